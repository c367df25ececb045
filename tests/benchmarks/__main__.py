"""Whole recorded runs with Z against scipy.linalg.schur on the same matrix, in one process, alternating, medians.

python -m tests.benchmarks                      sizes 50 … 1000, printed
python -m tests.benchmarks --sizes 200 1000     other sizes
python -m tests.benchmarks --write              also into tests/benchmarks/results.md, with date and machine
"""

from __future__ import annotations

import argparse
import datetime
import os
import time
from pathlib import Path

import numpy as np
import scipy.linalg

import schurbench as sb
from schurbench.journal.environment import environment
from schurbench.journal.journal import Journal
from schurbench.prepare.preparation import single_blas_thread

DATA = Path(__file__).parent.parent / "data"
RESULTS = Path(__file__).parent / "results.md"


def gaussian(n: int, complex_: bool) -> np.ndarray:
    rng = np.random.default_rng(n)
    a = rng.standard_normal((n, n))
    return a + 1j * rng.standard_normal((n, n)) if complex_ else a


def alternate(first, second, repeats: int) -> tuple[float, float]:
    """Median seconds of two calls that take turns, after one round that is not counted."""
    times: tuple[list[float], list[float]] = ([], [])
    for round_ in range(repeats + 1):
        for call, seconds in zip((first, second), times, strict=True):
            began = time.perf_counter()
            call()
            if round_:
                seconds.append(time.perf_counter() - began)
    return float(np.median(times[0])), float(np.median(times[1]))


def against_lapack(a: np.ndarray, repeats: int) -> tuple[float, float, sb.Run]:
    """Milliseconds of a recorded run and of scipy.linalg.schur, one BLAS thread each, and the run."""
    m = sb.load(a)
    with single_blas_thread():
        ours, lapack = alternate(lambda: sb.iterate(m), lambda: scipy.linalg.schur(a), repeats)
    return 1e3 * ours, 1e3 * lapack, sb.iterate(m)


def recording_cost(a: np.ndarray, repeats: int) -> float:
    """Share that the journal adds: the same run with all of it, and with steps only, no bands and no checkpoints."""
    m = sb.load(a)
    add = Journal.add

    def steps_only(self: Journal, step, H, Qh, window) -> None:
        self.steps.append(step)
        self.windows.append(window)

    def without() -> None:
        Journal.add = steps_only
        try:
            sb.iterate(m)
        finally:
            Journal.add = add

    with single_blas_thread():
        on, off = alternate(lambda: sb.iterate(m), without, repeats)
    return on / off - 1.0


def replay_cost(run: sb.Run, jumps: int = 30) -> float:
    """Median seconds of a jump to a random state, as a share of the run's iteration."""
    rng = np.random.default_rng(0)
    spent = []
    for k in rng.integers(0, len(run.steps) + 1, jumps):
        run.journal._walk = None
        began = time.perf_counter()
        run.state(int(k))
        spent.append(time.perf_counter() - began)
    return float(np.median(spent)) / run.phases["iterate"]


def diagnosis_cost(run: sb.Run) -> float:
    """Best of three, milliseconds, of a diagnosis without trying remedies."""
    return 1e3 * min(sb.diagnose(run).seconds for _ in range(3))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--sizes", type=int, nargs="+", default=[50, 100, 200, 300, 500, 1000])
    parser.add_argument("--repeats", type=int, default=9)
    parser.add_argument("--write", action="store_true", help=f"write {RESULTS.name} as well")
    arguments = parser.parse_args()

    facts = environment()
    blas = "; ".join(f"{b['library']} {b['version']} ({b['kernel']})" for b in facts["blas"])
    lines = [
        "# Whole recorded run with Z ÷ scipy.linalg.schur",
        "",
        f"{datetime.date.today().isoformat()}; {facts['cpu']}, {os.cpu_count()} cores, load {os.getloadavg()[0]:.1f} at the start;",
        f"{', '.join(f'{k} {v}' for k, v in facts['versions'].items())}; BLAS {blas}, one thread each.",
        f"One process, the two alternating, medians of {arguments.repeats}; `python -m tests.benchmarks --write`.",
        "",
        "| matrix | n | strategy | sweeps | ours, ms | schur, ms | ratio | recording | median jump | diagnosis, ms |",
        "|---|---|---|---|---|---|---|---|---|---|",
    ]
    print("\n".join(lines), flush=True)
    cases = [("Gaussian, real", gaussian(n, False)) for n in arguments.sizes]
    cases += [("Gaussian, complex", gaussian(n, True)) for n in arguments.sizes]
    cases += [(path.stem, sb.load(path).array) for path in sorted([*DATA.glob("*.npz"), *DATA.glob("*.mtx")])]
    for name, a in cases:
        repeats = arguments.repeats if len(a) < 800 else min(3, arguments.repeats)
        ours, lapack, run = against_lapack(a, repeats)
        row = (
            f"| {name} | {len(a)} | {run.settings.strategy} | {run.sweeps} | {ours:.2f} | {lapack:.2f} | {ours / lapack:.2f} "
            f"| {100 * recording_cost(a, repeats):.0f} % | {100 * replay_cost(run):.1f} % "
            f"| {diagnosis_cost(run):.0f} |"
        )
        print(row, flush=True)
        lines.append(row)
    if arguments.write:
        RESULTS.write_text("\n".join(lines) + "\n")


if __name__ == "__main__":
    main()
