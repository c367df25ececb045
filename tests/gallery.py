"""Seeded and published matrices that every strategy is held against.

`lapack_types` follows the description of the 21 matrix types in Reference-LAPACK's TESTING/EIG/dchkhs.f ("The matrices
used in testing"), written here from that description; sizes and scales are ours.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

ULP = 2.0**-52
# sqrt of the overflow and underflow thresholds, as dchkhs.f uses them to scale its extreme types
LARGE = 2.0**511
SMALL = 2.0**-511


def random_unitary(n: int, rng: np.random.Generator, complex_: bool) -> np.ndarray:
    g = rng.standard_normal((n, n))
    if complex_:
        g = g + 1j * rng.standard_normal((n, n))
    q, r = np.linalg.qr(g)
    return q * (np.diag(r) / np.abs(np.diag(r)))


def _spread(n: int, kind: str, rng: np.random.Generator, complex_: bool) -> np.ndarray:
    if kind == "even":
        d = np.linspace(1.0, ULP, n) if n > 1 else np.ones(1)
    elif kind == "geometric":
        d = ULP ** (np.arange(n) / max(1, n - 1))
    elif kind == "clustered":
        d = np.full(n, ULP)
        d[0] = 1.0
    else:
        d = np.exp(np.log(ULP) * rng.random(n))
    if complex_:
        return d * np.exp(2j * np.pi * rng.random(n))
    return d * rng.choice([-1.0, 1.0], n)


def lapack_types(n: int, complex_: bool) -> Iterator[tuple[str, np.ndarray]]:
    """Yield (name, matrix) for the 21 types at order n; the name says how it was drawn."""
    dtype = complex if complex_ else float
    for number in range(1, 22):
        seed = 1000 * number + n
        rng = np.random.default_rng(seed)
        name = f"type {number}, n={n}, {'complex' if complex_ else 'real'}, seed={seed}"
        kinds = {4: "even", 5: "geometric", 6: "clustered", 7: "even", 8: "even"}
        if number == 1:
            a = np.zeros((n, n))
        elif number == 2:
            a = np.eye(n)
        elif number == 3:
            a = np.eye(n) + np.eye(n, k=-1)
        elif number in kinds:
            a = np.diag(_spread(n, kinds[number], rng, complex_))
            a = a * {7: LARGE, 8: SMALL}.get(number, 1.0)
        elif number in (9, 10, 11, 12):  # U T U* with T upper triangular and U unitary
            kind = {9: "even", 10: "geometric", 11: "clustered", 12: "random"}[number]
            u = random_unitary(n, rng, complex_)
            t = np.triu(rng.uniform(-1, 1, (n, n)), 1) + np.diag(_spread(n, kind, rng, complex_))
            a = u @ t @ u.conj().T
        elif number in (13, 14, 15, 16, 17, 18):  # X T X⁻¹ with an ill-conditioned X
            kind = {13: "even", 14: "geometric", 15: "clustered"}.get(number, "random")
            u, v = random_unitary(n, rng, complex_), random_unitary(n, rng, complex_)
            s = np.geomspace(1.0, 1e4, n) if n > 1 else np.ones(1)
            x, xi = (u * s) @ v, v.conj().T @ (u / s).conj().T
            t = np.triu(rng.uniform(-1, 1, (n, n)), 1) + np.diag(_spread(n, kind, rng, complex_))
            a = x @ t @ xi * {17: LARGE, 18: SMALL}.get(number, 1.0)
        else:  # random entries in (−1, 1)
            a = rng.uniform(-1, 1, (n, n))
            if complex_:
                a = a + 1j * rng.uniform(-1, 1, (n, n))
            a = a * {20: LARGE, 21: SMALL}.get(number, 1.0)
        yield name, np.ascontiguousarray(a, dtype=dtype)


def frank(n: int) -> np.ndarray:
    """Frank's matrix (Frank 1958; Golub & Wilkinson 1976): entries n+1−max(i, j), upper Hessenberg."""
    i, j = np.indices((n, n)) + 1
    return np.where(j >= i - 1, n + 1 - np.maximum(i, j), 0).astype(float)


def clement(n: int) -> np.ndarray:
    """Clement's (Kac's) tridiagonal matrix (Clement 1959): eigenvalues ±(n−1), ±(n−3), …"""
    k = np.arange(1.0, n)
    return np.diag(k, 1) + np.diag(k[::-1], -1)


def cyclic(n: int) -> np.ndarray:
    """Cyclic permutation: eigenvalues are the n-th roots of unity."""
    return np.roll(np.eye(n), 1, axis=0)


def toeplitz_tridiagonal(n: int, a: float, b: float, c: float) -> np.ndarray:
    """Subdiagonal a, diagonal b, superdiagonal c: eigenvalues b + 2 sqrt(ac) cos(kπ/(n+1))."""
    return np.diag(np.full(n - 1, a), -1) + np.diag(np.full(n, b)) + np.diag(np.full(n - 1, c), 1)


def forsythe(n: int, alpha: float) -> np.ndarray:
    """Jordan block with α in the corner (Higham, The Matrix Computation Toolbox): α^(1/n) e^(2πik/n)."""
    a = np.diag(np.ones(n - 1), 1)
    a[n - 1, 0] = alpha
    return a


def day(n: int, eta: float) -> np.ndarray:
    """Day's family (Day, SAND96-0913, 1996), order 2n: eigenvalues ±sqrt(1 + η e^(2πik/n)) (derived, not published)."""
    a = np.kron(np.eye(n), [[0.0, 1.0], [1.0, 0.0]])
    for i in range(n - 1):
        a[2 * i + 2, 2 * i + 1] = eta
    a[0, 2 * n - 1] = eta
    return a


def wilkinson_plus() -> np.ndarray:
    """W21+ (Wilkinson 1965, ch. 5 §45): tridiagonal with |10−i| on the diagonal."""
    return np.diag(np.abs(np.arange(-10.0, 11.0))) + np.diag(np.ones(20), 1) + np.diag(np.ones(20), -1)


def rosser() -> np.ndarray:
    """Rosser's matrix (Rosser, Lanczos, Hestenes, Karush 1951)."""
    return np.array(
        [
            [611, 196, -192, 407, -8, -52, -49, 29],
            [196, 899, 113, -192, -71, -43, -8, -44],
            [-192, 113, 899, 196, 61, 49, 8, 52],
            [407, -192, 196, 611, 8, 44, 59, -23],
            [-8, -71, 61, 8, 411, -599, 208, 208],
            [-52, -43, 49, 44, -599, 411, 208, 208],
            [-49, -8, 8, 59, 208, 208, 99, -911],
            [29, -44, 52, -23, 208, 208, -911, 99],
        ],
        dtype=float,
    )


def hadamard(n: int) -> np.ndarray:
    """Sylvester's Hadamard matrix, n a power of two: ±sqrt(n), each n/2 times."""
    h = np.ones((1, 1))
    while len(h) < n:
        h = np.block([[h, h], [h, -h]])
    return h


def companion(coefficients: list[float]) -> np.ndarray:
    """Companion matrix of the monic polynomial with the given coefficients, highest first."""
    n = len(coefficients) - 1
    a = np.eye(n, k=-1)
    a[0] = -np.array(coefficients[1:]) / coefficients[0]
    return a


def matched_distance(found: np.ndarray, exact: np.ndarray) -> np.ndarray:
    """Distances of a best one-to-one matching of two spectra, in the order of ``exact``."""
    from scipy.optimize import linear_sum_assignment

    cost = np.abs(exact[:, None] - found[None, :])
    rows, columns = linear_sum_assignment(cost)
    return cost[rows, columns]
