"""Aggressive early deflation: look for converged eigenvalues in a window at the bottom of the active one.

Braman, Byers & Mathias, The multishift QR algorithm, part II: aggressive early deflation, SIAM J. Matrix Anal. Appl. 23
(2002), §2. The window is brought to Schur form; the subdiagonal entry beside it becomes a column of spikes; eigenvalues
whose spike is negligible are deflated, the others are moved up and out of the way; what is left is brought back to
Hessenberg form. Reordering and reduction come from LAPACK (trexc, gehrd) through scipy.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from schurbench.kernels.blocks import TINY, ULP
from schurbench.kernels.planes import join, split
from schurbench.kernels.small_schur import small_schur, small_schur_complex

__all__ = ["WindowOutcome", "deflate_window"]


@dataclass(frozen=True, slots=True)
class WindowOutcome:
    """What a deflation window found.

    Attributes
    ----------
    top : int
        First row of the window.
    spikes : tuple of float
        Magnitudes beside the window's Schur form before any deflation, top to bottom.
    deflated : tuple of (row, size, magnitude, threshold, eigenvalues)
        From the bottom upward; H is final in these rows.
    handed_on : tuple of complex
        Eigenvalues that stay, as shifts for the next sweep; conjugates adjacent, most promising first.
    converged : bool
        False when the window's own Schur form failed; nothing was changed then.
    """

    top: int
    spikes: tuple[float, ...]
    deflated: tuple[tuple[int, int, float, float, tuple[complex, ...]], ...]
    handed_on: tuple[complex, ...]
    converged: bool = True


def deflate_window(H: np.ndarray, Qh: np.ndarray, window: tuple[int, int], size: int, index: int) -> WindowOutcome:
    """Deflate what has converged in the last ``size`` rows of the active window; H and Qh change in place.

    Parameters
    ----------
    H, Qh : arrays in the kernels' layout
    window : (int, int)
        Active window.
    size : int
        Rows of the deflation window, at most those of the active window.
    index : int
        Index of the step.
    """
    lo, hi = window
    top = max(lo, hi - size)
    m = hi - top
    block = H[..., top:hi, top:hi]
    spike_row = complex(*H[..., top, top - 1]) if H.ndim == 3 else float(H[top, top - 1])
    spike = spike_row if top > lo else 0.0

    T, Vh = split(np.triu(join(block), -1)), split(np.eye(m, dtype=float if H.ndim == 2 else complex))
    norm = float(np.sqrt(np.square(T).sum()))
    if H.ndim == 2:
        fine = small_schur(T, Vh, np.zeros((1, m, 3)), norm, 1009 * index)
    else:
        fine = small_schur_complex(T, Vh, np.ones((1, m)), np.zeros((1, 2, m)), norm, 1009 * index)
    if not fine:
        return WindowOutcome(top, (), (), (), converged=False)

    from scipy.linalg import get_lapack_funcs

    t = np.asfortranarray(join(T))
    v = np.asfortranarray(join(Vh).conj().T)
    (trexc,) = get_lapack_funcs(("trexc",), (t,))
    spikes = tuple(np.abs(spike * v[0]).tolist())
    deflated: list[tuple[int, int, float, float, tuple[complex, ...]]] = []
    keep, bottom = 0, m  # rows [0, keep) stay, [bottom, m) are deflated, those between are still to be looked at
    while keep < bottom:
        i = bottom - 1
        pair = H.ndim == 2 and i > keep and t[i, i - 1] != 0.0
        first = i - 1 if pair else i
        if pair:
            size_here = abs(t[i, i]) + np.sqrt(abs(t[i, i - 1])) * np.sqrt(abs(t[i - 1, i]))
            magnitude = max(abs(spike * v[0, i]), abs(spike * v[0, i - 1]))
        else:
            size_here = abs(t[i, i]) or abs(spike)
            magnitude = abs(spike * v[0, i])
        threshold = max(TINY, ULP * float(size_here))
        if magnitude <= threshold:
            rows = 2 if pair else 1
            deflated.append((top + first, rows, float(magnitude), threshold, _eigenvalues(t, first, rows)))
            bottom = first
        else:
            t, v, info = trexc(t, v, first + 1, keep + 1, overwrite_a=1, overwrite_q=1)
            if info != 0:
                break  # two eigenvalues too close to be exchanged: all that is left stays
            keep += 2 if pair else 1
    handed_on = _shifts(t, bottom)
    if bottom == m and spike != 0.0:
        return WindowOutcome(top, spikes, (), handed_on)

    if bottom > 1 and spike != 0.0:
        _back_to_hessenberg(t, v, bottom)
    beside = spike * np.conj(v[0, 0]) if bottom > 0 else 0.0
    if H.ndim == 2:
        _real_update(H, Qh, top, hi, t, v)
    else:
        _complex_update(H, Qh, top, hi, t, v)
    if top > lo:
        if H.ndim == 2:
            H[top, top - 1] = beside
        else:
            H[0, top, top - 1], H[1, top, top - 1] = complex(beside).real, complex(beside).imag
    return WindowOutcome(top, spikes, tuple(deflated), handed_on)


def _eigenvalues(t: np.ndarray, i: int, rows: int) -> tuple[complex, ...]:
    if rows == 1:
        return (complex(t[i, i]),)
    if t[i + 1, i] == 0.0:
        return (complex(t[i, i]), complex(t[i + 1, i + 1]))
    im = float(np.sqrt(abs(t[i, i + 1])) * np.sqrt(abs(t[i + 1, i])))
    return (complex(t[i, i], im), complex(t[i + 1, i + 1], -im))


def _shifts(t: np.ndarray, rows: int) -> tuple[complex, ...]:
    """Eigenvalues of the leading rows, downward: each was moved to the top of those looked at after it, so that the ones
    that stood lowest in the window, where spikes are smallest, come first."""
    values: list[complex] = []
    i = 0
    while i < rows:
        pair = t.dtype == np.float64 and i + 1 < rows and t[i + 1, i] != 0.0
        values.extend(_eigenvalues(t, i, 2 if pair else 1))
        i += 2 if pair else 1
    return tuple(values)


def _back_to_hessenberg(t: np.ndarray, v: np.ndarray, rows: int) -> None:
    """Turn the spikes of the leading rows into one entry and the leading block into Hessenberg form again."""
    from scipy.linalg import get_lapack_funcs

    x = np.conj(v[0, :rows])
    norm = float(np.linalg.norm(x))
    alpha = x[0]
    beta = -norm * (alpha / abs(alpha) if alpha != 0 else 1.0)
    w = x.copy()
    w[0] -= beta
    scale = float(np.vdot(w, w).real)
    if scale > 0.0:
        # reflector I − 2 w wᴴ / (wᴴ w) from both sides, and on the columns of V
        t[:rows] -= np.outer(w * (2.0 / scale), w.conj() @ t[:rows])
        t[:rows, :rows] -= np.outer(t[:rows, :rows] @ w, w.conj() * (2.0 / scale))
        v[:, :rows] -= np.outer(v[:, :rows] @ w, w.conj() * (2.0 / scale))
    if rows < 3:
        return
    (gehrd,) = get_lapack_funcs(("gehrd",), (t,))
    name = "orghr" if t.dtype == np.float64 else "unghr"
    (orghr,) = get_lapack_funcs((name,), (t,))
    packed, tau, _ = gehrd(t[:rows, :rows], lwork=64 * rows)
    q, _ = orghr(packed, tau, lwork=64 * rows)
    t[:rows, :rows] = np.triu(packed, -1)
    t[:rows, rows:] = q.conj().T @ t[:rows, rows:]
    v[:, :rows] = v[:, :rows] @ q


def _real_update(H: np.ndarray, Qh: np.ndarray, top: int, hi: int, t: np.ndarray, v: np.ndarray) -> None:
    H[top:hi, top:hi] = t
    H[:top, top:hi] = H[:top, top:hi] @ v
    vt = np.ascontiguousarray(v.T)
    H[top:hi, hi:] = vt @ H[top:hi, hi:]
    if Qh.shape[0]:
        Qh[top:hi] = vt @ Qh[top:hi]


def _complex_update(H: np.ndarray, Qh: np.ndarray, top: int, hi: int, t: np.ndarray, v: np.ndarray) -> None:
    H[0, top:hi, top:hi], H[1, top:hi, top:hi] = t.real, t.imag
    vr, vi = np.ascontiguousarray(v.real), np.ascontiguousarray(v.imag)
    above = H[:, :top, top:hi]
    re, im = above[0] @ vr - above[1] @ vi, above[0] @ vi + above[1] @ vr
    above[0], above[1] = re, im
    pr, pi = np.ascontiguousarray(vr.T), np.ascontiguousarray(-vi.T)  # Vᴴ
    for right in (H[:, top:hi, hi:], Qh[:, top:hi] if Qh.shape[1] else None):
        if right is not None:
            re, im = pr @ right[0] - pi @ right[1], pr @ right[1] + pi @ right[0]
            right[0], right[1] = re, im
