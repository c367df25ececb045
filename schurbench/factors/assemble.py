"""From a run to factors of the loaded matrix."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
import scipy.linalg

from schurbench.errors import SettingsError
from schurbench.factors.core import Factors, ScaledFactors
from schurbench.factors.triangular import (
    Array,
    eigenvalues_of,
    in_matrix_units,
    is_exact,
    solve_small_blocks,
)
from schurbench.intake import WorkingMatrix
from schurbench.measures import ULP
from schurbench.prepare.plain import plural
from schurbench.prepare.preparation import prepare, single_blas_thread

if TYPE_CHECKING:
    from schurbench.journal import Run

__all__ = ["assemble"]


def assemble(run: Run) -> Factors:
    """Schur factors A = Z T Zᴴ of the loaded matrix from a finished or stopped run.

    Parameters
    ----------
    run : Run

    Returns
    -------
    Factors
        Partial (`complete` false) when the run stopped early.

    Raises
    ------
    SettingsError
        The run did not accumulate Z.
    InputError
        T exceeds the range of double precision in the units of A.

    Notes
    -----
    Without scaling T is H in the units of A. With scaling, 2^e D⁻¹ A D = Z H Zᴴ: the invariant subspaces of A are
    spanned by D·Z = QR, but carrying R H R⁻¹ over as T would lose the backward error. So Qᴴ A Q is formed and finished
    by sweeps of its own with the run's settings; only entries below rounding level of A are dropped beforehand. The
    pair of the scaled matrix stays as `Factors.scaled`.
    """
    if not run.settings.accumulate:
        raise SettingsError("this run did not accumulate Z, so it has no factors; run it again with accumulate=True")
    state = run.state(len(run.steps))
    if state.Z is None:
        raise SettingsError("the saved run holds no Z, so it has no factors; run it again with accumulate=True")
    form = run.settings.form
    t, z = np.triu(state.H, -1), np.array(state.Z, order="C")
    solved = solve_small_blocks(t, z, form)
    t = in_matrix_units(t, z, state.exponent, form)
    if (state.D == 1.0).all():
        left = f"{plural(solved, '2×2 block')} left by the stopped run solved directly."
        notes = (left,) if solved and not run.converged else ()
        return Factors(t, z, form, run.matrix, run.settings, run.environment, notes=notes)
    scaled = _scaled_pair(state.D, t, z, form)
    t, z, note = _of_the_loaded_matrix(run, scaled)
    return Factors(t, z, form, run.matrix, run.settings, run.environment, scaled, notes=(note,))


def _scaled_pair(d: npt.NDArray[np.float64], t: Array, z: Array, form: str) -> ScaledFactors:
    values = eigenvalues_of(t, form)
    arrays = [np.array(array) for array in (d, t, z, values)]
    for array in arrays:
        array.setflags(write=False)
    return ScaledFactors(*arrays)


def _of_the_loaded_matrix(run: Run, scaled: ScaledFactors) -> tuple[Array, Array, str]:
    """T and Z of A itself, started from the invariant subspaces that the scaled run found."""
    form = run.settings.form
    a = run.matrix.array
    with single_blas_thread():
        q = scipy.linalg.qr(scaled.D[:, None] * scaled.Z)[0]
        start = _drop_negligible(q.conj().T @ a @ q, form)
    t: Array = start
    z: Array = np.array(q)
    if not np.tril(t, -2).any():  # otherwise no block is isolated yet
        solve_small_blocks(t, z, form)
    if is_exact(t, form):
        return t, z, "The run was scaled; its factors carried over to the loaded matrix without further sweeps."
    again = WorkingMatrix(np.ascontiguousarray(t), name=run.matrix.name, source="carried over from the scaled run")
    if not run.converged:
        begun = prepare(again, form=form, balance="none", accumulate=True)
        assert begun.Z is not None  # asked for in the line above
        t, z = np.array(begun.H), z @ begun.Z
        solve_small_blocks(t, z, form)
        t = in_matrix_units(t, z, begun.exponent, form)
        return t, z, "The run was scaled and stopped early; T is finished only where that carries over."
    from schurbench.iteration import iterate

    strategy = "francis" if form == "real" else "wilkinson"
    rest = iterate(again, strategy=strategy, form=form, balance="none", deflation=run.settings.deflation)
    state = rest.state(len(rest.steps))
    assert state.Z is not None  # accumulate is iterate's default
    with single_blas_thread():
        t, z = np.triu(state.H, -1), z @ state.Z
    solve_small_blocks(t, z, form)
    t = in_matrix_units(t, z, state.exponent, form)
    further = plural(rest.sweeps, "further sweep")
    return t, z, f"The run was scaled; {further} ({strategy}) finished the factors of the loaded matrix from there."


def _drop_negligible(t: Array, form: str) -> Array:
    """Zero what lies below the subdiagonal, and below the diagonal where blocks part, at rounding level of A.

    Each dropped entry is at most ulp·‖A‖_F/√n, so that all of them together stay below √n·ulp·‖A‖_F.
    """
    level = ULP * float(np.linalg.norm(t)) / max(1.0, np.sqrt(t.shape[0]))
    t = np.ascontiguousarray(t)
    lower = np.tril(np.abs(t) <= level, -1)
    t[lower] = 0.0
    return t
