"""The side column's long work: a run, a comparison, a remedy, factors; each says on the page how far it is."""

from __future__ import annotations

import time
from collections.abc import Callable
from html import escape
from typing import TYPE_CHECKING, Any

from schurbench.errors import InputError
from schurbench.intake import WorkingMatrix
from schurbench.journal import Progress, Run, StopReason
from schurbench.panels import views
from schurbench.panels.background import Job
from schurbench.panels.page import Page
from schurbench.panels.summary import one_line, verdict
from schurbench.panels.text import duration
from schurbench.prepare.plain import number

if TYPE_CHECKING:
    from schurbench.panels.workbench import Workbench

__all__ = ["AT_ONCE", "Tasks"]

#: Up to this order a matrix is run as soon as it is loaded, and factors are certified as soon as a run ends.
AT_ONCE = 400

#: Shortest interval between two updates of the page, seconds; more than about 1000 messages a second are dropped.
PAGE_INTERVAL = 0.05


class Tasks:
    """What takes a while, done behind the page of a workbench, one thing at a time."""

    def __init__(self, bench: Workbench, page: Page) -> None:
        self._bench = bench
        self._page = page
        self._told = 0.0
        self.job = Job(self._failed, self._ended)

    # --- what can be begun ----------------------------------------------------------------------------------------

    def run(self, matrix: WorkingMatrix, settings: dict[str, Any]) -> None:
        """Begin a run with these settings; the page shows it when it ends."""

        def work() -> None:
            from schurbench.iteration import iterate

            self.adopt(iterate(matrix, progress=self._on_progress, cancel=self.job.cancelled, **settings))

        self._begin("Running", work)

    def compare(self, matrix: WorkingMatrix, entries: list[Any]) -> None:
        """Begin a comparison; the result is in ``comparison`` of the workbench."""

        def told(event: Any) -> None:
            self._tell(f"{event.entry}: sweep {event.sweeps}", (event.index + event.share) / event.count)

        def work() -> None:
            from schurbench.comparison import compare

            self._bench.comparison = compare(matrix, entries, progress=told, cancel=self.job.cancelled)
            self._page.compare.show(self._bench.comparison)
            self._say_outcome()

        self._begin("Comparing", work)

    def carry_out(self, remedy: Any) -> None:
        """Begin a remedy that is no iteration: other factors of the same run, or a structured solver."""

        def work() -> None:
            from schurbench.factors import Factors

            result = remedy.run()
            self._say_outcome()
            if isinstance(result, Factors):
                self._bench.factors = result
                self._page.save.verdict.value = verdict(result)
                self._page.tabs.selected_index = 2
                self._page.work.status.value = f"Reordered: {escape(result.selection)} first. Factors shows them."
            else:
                self._page.work.status.value = (
                    f"Structured solver: {duration(result.seconds)}, backward error {number(result.backward_error)} "
                    "in units of n times rounding. The panels still show the iteration."
                )

        self._begin("Trying", work)

    # --- what comes of a run --------------------------------------------------------------------------------------

    def adopt(self, run: Run) -> None:
        """Show a run and find out what it says."""
        from schurbench.diagnosis import diagnose

        bench, page = self._bench, self._page
        bench.factors = None
        bench.run = run
        self._say_outcome()
        bench.diagnosis = diagnose(run)
        page.findings.show(bench.diagnosis)
        if run.n <= AT_ONCE and run.settings.accumulate:
            self.factored()
        else:
            page.save.say("Press Save factors to certify and save them.")

    def factored(self) -> Any:
        """Factors of the run on the page, computed once, with their verdict shown.

        Raises
        ------
        InputError
            There is no run yet.
        """
        bench, page = self._bench, self._page
        if bench.run is None:
            raise InputError("there is no run yet; press Run first")
        if bench.factors is None:
            bench.factors = bench.run.factors()
            page.save.verdict.value = verdict(bench.factors)
            if not page.save.path.value:
                page.save.path.value = f"{_safe_stem(bench.run.matrix.name)}_schur.mat"
        return bench.factors

    def _say_outcome(self) -> None:
        run = self._bench.run
        if run is None:
            self._bench.status = "ready"
            return
        finished = run.converged
        bar = self._page.work.bar
        bar.value = 1.0 if finished else float(views.finished_rows(run, len(run.steps)).mean())
        bar.bar_style = "success" if finished else "warning"
        text = f"{run.stop.message[:1].upper()}{run.stop.message[1:]}"
        text = text.rstrip(".") + f", {duration(run.seconds)}."
        if run.stop.reason in (StopReason.LIMIT, StopReason.STALLED):
            text += " The findings say why and what to try."
        elif run.stop.reason is StopReason.CANCELLED:
            text += " The panels show what was done; Run starts again."
        self._page.work.status.value = escape(text)
        self._bench.status = "finished" if finished else "stopped"

    # --- how far it is --------------------------------------------------------------------------------------------

    def _begin(self, what: str, work: Callable[[], None]) -> None:
        def announce() -> None:
            self._bench.error = ""
            self._bench.status = "working"
            page = self._page
            page.work.run.disabled = page.compare.go.disabled = page.save.go.disabled = True
            page.work.cancel.disabled = False
            page.work.bar.bar_style = ""
            page.work.bar.value = 0.0
            page.work.status.value = f"{escape(what)} …"
            self._told = 0.0

        self.job.begin(work, announce)

    def _tell(self, text: str, share: float, last: bool = False) -> None:
        """Update the progress bar, at most 20 times a second, the last time always."""
        now = time.monotonic()
        if last or now - self._told >= PAGE_INTERVAL:
            self._told = now
            self._page.work.bar.value = min(1.0, max(0.0, share))
            self._page.work.status.value = escape(text)

    def _on_progress(self, event: Progress) -> None:
        if event.phase == "reduce":
            self._tell("Reducing to Hessenberg form …", 0.0)
            return
        left = f", about {duration(event.forecast)} left" if event.forecast else ""
        assert self._bench.matrix is not None
        text = f"Sweep {event.sweeps}: {event.deflated} of {self._bench.matrix.n} rows finished{left}"
        self._tell(text, event.share, event.phase == "done")

    def _failed(self, failure: Exception) -> None:
        self._bench.error = one_line(failure)
        self._bench.status = "failed"
        self._page.work.bar.bar_style = "danger"
        self._page.work.status.value = "Failed. Change a setting and run again, or open another matrix."

    def _ended(self) -> None:
        page = self._page
        page.work.run.disabled = page.compare.go.disabled = self._bench.matrix is None
        page.save.go.disabled = self._bench.run is None
        page.work.cancel.disabled = True


def _safe_stem(name: str) -> str:
    kept = "".join(c if c.isalnum() or c in "-_." else "_" for c in name).strip("._")
    return kept or "matrix"
