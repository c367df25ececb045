"""The Schur factors of the loaded matrix, as every later face sees them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from schurbench.errors import SettingsError
from schurbench.factors.certificate import Certificate, certify
from schurbench.factors.conditioning import condition_numbers, distances_to_spectrum_at
from schurbench.factors.reorder import REGIONS, RefusedSwap, Selection, bring_to_top, choose
from schurbench.factors.triangular import (
    Array,
    diagonal_blocks,
    eigenvalues_of,
    in_matrix_units,
    solve_small_blocks,
    unfinished_windows,
)
from schurbench.intake import WorkingMatrix
from schurbench.journal.records import Settings, Window
from schurbench.matching import pair_spectra
from schurbench.measures import ULP
from schurbench.prepare.plain import number, plain, plural
from schurbench.prepare.preparation import single_blas_thread
from schurbench.prepare.structure import scaled as scaled_to_one
from schurbench.prepare.structure import times_power_of_two

__all__ = ["Factors", "ScaledFactors"]

CAUTION = (
    "Where a stability, damping or other safety margin hangs on an eigenvalue, have it confirmed by an independent "
    "method and by the engineer licensed to sign for it."
)


@dataclass(frozen=True, slots=True, eq=False)
class ScaledFactors:
    """Factors of the scaled matrix D⁻¹ A D = Z T Zᴴ, often the more accurate source of eigenvalues.

    Attributes
    ----------
    D : (n,) ndarray of float64, write-protected
        Powers of two.
    T, Z : (n, n) ndarray, write-protected
        In the units of the loaded matrix.
    eigenvalues : (n,) ndarray of complex128, write-protected
        In T order; they are eigenvalues of A as well.
    """

    D: npt.NDArray[np.float64]
    T: Array
    Z: Array
    eigenvalues: npt.NDArray[np.complex128]


#: Eigenvalues within so many of their first-order movements of a boundary are looked at more closely.
_CANDIDATE = 10.0


# Not slotted: the certificate and the advice are worked out when first asked for and kept in the instance.
@dataclass(frozen=True, eq=False)
class Factors:
    """Schur factors of the loaded matrix, A = Z T Zᴴ.

    Attributes
    ----------
    T : (n, n) ndarray, row-major, write-protected
        Upper triangular, in the real form with standardised 2×2 blocks for complex pairs; only Hessenberg inside the
        `unfinished` windows. In the units of A.
    Z : (n, n) ndarray, row-major, write-protected
        Orthogonal (real form) or unitary.
    form : str
        ``"real"`` or ``"complex"``.
    matrix : WorkingMatrix
        The loaded matrix A.
    settings : Settings
        Settings of the run that led here.
    environment : dict
        Versions, BLAS, threads and CPU of that run.
    scaled : ScaledFactors or None
        The pair of D⁻¹ A D when the run scaled rows and columns. `reorder` leaves it in its own order.
    selection : str
        What `reorder` brought to the top; empty before.
    refused : tuple of RefusedSwap
        Swaps that `reorder` did not carry out.
    notes : tuple of str
        Facts about how the factors came about, each a sentence.
    """

    T: Array
    Z: Array
    form: str
    matrix: WorkingMatrix
    settings: Settings
    environment: Mapping[str, Any]
    scaled: ScaledFactors | None = None
    selection: str = ""
    refused: tuple[RefusedSwap, ...] = ()
    notes: tuple[str, ...] = ()
    unfinished: tuple[Window, ...] = field(init=False)
    eigenvalues: npt.NDArray[np.complex128] = field(init=False)

    def __post_init__(self) -> None:
        for name in ("T", "Z"):
            # Adding 0 strips the sign off zeros, which some readers of Matrix Market files drop: same bytes everywhere.
            array = np.array(getattr(self, name) + 0.0, order="C")
            array.setflags(write=False)
            object.__setattr__(self, name, array)
        values = eigenvalues_of(self.T, self.form)
        values.setflags(write=False)
        object.__setattr__(self, "eigenvalues", values)
        object.__setattr__(self, "unfinished", unfinished_windows(self.T, self.form))

    @property
    def n(self) -> int:
        """Order of the matrix."""
        return int(self.T.shape[0])

    @property
    def complete(self) -> bool:
        """Whether T is finished everywhere."""
        return not self.unfinished

    @cached_property
    def _certificate(self) -> Certificate:
        return certify(self.matrix.array, self.T, self.Z, self.form)

    def certificate(self) -> Certificate:
        """Backward error, orthogonality and exact structure, measured on these very arrays (once)."""
        return self._certificate

    @cached_property
    def trust(self) -> str:
        """Which eigenvalues to trust, and how far, in sentences with the numbers they rest on."""
        return _trust(self)

    def reorder(self, selection: Selection) -> Factors:
        """The same factors with chosen eigenvalues first.

        Parameters
        ----------
        selection : str, callable or iterable of int
            ``"left-half-plane"`` (Re λ < 0), ``"unit-disc"`` (|λ| < 1), a predicate on λ (it may take the whole array
            or one value), or rows of T. In the real form a complex pair stays together: choosing one of the two
            chooses both.

        Returns
        -------
        Factors
            With a certificate of its own. `refused` lists the swaps that LAPACK would not do because rounding could
            not keep the two blocks apart; T and Z are valid all the same. `notes` says how many pairs were completed,
            and how many eigenvalues lie closer to the boundary of a named region than rounding moves them.

        Raises
        ------
        SettingsError
            Factors are not finished, or the selection makes no sense for them.

        Notes
        -----
        Unfinished factors are refused: an eigenvalue that has not been found cannot be placed on either side.
        """
        if not self.complete:
            rows = ", ".join(f"{lo} to {hi - 1}" for lo, hi in self.unfinished)
            raise SettingsError(
                f"only finished factors can be reordered, and T is still Hessenberg in rows {rows}; "
                "raise the limit or change the strategy until the run converges"
            )
        asked = choose(selection, self.eigenvalues)
        chosen = asked.copy()
        for lo, hi in diagonal_blocks(self.T):
            chosen[lo:hi] = asked[lo:hi].any()
        notes = list(self.notes)
        completed = int(np.count_nonzero(chosen != asked))
        if completed:
            notes.append(f"{plural(completed, 'complex pair')} chosen by one member only moved as a whole.")
        if isinstance(selection, str):
            notes.extend(_near_boundary(self, selection))
        t, exponent = scaled_to_one(self.T)  # LAPACK's exchanges lose accuracy near the smallest doubles
        with single_blas_thread():
            t, z, refused = bring_to_top(t, self.Z, chosen)
            solve_small_blocks(t, z, self.form)
        t = in_matrix_units(t, z, exponent, self.form)
        if refused:
            notes.append(
                f"{plural(len(refused), 'swap')} of nearly equal eigenvalues refused by LAPACK: not every chosen "
                "eigenvalue is at the top."
            )
        name = selection if isinstance(selection, str) else "predicate" if callable(selection) else "rows"
        return replace(self, T=t, Z=z, selection=name, refused=tuple(refused), notes=tuple(notes))

    def save(self, path: str | Path, replace: bool = False) -> tuple[Path, ...]:
        """Write T and Z, and a manifest beside them; all or nothing.

        Parameters
        ----------
        path : str or Path
            Its suffix decides: ``.mat``, ``.npz`` and ``.h5`` hold arrays named T and Z; ``.mtx`` writes
            ``NAME_T.mtx`` and ``NAME_Z.mtx``. The manifest is ``NAME.SUFFIX.manifest.json``.
        replace : bool
            Whether files of these names may be overwritten.

        Returns
        -------
        tuple of Path
            What was written; the manifest comes last.

        Raises
        ------
        InputError
            Unknown suffix, a file that exists already, or a matrix too large for the format.
        """
        from schurbench.factors.writers import save_factors

        return save_factors(self, Path(path), replace=replace)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready: eigenvalues, what is finished, certificate and advice; the arrays are for `save`."""
        return {
            "name": self.matrix.name,
            "n": self.n,
            "form": self.form,
            "complete": self.complete,
            "unfinished": plain(self.unfinished),
            "eigenvalues": plain(self.eigenvalues),
            "scaled": None if self.scaled is None else {"eigenvalues": plain(self.scaled.eigenvalues)},
            "selection": self.selection,
            "refused": [{"selected": plain(swap.selected), "blocker": plain(swap.blocker)} for swap in self.refused],
            "notes": list(self.notes),
            "trust": self.trust,
            "certificate": self.certificate().to_dict(),
        }


def _near_boundary(factors: Factors, region: str) -> list[str]:
    """A sentence when rounding can put eigenvalues on the boundary of a region."""
    near = _undecided(factors, region)
    if not near:
        return []
    return [
        f"One unit of rounding in A can put {plural(near, 'eigenvalue')} onto {REGIONS[region][2]}: the side is not "
        f"determined. {CAUTION}"
    ]


def _undecided(factors: Factors, region: str) -> int:
    """How many eigenvalues one unit of rounding in A can put on the boundary of a region.

    Condition numbers only propose candidates: to first order they let the members of a cluster move much further than
    they can. What decides is the smallest perturbation that puts an eigenvalue on the nearest point of the boundary.
    """
    boundary = REGIONS[region][1](factors.eigenvalues)
    distance = np.abs(factors.eigenvalues - boundary)
    near = np.flatnonzero(distance <= _CANDIDATE * factors.certificate().rounding_movement)
    if not near.size:
        return 0
    points = boundary[near]
    if factors.form == "real":
        points = points.real + 1j * np.abs(points.imag)  # both members of a pair are as far
    points, member = np.unique(points, return_inverse=True)
    t, exponent = scaled_to_one(factors.T)
    with single_blas_thread():
        reach = distances_to_spectrum_at(times_power_of_two(points, exponent), t, factors.form)
    return int(np.count_nonzero(reach[member] <= ULP * float(np.linalg.norm(t))))


def _trust(factors: Factors) -> str:
    certificate = factors.certificate()
    condition, movement = certificate.condition, certificate.rounding_movement
    found = np.isfinite(factors.eigenvalues)
    sentences = []
    if not found.any():
        scaled = (
            "" if factors.scaled is None else " Eigenvalues of the scaled pair (.scaled) are there as far as it got."
        )
        return "No eigenvalue has been found yet: T is still Hessenberg throughout." + scaled
    if not factors.complete:
        missing = int(np.count_nonzero(~found))
        sentences.append(
            f"{plural(missing, 'eigenvalue is', 'eigenvalues are')} not found yet; the other {int(found.sum())} are as "
            "good as in a finished run."
        )
    measured = found & (condition < 1.0 / ULP)
    beyond = int(np.count_nonzero(found & ~measured))
    if beyond:
        sentences.append(
            f"{plural(beyond, 'eigenvalue has a condition number', 'eigenvalues have condition numbers')} beyond "
            f"{number(1.0 / ULP)}, the inverse of rounding, as multiple and defective ones have. Trust the mean of such "
            "a cluster rather than its members."
        )
    if measured.any():
        worst = int(np.argmax(np.where(measured, condition, -1.0)))
        sentences.append(
            f"The worst-conditioned eigenvalue{' of the others' if beyond else ''}, "
            f"{_complex(factors.eigenvalues[worst])}, has condition number {number(condition[worst])}: to first order, "
            f"one unit of rounding in A moves it by about {number(movement[worst])}."
        )
    if factors.scaled is not None:
        sentences.append(_which_pair(factors, factors.scaled))
    undecided = _undecided(factors, "left-half-plane")
    if undecided:
        sentences.append(
            f"One unit of rounding in A can put {plural(undecided, 'eigenvalue')} onto the imaginary axis, so the sign "
            f"of {'its' if undecided == 1 else 'their'} real part is not determined."
        )
    return " ".join([*sentences, CAUTION])


def _which_pair(factors: Factors, scaled: ScaledFactors) -> str:
    """Compare, eigenvalue by eigenvalue, how far rounding moves it in A and in D⁻¹ A D."""
    finite = np.isfinite(factors.eigenvalues).all() and np.isfinite(scaled.eigenvalues).all()
    if not finite:
        return "The run was scaled and has not finished; prefer the eigenvalues that the scaled pair (.scaled) has."
    with single_blas_thread():
        condition = condition_numbers(scaled.T, factors.form)
    with np.errstate(over="ignore"):
        movement = ULP * float(np.linalg.norm(scaled.T)) * condition
    order, _ = pair_spectra(factors.eigenvalues, scaled.eigenvalues)
    own, theirs = factors.certificate().rounding_movement, movement[order]
    better = int(np.count_nonzero(theirs < own))
    if not better:
        return "Scaling made no eigenvalue more certain; those of T and of the scaled pair (.scaled) are equally good."
    both = np.isfinite(own) & np.isfinite(theirs) & (theirs > 0) & (own > 0)
    factor = float(np.median(own[both] / theirs[both])) if both.any() else np.inf
    return (
        f"Trust the eigenvalues of the scaled pair (.scaled) for {better} of {factors.n}: there rounding moves "
        f"them less, by a median factor of {number(factor)} over all, provided the small entries of A are known "
        "to better than rounding of the largest one."
    )


def _complex(value: complex) -> str:
    if value.imag == 0.0:
        return number(value.real)
    return f"{number(value.real)} {'−' if value.imag < 0 else '+'} {number(abs(value.imag))}i"
