"""The evidence every cause draws on, worked out once for a run and only when a cause asks for it."""

from __future__ import annotations

import itertools
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from schurbench.diagnosis.figures import HealthyFigures, healthy_figures
from schurbench.journal import Deflation, DeflationKind, StopReason
from schurbench.matching import pair_spectra
from schurbench.measures import ULP
from schurbench.prepare.preparation import single_blas_thread
from schurbench.prepare.profile import Profile, profile_of

if TYPE_CHECKING:
    from schurbench.journal import Run

__all__ = ["ILL_CONDITIONED", "Case", "Cluster", "Decay", "Stretch"]

Real = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

#: Condition number from which an eigenvalue may count as ill-determined; Gaussian matrices of order 100 reach some 100.
ILL_CONDITIONED = 1e4

#: States looked at in one stretch; more would cost time and change no slope.
_SAMPLES = 160

#: Stretches examined in one run, the longest first.
_EXAMINED = 6

#: Share of the run, and least seconds, that one costly part of the diagnosis may take. Eigenvalues of an unfinished
#: window, and condition numbers, are only computed when they are expected to fit in. LAPACK needs about 1.2e-9·n³ s
#: for eigenvalues without vectors in real form and 4 times that in complex form, and 1.3e-9·n³ s for the left and right
#: vectors of a triangular matrix in either (n = 100 to 500, the machine of `schurbench.prepare.estimate`).
_SHARE, _LEAST = 0.05, 0.05
_EIGENVALUES_COST = {"real": 1.2e-9, "complex": 5e-9}
_CONDITIONS_COST = 1.3e-9

#: Two eigenvalues are one cluster when they lie within so many of the distances by which rounding moves each of them,
#: and within this share of their size (else a chain of neighbours would link a whole badly conditioned spectrum).
_LINK, _NEAR = 3.0, 0.02

#: A cluster no wider than so many times the rounding level of the norm is a multiple eigenvalue with enough
#: eigenvectors: whatever its condition numbers say, its members are right to 13 digits of the norm.
_HARMLESS = 1e3


@dataclass(frozen=True, slots=True)
class Stretch:
    """Consecutive sweeps on one window without a deflation, the last of them the one that ended it.

    Attributes
    ----------
    first, last : int
        Steps, both included.
    window : (int, int)
        Active window, half-open.
    end : Deflation or None
        What ended it; None when the run stopped first.
    looks : int
        Steps among them that looked into a deflation window instead of sweeping.
    """

    first: int
    last: int
    window: tuple[int, int]
    end: Deflation | None
    looks: int = 0

    @property
    def length(self) -> int:
        """Sweeps."""
        return self.last - self.first + 1 - self.looks

    @property
    def rows(self) -> int:
        """Rows of the window."""
        return self.window[1] - self.window[0]


@dataclass(frozen=True, slots=True)
class Cluster:
    """Eigenvalues that rounding cannot tell apart.

    Attributes
    ----------
    rows : tuple of int
        Their rows of H, ascending.
    centre : complex
        Their mean, in working units.
    radius : float
        Largest distance of a member from it.
    condition : float
        Largest condition number 1/s of a member.
    movement : float
        The distance by which rounding, ulp·‖H‖, moves such an eigenvalue to first order.
    """

    rows: tuple[int, ...]
    centre: complex
    radius: float
    condition: float
    movement: float


@dataclass(frozen=True, slots=True)
class Decay:
    """How one subdiagonal entry fell over a stretch, measured and predicted.

    Attributes
    ----------
    row : int
        The entry is h[row, row−1].
    measured, predicted : float
        Factor by which it shrinks in one sweep.
    straightness : float
        Share of the variation of log|h| that a straight line explains, 0 to 1.
    magnitude : float
        |h| at the end of the stretch, before it was set to zero.
    """

    row: int
    measured: float
    predicted: float
    straightness: float
    magnitude: float


class Case:
    """A run with everything the causes ask about it."""

    def __init__(self, run: Run) -> None:
        self.run = run

    @cached_property
    def healthy(self) -> HealthyFigures:
        """What the run is held against."""
        return healthy_figures(self.run)

    @cached_property
    def profile(self) -> Profile:
        """Profile of the loaded matrix, without the departure from normality, which would cost a Schur form."""
        return profile_of(self.run.matrix, exact_departure=False)

    @cached_property
    def real_entries(self) -> bool:
        """Whether every entry of the matrix is real, whatever its type."""
        return self.run.matrix.is_real or not bool(np.any(self.run.matrix.array.imag))

    @cached_property
    def stretches(self) -> tuple[Stretch, ...]:
        """Every stretch of sweeps between two deflations, in order."""
        found: list[Stretch] = []
        first: int | None = None
        looks = 0
        for step in self.run.steps:
            if first is None:
                if not step.shifts:
                    continue
                first, looks = step.index, 0
            looks += not step.shifts
            after = [d for d in step.deflations if not d.before_sweep]
            if after:
                found.append(Stretch(first, step.index, step.window, after[0], looks))
                first = None
        if first is not None:
            last = self.run.steps[-1]
            found.append(Stretch(first, last.index, last.window, None, looks))
        return tuple(found)

    @cached_property
    def _sweep_numbers(self) -> npt.NDArray[np.int64]:
        """Sweeps done up to and including each step, shape (steps,)."""
        return np.cumsum([bool(step.shifts) for step in self.run.steps], dtype=np.int64)

    def sweep_numbers(self, stretch: Stretch) -> npt.NDArray[np.int64]:
        """Number of the sweep of each of the sampled steps."""
        return self._sweep_numbers[self.sampled_steps(stretch) - 1]

    @cached_property
    def longest_wait(self) -> int:
        """Longest stretch, in sweeps."""
        return max((stretch.length for stretch in self.stretches), default=0)

    @cached_property
    def deflated(self) -> int:
        """Rows of H in final form."""
        return sum(d.size for d in self.run.deflations if d.kind is not DeflationKind.SPLIT)

    @cached_property
    def in_trouble(self) -> bool:
        """Whether the iteration waited longer, or needed more sweeps, than healthy ones do."""
        if self.longest_wait >= self.healthy.trouble_wait:
            return True
        # What is left has to be counted out, or a run that was stopped early would look slow or quick by accident.
        return self.run.sweeps > self.healthy.most_sweeps(self.deflated) + self._last_wait

    @property
    def _last_wait(self) -> int:
        last = self.stretches[-1] if self.stretches else None
        return last.length if last is not None and last.end is None else 0

    @cached_property
    def troubled(self) -> tuple[Stretch, ...]:
        """The stretches to explain, longest first: none in a healthy run."""
        if not self.in_trouble:
            return ()
        floor = self.healthy.trouble_wait
        if self.longest_wait < floor:
            # No single stretch is to blame, so the longer half of the ordinary ones has to do.
            floor = max(4, self.longest_wait // 2)
        long = sorted((s for s in self.stretches if s.length >= floor), key=lambda s: -s.length)
        return tuple(long[:_EXAMINED])

    @cached_property
    def stopped_early(self) -> bool:
        """Whether the run ended without having converged."""
        return self.run.stop.reason is not StopReason.CONVERGED

    @cached_property
    def final(self) -> npt.NDArray[Any]:
        """H after the last step."""
        return self.run.state(len(self.run.steps)).H

    @cached_property
    def eigenvalues(self) -> Complex:
        """Eigenvalues of H in row order, in working units.

        Final ones as they deflated, those of unfinished blocks by LAPACK; NaN in an unfinished block so large that its
        eigenvalues would cost more than the diagnosis may.
        """
        import scipy.linalg

        values = self.run.ritz(len(self.run.steps))
        if self.run.converged:
            return values
        H = self.final
        cuts = np.flatnonzero(np.diagonal(H, -1) == 0.0) + 1
        edges = [0, *(int(c) for c in cuts), self.run.n]
        cost = _EIGENVALUES_COST[self.run.settings.form]
        for lo, hi in itertools.pairwise(edges):
            if hi - lo > 1:
                fits = self._fits(cost, hi - lo)
                with single_blas_thread():
                    values[lo:hi] = scipy.linalg.eigvals(H[lo:hi, lo:hi], check_finite=False) if fits else np.nan
        return values

    def _fits(self, cost: float, n: int) -> bool:
        """Whether work of ``cost``·n³ seconds fits in the budget."""
        return cost * n**3 <= max(_LEAST, _SHARE * self.run.seconds)

    @cached_property
    def conditions(self) -> Real | None:
        """Condition number 1/s(λ) of every eigenvalue, in row order; None for an unfinished run or a large matrix.

        s(λ) = |yᴴx| of the unit left and right eigenvectors (Wilkinson 1965, chapter 2, section 8), of H in its final
        form; no similarity by an orthogonal matrix changes it.
        """
        import scipy.linalg

        if not self.run.converged or not self._fits(_CONDITIONS_COST, self.run.n):
            return None
        final = self.final
        # Entries under rounding level are not known; left in, they would make multiple eigenvalues of a normal matrix
        # look defective, because there such an entry stands over a difference that is as small.
        final = np.where(np.abs(final) > ULP * self.run.norm, final, np.diag(np.diagonal(final)))
        with single_blas_thread():
            result: Any = scipy.linalg.eig(final, left=True, right=True, check_finite=False)
        values, left, right = result
        overlap = np.abs((left.conj() * right).sum(axis=0))
        condition = 1.0 / np.maximum(overlap, np.finfo(np.float64).tiny)
        if np.abs(values - self.eigenvalues).max(initial=0.0) > 100.0 * ULP * self.run.norm:
            # LAPACK returns the eigenvalues of a triangular matrix in the order of its diagonal unless it permutes.
            condition = condition[pair_spectra(self.eigenvalues, values)[0]]
        return np.asarray(condition)

    @cached_property
    def movements(self) -> Real | None:
        """The distance by which rounding, ulp·‖H‖, moves each eigenvalue to first order, in working units."""
        if self.conditions is None:
            return None
        with np.errstate(over="ignore"):  # a condition number without bound may exceed the range, and so may this
            return ULP * self.run.norm * self.conditions

    @cached_property
    def clusters(self) -> tuple[Cluster, ...]:
        """Groups of two or more eigenvalues that rounding cannot tell apart, the largest first.

        Isolated from each other by rounding means: closer than a few times the distance that rounding moves each, so
        exactly multiple eigenvalues that are well conditioned are no cluster here.
        """
        if self.conditions is None or self.movements is None:
            return ()
        from scipy.sparse import csr_array
        from scipy.sparse.csgraph import connected_components

        values, movements = self.eigenvalues, self.movements
        distance = np.abs(values[:, None] - values[None, :])
        reach = _LINK * np.minimum(movements[:, None], movements[None, :])
        size = np.maximum(np.abs(values[:, None]), np.abs(values[None, :]))
        ill = self.conditions >= ILL_CONDITIONED
        linked = (distance <= reach) & (distance <= _NEAR * size) & ill[:, None] & ill[None, :]
        _, labels = connected_components(csr_array(linked.astype(np.int8)), directed=False)
        found = []
        for label in np.flatnonzero(np.bincount(labels) > 1):
            rows = np.flatnonzero(labels == label)
            centre = complex(values[rows].mean())
            radius = float(np.abs(values[rows] - centre).max())
            if 0.0 < radius <= _HARMLESS * ULP * self.run.norm:
                continue
            found.append(
                Cluster(
                    rows=tuple(int(row) for row in rows),
                    centre=centre,
                    radius=radius,
                    condition=float(self.conditions[rows].max()),
                    movement=float(movements[rows].max()),
                )
            )
        return tuple(sorted(found, key=lambda cluster: (-len(cluster.rows), -cluster.condition)))

    def known(self, stretch: Stretch) -> bool:
        """Whether the eigenvalues of the window of a stretch are known."""
        lo, hi = stretch.window
        return not bool(np.isnan(self.eigenvalues[lo:hi]).any())

    def sampled_steps(self, stretch: Stretch) -> npt.NDArray[np.int64]:
        """Sweeps of the later part of a stretch, at most 160, evenly spaced; transients at its start are left out."""
        first = stretch.first + (stretch.last - stretch.first + 1) // 4
        last = stretch.last if stretch.end is None else max(stretch.last - 1, first)
        if not self._replay_is_cheap:
            last = min(last, self.run.journal.held - 1)
        count = max(0, min(_SAMPLES, last - first + 1))
        chosen = np.unique(np.linspace(first, last, count).astype(np.int64))
        return chosen[[bool(self.run.steps[int(k) - 1].shifts) for k in chosen]] if chosen.size else chosen

    @cached_property
    def _replay_is_cheap(self) -> bool:
        """Whether rebuilding what a small ``keep`` left out of memory, once for each stretch, fits in the budget."""
        return _EXAMINED * self.run.phases["iterate"] <= _LEAST

    def readable(self, stretch: Stretch) -> bool:
        """Whether enough states of a stretch can be read to judge it."""
        return self.sampled_steps(stretch).size >= 2

    def shifts(self, stretch: Stretch) -> Complex:
        """Shifts of the sampled steps, shape (steps, shifts a sweep); missing ones of shorter sweeps are NaN."""
        steps = self.run.steps
        chosen = [steps[int(k) - 1].shifts for k in self.sampled_steps(stretch)]
        width = max(len(s) for s in chosen)
        out = np.full((len(chosen), width), np.nan, dtype=np.complex128)
        for i, s in enumerate(chosen):
            out[i, : len(s)] = s
        return out

    def gains(self, stretch: Stretch) -> Real:
        """Mean of log|p(λ)| over the sampled sweeps for every eigenvalue of the window, in row order.

        p is the shift polynomial of a sweep. After many sweeps the window holds the product of all p, as in a power
        iteration; with the gains sorted upwards, |h[hi−m, hi−m−1]| then shrinks by exp(gains[m−1] − gains[m]) a sweep,
        because the m smallest separate from the rest (Watkins, "Understanding the QR algorithm", SIAM Review 24, 1982,
        cited from memory).
        """
        lo, hi = stretch.window
        shifts = self.shifts(stretch)
        values = self.eigenvalues[lo:hi]
        floor = np.finfo(np.float64).tiny
        total = np.zeros((shifts.shape[0], values.size))
        for column in range(shifts.shape[1]):
            shift = shifts[:, column]
            used = ~np.isnan(shift)
            total[used] += np.log(np.maximum(np.abs(values[None, :] - shift[used, None]), floor))
        return np.asarray(total.mean(axis=0))

    def bands(self, stretch: Stretch) -> npt.NDArray[Any]:
        """Diagonal, signed subdiagonal and superdiagonal after the sampled steps, shape (steps, 3, n)."""
        return np.stack([np.asarray(self.run.journal.bands(int(k))) for k in self.sampled_steps(stretch)])

    def decay(self, stretch: Stretch) -> Decay | None:
        """How the entry that a stretch waits for falls; None when the stretch is too short or nothing is known of it.

        The entry is the one that deflated at the end; in an unfinished stretch the one the shifts should separate
        best.
        """
        steps = self.sampled_steps(stretch)
        lo, hi = stretch.window
        if steps.size < 4 or hi - lo < 2 or not self.known(stretch):
            return None
        gains = np.sort(self.gains(stretch))
        steps_down = gains[:-1] - gains[1:]  # [m−1]: log of the factor for h[hi−m, hi−m−1]
        if stretch.end is not None:
            row = stretch.end.row
        else:
            row = hi - 1 - int(np.argmin(steps_down))
        if not lo < row < hi:
            return None
        magnitudes = np.abs(self.bands(stretch)[:, 1, row - 1])
        if not magnitudes.all():
            return None
        level = np.log(magnitudes)
        numbers = self.sweep_numbers(stretch)
        x = numbers - numbers.mean()
        y = level - level.mean()
        slope = float(x @ y) / float(x @ x)
        variation = float(y @ y)
        straight = slope * float(x @ y) / variation if variation > 0.0 else 1.0
        return Decay(
            row=row,
            measured=float(np.exp(slope)),
            predicted=float(np.exp(steps_down[hi - row - 1])),
            straightness=min(1.0, straight),
            magnitude=float(magnitudes[-1]),
        )

    def participation(self, rows: tuple[int, int], most: int = 3) -> tuple[tuple[str, float], ...]:
        """The states of the matrix that carry most of a range of rows of H, with their shares.

        Empty where the source names no states, where Z was not accumulated, or where the rows are more than half of
        H, so that every state takes part. Later sweeps mix the columns of Z inside a window only, so the final Z
        says what the window consisted of at the time.
        """
        lo, hi = rows
        matrix = self.run.matrix
        if matrix.labels is None or not self.run.settings.accumulate or not 0 < hi - lo <= self.run.n // 2:
            return ()
        Z = self._final_vectors
        if Z is None:
            return ()
        shares = (np.abs(Z[:, lo:hi]) ** 2).sum(axis=1) / (hi - lo)
        order = np.argsort(-shares)[:most]
        return tuple((matrix.label(int(i)), float(shares[i])) for i in order if shares[i] >= 0.05)

    @cached_property
    def _final_vectors(self) -> npt.NDArray[Any] | None:
        return self.run.state(len(self.run.steps)).Z

    def carriers(self, rows: tuple[int, int]) -> str:
        """A half-sentence that names these states, empty where there is nothing to name."""
        found = self.participation(rows)
        if not found:
            return ""
        return "; these rows belong mostly to " + ", ".join(f"{name} ({100 * share:.0f} %)" for name, share in found)
