"""The style sheet of the page: sizes are fixed so that nothing jumps; colours of text and lines come from the theme."""

from __future__ import annotations

__all__ = ["FIGURE_HEIGHT", "SIDE_WIDTH", "STYLE", "TRACK_HEIGHT"]

#: Panels grow with the window: at 800 px two rows of them, the track and the sentences fit without scrolling.
FIGURE_HEIGHT = "clamp(165px, calc(34vh - 88px), 480px)"
TRACK_HEIGHT = "clamp(58px, 8.5vh, 120px)"
SIDE_WIDTH = "304px"

STYLE = """<style>
.sb-bench, .sb-bench .widget-html-content { font-size: 12px; line-height: 16px; color: var(--jp-ui-font-color1); }
.sb-bench { --bq-axis-tick-text-font: 10px sans-serif; --bq-axislabel-font: 11px sans-serif; }
.sb-bench .widget-html, .sb-bench .jupyter-widgets { margin: 0; }
.sb-bench .widget-html-content { padding: 0; }
.sb-bench .bqplot > svg .axis text.axislabel, .sb-bench .bqplot > svg .axis .tick text { fill: var(--jp-ui-font-color1); }
.sb-dots svg path { stroke-linecap: square; }
.sb-bench { overflow: hidden; }
.sb-head, .sb-head .widget-html-content { min-width: 0; max-width: 100%; overflow: hidden; }
.sb-head details[open] summary { white-space: normal; }
.sb-head details { max-height: 40vh; overflow-y: auto; }
.sb-head summary { cursor: pointer; overflow: hidden; text-overflow: ellipsis; white-space: nowrap; }
.sb-head td { padding: 0 14px 0 0; vertical-align: top; }
.sb-bench .sb-title.widget-html { white-space: nowrap; overflow: hidden; height: 18px; line-height: 18px !important; }
.sb-title b { margin-right: 8px; }
.sb-title span { margin-right: 8px; white-space: nowrap; color: var(--jp-ui-font-color1); }
.sb-bench .sb-say.widget-html { height: 48px; min-height: 48px; overflow: hidden; color: var(--jp-ui-font-color1); }
.sb-trackline { height: 32px; align-items: center; }
.sb-trackline button, .sb-tabs button { flex: 0 0 auto; min-width: max-content; }
.sb-trackline .sb-where { flex: 1 1 auto; max-height: 32px; overflow: hidden; }
.sb-bench button.jupyter-button { height: 22px; line-height: 22px; font-size: 12px; padding: 0 8px; margin: 0 0 0 4px; }
.sb-bench .widget-toggle-buttons, .sb-bench .widget-toggle-buttons > div { height: 18px; margin: 0; line-height: 18px; }
.sb-bench .widget-toggle-buttons button.jupyter-button { height: 18px; line-height: 18px; margin: 0 0 0 4px; }
.sb-step { height: 18px; }
.sb-step .slider-container { margin: 0 14px 0 52px !important; height: 18px; overflow: visible; }
.sb-step .noUi-target { margin: 0 !important; width: 100%; }
.sb-side { border-left: 1px solid var(--jp-border-color2); padding-left: 10px !important; }
.sb-side .widget-text input, .sb-side .widget-dropdown select { height: 22px; line-height: 20px; font-size: 12px; }
.sb-side .widget-text, .sb-side .widget-dropdown, .sb-side .widget-checkbox { height: 24px; align-items: center; }
.sb-bench .widget-html { height: auto; min-height: 0; }
.sb-side .widget-label, .sb-side .widget-label-basic { font-size: 12px; line-height: 22px; height: 22px; }
.sb-bench .sb-tabs { flex: 1 1 0; height: 0; min-height: 120px; }
.sb-tabs > .lm-TabBar { overflow: visible; }
.sb-tabs .lm-TabBar-tab { flex: 1 1 auto !important; min-width: 0 !important; padding: 0 4px !important; }
.sb-tabs .widget-tab-contents { padding: 6px 2px !important; overflow-y: auto !important; border: 0 !important; }
.sb-error { color: var(--jp-error-color1, #D55E00); }
.sb-error b { font-weight: 600; }
.sb-quiet { color: var(--jp-ui-font-color2); }
.sb-finding { border-top: 1px solid var(--jp-border-color2); padding: 4px 0; }
.sb-finding details { color: var(--jp-ui-font-color2); }
.sb-finding summary { cursor: pointer; }
.sb-finding td { padding: 0 8px 0 0; vertical-align: top; overflow-wrap: anywhere; }
.sb-table { overflow-x: auto; }
.sb-finding code { white-space: pre-wrap; overflow-wrap: anywhere; font-size: 11px; }
.sb-table table { border-collapse: collapse; white-space: nowrap; width: 100%; font-variant-numeric: tabular-nums; }
.sb-table td, .sb-table th { padding: 1px 6px 1px 0; text-align: right; font-weight: normal; }
.sb-table th:first-child, .sb-table td:first-child { text-align: left; }
.sb-table .sb-best { font-weight: 700; }
.sb-scale { height: 100%; display: flex; flex-direction: column; }
.sb-bar { position: relative; flex: 1 1 auto; width: 12px; margin: 8px 0 4px 4px;
  border: 1px solid var(--jp-border-color1); }
.sb-bar span { position: absolute; left: 15px; transform: translateY(50%); font-size: 10px; white-space: nowrap; }
.sb-bar .sb-level { bottom: -2px; left: -4px; width: 20px; height: 0; border-bottom: 3px dashed; transform: none; }
.sb-key { font-size: 10px; padding-left: 1px; line-height: 12px; white-space: nowrap; }
.sb-key i { display: inline-block; width: 10px; height: 8px; margin-right: 3px;
  border: 1px solid var(--jp-border-color1); }
</style>"""
