"""The workbench: one matrix, its runs, and four panels that follow one step cursor."""

from __future__ import annotations

import dataclasses
import tempfile
import threading
import time
from collections import OrderedDict
from collections.abc import Callable, Sequence
from html import escape
from pathlib import Path
from typing import Any

import ipywidgets as w
import traitlets as t

from schurbench.errors import InputError, SchurbenchError, SettingsError
from schurbench.intake import WorkingMatrix, load
from schurbench.journal import Progress, Run, State, StopReason
from schurbench.panels import views
from schurbench.panels.colours import ACTIVE, CHOSEN, CONVERGED, HEALTHY, MUTED, SHIFT, THRESHOLD
from schurbench.panels.figures import (
    DeflationFigure,
    MatrixFigure,
    SpectrumFigure,
    SubdiagonalFigure,
    TrackFigure,
    scale_html,
)
from schurbench.panels.side import (
    FORMS,
    ComparisonForm,
    FindingList,
    OpenForm,
    RunForm,
    SaveForm,
    SettingsForm,
    error_html,
    optional_number,
    shift_list,
)
from schurbench.panels.style import FIGURE_HEIGHT, SIDE_WIDTH, STYLE, TRACK_HEIGHT
from schurbench.panels.text import duration
from schurbench.policy import DEFLATION_TESTS, STRATEGIES
from schurbench.prepare.plain import number, plural
from schurbench.prepare.preparation import BALANCE_CHOICES

__all__ = ["Workbench"]

#: Up to this order a matrix is run as soon as it is loaded, and factors are certified as soon as a run ends.
AT_ONCE = 400

#: Shortest interval between two updates of the page, seconds; more than about 1000 messages a second are dropped.
PAGE_INTERVAL = 0.05

_SETTINGS = ("strategy", "form", "balance", "flip", "deflation", "tol", "exceptional", "limit", "shifts")

_BEFORE_A_RUN = {
    "matrix": "After a run: the magnitudes of H at the chosen step.",
    "subdiagonal": "After a run: how each subdiagonal entry falls, over all steps.",
    "deflations": "After a run: where and when eigenvalues left the window.",
    "spectrum": "After a run: Ritz values and shifts at the chosen step.",
}

#: States of H kept for going back and forth.
KEPT_STATES = 8


class Workbench(w.VBox):
    """A page in the notebook on which one matrix is run, looked into, compared and factored.

    Parameters
    ----------
    matrix : Run, WorkingMatrix, or anything `schurbench.load` accepts, optional
        Without it the page asks for a file.
    strategy, form, balance, flip, deflation, tol, exceptional, limit, shifts
        First settings, as for `schurbench.iterate`; each is also a trait of the same name.
    autostart : bool, optional
        Whether to run at once; by default up to n = 400.

    Attributes
    ----------
    matrix : WorkingMatrix or None
    run : Run or None
        The run the panels show. Assigning another one shows that.
    cursor : int
        State shown: 0 is the Hessenberg start, k the state after step k.
    row : int or None
        Chosen row of H; None follows the row that the iteration waits for.
    diagnosis, comparison, factors
        What was last computed of each, or None.
    status : str
        ``"empty"``, ``"ready"``, ``"working"``, ``"finished"``, ``"stopped"`` or ``"failed"``.
    error : str
        The last error in one line; empty when there is none.

    Raises
    ------
    InputError
        The matrix cannot be loaded.
    traitlets.TraitError
        A setting is none of the values it can take.
    TypeError
        An unknown keyword.

    Notes
    -----
    Long work runs in a thread of its own; `wait` waits for it and raises what it raised. All traits may be set from
    scripts, the page follows.
    """

    cursor = t.Int(0, min=0)
    row = t.Int(None, allow_none=True)
    strategy = t.Enum(STRATEGIES, "auto")
    form = t.Enum(FORMS, "auto")
    balance = t.Enum(BALANCE_CHOICES, "permute")
    flip = t.Bool(False)
    deflation = t.Enum(tuple(DEFLATION_TESTS), "ahues-tisseur")
    tol = t.Float(None, allow_none=True)
    exceptional = t.Int(None, allow_none=True, min=0)
    limit = t.Int(None, allow_none=True, min=1)
    shifts = t.Tuple()
    run = t.Instance(Run, allow_none=True)
    status = t.Unicode("empty")
    error = t.Unicode("")

    def __init__(
        self,
        matrix: Any = None,
        *,
        strategy: str = "auto",
        form: str = "auto",
        balance: str = "permute",
        flip: bool = False,
        deflation: str = "ahues-tisseur",
        tol: float | None = None,
        exceptional: int | None = None,
        limit: int | None = None,
        shifts: Sequence[complex] = (),
        autostart: bool | None = None,
    ) -> None:
        given = matrix if isinstance(matrix, Run) else None
        taken = given.matrix if given is not None else None if matrix is None else load(matrix)
        self.matrix: WorkingMatrix | None = None
        self.diagnosis: Any = None
        self.comparison: Any = None
        self.factors: Any = None
        self._lock = threading.RLock()
        self._job: threading.Thread | None = None
        self._cancel = threading.Event()
        self._failure: BaseException | None = None
        self._told = 0.0
        self._states: OrderedDict[int, State] = OrderedDict()
        self._painter = _Latest(self._paint, self._painting_failed)
        self._build()
        super().__init__([*self._page])
        self.add_class("sb-bench")
        self._wire()
        settings = {
            "strategy": strategy,
            "form": form,
            "balance": balance,
            "flip": flip,
            "deflation": deflation,
            "tol": tol,
            "exceptional": exceptional,
            "limit": limit,
            "shifts": tuple(shifts),
        }
        for name, value in settings.items():
            setattr(self, name, value)
        if given is not None:
            self._take(given.matrix)
            self._adopt(given)
        elif taken is not None:
            self.load(taken, autostart=autostart)
        else:
            self._show_empty()

    def __repr__(self) -> str:
        # the inherited one prints every trait of every child
        what = "no matrix" if self.matrix is None else f"{self.matrix.name}, n = {self.matrix.n}"
        return f"<Workbench: {what}, {self.status}>"

    # --- what scripts call ----------------------------------------------------------------------------------------

    def load(self, source: Any, key: str | None = None, *, autostart: bool | None = None) -> None:
        """Take another matrix, from a path or an object, and run it at once when it is small.

        Raises
        ------
        InputError
            It cannot be loaded; the page keeps what it had.
        """
        self._refuse_while_working()
        self._take(load(source, key) if key else load(source))
        assert self.matrix is not None
        if self.matrix.n <= AT_ONCE if autostart is None else autostart:
            self.start()

    def settings(self) -> dict[str, Any]:
        """The settings on the page, as keywords for `schurbench.iterate`."""
        chosen = {name: getattr(self, name) for name in _SETTINGS if name != "shifts"}
        if self.strategy == "given":
            chosen["shifts"] = list(self.shifts)
        return chosen

    def start(self) -> None:
        """Run the matrix with the settings on the page, in the background.

        Raises
        ------
        InputError
            There is no matrix yet.
        SchurbenchError
            Work is under way already.
        """
        matrix = self._matrix_or_raise()
        settings = self.settings()
        self._begin("Running", lambda: self._iterate(matrix, settings))

    def cancel(self) -> None:
        """Stop the work under way; what was computed is kept."""
        self._cancel.set()

    def wait(self, timeout: float | None = None) -> Run | None:
        """Wait until no work is under way and every panel is drawn.

        Parameters
        ----------
        timeout : float, optional
            Seconds.

        Returns
        -------
        Run or None
            The run on the page.

        Raises
        ------
        TimeoutError
            Work is still under way after ``timeout``.
        Exception
            Whatever the work raised.
        """
        until = None if timeout is None else time.monotonic() + timeout
        job = self._job
        if job is not None and job is not threading.current_thread():
            job.join(timeout)
            if job.is_alive():
                raise TimeoutError(f"still working after {timeout} s")
        self._painter.wait(None if until is None else max(0.0, until - time.monotonic()))
        if self._failure is not None:
            failure, self._failure = self._failure, None
            raise failure
        return self.run

    def compare_now(self, entries: Sequence[Any] | None = None) -> None:
        """Race several strategies or settings on the matrix, in the background; the result is in `comparison`.

        Parameters
        ----------
        entries : sequence, optional
            As for `schurbench.compare`; by default what is ticked on the page.

        Raises
        ------
        InputError
            There is no matrix yet, or nothing is ticked.
        """
        matrix = self._matrix_or_raise()
        chosen = self._ticked() if entries is None else list(entries)
        if not chosen:
            raise InputError("nothing is ticked; tick at least one strategy to compare")
        self._begin("Comparing", lambda: self._compare(matrix, chosen))

    def export(self, path: str | Path, replace: bool = False) -> list[Path]:
        """Save the factors of the run on the page.

        Parameters
        ----------
        path : str or Path
            The suffix decides the format: .mat, .npz, .h5 or .mtx (two files).
        replace : bool
            Whether an existing file may be overwritten.

        Returns
        -------
        list of Path
            The files written, the manifest among them.

        Raises
        ------
        InputError
            There is no run yet, the suffix is unknown, or the file exists.
        """
        written = list(self._factored().save(Path(path).expanduser(), replace=replace))
        self._save.offer(written)
        return written

    def close(self) -> None:
        """Stop the work and close every widget of the page."""
        if hasattr(self, "_cancel"):  # one whose arguments were refused is closed too, by the garbage collector
            self.cancel()
        super().close()

    # --- building -------------------------------------------------------------------------------------------------

    def _build(self) -> None:
        self._head = w.HTML()
        self._head.add_class("sb-head")
        self._track = TrackFigure(TRACK_HEIGHT)
        self._matrix_figure = MatrixFigure(FIGURE_HEIGHT)
        self._subdiagonal = SubdiagonalFigure(FIGURE_HEIGHT)
        self._deflations = DeflationFigure(FIGURE_HEIGHT)
        self._spectrum = SpectrumFigure(FIGURE_HEIGHT)
        self._slider = w.IntSlider(min=0, max=1, readout=False, layout=w.Layout(width="auto"), tooltip="Step cursor")
        self._slider.add_class("sb-step")
        self._where = _line("sb-where")
        self._to_start, self._to_last, self._to_next, self._to_longest = (
            w.Button(description=text, tooltip=tip, layout=w.Layout(width="auto"))
            for text, tip in (
                ("start", "Go to the Hessenberg start"),
                ("◂ deflation", "Go to the deflation before"),
                ("deflation ▸", "Go to the next deflation"),
                ("longest wait", "Go to where a deflation was waited for longest"),
            )
        )
        line = w.HBox([self._where, self._to_start, self._to_last, self._to_next, self._to_longest])
        line.add_class("sb-trackline")
        self._curves = w.ToggleButtons(
            options=[("picture", False), ("curves", True)],
            tooltips=["All entries over all steps", "The chosen entry, its neighbours and the threshold"],
            style={"button_width": "auto"},
        )
        self._scale = w.HTML(layout=w.Layout(height="100%"))
        self._say = {name: _line("sb-say", text) for name, text in _BEFORE_A_RUN.items()}
        titles = {
            "matrix": _title(
                "H",
                "Magnitudes of H; click to choose a row",
                (ACTIVE, "┅", "active window"),
                (CHOSEN, "━", "chosen row"),
            ),
            "subdiagonal": _title(
                "Subdiagonal",
                "Subdiagonal magnitudes by row and step; click to choose both",
                (CHOSEN, "━", "chosen"),
                (THRESHOLD, "┅", "threshold"),
            ),
            "spectrum": _title(
                "Spectrum",
                "Ritz values and shifts in the complex plane; click to choose the nearest",
                (ACTIVE, "✚", "moving"),
                (CONVERGED, "■", "converged"),
                (SHIFT, "◇", "shift"),
            ),
            "deflations": _title(
                "Deflations",
                "Deflations by row and step; click to choose both",
                (CONVERGED, "■", "one eigenvalue"),
                (CONVERGED, "□", "pair"),
                (SHIFT, "✚", "split"),
                (ACTIVE, "▒", "active window"),
            ),
        }
        spread = w.Layout(justify_content="space-between", height="20px", overflow="hidden")
        cells = {
            "matrix": w.VBox([titles["matrix"], self._matrix_figure.widget, self._say["matrix"]]),
            "subdiagonal": w.VBox(
                [
                    w.HBox([titles["subdiagonal"], self._curves], layout=spread),
                    self._subdiagonal.widget,
                    self._say["subdiagonal"],
                ]
            ),
            "spectrum": w.VBox([titles["spectrum"], self._spectrum.widget, self._say["spectrum"]]),
            "deflations": w.VBox([titles["deflations"], self._deflations.widget, self._say["deflations"]]),
        }
        for cell in cells.values():
            cell.layout = w.Layout(min_width="0", overflow="hidden")
        scale = w.VBox([self._scale], layout=w.Layout(height=FIGURE_HEIGHT, margin="20px 0 0 0", overflow="hidden"))
        panels = w.GridBox(
            [cells["matrix"], scale, cells["subdiagonal"], cells["spectrum"], w.Box(), cells["deflations"]],
            layout=w.Layout(
                grid_template_columns="minmax(0, 6fr) 54px minmax(0, 8fr)", grid_gap="4px 4px", width="auto"
            ),
        )
        legend = _title(
            "Track",
            "Sweeps waited at each step; click to go to a step",
            (MUTED, "▮", "sweeps waited"),
            (HEALTHY, "▒", "healthy"),
            (CONVERGED, "|", "deflation"),
            (SHIFT, "❙", "exceptional shift"),
            (CHOSEN, "━", "what you chose: step, row"),
        )
        self._form = SettingsForm()
        self._work = RunForm()
        self._findings = FindingList(self._try_remedy)
        self._compare_form = ComparisonForm()
        self._save = SaveForm()
        self._open = OpenForm()
        self._tabs = w.Tab(
            [self._findings.widget, self._compare_form.widget, self._save.widget, self._open.widget],
            titles=("Findings", "Compare", "Factors", "Open"),
        )
        self._tabs.add_class("sb-tabs")
        side = w.VBox(
            [self._form.widget, self._work.widget, self._tabs],
            layout=w.Layout(width=SIDE_WIDTH, min_width=SIDE_WIDTH, flex="0 0 auto"),
        )
        side.add_class("sb-side")
        main = w.VBox(
            [legend, self._track.widget, self._slider, line, panels], layout=w.Layout(flex="1 1 auto", min_width="0")
        )
        body = w.HBox([main, side], layout=w.Layout(width="100%", align_items="stretch"))
        self._page = (w.HTML(STYLE, layout=w.Layout(display="contents")), self._head, body)

    def _wire(self) -> None:
        form = self._form
        for name in ("strategy", "form", "balance", "flip", "deflation"):
            t.link((self, name), (getattr(form, name), "value"))
        numbers: tuple[tuple[str, Callable[[str], Any], str], ...] = (
            ("tol", float, "tolerance"),
            ("exceptional", int, "exceptional"),
            ("limit", int, "limit"),
        )
        for name, kind, what in numbers:
            self._link_text(name, getattr(form, name), lambda text, k=kind, what=what: optional_number(text, k, what))
        self._link_text("shifts", form.shifts, shift_list)
        t.link((self, "cursor"), (self._slider, "value"))
        self.observe(lambda _: self._follow(), ["cursor", "row"])
        self.observe(lambda _: self._show_run(), "run")
        self.observe(lambda change: self._show_error(change["new"]), "error")
        self._curves.observe(lambda _: self._show_curves(), "value")
        self._to_start.on_click(lambda _: self._go(0))
        self._to_last.on_click(lambda _: self._go_deflation(-1))
        self._to_next.on_click(lambda _: self._go_deflation(1))
        self._to_longest.on_click(lambda _: self._go(views.longest_wait(self.run) if self.run else 0))
        self._track.on_click(lambda x, y: self._go(round(x)))
        self._matrix_figure.on_click(lambda x, y: self._choose(round(y)))
        self._subdiagonal.picture.on_click(lambda x, y: self._choose(round(y), round(x)))
        self._subdiagonal.curves.on_click(lambda x, y: self._go(round(x)))
        self._deflations.on_click(lambda x, y: self._choose(round(y), round(x)))
        self._spectrum.on_click(self._choose_value)
        work, compare, save, opened = self._work, self._compare_form, self._save, self._open
        work.run.on_click(lambda _: self._guarded(self.start, form.error))
        work.cancel.on_click(lambda _: self.cancel())
        compare.go.on_click(lambda _: self._guarded(self.compare_now, compare.error))
        save.go.on_click(lambda _: self._guarded(self._save_clicked, save.error))
        opened.go.on_click(lambda _: self._guarded(self._load_clicked, opened.error))
        opened.upload.observe(lambda _: self._guarded(self._uploaded, opened.error), "value")

    def _link_text(self, name: str, field: Any, parse: Callable[[str], Any]) -> None:
        """Tie a trait to a text field. Text that does not parse leaves the trait alone; the page says why."""

        def typed(change: dict[str, Any]) -> None:
            self._guarded(lambda: setattr(self, name, parse(change["new"])), self._form.error)

        def changed(change: dict[str, Any]) -> None:
            value = change["new"]
            try:
                same = parse(field.value) == value
            except SettingsError:
                same = False
            if not same:
                items = value if isinstance(value, tuple) else () if value is None else (value,)
                field.value = ", ".join(str(item).strip("()").replace("j", "i") for item in items)

        field.observe(typed, "value")
        self.observe(changed, name)

    # --- work in the background -----------------------------------------------------------------------------------

    def _matrix_or_raise(self) -> WorkingMatrix:
        if self.matrix is None:
            raise InputError("there is no matrix yet; load one under Open")
        return self.matrix

    def _refuse_while_working(self) -> None:
        if self._job is not None and self._job.is_alive() and self._job is not threading.current_thread():
            raise SchurbenchError("work is under way; cancel it or wait for it first")

    def _begin(self, what: str, work: Callable[[], None]) -> None:
        with self._lock:
            self._refuse_while_working()
            self._cancel = threading.Event()
            self._failure = None
            self.error = ""
            self._busy(what)
            self._job = threading.Thread(target=self._carry_out, args=(work,), name="schurbench workbench", daemon=True)
            self._job.start()

    def _carry_out(self, work: Callable[[], None]) -> None:
        try:
            work()
        except Exception as failure:
            self._failure = failure
            self.error = _one_line(failure)
            self.status = "failed"
            self._work.bar.bar_style = "danger"
            self._work.status.value = "Failed. Change a setting and run again, or open another matrix."
        finally:
            self._work.run.disabled = self._compare_form.go.disabled = self.matrix is None
            self._save.go.disabled = self.run is None
            self._work.cancel.disabled = True

    def _busy(self, what: str) -> None:
        self.status = "working"
        self._work.run.disabled = self._compare_form.go.disabled = self._save.go.disabled = True
        self._work.cancel.disabled = False
        self._work.bar.bar_style = ""
        self._work.bar.value = 0.0
        self._work.status.value = f"{escape(what)} …"
        self._told = 0.0

    def _tell(self, text: str, share: float, last: bool = False) -> None:
        """Update the progress bar, at most 20 times a second, the last time always."""
        now = time.monotonic()
        if last or now - self._told >= PAGE_INTERVAL:
            self._told = now
            self._work.bar.value = min(1.0, max(0.0, share))
            self._work.status.value = escape(text)

    def _on_progress(self, event: Progress) -> None:
        if event.phase == "reduce":
            self._tell("Reducing to Hessenberg form …", 0.0)
            return
        left = f", about {duration(event.forecast)} left" if event.forecast else ""
        assert self.matrix is not None
        text = f"Sweep {event.sweeps}: {event.deflated} of {self.matrix.n} rows finished{left}"
        self._tell(text, event.share, event.phase == "done")

    def _iterate(self, matrix: WorkingMatrix, settings: dict[str, Any]) -> None:
        from schurbench.iteration import iterate

        run = iterate(matrix, progress=self._on_progress, cancel=self._cancel, **settings)
        self._adopt(run)

    def _adopt(self, run: Run) -> None:
        """Show a run and find out what it says."""
        from schurbench.diagnosis import diagnose

        self.factors = None
        self.run = run
        self._say_outcome(run)
        self.diagnosis = diagnose(run)
        self._findings.show(self.diagnosis)
        if run.n <= AT_ONCE and run.settings.accumulate:
            self._factored()
        else:
            self._save.say("Press Save factors to certify and save them.")

    def _say_outcome(self, run: Run) -> None:
        finished = run.converged
        bar = self._work.bar
        bar.value = 1.0 if finished else float(views.finished_rows(run, len(run.steps)).mean())
        bar.bar_style = "success" if finished else "warning"
        text = f"{run.stop.message[:1].upper()}{run.stop.message[1:]}"
        text = text.rstrip(".") + f", {duration(run.seconds)}."
        if run.stop.reason in (StopReason.LIMIT, StopReason.STALLED):
            text += " The findings say why and what to try."
        elif run.stop.reason is StopReason.CANCELLED:
            text += " The panels show what was done; Run starts again."
        self._work.status.value = escape(text)
        self.status = "finished" if finished else "stopped"

    def _factored(self) -> Any:
        """Factors of the run on the page, computed once, with their verdict shown."""
        if self.run is None:
            raise InputError("there is no run yet; press Run first")
        if self.factors is None:
            self.factors = self.run.factors()
            self._save.verdict.value = _verdict(self.factors)
            if not self._save.path.value:
                self._save.path.value = f"{_safe_stem(self.run.matrix.name)}_schur.mat"
        return self.factors

    def _compare(self, matrix: WorkingMatrix, entries: list[Any]) -> None:
        from schurbench.comparison import compare

        def told(event: Any) -> None:
            share = (event.index + event.share) / event.count
            self._tell(f"{event.entry}: sweep {event.sweeps}", share)

        self.comparison = compare(matrix, entries, progress=told, cancel=self._cancel)
        self._compare_form.show(self.comparison)
        if self.run is not None:
            self._say_outcome(self.run)
        else:
            self.status = "ready"

    def _carry_out_remedy(self, remedy: Any) -> None:
        """A remedy that is no iteration: other factors of the same run, or a structured solver."""
        from schurbench.factors import Factors

        result = remedy.run()
        if self.run is not None:
            self._say_outcome(self.run)
        if isinstance(result, Factors):
            self.factors = result
            self._save.verdict.value = _verdict(result)
            self._tabs.selected_index = 2
            self._work.status.value = f"Reordered: {escape(result.selection)} first. Factors shows them."
        else:
            self._work.status.value = (
                f"Structured solver: {duration(result.seconds)}, backward error {number(result.backward_error)} "
                "in units of n times rounding. The panels still show the iteration."
            )

    def _ticked(self) -> list[Any]:
        chosen: list[Any] = list(self._compare_form.chosen())
        if self._compare_form.current.value:
            changed = {name: value for name, value in self.settings().items() if value != self.trait_defaults(name)}
            own = {"strategy": self.strategy, **changed}
            if len(own) > 1 or self.strategy not in chosen:
                chosen.insert(0, own)
        return chosen

    # --- what the controls do -------------------------------------------------------------------------------------

    def _guarded(self, action: Callable[[], Any], place: Any) -> None:
        """Run the action of a control; an error is shown in one line under it, never lost."""
        place.value = ""
        try:
            action()
        except Exception as failure:
            place.value = error_html(_one_line(failure))

    def _try_remedy(self, finding: Any) -> None:
        def apply() -> None:
            self._refuse_while_working()
            remedy = finding.remedy
            if not remedy.settings:
                self._begin("Trying", lambda: self._carry_out_remedy(remedy))
                return
            # a remedy names every setting that differs from the defaults
            for name in _SETTINGS:
                value = remedy.settings.get(name, self.trait_defaults(name))
                setattr(self, name, tuple(value) if name == "shifts" else value)
            self.start()

        self._guarded(apply, self._form.error)

    def _save_clicked(self) -> None:
        text = self._save.path.value.strip()
        if not text:
            raise InputError("no file is named; give a path that ends in .mat, .npz, .h5 or .mtx")
        self._refuse_while_working()
        self.export(text, replace=self._save.replace.value)

    def _load_clicked(self) -> None:
        text = self._open.path.value.strip()
        if not text:
            raise InputError("no file is named; give a path, or upload a file")
        self.load(Path(text).expanduser(), self._open.key.value.strip() or None)

    def _uploaded(self) -> None:
        upload = self._open.upload
        if not upload.value:
            return
        item = upload.value[0]
        upload.value = ()
        self._refuse_while_working()
        name = Path(str(item["name"]).replace("\\", "/")).name or "upload"
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / name
            path.write_bytes(item["content"])
            matrix = load(path, self._open.key.value.strip() or None)
        self.load(dataclasses.replace(matrix, source=f"uploaded {name}"))

    def _go(self, cursor: int) -> None:
        last = len(self.run.steps) if self.run else 0
        self.cursor = min(max(0, cursor), last)

    def _go_deflation(self, direction: int) -> None:
        if self.run is None:
            return
        steps = sorted({event.step for event in self.run.deflations})
        ahead = [k for k in steps if (k > self.cursor if direction > 0 else k < self.cursor)]
        if ahead:
            self._go(ahead[0] if direction > 0 else ahead[-1])

    def _choose(self, row: int, cursor: int | None = None) -> None:
        """Choose a row; choosing it again lets the page follow the waiting row."""
        if self.run is None:
            return
        row = min(max(0, row), self.run.n - 1)
        with self._lock, self.hold_trait_notifications():
            self.row = None if self.row == row and cursor in (None, self.cursor) else row
            if cursor is not None:
                self._go(cursor)

    def _choose_value(self, x: float, y: float) -> None:
        if self.run is None:
            return
        values = self.run.to_matrix_units(self.run.ritz(self.cursor))
        (left, right), (low, high) = views.spectrum_limits(self.run)
        distance = ((values.real - x) / (right - left)) ** 2 + ((values.imag - y) / (high - low)) ** 2
        self._choose(int(distance.argmin()))

    # --- showing --------------------------------------------------------------------------------------------------

    def _take(self, matrix: WorkingMatrix) -> None:
        from schurbench.prepare import profile

        with self._lock:
            self.matrix = matrix
            self.run = None
            self.diagnosis = self.comparison = self.factors = None
            self._work.run.disabled = self._compare_form.go.disabled = False
            self._save.go.disabled = True
            self._save.link.value = self._save.path.value = ""
            self._save.say("Factors appear here after a run.")
            self._compare_form.say("Tick two or more and press Compare.")
            self._findings.say("Findings appear here after a run.")
            self._work.bar.value = 0.0
            self._work.bar.bar_style = ""
            self._work.status.value = "Ready: choose settings and press Run."
            self.status = "ready"
        self._head.value = _head(matrix, profile(matrix))

    def _show_empty(self) -> None:
        self._head.value = "<b>No matrix yet.</b> Open a file on the right: give its path or upload it."
        self._tabs.selected_index = 3
        self._work.run.disabled = self._compare_form.go.disabled = self._save.go.disabled = True
        self._work.status.value = "Nothing to run yet."
        self._where.value = "The steps of a run appear here."

    def _show_error(self, message: str) -> None:
        self._form.error.value = error_html(message)

    def _show_run(self) -> None:
        """Everything that depends on the run but not on the cursor."""
        run = self.run
        if run is None:
            return
        with self._lock:
            self._states.clear()
            steps = len(run.steps)
            self._limits = views.magnitude_limits(run)
            self._track.show(views.track_view(run))
            self._subdiagonal.picture.show(views.map_view(run), self._limits, run.n, steps)
            self._deflations.show(views.deflation_view(run), run.n, steps)
            self._spectrum.frame(*views.spectrum_limits(run))
            self._scale.value = scale_html(self._limits)
            self._slider.max = max(1, steps)
            self.row = None
            target = views.longest_wait(run)
            if self.cursor == target:
                self._follow()
            else:
                self.cursor = target

    def _chosen(self, run: Run) -> int:
        return views.waited_row(run, self.cursor) if self.row is None else min(self.row, run.n - 1)

    def _follow(self) -> None:
        """Everything that depends on the cursor and the chosen row; the picture of H follows from its own thread."""
        run = self.run
        if run is None:
            return
        with self._lock:
            cursor = min(self.cursor, len(run.steps))
            row = self._chosen(run)
            self._track.move(cursor)
            self._subdiagonal.move(cursor)
            self._subdiagonal.picture.choose(row)
            self._deflations.move(cursor)
            self._deflations.choose(row)
            self._show_curves()
            spectrum = views.spectrum_view(run, cursor, row)
            self._spectrum.show(spectrum)
            self._where.value = escape(views.track_sentence(run, cursor))
            self._say["deflations"].value = escape(views.deflation_sentence(run, cursor))
            self._say["spectrum"].value = escape(spectrum.sentence)
        self._painter.request((run, cursor, row))

    def _show_curves(self) -> None:
        run = self.run
        with self._lock:
            if self._curves.value and run is not None:
                row = self._chosen(run)
                lo, hi = run.window(min(self.cursor, len(run.steps)))
                around = [row, row - 1, row + 1, hi - 1, hi - 2, hi - 3, lo + 1]
                view = views.curves_view(run, tuple(r for r in around if 1 <= r < run.n))
                self._subdiagonal.curves.show(view, self._limits, len(run.steps))
                self._subdiagonal.curves.move(self.cursor)
            self._subdiagonal.show_curves(self._curves.value)

    def _paint(self, request: tuple[Run, int, int]) -> Callable[[], None]:
        """Rebuild H at the cursor, which may take a while; the returned call shows it."""
        run, cursor, row = request
        state = self._states.get(cursor)
        if state is None:
            state = run.state(cursor)
            with self._lock:
                if run is self.run:
                    self._states[cursor] = state
                    while len(self._states) > KEPT_STATES:
                        self._states.popitem(last=False)
        view = views.matrix_view(run, cursor, state)
        words = views.subdiagonal_sentence(run, cursor, row, state)

        def show() -> None:
            with self._lock:
                if run is self.run:
                    self._matrix_figure.show(view, self._limits, run.n)
                    self._matrix_figure.choose(row)
                    self._say["matrix"].value = escape(view.sentence)
                    self._say["subdiagonal"].value = escape(words)

        return show

    def _painting_failed(self, failure: Exception) -> None:
        self.error = _one_line(failure)


class _Latest:
    """Carries out the most recent request in a thread of its own and drops those that were overtaken."""

    def __init__(self, prepare: Callable[[Any], Callable[[], None]], failed: Callable[[Exception], None]) -> None:
        self._prepare = prepare
        self._failed = failed
        self._condition = threading.Condition()
        self._pending: Any = None
        self._running = False

    def request(self, what: Any) -> None:
        with self._condition:
            self._pending = what
            if not self._running:
                self._running = True
                threading.Thread(target=self._loop, name="schurbench painter", daemon=True).start()

    def wait(self, timeout: float | None = None) -> None:
        """Wait until nothing is pending.

        Raises
        ------
        TimeoutError
        """
        with self._condition:
            if not self._condition.wait_for(lambda: not self._running, timeout):
                raise TimeoutError(f"the panels are still being drawn after {timeout} s")

    def _loop(self) -> None:
        while True:
            with self._condition:
                if self._pending is None:
                    self._running = False
                    self._condition.notify_all()
                    return
                what, self._pending = self._pending, None
            try:
                self._prepare(what)()
            except Exception as failure:
                self._failed(failure)


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


def _one_line(failure: BaseException) -> str:
    text = " ".join(str(failure).split())
    if isinstance(failure, (SchurbenchError, t.TraitError)):
        return text
    return f"{type(failure).__name__}: {text}" if text else type(failure).__name__


def _safe_stem(name: str) -> str:
    kept = "".join(c if c.isalnum() or c in "-_." else "_" for c in name).strip("._")
    return kept or "matrix"


def _head(matrix: WorkingMatrix, profile: Any) -> str:
    kind = "real" if matrix.is_real else "complex"
    remarks = profile.remarks or ("Nothing stands out.",)
    if profile.departure is None:
        departure = f"between {number(profile.departure_lower)} and {number(profile.departure_upper)}"
    else:
        departure = number(profile.departure)
    line = f"n = {matrix.n}, {kind}, ‖A‖<sub>F</sub> = {number(profile.norm_frobenius)}. {escape(remarks[0])}"
    facts = [
        ("source", matrix.source),
        ("structure", ", ".join(profile.structures) or "none to rounding"),
        ("departure from normality", f"{departure} of the norm"),
        ("balancing", f"shrinks the 1-norm by a factor of {number(profile.balance_factor)}"),
        ("blocks after permuting", plural(profile.components, "block")),
        ("expected for a run", f"{duration(profile.seconds_estimate)}, {number(profile.memory_estimate / 2**20)} MiB"),
        ("SHA-256", matrix.sha256[:16] + " …"),
    ]
    table = "".join(f"<tr><td>{escape(name)}</td><td>{escape(value)}</td></tr>" for name, value in facts)
    more = "".join(f"<div>{escape(text)}</div>" for text in (*remarks[1:], *matrix.notes))
    return f"<details><summary><b>{escape(matrix.name)}</b>: {line}</summary>{more}<table>{table}</table></details>"


def _verdict(factors: Any) -> str:
    certificate = factors.certificate()
    colour, glyph = (CONVERGED, "✔") if certificate.passed else (CHOSEN, "✘")
    lines = [f'<i style="color:{colour};font-style:normal">{glyph}</i> {escape(certificate.sentence)}']
    lines.extend(escape(text) for text in (*factors.notes, factors.trust))
    return "".join(f"<div>{line}</div>" for line in lines if line)
