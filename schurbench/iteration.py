"""The iteration: `Iteration` by hand, `iterate` as the driver and the only loop.

One step is at most one sweep on the active window followed by a scan for negligible entries. The strategy proposes the
shifts, the deflation test judges the entries, the kernels change H, the journal records; this module only puts them in
order.
"""

from __future__ import annotations

import threading
import time
from collections.abc import Callable, Sequence
from dataclasses import asdict, replace
from pathlib import Path
from typing import Any

import numpy as np

from schurbench.errors import InputError, SchurbenchError, SettingsError
from schurbench.intake import WorkingMatrix, load
from schurbench.journal.environment import environment
from schurbench.journal.journal import Journal
from schurbench.journal.records import (
    SPIKE,
    Deflation,
    DeflationKind,
    Progress,
    Step,
    StepKind,
    Stop,
    StopReason,
    Window,
)
from schurbench.journal.run import Run
from schurbench.journal.store import RunStore, require_free
from schurbench.measures import RATIO_LIMIT, Array, frobenius, orthogonality_ratio, residual_ratio
from schurbench.policy import (
    BUILT_IN,
    ShiftStrategy,
    WindowView,
    checked_proposal,
    deflation_test,
    exceptional_shifts,
)
from schurbench.prepare.preparation import prepare, single_blas_thread
from schurbench.settings import check_limits, recorded_strategy, resolve

__all__ = ["Iteration", "drive", "iterate"]

#: Sweeps without any deflation after which a run counts as stalled: more than three times the longest wait seen on healthy
#: matrices (18 sweeps, `schurbench.diagnosis.figures`).
STALLED_AFTER = 60

#: Sweeps, in units of n, before rounding in H and Z is measured for the first time, and between two measurements. Healthy
#: runs end before (3.4 n is usual for single shifts); a measurement costs four matrix products.
_ROUNDING_FIRST, _ROUNDING_EVERY = 6, 2

#: Longest interval between two progress calls, seconds; more often would cost more than it tells.
_PROGRESS_EVERY = 0.05

_KINDS = {
    (True, 1): StepKind.SINGLE,
    (True, 2): StepKind.DOUBLE,
    (False, 1): StepKind.SINGLE,
    (False, 2): StepKind.TWIN_SINGLE,
}


class Iteration:
    """A shifted QR iteration that is stepped by hand.

    Parameters
    ----------
    matrix : WorkingMatrix, or anything `schurbench.load` accepts
    strategy, form, balance, flip, deflation, tol, exceptional, accumulate, limit, stop_when_stalled, keep, store, shifts
        As for `iterate`. With a store, `close` says that no more steps will follow.

    Examples
    --------
    >>> import numpy as np, schurbench as sb
    >>> it = sb.Iteration(np.array([[2.0, 1.0, 0.0], [1.0, 3.0, 1.0], [0.0, 1.0, 4.0]]), strategy="wilkinson")
    >>> while not it.done:
    ...     step = it.step()
    >>> it.stop.reason
    <StopReason.CONVERGED: 'converged'>
    """

    _window: Window
    _fresh: bool  # nothing has been scanned yet
    _sweeps: int
    _waited: int
    _store: RunStore | None  # the one to write to; the journal may read an older one

    def __init__(
        self,
        matrix: Any,
        strategy: str | ShiftStrategy = "auto",
        *,
        form: str = "auto",
        balance: str = "permute",
        flip: bool = False,
        deflation: str = "ahues-tisseur",
        tol: float | None = None,
        exceptional: bool | int | None = None,
        accumulate: bool = True,
        limit: int | None = None,
        stop_when_stalled: bool = False,
        keep: str | int = "256 MiB",
        store: str | Path | None = None,
        shifts: Sequence[complex] | None = None,
    ) -> None:
        directory = None if store is None else require_free(store)
        self.matrix: WorkingMatrix = load(matrix)
        self._strategy, self.settings = resolve(
            self.matrix, strategy, form, balance, flip, deflation, tol, exceptional, accumulate, limit,
            stop_when_stalled, keep, shifts,
        )  # fmt: skip
        began = time.perf_counter()
        self.preparation = prepare(self.matrix, self.settings.form, balance, flip, accumulate)
        self._phases = {"reduce": time.perf_counter() - began, "iterate": 0.0, "compile": 0.0}
        self._environment: dict[str, Any] | None = None
        self._make_kernels_ready()
        from schurbench.kernels import split

        H, Qh = split(self.preparation.H), split(self.preparation.Qh)
        start = (H.copy(), Qh.copy())
        begun = None
        if directory is not None:
            begun = RunStore.create(directory, self.matrix, self.preparation, start, self._head(None))
        self._take_up(H, Qh, Journal.begin(*start, (0, self.n), self.settings.keep, begun))
        self._store = begun

    @classmethod
    def continue_from(
        cls,
        run: Run,
        *,
        limit: int | None = None,
        stop_when_stalled: bool | None = None,
        store: str | Path | bool | None = None,
        strategy: ShiftStrategy | None = None,
    ) -> Iteration:
        """An iteration that goes on where a run stopped; see `Run.resume`, whose parameters and errors these are."""
        if run.converged:
            raise SettingsError(
                "the run has converged, so there is nothing left to do; start a new one for other settings"
            )
        self = cls.__new__(cls)
        self.matrix, self.preparation = run.matrix, run.preparation
        self._strategy = recorded_strategy(run, strategy)
        if limit is None:
            limit = run.settings.limit if run.sweeps < run.settings.limit else run.sweeps + run.settings.limit
        if stop_when_stalled is None:
            stop_when_stalled = run.settings.stop_when_stalled and run.stop.reason is not StopReason.STALLED
        check_limits(limit, stop_when_stalled)
        self.settings = replace(run.settings, limit=int(limit), stop_when_stalled=bool(stop_when_stalled))
        self._phases = dict(run.phases)
        now = environment()
        earlier = run.environment.get("continued", [])
        self._environment = {**run.environment, "continued": [*earlier, {"after_step": len(run.steps), **now}]}
        self._make_kernels_ready()
        H, Qh = run._final
        self._take_up(H.copy(), Qh.copy(), run.journal.continued())
        stop = self._judge()
        if stop is not None:
            raise SettingsError(f"the run cannot go on: {stop.message}")
        if store is not False:
            self._store = _store_to_go_on(run, store, self._head(None))
            self._journal.store = self._store
        return self

    def _make_kernels_ready(self) -> None:
        began = time.perf_counter()
        from schurbench.kernels import deflate, make_ready, scan, sweep

        self._looks = getattr(self._strategy, "deflation_window", None)
        make_ready(self.settings.form, self._looks is not None)
        self._kernels = (sweep, scan, deflate)
        self._phases["compile"] += time.perf_counter() - began

    def _take_up(self, H: Array, Qh: Array, journal: Journal) -> None:
        """Be ready for the step after the last one recorded; H and Zᴴ are those of its state."""
        from schurbench.kernels import Workspace

        self._H, self._Qh, self._journal = H, Qh, journal
        self._work = Workspace(self._H)
        self._real = self.settings.form == "real"
        self._norm = frobenius(journal.checkpoints[0][0])
        self._test = deflation_test(self.settings.deflation)
        self._tol = -1.0 if self.settings.tol is None else self.settings.tol
        self._view = WindowView(self._H)
        self._trusted = type(self._strategy) in BUILT_IN
        self._stop: Stop | None = None
        self._store = None
        self._closed = False
        self._recall()
        # the first measurement that is due now, unless it was made at an earlier step, or later
        first, every = _ROUNDING_FIRST * max(10, self.n), _ROUNDING_EVERY * max(10, self.n)
        done = bool(journal.steps) and not journal.steps[-1].shifts
        passed = max(0, -(-(self._sweeps + done - first) // every))
        self._measure_at = first + passed * every

    @property
    def n(self) -> int:
        """Order of the matrix."""
        return self.matrix.n

    @property
    def H(self) -> Array:
        """Copy of the current H, in working units."""
        from schurbench.kernels import join

        return np.asarray(join(self._H))

    @property
    def Z(self) -> Array | None:
        """Copy of the current Z, or None when it is not accumulated."""
        from schurbench.kernels import join

        return np.ascontiguousarray(join(self._Qh).conj().T) if self.settings.accumulate else None

    @property
    def window(self) -> Window:
        """Active window (lo, hi), half-open; ``(0, n)`` before the first step and ``(0, 0)`` when done."""
        return self._window

    @property
    def done(self) -> bool:
        """Whether the iteration has ended, for whatever reason."""
        return self._stop is not None

    @property
    def stop(self) -> Stop | None:
        """Why the iteration ended, or None while it goes on."""
        return self._stop

    @property
    def sweeps(self) -> int:
        """Sweeps done so far."""
        return self._sweeps

    @property
    def waited(self) -> int:
        """Sweeps since the last deflation."""
        return self._waited

    def step(self) -> Step:
        """Do one sweep on the active window, or look into a deflation window, and scan for negligible entries.

        Returns
        -------
        Step
            Its record. The first step also scans before its sweep; when that finishes the matrix, it is a step without
            a sweep.

        Raises
        ------
        SchurbenchError
            The iteration is done.
        SettingsError
            A strategy of the user's own proposed shifts that cannot be used; the state is as before the call.
        """
        if self._stop is not None:
            raise SchurbenchError(f"the iteration is done ({self._stop.message}); start a new one for more steps")
        if self._closed:
            raise SchurbenchError("the iteration was closed; go on with run().resume()")
        began = time.perf_counter()
        try:
            step = self._step(began)
        except BaseException:
            self._undo()
            raise
        self._phases["iterate"] += time.perf_counter() - began
        self._stop = self._judge()
        if self._stop is not None:
            self.close()
        return step

    def _judge(self) -> Stop | None:
        """Whether the iteration ends with the last step recorded, and why."""
        lo, hi = self._window
        if hi == 0:
            return Stop(StopReason.CONVERGED, f"converged after {_count(self._sweeps, 'sweep')}", (0, 0))
        if self.settings.stop_when_stalled and self._waited >= STALLED_AFTER:
            return Stop(
                StopReason.STALLED,
                f"stalled: no deflation in {self._waited} sweeps on rows {lo} to {hi - 1}; see the diagnosis for what to change",
                self._window,
            )
        if self._rounding_too_large():
            return Stop(
                StopReason.STALLED,
                f"stalled: after {self._sweeps} sweeps rounding has used up half of what a certificate allows, so that more "
                "sweeps would spoil the factors; see the diagnosis for what to change",
                self._window,
            )
        if self._sweeps >= self.settings.limit:
            return Stop(
                StopReason.LIMIT,
                f"stopped at the limit of {_count(self._sweeps, 'sweep')} with rows {lo} to {hi - 1} unfinished",
                self._window,
            )
        if self._store is not None and self._store.failed is not None:
            return Stop(
                StopReason.CANCELLED,
                f"stopped after {_count(self._sweeps, 'sweep')} because {self._store.failed}; the run is still in memory",
                self._window,
            )
        return None

    def close(self) -> None:
        """Write what has not been written to the store yet and let go of it; without a store, only end the iteration.

        A finished iteration closes by itself. A closed one takes no more steps; its run can be resumed.
        """
        self._closed = True
        if self._store is None:
            return
        if self._store.held:
            self._store.settle()
            self._store.head = self._head(self._stop or self._stopped_by_hand())
            self._store.add_checkpoint(len(self._journal.steps), self._H, self._Qh)
        self._store.close()

    def _head(self, stop: Stop | None) -> dict[str, Any]:
        """What a store holds beside the record itself."""
        return {
            "settings": self.settings.to_dict(),
            "phases": dict(self._phases),
            "environment": self._environment or environment(),
            "stop": None if stop is None else asdict(stop),
        }

    def _stopped_by_hand(self) -> Stop:
        return Stop(
            StopReason.CANCELLED,
            f"stopped by hand after {_count(self._sweeps, 'sweep')} with {self._window[1]} of {self.n} rows unfinished",
            self._window,
        )

    def run(self) -> Run:
        """Everything done so far as a `Run`; the iteration may go on afterwards."""
        stop = self._stop or self._stopped_by_hand()
        store = self._store
        if store is not None:
            store.flush()
            if store.failed is not None and store.failed not in stop.message:
                stop = replace(stop, message=f"{stop.message}; {store.failed}, so the run is whole in memory only")
        return Run(
            matrix=self.matrix,
            settings=self.settings,
            preparation=self.preparation,
            journal=self._journal.snapshot(),
            stop=stop,
            phases=dict(self._phases),
            environment=self._environment or environment(),
            # a finished iteration never changes its arrays again, so they need no copy
            _final=(self._H, self._Qh) if self._closed else (self._H.copy(), self._Qh.copy()),
        )

    def _step(self, began: float) -> Step:
        sweep = self._kernels[0]
        index = len(self._journal.steps) + 1
        deflations: list[Deflation] = []
        if self._fresh:
            self._scan(index, deflations, before=True)
            self._fresh = False
        window = self._window
        shifts: tuple[complex, ...] = ()
        exceptional = False
        rotations = rows = 0
        spikes: tuple[float, ...] = ()
        kind = StepKind.SCAN
        view = self._view
        if window[1]:
            view.window = window
            view.waited = self._waited
            view.sweep = self._sweeps
            found = len(deflations)
            rows = min(int(self._looks(view)), window[1] - window[0]) if self._looks is not None else 0
            if rows > 0:
                kind = StepKind.WINDOW
                spikes = self._look(index, window, rows, deflations)
                self._scan(index, deflations, before=False)
            else:
                shifts, exceptional = self._propose()
                kind = _KINDS.get((self._real, len(shifts)), StepKind.MANY)
                rotations = sweep(self._H, self._Qh, self._work, window, shifts, index)
                view.found = None
                self._scan(index, deflations, before=False)
                self._sweeps += 1
                self._waited += 1
            if len(deflations) > found:
                self._waited = 0
        handed_on = view.handed_on if rows > 0 else ()
        seconds = time.perf_counter() - began
        step = Step(
            index, window, kind, shifts, exceptional, rotations, seconds, tuple(deflations), rows, spikes, handed_on
        )
        self._journal.add(step, self._H, self._Qh, self._window)
        return step

    def _look(self, index: int, window: Window, rows: int, out: list[Deflation]) -> tuple[float, ...]:
        """Look into a deflation window; returns its spikes."""
        from schurbench.kernels import deflate_window

        with single_blas_thread():
            outcome = deflate_window(self._H, self._Qh, window, rows, index)
        lo, hi = window
        for row, size, magnitude, threshold, values in outcome.deflated:
            kind = DeflationKind.SINGLE if size == 1 else DeflationKind.PAIR
            out.append(Deflation(index, row, size, kind, SPIKE, magnitude, threshold, values))
            hi = row
        self._window = (lo, hi) if hi > lo else (0, lo)
        self._view.found = (window[1] - hi) / rows
        self._view.handed_on = outcome.handed_on
        spikes: tuple[float, ...] = outcome.spikes
        return spikes

    def _propose(self) -> tuple[tuple[complex, ...], bool]:
        view = self._view
        period = self.settings.exceptional
        if period and self._waited and self._waited % period == 0:
            ordinary = self._strategy.shifts(view)
            turn = self._waited // period - 1
            return exceptional_shifts(view, turn, len(ordinary), self._real), True
        shifts = self._strategy.shifts(view)
        if not self._trusted:
            shifts = checked_proposal(shifts, self._real, self._norm)
        return tuple([complex(s) for s in shifts]), False

    def _scan(self, index: int, out: list[Deflation], *, before: bool) -> None:
        """Split off whatever is negligible at the bottom of the window, and move the window up."""
        _, scan, deflate = self._kernels
        H, Qh, name = self._H, self._Qh, self._test.name
        lo, hi = self._window
        while hi > 0:
            row, magnitude, threshold = scan(H, (lo, hi), self._test.code, self._tol, self._norm)
            size = hi - row
            if size == 1 or (size == 2 and self._real):
                values = deflate(H, Qh, row, size)
                kind = DeflationKind.SINGLE if size == 1 else DeflationKind.PAIR
                out.append(Deflation(index, row, size, kind, name, magnitude, threshold, values, before))
                lo, hi = 0, row
            else:
                if magnitude > 0.0:
                    deflate(H, Qh, row, 0)
                    out.append(Deflation(index, row, size, DeflationKind.SPLIT, name, magnitude, threshold, (), before))
                lo = row
                break
        self._window = (lo, hi) if hi > 0 else (0, 0)

    def _rounding_too_large(self) -> bool:
        """Whether a long run must end so that H and Z stay within the certificate.

        A run that neither converges nor changes repeats the same roundings in every sweep, so that they add up instead of
        averaging out; thousands of such sweeps would push the ratios over their limit.
        """
        if self._sweeps < self._measure_at or not self.settings.accumulate:
            return False
        self._measure_at = self._sweeps + _ROUNDING_EVERY * max(10, self.n)
        Z = self.Z
        assert Z is not None  # accumulated, as just checked
        with single_blas_thread():
            return (
                max(
                    orthogonality_ratio(Z),
                    residual_ratio(self.preparation.working(self.matrix), Z, self.H),
                )
                > 0.5 * RATIO_LIMIT
            )

    def _undo(self) -> None:
        """Back to the last recorded state after a step was broken off in the middle."""
        self._journal.mend()
        H, Qh = self._journal.rebuild(len(self._journal.steps))
        self._H[:] = H
        self._Qh[:] = Qh
        self._recall()

    def _recall(self) -> None:
        """Read everything that the next step depends on, beside H and Zᴴ, off the record."""
        steps, view = self._journal.steps, self._view
        self._window = self._journal.windows[-1]
        self._fresh = not steps
        self._sweeps = sum(1 for step in steps if step.shifts)
        self._waited = 0
        for step in reversed(steps):
            if any(not d.before_sweep for d in step.deflations):
                break
            self._waited += bool(step.shifts)
        view.found = None
        if steps and steps[-1].rows:
            bottom = steps[-1].window[1]
            left = min((d.row for d in steps[-1].deflations if d.test == SPIKE), default=bottom)
            view.found = (bottom - left) / steps[-1].rows
        view.handed_on = next((step.handed_on for step in reversed(steps) if step.rows), ())


def iterate(
    matrix: Any,
    strategy: str | ShiftStrategy = "auto",
    *,
    form: str = "auto",
    balance: str = "permute",
    flip: bool = False,
    deflation: str = "ahues-tisseur",
    tol: float | None = None,
    exceptional: bool | int | None = None,
    accumulate: bool = True,
    limit: int | None = None,
    stop_when_stalled: bool = False,
    keep: str | int = "256 MiB",
    store: str | Path | None = None,
    progress: Callable[[Progress], object] | None = None,
    cancel: threading.Event | None = None,
    shifts: Sequence[complex] | None = None,
) -> Run:
    """Run a shifted QR iteration to its end and record every step.

    Parameters
    ----------
    matrix : WorkingMatrix, or anything `schurbench.load` accepts
    strategy : {"auto", "zero", "rayleigh", "wilkinson", "francis", "multishift", "given"} or ShiftStrategy
        ``auto`` is multishift from n = 256 on; below, francis in real form and wilkinson in complex form.
    form : {"auto", "real", "complex"}
        ``auto``: a complex matrix is complex; a real one is real, except for wilkinson and for given shifts that are not
        closed under conjugation.
    balance : {"permute", "none", "scale", "both"}
        What LAPACK ``gebal`` does first.
    flip : bool
        Reverse rows and columns first.
    deflation : {"ahues-tisseur", "neighbour", "norm"}
    tol : float, optional
        Absolute level, in working units of H, that replaces rounding level in the deflation test.
    exceptional : bool or int, optional
        Exceptional shifts after so many sweeps without a deflation (True: 10; False or 0: never).
        None: on for all strategies but zero and given.
    accumulate : bool
        Whether Z is formed; factors need it.
    limit : int, optional
        Largest number of sweeps; 30·max(10, n) by default (Reference-LAPACK dlahqr.f, ITMAX).
    stop_when_stalled : bool
        Stop after 60 sweeps without a deflation.
    keep : str or int
        Memory for checkpoints, such as ``"256 MiB"`` or a number of bytes.
    store : str or Path, optional
        Directory, empty or not there yet, that the run is recorded in while it goes on. It can be opened with `open_run` at any
        moment, also after the process was killed, and resumed. Needs the extra ``store`` (Zarr).
    progress : callable, optional
        Called with a `Progress` at most 20 times a second, and at the end.
    cancel : threading.Event, optional
        When set, the run stops after the current sweep with what it has.
    shifts : sequence of complex, optional
        For strategy ``given``.

    Returns
    -------
    Run
        Also when it did not converge: ``run.stop`` says why, and partial factors are available. A keyboard interrupt
        ends the run the same way, as cancelled.

    Raises
    ------
    InputError
        The matrix cannot be used, or the directory for the run.
    SettingsError
        The settings cannot be carried out on it.
    """
    began = time.perf_counter()
    iteration = Iteration(
        matrix, strategy, form=form, balance=balance, flip=flip, deflation=deflation, tol=tol, exceptional=exceptional,
        accumulate=accumulate, limit=limit, stop_when_stalled=stop_when_stalled, keep=keep, store=store, shifts=shifts,
    )  # fmt: skip
    return drive(iteration, progress, cancel, began)


def drive(
    iteration: Iteration,
    progress: Callable[[Progress], object] | None = None,
    cancel: threading.Event | None = None,
    began: float | None = None,
) -> Run:
    """Take steps until the iteration is done, or told to stop, and close it; parameters as for `iterate`."""
    began = told = time.perf_counter() if began is None else began
    from_share = _share(iteration)
    try:
        while not iteration.done:
            if cancel is not None and cancel.is_set():
                break
            iteration.step()
            if progress is not None:
                now = time.perf_counter()
                if now - told >= _PROGRESS_EVERY:
                    told = now
                    progress(_progress(iteration, now - began, from_share))
    except KeyboardInterrupt:
        pass  # the step was undone; what is left is a valid partial run
    finally:
        iteration.close()
    run = iteration.run()
    if progress is not None:
        progress(_progress(iteration, time.perf_counter() - began, from_share, ended=True))
    return run


def _share(iteration: Iteration) -> float:
    """Estimate of what is done. Work on a window is proportional to its rows times n, so it shrinks quadratically."""
    hi = iteration.window[1]
    return 1.0 if iteration.done and hi == 0 else 1.0 - (hi / iteration.n) ** 2


def _progress(iteration: Iteration, seconds: float, from_share: float, *, ended: bool = False) -> Progress:
    share = _share(iteration)
    gained = share - from_share  # in these seconds; the rest was there before
    forecast = seconds * (1.0 - share) / gained if gained > 0.02 and not ended else None
    return Progress(
        phase="done" if ended else "iterate",
        sweeps=iteration.sweeps,
        window=iteration.window,
        deflated=iteration.n - iteration.window[1],
        share=share,
        seconds=seconds,
        forecast=forecast,
    )


def _store_to_go_on(run: Run, store: str | Path | bool | None, head: dict[str, Any]) -> RunStore | None:
    """A store that holds the run so far and takes what follows: the run's own or a new one; None without."""
    journal = run.journal
    place = run.store if store is None or isinstance(store, bool) else Path(store)
    if place is None:
        return None
    if run.store is not None and place.resolve() == run.store.resolve():
        held = RunStore.open(place)
        held.hold()
        known, _ = held.steps(run.settings.deflation)
        if known != journal.steps[: len(known)]:
            held.close()
            raise InputError(f"{place} has gone on since this run was opened; open it again and resume that run")
        held.head = head
    else:
        held = RunStore.create(place, run.matrix, run.preparation, journal.checkpoints[0], head)
    for k in range(held.states, len(journal.windows)):
        held.add(journal.steps[k - 1] if k else None, journal.windows[k], journal.bands(k))
    if len(journal.steps) not in held.checkpoints and journal.steps:
        held.add_checkpoint(len(journal.steps), *run._final)
    return held


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}" if number == 1 else f"{number} {noun}s"
