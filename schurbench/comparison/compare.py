"""Several strategies and settings side by side on one matrix."""

from __future__ import annotations

import inspect
import threading
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import CancelledError, Executor, Future, ThreadPoolExecutor, wait
from dataclasses import asdict, dataclass
from functools import cache
from typing import Any

import numpy as np

from schurbench.errors import InputError, SchurbenchError, SettingsError
from schurbench.intake import WorkingMatrix, load
from schurbench.iteration import iterate
from schurbench.journal import Progress, Run, Settings, StopReason
from schurbench.prepare.plain import number, plain
from schurbench.prepare.preparation import single_blas_thread

__all__ = [
    "DEFAULT_ENTRIES",
    "Comparison",
    "ComparisonProgress",
    "Entry",
    "Figures",
    "compare",
    "figures_of",
    "need_pandas",
]

#: Compared when nothing is named: one strategy of each kind of shift. ``zero`` hardly ever ends before the limit, ``given``
#: needs shifts, ``multishift`` differs from the first two on large matrices only, ``auto`` is one of the others.
DEFAULT_ENTRIES = ("francis", "wilkinson", "rayleigh")

#: Seconds closer than this share of the fastest, or than this many, are one and the same: repeated runs of one setting
#: differ as much.
_SAME_SHARE = 0.10
_SAME_SECONDS = 0.01

_NOT_RUN = "not run: the comparison was cancelled"


@dataclass(frozen=True, slots=True)
class ComparisonProgress(Progress):
    """Progress of one entry, and which of them it is.

    Attributes
    ----------
    entry : str
        Label of the entry.
    index, count : int
        Its place (from 0) among so many.
    """

    entry: str
    index: int
    count: int


@dataclass(frozen=True, slots=True)
class Figures:
    """What one run cost and what it gave.

    Attributes
    ----------
    sweeps : int
    sweeps_per_eigenvalue : float or None
        Over the eigenvalues found; None when none was.
    exceptional_shifts : int
        Sweeps that used exceptional shifts.
    longest_wait : int
        Most sweeps between two deflations.
    seconds : float
        Wall time of reduction and iteration, without compiling kernels and without assembling factors.
    stop : str
        Stop reason.
    converged : bool
    backward_error, orthogonality : float or None
        Ratios of the certificate of the factors of the loaded matrix: for a scaled run after its factors were carried
        over, so that all entries answer for the same matrix. None without factors.
    passed : bool or None
        Verdict of that certificate; None without factors.
    note : str
        Why there are no factors; empty where there are.
    """

    sweeps: int
    sweeps_per_eigenvalue: float | None
    exceptional_shifts: int
    longest_wait: int
    seconds: float
    stop: str
    converged: bool
    backward_error: float | None
    orthogonality: float | None
    passed: bool | None
    note: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Entry:
    """One setting of a comparison.

    Attributes
    ----------
    label : str
        Strategy and what differs from the defaults, unique in the comparison.
    asked : dict
        Keywords of `schurbench.iterate` as they were asked for.
    settings : Settings or None
        As carried out; None when the entry failed.
    run : Run or None
    figures : Figures or None
    error : str or None
        One line when the entry failed; the others went on.
    """

    label: str
    asked: Mapping[str, Any]
    settings: Settings | None = None
    run: Run | None = None
    figures: Figures | None = None
    error: str | None = None

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: label, settings as carried out, figures, error."""
        return {
            "label": self.label,
            "settings": None if self.settings is None else plain(self.settings.to_dict()),
            "figures": None if self.figures is None else plain(asdict(self.figures)),
            "error": self.error,
        }


@dataclass(frozen=True, slots=True, eq=False)
class Comparison:
    """Entries in the order they were asked for, and the preferred one.

    Attributes
    ----------
    matrix : WorkingMatrix
    entries : tuple of Entry
    """

    matrix: WorkingMatrix
    entries: tuple[Entry, ...]

    @property
    def preferred(self) -> Entry | None:
        """The entry to take, or None when none converged with factors that pass.

        Of the entries that converged and whose certificate passed (or that were asked not to accumulate Z), the
        fastest; entries within 10 % or 10 ms of its time count as equally fast, and of these the one with the fewest
        sweeps is taken, then the one asked for first. Seconds are measured, so two close entries may change places
        when the comparison is repeated.
        """
        sound = [entry for entry in self.entries if _is_sound(entry)]
        if not sound:
            return None
        fastest = min(_figures(entry).seconds for entry in sound)
        level = [entry for entry in sound if _figures(entry).seconds <= fastest * (1.0 + _SAME_SHARE) + _SAME_SECONDS]
        return min(level, key=lambda entry: _figures(entry).sweeps)

    @property
    def sentence(self) -> str:
        """The outcome in words."""
        best = self.preferred
        if best is None:
            return "None of the entries converged with factors that pass; the diagnosis of their runs says why."
        figures = _figures(best)
        return (
            f"{best.label} is preferred: of the entries that converged and passed it was the fastest, or as "
            f"fast with fewer sweeps: {figures.sweeps} sweeps in {number(figures.seconds)} s."
        )

    def table(self) -> Any:
        """One row an entry, as a pandas frame indexed by label.

        Raises
        ------
        InputError
            pandas is not installed.
        """
        pandas = need_pandas()
        columns = list(Figures.__dataclass_fields__)
        rows = [
            {name: None if entry.figures is None else getattr(entry.figures, name) for name in columns}
            | {"error": entry.error or ""}
            for entry in self.entries
        ]
        index = pandas.Index([entry.label for entry in self.entries], name="entry")
        return pandas.DataFrame(rows, index=index, columns=[*columns, "error"])

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready; `preferred` is a label."""
        best = self.preferred
        return {
            "matrix": {"name": self.matrix.name, "n": self.matrix.n, "sha256": self.matrix.sha256},
            "entries": [entry.to_dict() for entry in self.entries],
            "preferred": None if best is None else best.label,
            "sentence": self.sentence,
        }


def compare(
    matrix: Any,
    entries: Sequence[str | Mapping[str, Any]] | str | Mapping[str, Any] | None = None,
    executor: Executor | None = None,
    progress: Callable[[ComparisonProgress], object] | None = None,
    cancel: threading.Event | None = None,
    **common: Any,
) -> Comparison:
    """Run several settings on one matrix.

    Parameters
    ----------
    matrix : WorkingMatrix, or anything `schurbench.load` accepts
    entries : sequence of str or dict, or one of them, optional
        Strategy names or keywords of `schurbench.iterate`. By default francis, wilkinson and rayleigh.
    executor : concurrent.futures.Executor, optional
        Where entries run at the same time; without one they run one after another, which gives the fairer seconds.
    progress : callable, optional
        Called with `ComparisonProgress`; with an executor other than a thread pool only when an entry ends.
    cancel : threading.Event, optional
        When set, the entry that runs stops with what it has and the others are not run.
    **common
        Keywords of `schurbench.iterate` for every entry; an entry's own take precedence.

    Returns
    -------
    Comparison
        An entry that fails holds its error; the others are not affected.

    Raises
    ------
    InputError
        The matrix cannot be used.
    SettingsError
        There is no entry to compare.
    """
    m = load(matrix)
    if isinstance(entries, str | Mapping):  # its letters or keywords would count as entries
        entries = [entries]
    asked = [_keywords(entry, common) for entry in (DEFAULT_ENTRIES if entries is None else entries)]
    if not asked:
        raise SettingsError("there is nothing to compare; name at least one strategy or setting")
    labels = _labels(asked)

    def hear(index: int) -> Callable[[Progress], object] | None:
        if progress is None:
            return None
        return lambda event: progress(
            ComparisonProgress(**_fields(event), entry=labels[index], index=index, count=len(labels))
        )

    # One limit around all entries: contexts entered and left by several threads would restore each other's.
    with single_blas_thread():
        if executor is None:
            results = _one_by_one(m, asked, labels, hear, cancel)
        else:
            results = _together(executor, m, asked, labels, hear, cancel)
    return Comparison(m, tuple(results))


def figures_of(run: Run) -> Figures:
    """Figures of a finished or stopped run; assembles and certifies its factors."""
    found = sum(len(deflation.eigenvalues) for deflation in run.deflations)
    backward_error = orthogonality = passed = None
    note = ""
    try:
        certificate = run.factors().certificate()
        backward_error, orthogonality = certificate.backward_error, certificate.orthogonality
        passed = certificate.passed
    except SchurbenchError as error:
        note = str(error)
    return Figures(
        sweeps=run.sweeps,
        sweeps_per_eigenvalue=run.sweeps / found if found else None,
        exceptional_shifts=len(run.exceptional_steps),
        longest_wait=int(np.max(run.waits, initial=0)),
        seconds=run.seconds,
        stop=str(run.stop.reason),
        converged=run.converged,
        backward_error=backward_error,
        orthogonality=orthogonality,
        passed=passed,
        note=note,
    )


def need_pandas() -> Any:
    """The pandas module, or one clear line."""
    try:
        import pandas
    except ImportError:
        raise InputError("a table needs pandas; install schurbench[formats], or use to_dict()") from None
    return pandas


def _keywords(entry: str | Mapping[str, Any], common: Mapping[str, Any]) -> dict[str, Any]:
    if isinstance(entry, str):
        return {**common, "strategy": entry}
    if isinstance(entry, Mapping):
        return {**common, **{str(key): value for key, value in entry.items()}}
    raise SettingsError(f"{entry!r} is no entry to compare; give a strategy name or a dict of settings")


def _labels(asked: Sequence[Mapping[str, Any]]) -> list[str]:
    """Strategy and the settings in which entries differ from what all of them share."""
    shared = {
        key: value
        for key, value in asked[0].items()
        if all(key in other and _same(other[key], value) for other in asked)
    }
    labels: list[str] = []
    for keywords in asked:
        strategy = keywords.get("strategy", "auto")
        name = strategy if isinstance(strategy, str) else str(getattr(strategy, "name", type(strategy).__name__))
        rest = [f"{key}={_short(value)}" for key, value in keywords.items() if key != "strategy" and key not in shared]
        label = " ".join([name, *rest])
        copies = sum(1 for other in labels if other == label or other.startswith(label + " ("))
        labels.append(label if not copies else f"{label} ({copies + 1})")
    return labels


def _same(a: object, b: object) -> bool:
    return a is b or (type(a) is type(b) and isinstance(a, str | int | float | bool | None) and a == b)


def _short(value: Any) -> str:
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, str | int | float | None):
        return str(value)
    if isinstance(value, Sequence):
        return f"{len(value)} values"
    return type(value).__name__


def _fields(event: Progress) -> dict[str, Any]:
    return {name: getattr(event, name) for name in Progress.__dataclass_fields__}


@cache
def _settings_known() -> frozenset[str]:
    own = {"matrix", "progress", "cancel"}
    return frozenset(inspect.signature(iterate).parameters) - own


@cache
def _compiled() -> None:
    """Compile, or load from the cache, once in a process: no entry's seconds may contain it."""
    from schurbench.kernels import warm

    warm()


def _carry_out(
    m: WorkingMatrix,
    keywords: Mapping[str, Any],
    label: str,
    progress: Callable[[Progress], object] | None = None,
    cancel: threading.Event | None = None,
) -> Entry:
    """One entry; whatever goes wrong in it stays in it."""
    unknown = sorted(set(keywords) - _settings_known())
    if unknown:
        known = ", ".join(sorted(_settings_known()))
        return Entry(label, keywords, error=f"there is no setting {', '.join(unknown)}; known are {known}")
    try:
        _compiled()
        run = iterate(m, progress=progress, cancel=cancel, **keywords)
        return Entry(label, keywords, run.settings, run, figures_of(run))
    except SchurbenchError as error:
        return Entry(label, keywords, error=str(error))
    except Exception as error:  # a strategy of the user's own may raise anything
        return Entry(label, keywords, error=f"{type(error).__name__}: {' '.join(str(error).split())}")


Hear = Callable[[int], Callable[[Progress], object] | None]


def _one_by_one(
    m: WorkingMatrix,
    asked: Sequence[Mapping[str, Any]],
    labels: Sequence[str],
    hear: Hear,
    cancel: threading.Event | None,
) -> list[Entry]:
    results: list[Entry] = []
    interrupted = False
    for index, (keywords, label) in enumerate(zip(asked, labels, strict=True)):
        if interrupted or (cancel is not None and cancel.is_set()):
            results.append(Entry(label, keywords, error=_NOT_RUN))
            continue
        entry = _carry_out(m, keywords, label, hear(index), cancel)
        # A keyboard interrupt ends the run as cancelled; it was meant for the whole comparison.
        interrupted = entry.run is not None and entry.run.stop.reason is StopReason.CANCELLED
        results.append(entry)
    return results


def _together(
    executor: Executor,
    m: WorkingMatrix,
    asked: Sequence[Mapping[str, Any]],
    labels: Sequence[str],
    hear: Hear,
    cancel: threading.Event | None,
) -> list[Entry]:
    shares_memory = isinstance(executor, ThreadPoolExecutor)
    futures: list[Future[Entry]] = []
    for index, (keywords, label) in enumerate(zip(asked, labels, strict=True)):
        extra = (hear(index), cancel) if shares_memory else ()
        futures.append(executor.submit(_carry_out, m, keywords, label, *extra))
    pending = set(futures)
    while pending:
        done, pending = wait(pending, timeout=0.1)
        if cancel is not None and cancel.is_set():
            for future in pending:
                future.cancel()
        if shares_memory:
            continue
        for future in done:
            _tell_end(hear(futures.index(future)), future)
    return [_outcome(future, asked[i], labels[i]) for i, future in enumerate(futures)]


def _outcome(future: Future[Entry], keywords: Mapping[str, Any], label: str) -> Entry:
    try:
        return future.result()
    except CancelledError:
        return Entry(label, keywords, error=_NOT_RUN)
    except Exception as error:  # the worker died, or the entry could not be sent to it or back
        return Entry(
            label, keywords, error=f"the worker failed ({type(error).__name__}: {' '.join(str(error).split())})"
        )


def _tell_end(tell: Callable[[Progress], object] | None, future: Future[Entry]) -> None:
    if tell is None or future.cancelled() or future.exception() is not None:
        return
    run = future.result().run
    if run is not None:
        left = run.stop.window[1]
        share = 1.0 - (left / run.n) ** 2
        tell(Progress("done", run.sweeps, run.stop.window, run.n - left, share, run.seconds, None))


def _figures(entry: Entry) -> Figures:
    if entry.figures is None:
        raise ValueError(f"{entry.label} failed and has no figures")
    return entry.figures


def _is_sound(entry: Entry) -> bool:
    if entry.figures is None or entry.settings is None or not entry.figures.converged:
        return False
    return bool(entry.figures.passed) or not entry.settings.accumulate
