"""What a diagnosis consists of: findings with evidence, and remedies that can be run."""

from __future__ import annotations

import time
from dataclasses import dataclass, field
from enum import IntEnum
from typing import TYPE_CHECKING, Any, Protocol

import numpy as np
import numpy.typing as npt

from schurbench.intake import WorkingMatrix
from schurbench.prepare.plain import number, plain
from schurbench.prepare.structure import scaled, times_power_of_two

if TYPE_CHECKING:
    from schurbench.diagnosis.forecast import Forecast
    from schurbench.factors import Factors
    from schurbench.journal import Run

__all__ = [
    "ClusterRemedy",
    "Diagnosis",
    "Finding",
    "Rank",
    "Remedy",
    "RemedyResult",
    "SettingsRemedy",
    "SolverRemedy",
    "StructuredSolution",
    "solve_structured",
]


class Rank(IntEnum):
    """Order in which findings are named."""

    ITERATION = 1  #: a cause of slow or failed iteration
    EIGENVALUES = 2  #: eigenvalues that the input or the preparation determines badly
    ADVICE = 3  #: structure or settings that would serve better
    HEALTHY = 4  #: nothing to do


@dataclass(frozen=True, slots=True)
class RemedyResult:
    """What trying a remedy showed.

    Attributes
    ----------
    helped : bool
    statement : str
        One sentence with the numbers before and after.
    sweeps_before, sweeps_after : int
        0 after a remedy that is no iteration.
    seconds_before, seconds_after : float
    backward_error_before, backward_error_after : float or None
        ‖D⁻¹AD − ZHZᴴ‖₁ over n·ulp·‖D⁻¹AD‖₁ at the end; None where Z was not accumulated.
    converged_before, converged_after : bool
    """

    helped: bool
    statement: str
    sweeps_before: int
    sweeps_after: int
    seconds_before: float
    seconds_after: float
    backward_error_before: float | None
    backward_error_after: float | None
    converged_before: bool
    converged_after: bool

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return {name: plain(getattr(self, name)) for name in self.__slots__}


class Remedy(Protocol):
    """What a finding proposes. `SettingsRemedy`, `SolverRemedy` and `ClusterRemedy` are its kinds."""

    @property
    def text(self) -> str:
        """One sentence."""
        ...

    @property
    def settings(self) -> dict[str, Any]:
        """Keywords of `schurbench.iterate`; empty for a remedy that is no iteration."""
        ...

    @property
    def call(self) -> str:
        """The remedy as Python, with the loaded matrix under the name ``matrix``."""
        ...

    @property
    def result(self) -> RemedyResult | None:
        """What trying it showed, None while it has not been tried."""
        ...

    def run(self) -> Any:
        """Carry it out on the matrix of the run."""
        ...

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        ...


@dataclass(frozen=True, slots=True)
class SettingsRemedy:
    """Other settings for the iteration.

    Attributes
    ----------
    text : str
        What it changes and why, one sentence.
    settings : dict
        Keywords of `schurbench.iterate`, complete: all that the run had other than the defaults, with the change.
    changes : tuple of str
        The keywords that differ from the run.
    result : RemedyResult or None
        Filled in by ``diagnose(run, try_remedies=True)``.
    """

    text: str
    settings: dict[str, Any]
    changes: tuple[str, ...]
    matrix: WorkingMatrix = field(repr=False)
    result: RemedyResult | None = None

    @property
    def call(self) -> str:
        """The remedy as a line of Python."""
        keywords = "".join(f", {name}={value!r}" for name, value in self.settings.items())
        return f"schurbench.iterate(matrix{keywords})"

    def run(self) -> Run:
        """Iterate on the matrix of the run with these settings."""
        from schurbench.iteration import iterate

        return iterate(self.matrix, **self.settings)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return {
            "text": self.text,
            "settings": plain(self.settings),
            "changes": list(self.changes),
            "call": self.call,
            "result": self.result.to_dict() if self.result else None,
        }


@dataclass(frozen=True, slots=True)
class ClusterRemedy:
    """The mean and the invariant subspace of a cluster instead of its single members.

    Attributes
    ----------
    text : str
    source : Run
        The run whose factors are reordered.
    again : str
        The call that repeats it.
    centre : complex
        Mean of the cluster, with non-negative imaginary part for a real matrix, in the units of the matrix.
    radius : float
        All members lie within it, and nothing else is meant to.
    result : None
        There is nothing to compare: the remedy changes what is used, not how it is computed.
    """

    text: str
    source: Run = field(repr=False)
    again: str
    centre: complex
    radius: float
    result: None = None

    @property
    def settings(self) -> dict[str, Any]:
        """Empty: this remedy is no iteration."""
        return {}

    @property
    def call(self) -> str:
        """Python lines that need nothing but ``matrix``."""
        value = "value.real + abs(value.imag) * 1j" if self._folded else "value"
        return (
            f"run = {self.again}\n"
            f"factors = run.factors().reorder(lambda value: abs({value} - ({self.centre!r})) <= {self.radius!r})\n"
            f"# the leading columns of factors.Z span the invariant subspace of the cluster"
        )

    @property
    def _folded(self) -> bool:
        return self.source.settings.form == "real"

    def run(self) -> Factors:
        """Factors of the run with the cluster (and in real form its conjugate) at the top."""

        def member(value: complex) -> bool:
            folded = complex(value.real, abs(value.imag)) if self._folded else complex(value)
            return abs(folded - self.centre) <= self.radius

        return self.source.factors().reorder(member)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return {"text": self.text, "settings": {}, "changes": [], "call": self.call, "result": None}


@dataclass(frozen=True, slots=True, eq=False)
class StructuredSolution:
    """What a structured solver gave: A = V diag(λ) Vᴴ with unitary V, which is a Schur form without coupling.

    Attributes
    ----------
    eigenvalues : (n,) ndarray
    vectors : (n, n) ndarray
        Columns belong to the eigenvalues.
    seconds : float
    backward_error : float
        ‖A − V diag(λ) Vᴴ‖₁ over n·ulp·‖A‖₁, LAPACK's ratio.
    """

    eigenvalues: npt.NDArray[Any]
    vectors: npt.NDArray[Any]
    seconds: float
    backward_error: float


@dataclass(frozen=True, slots=True)
class SolverRemedy:
    """A structured solver of scipy instead of the general iteration.

    Attributes
    ----------
    text : str
    call : str
        Python lines that need nothing but ``matrix``.
    structure : str
        ``"hermitian"``, ``"skew"`` or ``"normal"``; decides what `run` does.
    result : RemedyResult or None
    """

    text: str
    call: str
    structure: str
    matrix: WorkingMatrix = field(repr=False)
    result: RemedyResult | None = None

    @property
    def settings(self) -> dict[str, Any]:
        """Empty: this remedy is no iteration."""
        return {}

    def run(self) -> StructuredSolution:
        """Solve with the structured solver and measure the backward error."""
        from schurbench.measures import residual_ratio

        began = time.perf_counter()
        b, exponent = scaled(self.matrix.array)
        values, vectors = _solve(b, self.structure)
        seconds = time.perf_counter() - began
        error = residual_ratio(b, vectors, np.diag(values))
        values = times_power_of_two(values, -exponent)
        for array in (values, vectors):
            array.setflags(write=False)
        return StructuredSolution(values, vectors, seconds, error)

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return {
            "text": self.text,
            "settings": {},
            "changes": [],
            "call": self.call,
            "result": self.result.to_dict() if self.result else None,
        }


def solve_structured(matrix: Any, structure: str) -> tuple[npt.NDArray[Any], npt.NDArray[Any]]:
    """Eigenvalues and orthonormal eigenvectors of a Hermitian, skew-Hermitian or normal matrix.

    Parameters
    ----------
    matrix : (n, n) array, or a WorkingMatrix
    structure : {"hermitian", "skew", "normal"}

    Returns
    -------
    values : (n,) ndarray
    vectors : (n, n) ndarray
        Unitary; A = V diag(λ) Vᴴ.

    Notes
    -----
    For a normal A the Hermitian part H₁ and the skew part iH₂ commute, so the Hermitian H₁ + tH₂ has the same
    eigenvectors for every t, and for all but finitely many t no further ones. Where two eigenvalues of the sum lie
    close, their vectors come out mixed by about ε over the distance; since the eigenvalues of A itself are apart
    there, one step of first-order perturbation theory separates them again. Driver ``evd``, because ``evr``, the
    default, leaves vectors an order of magnitude less orthogonal (measured on cyclic matrices of order 100: 27 against
    0.8 in units of n·ulp).
    """
    a: Any = matrix.array if isinstance(matrix, WorkingMatrix) else np.asarray(matrix)
    b, exponent = scaled(a)
    values, vectors = _solve(b, structure)
    return times_power_of_two(values, -exponent), vectors


def _solve(a: Any, structure: str) -> tuple[npt.NDArray[Any], npt.NDArray[Any]]:
    """`solve_structured` for a matrix whose entries are at most 1, so that nothing overflows on the way."""
    import scipy.linalg

    adjoint = a.conj().T
    if structure == "hermitian":
        values, vectors = scipy.linalg.eigh((a + adjoint) / 2, driver="evd", check_finite=False)
        return np.asarray(values), np.asarray(vectors)
    if structure == "skew":
        values, vectors = scipy.linalg.eigh((a - adjoint) / 2j, driver="evd", check_finite=False)
        return 1j * np.asarray(values), np.asarray(vectors)
    mixed = (a + adjoint) / 2 + np.sqrt(2.0) * (a - adjoint) / 2j
    vectors = np.asarray(scipy.linalg.eigh(mixed, driver="evd", check_finite=False)[1])
    nearly = vectors.conj().T @ a @ vectors
    values = np.diagonal(nearly)
    gap = values[None, :] - values[:, None]
    apart = np.abs(gap) > 1e-8 * float(np.abs(values).max(initial=0.0))
    turn = np.where(apart, nearly, 0.0) / np.where(apart, gap, 1.0)
    vectors = vectors + vectors @ (turn - turn.conj().T) / 2  # unitary up to the square of the correction
    return np.einsum("ij,ij->j", vectors.conj(), a @ vectors), vectors


@dataclass(frozen=True, slots=True)
class Finding:
    """One thing the record shows, with its evidence.

    Attributes
    ----------
    cause : str
        Code of the cause, such as ``"equal-moduli"``.
    statement : str
        One plain sentence with numbers.
    evidence : dict of str to number
        Measured values beside predicted ones; names say which is which.
    rows : tuple of int
        Rows of H it concerns.
    steps : tuple of int
        First and last step of every stretch of sweeps it explains.
    confidence : float
        0 to 1: how well the evidence fits.
    remedy : Remedy or None
    rank : Rank
    """

    cause: str
    statement: str
    evidence: dict[str, float]
    rows: tuple[int, ...] = ()
    steps: tuple[int, ...] = ()
    confidence: float = 1.0
    remedy: Remedy | None = None
    rank: Rank = Rank.ITERATION

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return {
            "cause": self.cause,
            "statement": self.statement,
            "evidence": plain(self.evidence),
            "rows": list(self.rows),
            "steps": list(self.steps),
            "confidence": self.confidence,
            "rank": self.rank.name.lower(),
            "remedy": self.remedy.to_dict() if self.remedy is not None else None,
        }


@dataclass(frozen=True, slots=True)
class Diagnosis:
    """Findings, most useful first, and a forecast.

    Attributes
    ----------
    findings : tuple of Finding
        Trouble with the iteration, then ill-determined eigenvalues, then advice, then healthy.
    forecast : Forecast or None
        None where the record holds no evidence for one.
    seconds : float
        What the diagnosis itself took.
    """

    findings: tuple[Finding, ...]
    forecast: Forecast | None
    seconds: float

    def to_dict(self) -> dict[str, Any]:
        """JSON-ready dictionary."""
        return {
            "findings": [finding.to_dict() for finding in self.findings],
            "forecast": self.forecast.to_dict() if self.forecast is not None else None,
            "seconds": self.seconds,
        }

    def __str__(self) -> str:
        lines = []
        for finding in self.findings:
            lines.append(f"{finding.cause}: {finding.statement}")
            if finding.remedy is not None:
                lines.append(f"  remedy: {finding.remedy.text}")
                if finding.remedy.result is not None:
                    lines.append(f"  tried: {finding.remedy.result.statement}")
        if self.forecast is not None:
            lines.append(self.forecast.statement)
        return "\n".join(lines)


def ratio_text(value: float | None) -> str:
    """A backward error ratio in a sentence."""
    return "not known" if value is None else number(value)
