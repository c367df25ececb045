"""Following the cursor: what is drawn when the run, the step or the chosen row changes, and where a click leads."""

from __future__ import annotations

import threading
from collections import OrderedDict
from collections.abc import Callable
from html import escape
from typing import TYPE_CHECKING

from schurbench.journal import Run, State
from schurbench.panels import views
from schurbench.panels.background import Latest
from schurbench.panels.figures import scale_html
from schurbench.panels.page import Page
from schurbench.panels.summary import one_line

if TYPE_CHECKING:
    from schurbench.panels.workbench import Workbench

__all__ = ["Follower"]

#: States of H kept for going back and forth.
KEPT_STATES = 8


class Follower:
    """Keeps the track and the panels at the cursor of a workbench, and moves the cursor when they are clicked."""

    def __init__(self, bench: Workbench, page: Page, lock: threading.RLock) -> None:
        self._bench = bench
        self._page = page
        self._lock = lock
        self._states: OrderedDict[int, State] = OrderedDict()
        self._limits = (0.0, 1.0)
        self._painter = Latest(self._paint, self._painting_failed)

    def wire(self) -> None:
        """Follow the traits of the workbench, and listen to clicks into the track and the panels."""
        bench, page = self._bench, self._page
        bench.observe(lambda _: self._follow(), ["cursor", "row"])
        bench.observe(lambda _: self._show_run(), "run")
        page.curves.observe(lambda _: self._show_curves(), "value")
        page.to_start.on_click(lambda _: self.go(0))
        page.to_last.on_click(lambda _: self._go_deflation(-1))
        page.to_next.on_click(lambda _: self._go_deflation(1))
        page.to_longest.on_click(lambda _: self.go(views.longest_wait(bench.run) if bench.run else 0))
        page.track.on_click(lambda x, y: self.go(round(x)))
        page.matrix.on_click(lambda x, y: self._choose(round(y)))
        page.subdiagonal.picture.on_click(lambda x, y: self._choose(round(y), round(x)))
        page.subdiagonal.curves.on_click(lambda x, y: self.go(round(x)))
        page.deflations.on_click(lambda x, y: self._choose(round(y), round(x)))
        page.spectrum.on_click(self._choose_value)

    def wait(self, until: float | None) -> None:
        """Wait until every panel is drawn, but no longer than the monotonic clock shows ``until``.

        Raises
        ------
        TimeoutError
        """
        self._painter.wait(until)

    # --- moving ---------------------------------------------------------------------------------------------------

    def go(self, cursor: int) -> None:
        """Move the cursor, to the nearest end if there is no such step."""
        last = len(self._bench.run.steps) if self._bench.run else 0
        self._bench.cursor = min(max(0, cursor), last)

    def _go_deflation(self, direction: int) -> None:
        run, cursor = self._bench.run, self._bench.cursor
        if run is None:
            return
        steps = sorted({event.step for event in run.deflations})
        ahead = [k for k in steps if (k > cursor if direction > 0 else k < cursor)]
        if ahead:
            self.go(ahead[0] if direction > 0 else ahead[-1])

    def _choose(self, row: int, cursor: int | None = None) -> None:
        """Choose a row; choosing it again lets the page follow the waiting row."""
        bench = self._bench
        if bench.run is None:
            return
        row = min(max(0, row), bench.run.n - 1)
        with self._lock, bench.hold_trait_notifications():
            bench.row = None if bench.row == row and cursor in (None, bench.cursor) else row
            if cursor is not None:
                self.go(cursor)

    def _choose_value(self, x: float, y: float) -> None:
        run = self._bench.run
        if run is None:
            return
        values = run.to_matrix_units(run.ritz(self._bench.cursor))
        (left, right), (low, high) = views.spectrum_limits(run)
        distance = ((values.real - x) / (right - left)) ** 2 + ((values.imag - y) / (high - low)) ** 2
        self._choose(int(distance.argmin()))

    # --- showing --------------------------------------------------------------------------------------------------

    def _show_run(self) -> None:
        """Everything that depends on the run but not on the cursor."""
        bench, page, run = self._bench, self._page, self._bench.run
        if run is None:
            return
        with self._lock:
            self._states.clear()
            steps = len(run.steps)
            self._limits = views.magnitude_limits(run)
            page.track.show(views.track_view(run))
            page.subdiagonal.picture.show(views.map_view(run), self._limits, run.n, steps)
            page.deflations.show(views.deflation_view(run), run.n, steps)
            page.spectrum.frame(*views.spectrum_limits(run))
            page.scale.value = scale_html(self._limits)
            page.set_last_step(max(1, steps))
            bench.row = None
            target = views.longest_wait(run)
            if bench.cursor == target:
                self._follow()
            else:
                bench.cursor = target

    def _at(self, run: Run) -> tuple[int, int]:
        """The step and the row that are shown."""
        cursor = min(self._bench.cursor, len(run.steps))
        row = self._bench.row
        return cursor, views.waited_row(run, cursor) if row is None else min(row, run.n - 1)

    def _follow(self) -> None:
        """Everything that depends on the cursor and the chosen row; the picture of H follows from its own thread."""
        page, run = self._page, self._bench.run
        if run is None:
            return
        with self._lock:
            cursor, row = self._at(run)
            for figure in (page.track, page.subdiagonal.picture, page.subdiagonal.curves, page.deflations):
                figure.move(cursor)
            for figure in (page.subdiagonal.picture, page.deflations):
                figure.choose(row)
            self._show_curves()
            spectrum = views.spectrum_view(run, cursor, row)
            page.spectrum.show(spectrum)
            page.where.value = escape(views.track_sentence(run, cursor))
            page.say["deflations"].value = escape(views.deflation_sentence(run, cursor))
            page.say["spectrum"].value = escape(spectrum.sentence)
        self._painter.request((run, cursor, row))

    def _show_curves(self) -> None:
        page, run = self._page, self._bench.run
        with self._lock:
            if page.curves.value and run is not None:
                cursor, row = self._at(run)
                lo, hi = run.window(cursor)
                around = [row, row - 1, row + 1, hi - 1, hi - 2, hi - 3, lo + 1]
                view = views.curves_view(run, tuple(r for r in around if 1 <= r < run.n))
                page.subdiagonal.curves.show(view, self._limits, len(run.steps))
                page.subdiagonal.curves.move(cursor)
            page.subdiagonal.show_curves(page.curves.value)

    def _paint(self, request: tuple[Run, int, int]) -> Callable[[], None]:
        """Rebuild H at the cursor, which may take a while; the returned call shows it."""
        run, cursor, row = request
        state = self._states.get(cursor)
        if state is None:
            state = run.state(cursor)
            with self._lock:
                if run is self._bench.run:
                    self._states[cursor] = state
                    while len(self._states) > KEPT_STATES:
                        self._states.popitem(last=False)
        view = views.matrix_view(run, cursor, state)
        words = views.subdiagonal_sentence(run, cursor, row, state)

        def show() -> None:
            with self._lock:
                if run is self._bench.run:
                    self._page.matrix.show(view, self._limits, run.n)
                    self._page.matrix.choose(row)
                    self._page.say["matrix"].value = escape(view.sentence)
                    self._page.say["subdiagonal"].value = escape(words)

        return show

    def _painting_failed(self, failure: Exception) -> None:
        self._bench.error = one_line(failure)
