"""The certificate: what was measured on the factors, and the verdict."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from schurbench.factors.conditioning import condition_numbers, separations
from schurbench.factors.triangular import Array, is_exact, unfinished_windows
from schurbench.journal.records import Window
from schurbench.measures import RATIO_LIMIT, ULP, orthogonality_ratio, residual_ratio
from schurbench.prepare.plain import number, plain, plural
from schurbench.prepare.preparation import single_blas_thread
from schurbench.prepare.structure import scaled

__all__ = ["Certificate", "certify"]


# Not slotted: the condition numbers are worked out when first asked for and kept in the instance.
@dataclass(frozen=True, eq=False)
class Certificate:
    """Measurements on T and Z against the loaded matrix A.

    Attributes
    ----------
    backward_error : float
        ‖A − Z T Zᴴ‖₁ / (‖A‖₁ n ulp).
    orthogonality : float
        ‖I − Zᴴ Z‖₁ / (n ulp).
    structure : bool
        Whether T has exactly the required form: exact zeros, and in the real form standardised 2×2 blocks (equal
        diagonal, off-diagonal entries of opposite sign). Read off the array, no tolerance.
    form : str
        ``"real"`` or ``"complex"``.
    unfinished : tuple of (int, int)
        Half-open windows in which T is only Hessenberg.
    """

    backward_error: float
    orthogonality: float
    structure: bool
    form: str
    unfinished: tuple[Window, ...]
    _t: Array = field(repr=False)

    @property
    def passed(self) -> bool:
        """Both ratios under `schurbench.measures.RATIO_LIMIT` and exact structure; nothing else enters."""
        return bool(self.backward_error < RATIO_LIMIT and self.orthogonality < RATIO_LIMIT and self.structure)

    @cached_property
    def condition(self) -> npt.NDArray[np.float64]:
        """Condition number 1/s(λ) of each eigenvalue, in T order, shape (n,); 1 at best.

        ``inf`` where the eigenvalue is multiple and defective to working precision, NaN in unfinished windows. See
        `schurbench.factors.conditioning.condition_numbers` for the definition.
        """
        t, _ = scaled(self._t)
        with single_blas_thread():
            return _protected(condition_numbers(t, self.form))

    @cached_property
    def _separation(self) -> tuple[npt.NDArray[np.float64], str]:
        t, exponent = scaled(self._t)
        with single_blas_thread():
            sep, reason = separations(t, self.form)
        return _protected(np.ldexp(sep, -exponent)), reason

    @property
    def separation(self) -> npt.NDArray[np.float64]:
        """Estimated separation of each eigenvalue from the others, in the units of A, shape (n,).

        NaN where it was not computed; `separation_reason` says why.
        """
        return self._separation[0]

    @property
    def separation_reason(self) -> str:
        """Why separations are missing; empty when none is."""
        return self._separation[1]

    @cached_property
    def rounding_movement(self) -> npt.NDArray[np.float64]:
        """How far one unit of rounding moves each eigenvalue to first order, ulp · ‖A‖_F / s(λ), in the units of A.

        Shape (n,). A decision that hangs on less than this distance cannot be read off the eigenvalue.
        """
        t, exponent = scaled(self._t)
        with np.errstate(over="ignore"):
            return _protected(np.ldexp(ULP * float(np.linalg.norm(t)) * self.condition, -exponent))

    @property
    def sentence(self) -> str:
        """The verdict in words."""
        measured = (
            f"the backward error ‖A − Z T Zᴴ‖ is {number(self.backward_error)} and the departure of Z from "
            f"{'orthogonal' if self.form == 'real' else 'unitary'} {number(self.orthogonality)}, in units of n times "
            f"rounding (limit {number(RATIO_LIMIT)})"
        )
        if self.passed:
            return f"Passed: {measured}, and T has exactly the required form."
        if self.unfinished and max(self.backward_error, self.orthogonality) < RATIO_LIMIT:
            rows = sum(hi - lo for lo, hi in self.unfinished)
            return (
                f"Not passed, because T is not finished: {plural(rows, 'row')} in "
                f"{plural(len(self.unfinished), 'window')} are still in Hessenberg form. Otherwise {measured}."
            )
        form = "T has exactly the required form" if self.structure else "T does not have exactly the required form"
        return f"Not passed: {measured}; {form}."

    def summary(self) -> dict[str, Any]:
        """The verdict and its three measurements, JSON-ready; costs nothing further."""
        return {
            "passed": self.passed,
            "backward_error": plain(self.backward_error),
            "orthogonality": plain(self.orthogonality),
            "limit": RATIO_LIMIT,
            "structure": self.structure,
            "unfinished": plain(self.unfinished),
            "sentence": self.sentence,
        }

    def to_dict(self) -> dict[str, Any]:
        """Everything, JSON-ready: `summary` and the conditioning of each eigenvalue (``"inf"`` and None for NaN)."""
        return {
            **self.summary(),
            "condition": plain(self.condition),
            "rounding_movement": plain(self.rounding_movement),
            "separation": plain(self.separation),
            "separation_reason": self.separation_reason,
        }


def certify(a: Array, t: Array, z: Array, form: str) -> Certificate:
    """Measure (T, Z) against A.

    Parameters
    ----------
    a, t, z : (n, n) ndarray
        Matrix, Schur factor and unitary factor, in the same units.
    form : {"real", "complex"}

    Notes
    -----
    The sums are formed by one BLAS thread, so that the ratios do not depend on the number of cores.
    """
    with single_blas_thread():
        backward_error, orthogonality = residual_ratio(a, z, t), orthogonality_ratio(z)
    return Certificate(backward_error, orthogonality, is_exact(t, form), form, unfinished_windows(t, form), t)


def _protected(values: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    values.setflags(write=False)
    return values
