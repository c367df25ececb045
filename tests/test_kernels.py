"""Invariants of the steps themselves, each checked against numpy on the mathematical definition."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.linalg

from schurbench.kernels import Workspace, bands, join, scan, split, sweep
from schurbench.kernels.blocks import standardise_pair
from schurbench.kernels.rotations import make_reflector, make_rotation, make_rotation_complex
from schurbench.measures import ULP
from tests.gallery import matched_distance


def hessenberg(n: int, dtype: type, seed: int) -> np.ndarray:
    rng = np.random.default_rng(seed)
    a = rng.standard_normal((n, n))
    if dtype is complex:
        a = a + 1j * rng.standard_normal((n, n))
    return np.ascontiguousarray(np.triu(a, -1).astype(dtype))


def q_of_rotations(n: int, lo: int, hi: int, C: np.ndarray, S: np.ndarray) -> np.ndarray:
    """Q from the rotations, by multiplying them out."""
    Qh = np.eye(n, dtype=S.dtype)
    for k in range(lo, hi - 1):
        G = np.array([[C[k], S[k]], [-np.conj(S[k]), C[k]]])
        Qh[k : k + 2] = G @ Qh[k : k + 2]
    return Qh.conj().T


@pytest.mark.parametrize("dtype", [float, complex])
@pytest.mark.parametrize(("n", "lo", "hi"), [(2, 0, 2), (5, 0, 5), (9, 0, 9), (12, 3, 10), (13, 5, 7), (30, 0, 29)])
def test_single_shift_step_is_rq_plus_shift(dtype: type, n: int, lo: int, hi: int) -> None:
    H0 = hessenberg(n, dtype, seed=n)
    for edge in (lo, hi):
        if 0 < edge < n:
            H0[edge, edge - 1] = 0.0
    shift = dtype(0.3 if dtype is float else 0.3 - 0.7j)
    planes, Qh = split(H0), split(np.eye(n, dtype=dtype))
    work = Workspace(planes)
    rotations = sweep(planes, Qh, work, (lo, hi), (shift,), 1)
    H, Qh, S = join(planes), join(Qh), join(work.S[0][..., None, :])[0]

    assert rotations == hi - lo - 1
    # Hessenberg form is kept exactly, and so are the zeros at the window's edges
    assert not np.tril(H, -2).any()
    for edge in (lo, hi):
        if 0 < edge < n:
            assert H[edge, edge - 1] == 0.0
    # Qᴴ H Q = the next H, with Q multiplied out from the recorded rotations
    Q = q_of_rotations(n, lo, hi, work.C[0], S)
    np.testing.assert_allclose(Qh, Q.conj().T, atol=20 * ULP)
    np.testing.assert_allclose(H, Q.conj().T @ H0 @ Q, atol=40 * n * ULP)
    # and Q is the Q of H − σI = QR: QᴴH − σQᴴ is upper triangular in the window
    R = Q.conj().T @ (H0 - shift * np.eye(n))
    np.testing.assert_allclose(np.tril(R[lo:hi, lo:hi], -1), 0.0, atol=40 * n * ULP)
    np.testing.assert_allclose(H[lo:hi, lo:hi], (R @ Q)[lo:hi, lo:hi] + shift * np.eye(hi - lo), atol=40 * n * ULP)


@pytest.mark.parametrize(("n", "lo", "hi"), [(3, 0, 3), (4, 0, 4), (7, 0, 7), (12, 3, 10), (13, 5, 8), (30, 0, 29)])
@pytest.mark.parametrize("pair", [(0.4 + 1.1j, 0.4 - 1.1j), (0.5, -2.0)])
def test_double_shift_sweep_equals_two_explicit_steps(n: int, lo: int, hi: int, pair: tuple[complex, complex]) -> None:
    """The implicit Q theorem (Golub & Van Loan, 4th ed., §7.4.5) against numpy's QR of (H − σ₁I)(H − σ₂I)."""
    H0 = hessenberg(n, float, seed=7 * n)
    for edge in (lo, hi):
        if 0 < edge < n:
            H0[edge, edge - 1] = 0.0
    H, Qh = H0.copy(), np.eye(n)
    first, second = map(complex, pair)
    reflectors = sweep(H, Qh, Workspace(H), (lo, hi), (first, second), 1)

    assert reflectors == hi - lo - 1
    assert not np.tril(H, -2).any()
    np.testing.assert_allclose(Qh @ Qh.T, np.eye(n), atol=20 * ULP)
    np.testing.assert_allclose(H, Qh @ H0 @ Qh.T, atol=60 * n * ULP)
    window = H0[lo:hi, lo:hi]
    M = window @ window - (first + second).real * window + (first * second).real * np.eye(hi - lo)
    Q, _ = np.linalg.qr(M)
    mine = Qh[lo:hi, lo:hi].T
    # equal up to signs of columns; the last columns are as ill-determined as M is near singular
    dots = np.abs(np.sum(Q * mine, axis=0))
    np.testing.assert_allclose(dots, 1.0, atol=1e3 * ULP * np.linalg.cond(M))


@pytest.mark.parametrize(
    ("f", "g"),
    [
        (3.0, 4.0),
        (0.0, 2.0),
        (2.0, 0.0),
        (-1e200, 1e200),
        (1e-200, -1e-200),
        (1 + 2j, 3 - 1j),
        (0j, 2j),
        (-2j, 1e-300 + 0j),
    ],
)
def test_rotation_annihilates(f: complex, g: complex) -> None:
    c, s, r = (make_rotation_complex if isinstance(f, complex) else make_rotation)(f, g, 1, 0)
    scale = max(abs(f), abs(g))
    assert abs(c * c + abs(s) ** 2 - 1.0) < 4 * ULP
    assert abs(-np.conj(s) * f + c * g) <= 4 * ULP * scale
    assert abs(c * f + s * g - r) <= 4 * ULP * scale


@pytest.mark.parametrize(
    "x", [(1.0, 2.0, 3.0), (-1e-200, 1e-201, 2e-200), (1e200, -1e200, 3e199), (0.0, 1.0, 0.0), (5.0, 0.0, 0.0)]
)
def test_reflector_annihilates(x: tuple[float, float, float]) -> None:
    t, v1, v2, beta = make_reflector(*x, 1, 0)
    v = np.array([1.0, v1, v2])
    y = np.array(x) - t * v * (v @ np.array(x))
    np.testing.assert_allclose(y, [beta, 0.0, 0.0], atol=8 * ULP * max(map(abs, x)))


# Blocks whose kind is decided by hand: real and complex pairs, nearly equal, lower triangular, graded.
BLOCKS = [
    [[4.0, 1.0], [2.0, 3.0]],
    [[1.0, -2.0], [3.0, 1.0]],
    [[1.0, 5.0], [-3.0, 2.0]],
    [[2.0, 0.0], [7.0, -1.0]],
    [[1.0, 1e-17], [1e-17, 1.0]],
    [[1.0, 1.0], [1e-30, 1.0 + 1e-15]],
    [[1e-150, 1e100], [-1e-120, 3e-150]],
    [[0.0, 1.0], [1.0, 0.0]],
    [[3.0, 2.0], [0.0, 1.0]],
    [[1e10, 1.0], [1.0, -1e-10]],
    [[5.0, 3.0], [-3.0, 5.0]],
]


@pytest.mark.parametrize("block", BLOCKS)
def test_standard_blocks(block: list[list[float]]) -> None:
    """Standard form exactly, eigenvalues as mpmath computes them at 50 digits."""
    import mpmath

    H = np.array(block)
    Q = np.eye(2)
    norm = np.abs(H).max()
    re1, im1, re2, im2 = standardise_pair(H, Q, 0)
    if H[1, 0] == 0.0:
        assert im1 == im2 == 0.0
        assert (re1, re2) == (H[0, 0], H[1, 1])
    else:
        assert H[0, 0] == H[1, 1]
        assert H[0, 1] * H[1, 0] < 0.0 or (H[0, 1] > 0) != (H[1, 0] > 0)
        assert im1 == -im2 > 0.0
    np.testing.assert_allclose(Q.T @ H @ Q, block, atol=8 * ULP * norm)
    with mpmath.workdps(50):
        (a, b), (c, d) = [[mpmath.mpf(x) for x in row] for row in block]
        root = mpmath.sqrt((a - d) ** 2 / 4 + b * c)
        exact = [complex((a + d) / 2 + root), complex((a + d) / 2 - root)]
    # a double eigenvalue moves by sqrt(ulp) under rounding; others are held to rounding of the norm
    allowed = 8 * ULP * norm / max(1e-8, min(1.0, abs(exact[0] - exact[1]) / norm))
    found = [complex(re1, im1), complex(re2, im2)]
    assert (
        min(abs(found[0] - exact[0]) + abs(found[1] - exact[1]), abs(found[0] - exact[1]) + abs(found[1] - exact[0]))
        <= allowed
    )


def test_standard_block_brings_the_rest_along() -> None:
    H0 = hessenberg(8, float, seed=3)
    H0[3, 2] = H0[5, 4] = 0.0
    H, Qh = H0.copy(), np.eye(8)
    standardise_pair(H, Qh, 3)
    np.testing.assert_allclose(H, Qh @ H0 @ Qh.T, atol=50 * ULP)
    assert not np.tril(H, -2).any()


def test_deflation_tests_differ_where_they_should() -> None:
    """A small entry in a graded block: the norm test drops it, the other two keep it (mechanism of lossy deflation)."""
    H = np.diag([1.0, 1e-8, 1e-14]) + np.diag([1e-3, 1e-10], 1)
    H[1, 0], H[2, 1] = 1e-5, 1e-17
    norm = float(np.linalg.norm(H))
    assert scan(H, (0, 3), 2, -1.0, norm)[0] == 2  # 1e-17 is below ulp·‖H‖
    assert scan(H, (0, 3), 0, -1.0, norm)[0] == 0
    assert scan(H, (0, 3), 1, -1.0, norm)[0] == 0
    # Ahues–Tisseur refuses what the neighbour test accepts when the opposite entry is large
    G = np.array([[1.0, 1e6], [1e-16, 1.0 + 1e-9]])
    assert scan(G, (0, 2), 0, -1.0, 1e6)[0] == 1
    assert scan(G, (0, 2), 1, -1.0, 1e6)[0] == 0
    # magnitude and threshold tell the decision
    row, magnitude, threshold = scan(G, (0, 2), 0, -1.0, 1e6)
    assert (row, magnitude) == (1, 1e-16)
    assert magnitude <= threshold == pytest.approx(ULP * (2.0 + 1e-9))
    # an absolute tolerance replaces rounding level
    assert scan(G, (0, 2), 0, 1e-20, 1e6)[0] == 0
    assert scan(G, (0, 2), 2, 1e-15, 1e6)[0] == 1


def test_a_hollow_block_is_judged_by_its_neighbours() -> None:
    """Zero diagonal, as in bipartite matrices: eigenvalues ±sqrt(ab) of [0 a; b 0] are dropped at rounding of what is near."""
    H = np.diag([1.0, 1.0, 1.0], 1) + np.diag([1.0, 1e-20, 1.0], -1)
    assert scan(H, (0, 4), 1, -1.0, 2.0)[0] == 0  # they are 1e-10
    H[2, 1] = 1e-34
    assert scan(H, (0, 4), 1, -1.0, 2.0)[0] == 2  # they are 1e-17


def test_bands() -> None:
    H = hessenberg(6, complex, seed=2)
    out = np.empty((3, 6), dtype=complex)
    bands(split(H), 0, 6, out)
    assert np.array_equal(out[0], np.diag(H))
    assert np.array_equal(out[1, :5], np.diag(H, -1))
    assert np.array_equal(out[2, :5], np.diag(H, 1))


def test_reference_spectrum_after_many_steps() -> None:
    """Two hundred arbitrary steps change no eigenvalue beyond rounding: LAPACK through scipy is the reference."""
    H = hessenberg(12, complex, seed=5)
    before = scipy.linalg.eigvals(H)
    planes = split(H)
    Qh = np.empty((2, 0, 12))
    work = Workspace(planes)
    rng = np.random.default_rng(0)
    for k in range(200):
        sweep(planes, Qh, work, (0, 12), (complex(*rng.standard_normal(2)),), k)
    after = scipy.linalg.eigvals(join(planes))
    assert matched_distance(after, before).max() < 1e-11


def test_complex_scan_agrees_with_the_real_one() -> None:
    """The two scans read different layouts but are one rule."""
    rng = np.random.default_rng(4)
    for _ in range(50):
        H = np.triu(rng.standard_normal((7, 7)) * 10.0 ** rng.integers(-9, 9, (7, 7)), -1)
        H[rng.integers(1, 7), :] *= 1e-14
        for test in range(3):
            real = scan(H, (0, 7), test, -1.0, float(np.linalg.norm(H)))
            planes = split(H.astype(complex))
            assert scan(planes, (0, 7), test, -1.0, float(np.linalg.norm(H))) == pytest.approx(real, rel=1e-15)
