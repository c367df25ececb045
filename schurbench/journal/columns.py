"""Steps and deflations as plain columns of numbers, as files and stores hold them, and back.

Whatever is read is checked here before a record is made of it: replay hands windows and rows to compiled kernels, which do
not look at bounds again.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from schurbench.journal.records import SPIKE, Deflation, DeflationKind, Step, StepKind, Window

__all__ = ["COLUMNS", "decode", "encode"]

_STEP_KINDS = list(StepKind)
_DEFLATION_KINDS = list(DeflationKind)

#: Name, type and width of each column group. ``steps``: index, kind, window, exceptional, rotations, rows, how many shifts,
#: spikes, values handed on and deflations, window afterwards. ``deflations``: step, row, size, kind, by a spike, before the
#: sweep, how many eigenvalues. ``levels``: magnitude, threshold. ``values``, step by step: shifts, values handed on,
#: eigenvalues. ``seconds`` has one entry a step, ``spikes`` those of all deflation windows.
COLUMNS: dict[str, tuple[str, tuple[int, ...]]] = {
    "steps": ("int64", (13,)),
    "seconds": ("float64", ()),
    "deflations": ("int64", (7,)),
    "levels": ("float64", (2,)),
    "values": ("complex128", ()),
    "spikes": ("float64", ()),
}


def encode(steps: Sequence[Step], windows: Sequence[Window]) -> dict[str, npt.NDArray[Any]]:
    """Columns of some steps; ``windows`` are those after each of them."""
    rows: dict[str, list[Any]] = {name: [] for name in COLUMNS}
    for step, after in zip(steps, windows, strict=True):
        rows["steps"].append(
            (
                step.index, _STEP_KINDS.index(step.kind), *step.window, step.exceptional, step.rotations, step.rows,
                len(step.shifts), len(step.spikes), len(step.handed_on), len(step.deflations), *after,
            )
        )  # fmt: skip
        rows["seconds"].append(step.seconds)
        rows["spikes"] += step.spikes
        rows["values"] += step.shifts
        rows["values"] += step.handed_on
        for d in step.deflations:
            kind, spike = _DEFLATION_KINDS.index(d.kind), d.test == SPIKE
            rows["deflations"].append((d.step, d.row, d.size, kind, spike, d.before_sweep, len(d.eigenvalues)))
            rows["levels"].append((d.magnitude, d.threshold))
            rows["values"] += d.eigenvalues
    return {
        name: np.array(rows[name], dtype=dtype).reshape(len(rows[name]), *tail)
        for name, (dtype, tail) in COLUMNS.items()
    }


def decode(
    columns: Mapping[str, npt.NDArray[Any]], *, n: int, real: bool, test: str
) -> tuple[list[Step], list[Window]]:
    """Steps, and the windows after each of them.

    Raises
    ------
    ValueError
        The columns contradict each other, or something lies outside a matrix of order n.
    """
    for name, (dtype, tail) in COLUMNS.items():
        if columns[name].dtype != dtype or columns[name].shape[1:] != tail:
            raise ValueError(f"{name} has another type or shape")
    S, D = columns["steps"], columns["deflations"]
    _check(S, D, columns, n, real)
    values, spikes = columns["values"].tolist(), columns["spikes"].tolist()
    levels, seconds = columns["levels"].tolist(), columns["seconds"].tolist()
    steps: list[Step] = []
    at = at_spike = at_deflation = 0
    events: list[list[int]] = D.tolist()
    for number, row in enumerate(S.tolist()):
        index, kind, lo, hi, exceptional, rotations, rows, n_shifts, n_spikes, n_handed, n_deflations, _, _ = row
        shifts = tuple(values[at : at + n_shifts])
        handed_on = tuple(values[at + n_shifts : at + n_shifts + n_handed])
        at += n_shifts + n_handed
        found = []
        for i in range(at_deflation, at_deflation + n_deflations):
            _, first, size, sort, spike, before, n_values = events[i]
            magnitude, threshold = levels[i]
            found.append(
                Deflation(
                    index, first, size, _DEFLATION_KINDS[sort], SPIKE if spike else test, magnitude, threshold,
                    tuple(values[at : at + n_values]), bool(before),
                )
            )  # fmt: skip
            at += n_values
        at_deflation += n_deflations
        steps.append(
            Step(
                index, (lo, hi), _STEP_KINDS[kind], shifts, bool(exceptional), rotations, seconds[number],
                tuple(found), rows, tuple(spikes[at_spike : at_spike + n_spikes]), handed_on,
            )
        )  # fmt: skip
        at_spike += n_spikes
    return steps, [(lo, hi) for lo, hi in S[:, 11:].tolist()]


def _check(
    S: npt.NDArray[np.int64], D: npt.NDArray[np.int64], columns: Mapping[str, npt.NDArray[Any]], n: int, real: bool
) -> None:
    index, kind, lo, hi, _, rotations, rows, n_shifts, n_spikes, n_handed, n_deflations, lo_after, hi_after = S.T
    step, first, size, sort, _, _, n_values = D.T
    sound = (
        np.array_equal(index, np.arange(1, len(S) + 1))
        and np.all((kind >= 0) & (kind < len(_STEP_KINDS)))
        and np.all((lo >= 0) & (lo <= hi) & (hi <= n) & (lo_after >= 0) & (lo_after <= hi_after) & (hi_after <= n))
        and np.all((rows >= 0) & (rows <= hi - lo) & (rotations >= 0))
        and min(n_shifts.min(initial=0), n_spikes.min(initial=0), n_handed.min(initial=0)) >= 0
        and min(n_deflations.min(initial=0), n_values.min(initial=0)) >= 0
        and np.all((n_shifts == 0) | ((hi - lo >= 2) & (rows == 0)))
        and (not real or np.all((n_shifts <= 1) | (n_shifts % 2 == 0)))
        and np.array_equal(step, np.repeat(index, np.maximum(n_deflations, 0)))
        and np.all((first >= 0) & (size >= 1) & (first + size <= n))
        and np.all((sort >= 0) & (sort < len(_DEFLATION_KINDS)))
        and np.all((np.array(_DEFLATION_KINDS)[sort] == DeflationKind.SPLIT) | (size <= 2))
        and len(columns["seconds"]) == len(S)
        and len(columns["levels"]) == len(D)
        and len(columns["spikes"]) == n_spikes.sum()
        and len(columns["values"]) == n_shifts.sum() + n_handed.sum() + n_values.sum()
        and not np.isnan(columns["seconds"]).any()
        and not np.isnan(columns["levels"]).any()
        and not np.isnan(columns["spikes"]).any()
        and not np.isnan(columns["values"]).any()
    )
    if not sound:
        raise ValueError("steps that contradict each other")
