"""The side column: settings, findings, comparison, factors, and where a matrix comes from. Widgets only."""

from __future__ import annotations

import base64
import re
from collections.abc import Callable
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING, Any

import ipywidgets as w

from schurbench.errors import SettingsError
from schurbench.measures import RATIO_LIMIT
from schurbench.panels.text import duration
from schurbench.policy import DEFLATION_TESTS, STRATEGIES
from schurbench.prepare.plain import number
from schurbench.prepare.preparation import BALANCE_CHOICES

if TYPE_CHECKING:
    from schurbench.comparison import Comparison
    from schurbench.diagnosis import Diagnosis, Finding

__all__ = [
    "ComparisonForm",
    "FindingList",
    "OpenForm",
    "RunForm",
    "SaveForm",
    "SettingsForm",
    "error_html",
    "optional_number",
    "shift_list",
]

FORMS = ("auto", "real", "complex")

#: Largest file that is also offered as a link; the link carries the whole file.
LINK_LIMIT = 4 << 20

_FULL = {"width": "auto"}
_DESCRIPTION = {"description_width": "82px"}


def error_html(message: str) -> str:
    """One line that says what went wrong, announced by screen readers."""
    return f'<span class="sb-error" role="alert">⚠ {escape(message)}</span>' if message else ""


def optional_number(text: str, kind: Callable[[str], Any], what: str) -> Any:
    """None for blank text, otherwise the number in it.

    Raises
    ------
    SettingsError
        The text is not such a number.
    """
    text = text.strip().replace("−", "-")
    if not text:
        return None
    try:
        return kind(text)
    except ValueError:
        raise SettingsError(f"{what}: {text!r} is not a number; leave it blank for the default") from None


def shift_list(text: str) -> tuple[complex, ...]:
    """Shifts from text such as ``1.5, -2+3i``.

    Raises
    ------
    SettingsError
        An item is not a complex number.
    """
    shifts = []
    for item in re.split(r"[,;]", text.replace("−", "-")):
        if item.strip():
            try:
                shifts.append(complex("".join(item.split()).replace("i", "j")))
            except ValueError:
                raise SettingsError(f"shifts: {item!r} is not a number; write them as 1.5, -2+3i") from None
    return tuple(shifts)


class SettingsForm:
    """Settings of the next run, one row each."""

    def __init__(self) -> None:
        def row(widget: Any, tip: str) -> Any:
            widget.layout = w.Layout(**_FULL)
            widget.style = _DESCRIPTION
            widget.tooltip = tip
            return widget

        self.strategy = row(
            w.Dropdown(options=STRATEGIES, description="Strategy"),
            "How shifts are chosen; auto decides by size and form",
        )
        self.shifts = row(
            w.Text(description="Shifts", placeholder="1.5, -2+3i", continuous_update=False),
            "The shifts of the strategy 'given', in the units of the matrix",
        )
        self.form = row(w.Dropdown(options=FORMS, description="Form"), "Real or complex arithmetic and Schur form")
        self.balance = row(
            w.Dropdown(options=BALANCE_CHOICES, description="Balance"),
            "Permute isolated eigenvalues out, scale rows and columns",
        )
        self.flip = w.Checkbox(
            description="flip",
            indent=False,
            layout=w.Layout(width="64px"),
            tooltip="Reverse rows and columns first, for matrices graded from small to large",
        )
        self.deflation = row(
            w.Dropdown(options=tuple(DEFLATION_TESTS), description="Deflation"),
            "Which subdiagonal entries count as negligible",
        )
        self.tol = row(
            w.Text(description="Tolerance", placeholder="rounding level", continuous_update=False),
            "Absolute level, in the working units of H, instead of rounding level",
        )
        self.exceptional = row(
            w.Text(description="Exceptional", placeholder="default", continuous_update=False),
            "Sweeps without a deflation before an exceptional shift; 0 for never",
        )
        self.limit = w.Text(
            placeholder="limit: 30·n",
            continuous_update=False,
            layout=w.Layout(width="88px"),
            tooltip="Largest number of sweeps",
        )
        for widget in (self.balance, self.exceptional):
            widget.layout = w.Layout(width="auto", flex="1 1 auto", min_width="0")
        self.error = w.HTML()
        self.widget = w.VBox(
            [
                self.strategy,
                self.shifts,
                self.form,
                w.HBox([self.balance, self.flip]),
                self.deflation,
                self.tol,
                w.HBox([self.exceptional, self.limit]),
                self.error,
            ]
        )
        self.strategy.observe(lambda _: self._show_shifts(), "value")
        self._show_shifts()

    def _show_shifts(self) -> None:
        self.shifts.layout.display = None if self.strategy.value == "given" else "none"


class RunForm:
    """Run, cancel, and how far the work is."""

    def __init__(self) -> None:
        self.run = w.Button(description="Run", button_style="primary", tooltip="Run with these settings")
        self.cancel = w.Button(description="Cancel", disabled=True, tooltip="Stop; what was computed is kept")
        self.bar = w.FloatProgress(min=0.0, max=1.0, layout=w.Layout(width="auto", flex="1 1 auto", min_width="0"))
        for button in (self.run, self.cancel):
            button.layout = w.Layout(width="66px")
        self.status = w.HTML()
        self.widget = w.VBox([w.HBox([self.run, self.cancel, self.bar]), self.status])


class FindingList:
    """Findings as sentences, the most useful first; evidence is folded, remedies are buttons."""

    def __init__(self) -> None:
        self._try: Callable[[Finding], None] | None = None
        self.widget = w.VBox()
        self.say("Findings appear here after a run.")

    def on_try(self, handler: Callable[[Finding], None]) -> None:
        """Call ``handler`` with a finding when the button of its remedy is pressed."""
        self._try = handler

    def say(self, text: str) -> None:
        """A single quiet line instead of findings."""
        self._replace([w.HTML(f'<span class="sb-quiet">{escape(text)}</span>')])

    def show(self, diagnosis: Diagnosis) -> None:
        items: list[Any] = []
        if diagnosis.forecast is not None:
            items.append(w.HTML(f"<div>{escape(_sentence(diagnosis.forecast))}</div>"))
        for finding in diagnosis.findings:
            items.append(w.HTML(_finding_html(finding)))
            remedy = finding.remedy
            if remedy is not None and self._try is not None:
                button = w.Button(
                    description="Try " + _remedy_text(remedy),
                    tooltip=remedy.text,
                    layout=w.Layout(width="auto", max_width="100%"),
                )
                button.on_click(lambda _, finding=finding, handler=self._try: handler(finding))
                items.append(w.HBox([button]))
        if diagnosis.findings:
            self._replace(items)
        else:
            self.say("Nothing to report: the run gives no reason for a finding.")

    def _replace(self, items: list[Any]) -> None:
        old = self.widget.children
        self.widget.children = items
        for child in old:
            for inner in (*getattr(child, "children", ()), child):
                inner.close()


def _sentence(value: Any) -> str:
    return str(getattr(value, "statement", value))


def _remedy_text(remedy: Any) -> str:
    from schurbench.diagnosis import SettingsRemedy, SolverRemedy

    if isinstance(remedy, SettingsRemedy):
        return _settings_text({name: remedy.settings[name] for name in remedy.changes})
    return "the structured solver" if isinstance(remedy, SolverRemedy) else "bringing the cluster to the top"


def _settings_text(settings: dict[str, Any]) -> str:
    def said(key: str, value: Any) -> str:
        if isinstance(value, bool):
            return key.replace("_", " ") if value else f"no {key.replace('_', ' ')}"
        return str(value) if key == "strategy" else f"{key.replace('_', ' ')} {value}"

    return ", ".join(said(key, value) for key, value in settings.items())


def _finding_html(finding: Finding) -> str:
    def shown(value: Any) -> str:
        if isinstance(value, bool):
            return "yes" if value else "no"
        if isinstance(value, (int, float)):
            return number(float(value)) if not float(value).is_integer() or abs(value) >= 1e5 else str(int(value))
        if isinstance(value, (list, tuple)):
            more = ", …" if len(value) > 8 else ""
            return ", ".join(shown(item) for item in value[:8]) + more
        return str(value)

    lines = "".join(
        f"<tr><td>{escape(str(key).replace('_', ' '))}</td><td>{escape(shown(value))}</td></tr>"
        for key, value in finding.evidence.items()
    )
    remedy = ""
    if finding.remedy is not None:
        remedy = f"<div>{escape(finding.remedy.text)}</div><code>{escape(finding.remedy.call)}</code>"
    return (
        f'<div class="sb-finding">{escape(finding.statement)}'
        f"<details><summary>evidence</summary><table>{lines}</table>{remedy}</details></div>"
    )


class ComparisonForm:
    """Which strategies to race, and the table of what came of it."""

    def __init__(self) -> None:
        self.choices = {
            name: w.Checkbox(
                value=name in ("francis", "wilkinson"), description=name, indent=False, layout=w.Layout(width="88px")
            )
            for name in STRATEGIES
            if name not in ("auto", "given")
        }
        self.current = w.Checkbox(
            value=True, description="my settings", indent=False, layout=w.Layout(width="auto"), tooltip="As set above"
        )
        self.go = w.Button(
            description="Compare", tooltip="Run each of them on this matrix", layout=w.Layout(width="78px")
        )
        self.table = w.HTML()
        self.error = w.HTML()
        boxes = list(self.choices.values())
        self.widget = w.VBox(
            [w.HBox(boxes[:3]), w.HBox([*boxes[3:], self.current]), w.HBox([self.go]), self.error, self.table]
        )
        self.table.add_class("sb-table")
        self.say("Tick two or more and press Compare.")

    def chosen(self) -> list[str]:
        return [name for name, box in self.choices.items() if box.value]

    def show(self, comparison: Comparison) -> None:
        """One block an entry: its label, then its figures or why there are none."""
        heads = ("sweeps", "per λ", "longest wait", "time", "error")
        lines = ["<tr>" + "".join(f"<th>{head}</th>" for head in heads) + "</tr>"]
        for entry in comparison.entries:
            best = entry is comparison.preferred
            mark = ' <span class="sb-quiet">preferred</span>' if best else ""
            style = ' class="sb-best"' if best else ""
            lines.append(f'<tr><th colspan="{len(heads)}"{style}>{escape(entry.label)}{mark}</th></tr>')
            figures = entry.figures
            if figures is None:
                lines.append(
                    f'<tr><td colspan="{len(heads)}" class="sb-error">{escape(entry.error or "not run")}</td></tr>'
                )
                continue
            per = figures.sweeps_per_eigenvalue
            error = figures.backward_error
            cells = [
                str(figures.sweeps) + ("" if figures.converged else f" ({figures.stop})"),
                "–" if per is None else number(per),
                str(figures.longest_wait),
                duration(figures.seconds),
                "–" if error is None else number(error),
            ]
            lines.append("<tr>" + "".join(f"<td>{escape(cell)}</td>" for cell in cells) + "</tr>")
        note = f"Error: backward error in units of n times rounding, limit {number(RATIO_LIMIT)}."
        self.table.value = (
            f'<table>{"".join(lines)}</table><div class="sb-quiet">{note}</div><div>{escape(comparison.sentence)}</div>'
        )

    def say(self, text: str) -> None:
        self.table.value = f'<span class="sb-quiet">{escape(text)}</span>'


class SaveForm:
    """Factors with their verdict, and where to put them."""

    def __init__(self) -> None:
        self.verdict = w.HTML()
        self.path = w.Text(
            description="File",
            placeholder="plant_schur.mat",
            layout=w.Layout(**_FULL),
            style={"description_width": "32px"},
            continuous_update=False,
            tooltip="A path; .mat, .npz, .h5 or .mtx decides the format",
        )
        self.replace = w.Checkbox(description="replace an existing file", indent=False, layout=w.Layout(width="auto"))
        self.go = w.Button(description="Save factors", tooltip="Write T and Z", layout=w.Layout(width="100px"))
        self.error = w.HTML()
        self.link = w.HTML()
        self.widget = w.VBox([self.verdict, self.path, self.replace, w.HBox([self.go]), self.error, self.link])
        self.say("Factors appear here after a run.")

    def say(self, text: str) -> None:
        self.verdict.value = f'<span class="sb-quiet">{escape(text)}</span>'

    def offer(self, paths: list[Path]) -> None:
        """Name what was written, with links where the files are small."""
        lines = [f"Saved {escape(str(paths[0].resolve().parent))}:"]
        for path in paths:
            name = escape(path.name)
            if path.stat().st_size <= LINK_LIMIT:
                data = base64.b64encode(path.read_bytes()).decode("ascii")
                lines.append(f'<a download="{name}" href="data:application/octet-stream;base64,{data}">{name}</a>')
            else:
                lines.append(name)
        self.link.value = "<br>".join(lines)


class OpenForm:
    """A matrix from a path, or from a file on the visitor's own machine."""

    def __init__(self) -> None:
        self.path = w.Text(
            description="Path",
            placeholder="plant.mat",
            layout=w.Layout(**_FULL),
            style={"description_width": "46px"},
            tooltip="A .npy, .npz, .mtx, .mat, .csv, .txt or .tsv file on the machine that runs the notebook",
        )
        self.key = w.Text(
            description="Array",
            placeholder="only if the file holds several",
            layout=w.Layout(**_FULL),
            style={"description_width": "46px"},
            tooltip="Name of the array in the file",
        )
        self.go = w.Button(description="Load", tooltip="Load this file", layout=w.Layout(width="66px"))
        self.upload = w.FileUpload(
            description="Upload",
            multiple=False,
            tooltip="Choose a file on your machine",
            layout=w.Layout(width="110px"),
        )
        self.error = w.HTML()
        self.widget = w.VBox([self.path, self.key, w.HBox([self.go, self.upload]), self.error])
