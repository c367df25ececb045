"""The workbench: one matrix, its runs, and four panels that follow one step cursor.

This module holds the state of the page and what scripts and controls may do with it. `page` puts the widgets in their
place, `follow` draws what the cursor shows, `tasks` does the long work, `summary` finds the words.
"""

from __future__ import annotations

import dataclasses
import tempfile
import threading
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import ipywidgets as w
import traitlets as t

from schurbench.errors import InputError, SettingsError
from schurbench.intake import WorkingMatrix, load
from schurbench.journal import Run
from schurbench.panels.follow import Follower
from schurbench.panels.page import Page
from schurbench.panels.side import FORMS, error_html, optional_number, shift_list
from schurbench.panels.summary import head, one_line
from schurbench.panels.tasks import AT_ONCE, Tasks
from schurbench.policy import DEFLATION_TESTS, STRATEGIES
from schurbench.prepare.preparation import BALANCE_CHOICES

__all__ = ["Workbench"]

_SETTINGS = ("strategy", "form", "balance", "flip", "deflation", "tol", "exceptional", "limit", "shifts")


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
        self._page = Page()
        self._tasks = Tasks(self, self._page)
        self._follower = Follower(self, self._page, self._lock)
        super().__init__([*self._page.children])
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
            self._tasks.adopt(given)
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
        self._tasks.job.refuse_second()
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
        self._tasks.run(self._matrix_or_raise(), self.settings())

    def cancel(self) -> None:
        """Stop the work under way; what was computed is kept."""
        self._tasks.job.cancelled.set()

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
        self._tasks.job.wait(until)
        self._follower.wait(until)
        self._tasks.job.raise_failure()
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
        self._tasks.compare(matrix, chosen)

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
        written = list(self._tasks.factored().save(Path(path).expanduser(), replace=replace))
        self._page.save.offer(written)
        return written

    def close(self) -> None:
        """Stop the work and close every widget of the page."""
        if hasattr(self, "_tasks"):  # one whose arguments were refused is closed too, by the garbage collector
            self.cancel()
        super().close()

    # --- controls -------------------------------------------------------------------------------------------------

    def _wire(self) -> None:
        page = self._page
        for name in ("strategy", "form", "balance", "flip", "deflation"):
            t.link((self, name), (getattr(page.form, name), "value"))
        numbers: tuple[tuple[str, Callable[[str], Any], str], ...] = (
            ("tol", float, "tolerance"),
            ("exceptional", int, "exceptional"),
            ("limit", int, "limit"),
        )
        for name, kind, what in numbers:
            self._link_text(name, lambda text, k=kind, what=what: optional_number(text, k, what))
        self._link_text("shifts", shift_list)
        t.link((self, "cursor"), (page.slider, "value"))
        self._follower.wire()
        self.observe(lambda change: self._show_error(change["new"]), "error")
        page.findings.on_try(self._try_remedy)
        page.work.cancel.on_click(lambda _: self.cancel())
        for button, action, form in (
            (page.work.run, self.start, page.form),
            (page.compare.go, self.compare_now, page.compare),
            (page.save.go, self._save_clicked, page.save),
            (page.open.go, self._load_clicked, page.open),
        ):
            button.on_click(lambda _, action=action, form=form: self._guarded(action, form))
        page.open.upload.observe(lambda _: self._guarded(self._uploaded, page.open), "value")

    def _link_text(self, name: str, parse: Callable[[str], Any]) -> None:
        """Tie a trait to the text field of its name. Text that does not parse leaves the trait alone; the page says why."""
        field = getattr(self._page.form, name)

        def typed(change: dict[str, Any]) -> None:
            self._guarded(lambda: setattr(self, name, parse(change["new"])), self._page.form)

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

    def _guarded(self, action: Callable[[], Any], form: Any) -> None:
        """Run the action of a control; an error is shown in one line in its form, never lost."""
        form.error.value = ""
        try:
            action()
        except Exception as failure:
            form.error.value = error_html(one_line(failure))

    def _show_error(self, message: str) -> None:
        self._page.form.error.value = error_html(message)

    def _try_remedy(self, finding: Any) -> None:
        def apply() -> None:
            self._tasks.job.refuse_second()
            remedy = finding.remedy
            if not remedy.settings:
                self._tasks.carry_out(remedy)
                return
            # a remedy names every setting that differs from the defaults
            for name in _SETTINGS:
                value = remedy.settings.get(name, self.trait_defaults(name))
                setattr(self, name, tuple(value) if name == "shifts" else value)
            self.start()

        self._guarded(apply, self._page.form)

    def _ticked(self) -> list[Any]:
        chosen: list[Any] = list(self._page.compare.chosen())
        if self._page.compare.current.value:
            changed = {name: value for name, value in self.settings().items() if value != self.trait_defaults(name)}
            own = {"strategy": self.strategy, **changed}
            if len(own) > 1 or self.strategy not in chosen:
                chosen.insert(0, own)
        return chosen

    # --- files in and out -----------------------------------------------------------------------------------------

    def _save_clicked(self) -> None:
        text = self._page.save.path.value.strip()
        if not text:
            raise InputError("no file is named; give a path that ends in .mat, .npz, .h5 or .mtx")
        self._tasks.job.refuse_second()
        self.export(text, replace=self._page.save.replace.value)

    def _load_clicked(self) -> None:
        text = self._page.open.path.value.strip()
        if not text:
            raise InputError("no file is named; give a path, or upload a file")
        self.load(Path(text).expanduser(), self._page.open.key.value.strip() or None)

    def _uploaded(self) -> None:
        upload = self._page.open.upload
        if not upload.value:
            return
        item = upload.value[0]
        upload.value = ()
        self._tasks.job.refuse_second()
        name = Path(str(item["name"]).replace("\\", "/")).name or "upload"
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / name
            path.write_bytes(item["content"])
            matrix = load(path, self._page.open.key.value.strip() or None)
        self.load(dataclasses.replace(matrix, source=f"uploaded {name}"))

    def _matrix_or_raise(self) -> WorkingMatrix:
        if self.matrix is None:
            raise InputError("there is no matrix yet; load one under Open")
        return self.matrix

    def _take(self, matrix: WorkingMatrix) -> None:
        """Put another matrix on the page and clear what belonged to the one before."""
        from schurbench.prepare import profile

        page = self._page
        with self._lock:
            self.matrix = matrix
            self.run = None
            self.diagnosis = self.comparison = self.factors = None
            page.work.run.disabled = page.compare.go.disabled = False
            page.save.go.disabled = True
            page.save.link.value = page.save.path.value = ""
            page.save.say("Factors appear here after a run.")
            page.compare.say("Tick two or more and press Compare.")
            page.findings.say("Findings appear here after a run.")
            page.work.bar.value = 0.0
            page.work.bar.bar_style = ""
            page.work.status.value = "Ready: choose settings and press Run."
            self.status = "ready"
        page.head.value = head(matrix, profile(matrix))

    def _show_empty(self) -> None:
        page = self._page
        page.head.value = "<b>No matrix yet.</b> Open a file on the right: give its path or upload it."
        page.tabs.selected_index = 3
        page.work.run.disabled = page.compare.go.disabled = page.save.go.disabled = True
        page.work.status.value = "Nothing to run yet."
        page.where.value = "The steps of a run appear here."
