"""The page: every widget of the workbench, made once and put in its place. It shows and asks; it decides nothing."""

from __future__ import annotations

from typing import Any

import ipywidgets as w

from schurbench.panels.colours import ACTIVE, CHOSEN, CONVERGED, HEALTHY, MUTED, SHIFT, THRESHOLD
from schurbench.panels.figures import DeflationFigure, MatrixFigure, SpectrumFigure, SubdiagonalFigure, TrackFigure
from schurbench.panels.side import ComparisonForm, FindingList, OpenForm, RunForm, SaveForm, SettingsForm
from schurbench.panels.style import FIGURE_HEIGHT, SIDE_WIDTH, STYLE, TRACK_HEIGHT

__all__ = ["Page"]

_BEFORE_A_RUN = {
    "matrix": "After a run: the magnitudes of H at the chosen step.",
    "subdiagonal": "After a run: how each subdiagonal entry falls, over all steps.",
    "deflations": "After a run: where and when eigenvalues left the window.",
    "spectrum": "After a run: Ritz values and shifts at the chosen step.",
}

_STEP_TIP = "Step cursor: drag it, or walk with the arrow keys, Page Up and Page Down, Home and End"


class Page:
    """The line about the matrix, the track with its cursor, four panels, and the side column."""

    def __init__(self) -> None:
        self.head = w.HTML()
        self.head.add_class("sb-head")
        self._make_track()
        self._make_panels()
        self._make_side()
        body = w.HBox([self._main(), self._side], layout=w.Layout(width="100%", align_items="stretch"))
        self.children = (w.HTML(STYLE, layout=w.Layout(display="contents")), self.head, body)

    def set_last_step(self, last: int) -> None:
        """Let the step cursor go up to ``last``."""
        if self.slider.max != last:
            self.slider.max = last
            # a slider that is shown already keeps its first end for the End key; shown anew, it has the right one
            self._slider_place.children = []
            self._slider_place.children = [self.slider]

    def _make_track(self) -> None:
        self.track = TrackFigure(TRACK_HEIGHT)
        self.slider = w.IntSlider(min=0, max=1, readout=False, layout=w.Layout(width="auto"), tooltip=_STEP_TIP)
        self.slider.add_class("sb-step")
        self._slider_place = w.VBox([self.slider], layout=w.Layout(overflow="visible"))
        self.where = _line("sb-where")
        self.to_start, self.to_last, self.to_next, self.to_longest = (
            w.Button(description=text, tooltip=tip, layout=w.Layout(width="auto"))
            for text, tip in (
                ("start", "Go to the Hessenberg start"),
                ("◂ deflation", "Go to the deflation before"),
                ("deflation ▸", "Go to the next deflation"),
                ("longest wait", "Go to where a deflation was waited for longest"),
            )
        )

    def _make_panels(self) -> None:
        self.matrix = MatrixFigure(FIGURE_HEIGHT)
        self.subdiagonal = SubdiagonalFigure(FIGURE_HEIGHT)
        self.deflations = DeflationFigure(FIGURE_HEIGHT)
        self.spectrum = SpectrumFigure(FIGURE_HEIGHT)
        self.curves = w.ToggleButtons(
            options=[("picture", False), ("curves", True)],
            tooltips=["All entries over all steps", "The chosen entry, its neighbours and the threshold"],
            style={"button_width": "auto"},
        )
        self.scale = w.HTML(layout=w.Layout(height="100%"))
        self.say = {name: _line("sb-say", text) for name, text in _BEFORE_A_RUN.items()}

    def _make_side(self) -> None:
        self.form = SettingsForm()
        self.work = RunForm()
        self.findings = FindingList()
        self.compare = ComparisonForm()
        self.save = SaveForm()
        self.open = OpenForm()
        self.tabs = w.Tab(
            [self.findings.widget, self.compare.widget, self.save.widget, self.open.widget],
            titles=("Findings", "Compare", "Factors", "Open"),
        )
        self.tabs.add_class("sb-tabs")
        self._side = w.VBox(
            [self.form.widget, self.work.widget, self.tabs],
            layout=w.Layout(width=SIDE_WIDTH, min_width=SIDE_WIDTH, flex="0 0 auto"),
        )
        self._side.add_class("sb-side")

    def _main(self) -> Any:
        legend = _title(
            "Track",
            "Sweeps waited at each step; click to go to a step",
            (MUTED, "▮", "sweeps waited"),
            (HEALTHY, "▒", "healthy"),
            (CONVERGED, "|", "deflation"),
            (ACTIVE, "╷", "deflation window"),
            (SHIFT, "❙", "exceptional shift"),
            (CHOSEN, "━", "what you chose: step, row"),
        )
        line = w.HBox([self.where, self.to_start, self.to_last, self.to_next, self.to_longest])
        line.add_class("sb-trackline")
        scale = w.VBox([self.scale], layout=w.Layout(height=FIGURE_HEIGHT, margin="20px 0 0 0", overflow="hidden"))
        panels = w.GridBox(
            [
                self._matrix_cell(),
                scale,
                self._subdiagonal_cell(),
                self._spectrum_cell(),
                w.Box(),
                self._deflation_cell(),
            ],
            layout=w.Layout(
                grid_template_columns="minmax(0, 6fr) 54px minmax(0, 8fr)", grid_gap="4px 4px", width="auto"
            ),
        )
        return w.VBox(
            [legend, self.track.widget, self._slider_place, line, panels],
            layout=w.Layout(flex="1 1 auto", min_width="0"),
        )

    def _matrix_cell(self) -> Any:
        title = _title(
            "H",
            "Magnitudes of H, with the active window and the deflation window of the step; click to choose a row",
            (ACTIVE, "┅", "active"),
            (SHIFT, "┉", "deflation window"),
            (CHOSEN, "━", "chosen"),
        )
        return _cell(title, self.matrix, self.say["matrix"])

    def _subdiagonal_cell(self) -> Any:
        title = _title(
            "Subdiagonal",
            "Subdiagonal magnitudes by row and step; click to choose both",
            (CHOSEN, "━", "chosen"),
            (THRESHOLD, "┅", "threshold"),
        )
        spread = w.Layout(justify_content="space-between", height="20px", overflow="hidden")
        return _cell(w.HBox([title, self.curves], layout=spread), self.subdiagonal, self.say["subdiagonal"])

    def _spectrum_cell(self) -> Any:
        title = _title(
            "Spectrum",
            "Ritz values and shifts in the complex plane; click to choose the nearest",
            (ACTIVE, "✚", "moving"),
            (CONVERGED, "■", "converged"),
            (SHIFT, "◇", "shift"),
        )
        return _cell(title, self.spectrum, self.say["spectrum"])

    def _deflation_cell(self) -> Any:
        title = _title(
            "Deflations",
            "Deflations by row and step; click to choose both",
            (CONVERGED, "■", "one eigenvalue"),
            (CONVERGED, "□", "pair"),
            (SHIFT, "✚", "split"),
            (ACTIVE, "▒", "active window"),
        )
        return _cell(title, self.deflations, self.say["deflations"])


def _cell(title: Any, figure: Any, words: Any) -> Any:
    return w.VBox([title, figure.widget, words], layout=w.Layout(min_width="0", overflow="hidden"))


def _line(name: str, text: str = "") -> Any:
    widget = w.HTML(f'<span class="sb-quiet">{text}</span>')
    widget.add_class(name)
    return widget


def _title(name: str, tip: str, *entries: tuple[str, str, str]) -> Any:
    keys = "".join(
        f'<span><i style="color:{colour};font-style:normal">{glyph}</i> {text}</span>'
        for colour, glyph, text in entries
    )
    widget = w.HTML(f"<b>{name}</b>{keys}", tooltip=tip)
    widget.add_class("sb-title")
    return widget
