"""structure-unused: the matrix is symmetric, skew or normal, and a solver for that makes use of it."""

from __future__ import annotations

from schurbench.diagnosis.case import Case
from schurbench.diagnosis.finding import Finding, Rank, SolverRemedy
from schurbench.prepare.plain import number
from schurbench.prepare.profile import rounding_level

__all__ = ["StructureUnused"]

_HERMITIAN = "import scipy.linalg\nvalues, vectors = scipy.linalg.eigh(matrix, driver='evd')"
_SKEW = "import scipy.linalg\nvalues, vectors = scipy.linalg.eigh(matrix / 1j, driver='evd')\nvalues = 1j * values"
_NORMAL = "from schurbench.diagnosis import solve_structured\nvalues, vectors = solve_structured(matrix, 'normal')"

#: Profile field, word for a real and a complex matrix, structure for the solver, call, what the solver makes use of.
_KINDS = (
    ("hermitian", "symmetric", "Hermitian", "hermitian", _HERMITIAN, "real eigenvalues and orthonormal eigenvectors"),
    ("skew", "skew-symmetric", "skew-Hermitian", "skew", _SKEW, "imaginary eigenvalues and orthonormal eigenvectors"),
    ("orthogonal", "orthogonal", "unitary", "normal", _NORMAL, "orthonormal eigenvectors"),
    ("scaled_orthogonal", "a multiple of an orthogonal matrix", "a multiple of a unitary matrix", "normal", _NORMAL,
     "orthonormal eigenvectors"),
    ("normal", "normal", "normal", "normal", _NORMAL, "orthonormal eigenvectors"),
)  # fmt: skip


class StructureUnused:
    """A residual near rounding level names the structure; the general iteration treats it as any other matrix."""

    code = "structure-unused"

    def finding(self, case: Case) -> Finding | None:
        """Applies when one of the structures holds to rounding and there is something left to iterate."""
        p = case.profile
        if p.n < 3 or p.triangular != "no":
            return None
        level = rounding_level(p.n)
        for name, real_word, complex_word, structure, call, gain in _KINDS:
            residual = getattr(p, name)
            if residual > level:
                continue
            word = real_word if p.real else complex_word
            return Finding(
                cause=self.code,
                statement=(
                    f"The matrix is {word} to rounding (residual {number(residual)}, rounding level {number(level)}); "
                    f"a solver for that structure gives {gain}."
                ),
                evidence={f"measured_residual_{name}": residual, "rounding_level": level},
                confidence=0.95 if residual == 0.0 else 0.9,
                remedy=SolverRemedy(
                    text=f"Use scipy.linalg.eigh, {_WAYS[structure]}.",
                    call=call,
                    structure=structure,
                    matrix=case.run.matrix,
                ),
                rank=Rank.ADVICE,
            )
        return None


_WAYS = {
    "hermitian": "the solver for Hermitian matrices",
    "skew": "on the matrix divided by i, which is Hermitian",
    "normal": "on a combination of the Hermitian and the skew part, which has the same eigenvectors",
}
