"""One of the two jobs of `schurbench.twin`, run as ``python -m schurbench.comparison._twin_job FOLDER``.

Reads ``matrix.npy`` and ``job.json`` in the folder, writes ``factors.npz`` and ``report.json`` there. Plain arrays and
JSON both ways, so that nothing is unpickled.
"""

from __future__ import annotations

import hashlib
import json
import sys
from pathlib import Path
from typing import Any

import numpy as np

from schurbench.errors import SchurbenchError
from schurbench.intake import WorkingMatrix
from schurbench.iteration import iterate
from schurbench.journal import Run
from schurbench.prepare.plain import plain

__all__ = ["main"]


def main(folder: Path) -> int:
    """Carry out the job; 0 done, 2 refused with its reason in the report."""
    job = json.loads((folder / "job.json").read_text(encoding="utf-8"))
    matrix = WorkingMatrix(np.load(folder / "matrix.npy", allow_pickle=False), name=job["name"])
    settings = dict(job["settings"])
    if settings.get("shifts") is not None:
        settings["shifts"] = [complex(*pair) for pair in settings["shifts"]]
    try:
        run = iterate(matrix, **settings)
        factors = run.factors()
    except SchurbenchError as error:
        (folder / "report.json").write_text(json.dumps({"error": str(error)}), encoding="utf-8")
        return 2
    np.savez(
        folder / "factors.npz",
        T=factors.T,
        Z=factors.Z,
        eigenvalues=factors.eigenvalues,
        condition=factors.certificate().condition,
    )
    report = {
        "error": None,
        "sha256": matrix.sha256,
        "environment": run.environment,
        "converged": run.converged,
        "stop": str(run.stop.reason),
        "sweeps": run.sweeps,
        "seconds": run.seconds,
        "settings": run.settings.to_dict(),
        "values": [_fingerprint(run, k) for k in range(len(run.steps) + 1)],
        "decisions": [_decision(run, k) for k in range(len(run.steps) + 1)],
    }
    (folder / "report.json").write_text(json.dumps(plain(report), allow_nan=False), encoding="utf-8")
    return 0


def _fingerprint(run: Run, k: int) -> str:
    """Digest of the three middle diagonals of H after step k, bit for bit."""
    digest = hashlib.sha256()
    for band in (run.diagonal(k), run.subdiagonal(k), run.superdiagonal(k)):
        digest.update(np.ascontiguousarray(band).tobytes())
    return digest.hexdigest()


def _decision(run: Run, k: int) -> list[Any]:
    """What step k did, without any rounded number: window, kind, exceptional or not, deflations."""
    if k == 0:
        return []
    step = run.steps[k - 1]
    deflations = [[deflation.row, deflation.size, str(deflation.kind)] for deflation in step.deflations]
    return [list(step.window), str(step.kind), step.exceptional, deflations]


if __name__ == "__main__":
    raise SystemExit(main(Path(sys.argv[1])))
