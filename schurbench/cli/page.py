"""An explanation as one page that stands alone: no script, no font, nothing fetched."""

from __future__ import annotations

from html import escape
from typing import TYPE_CHECKING

from schurbench.cli.console import figure
from schurbench.cli.wording import where

if TYPE_CHECKING:
    from schurbench.diagnosis import Diagnosis, Finding
    from schurbench.journal import Run

__all__ = ["explanation_page"]

#: Columns of the drawing of waits; with more sweeps than this a column shows the longest wait among its sweeps.
COLUMNS = 720
HEIGHT = 120

_STYLE = """
body { font: 16px/1.5 system-ui, sans-serif; color: #222; max-width: 50rem; margin: 2rem auto; padding: 0 1rem; }
h1 { font-size: 1.5rem; } h2 { font-size: 1.15rem; margin-top: 2rem; }
table { border-collapse: collapse; } td, th { padding: .15rem 1.5rem .15rem 0; text-align: left; vertical-align: top; }
td.figure { text-align: right; font-variant-numeric: tabular-nums; }
pre { background: #f4f4f4; padding: .6rem; overflow-x: auto; }
figure { margin: 1rem 0; } svg { width: 100%; height: auto; }
.quiet, figcaption { color: #555; font-size: .9rem; }
"""


def explanation_page(run: Run, diagnosis: Diagnosis) -> str:
    """HTML text of a run and its diagnosis. Every name and number from the files is escaped."""
    from schurbench.factors.core import CAUTION

    m, s = run.matrix, run.settings
    title = f"How the iteration on {m.name} went"
    facts = [
        ("matrix", f"{m.name}, {'real' if m.is_real else 'complex'}, n = {m.n}, from {m.source}"),
        ("SHA-256 of the matrix", m.sha256),
        ("strategy", f"{s.strategy}, {s.form} form"),
        ("preparation", f"balance {s.balance}{', flipped' if s.flip else ''}"),
        ("deflation test", s.deflation if s.tol is None else f"{s.deflation}, tol {figure(s.tol)}"),
        ("outcome", run.stop.message),
        ("made with", f"schurbench {run.environment.get('schurbench', '')}"),
    ]
    forecast = "" if diagnosis.forecast is None else f"<p>{escape(diagnosis.forecast.statement)}</p>"
    return "\n".join(
        [
            "<!doctype html>",
            '<html lang="en"><head><meta charset="utf-8">',
            "<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\">",
            f"<title>{escape(title)}</title><style>{_STYLE}</style></head><body>",
            f"<h1>{escape(title)}</h1>",
            _table(facts),
            _waits(run),
            *(_finding(finding) for finding in diagnosis.findings),
            forecast,
            '<p class="quiet">Rows and steps are those of the Hessenberg matrix H of this run; magnitudes are in its '
            f"working units. {escape(CAUTION)}</p>",
            "</body></html>",
            "",
        ]
    )


def _finding(finding: Finding) -> str:
    parts = [f"<h2>{escape(finding.statement)}</h2>"]
    if finding.evidence:
        parts.append(
            _table([(name.replace("_", " "), figure(value)) for name, value in finding.evidence.items()], "figure")
        )
    place = where(finding)
    parts.append(
        f'<p class="quiet">Cause: {escape(finding.cause)}; confidence {figure(float(finding.confidence))}'
        f"{f'; seen in {place}' if place else ''}.</p>"
    )
    if finding.remedy is not None:
        parts.append(f"<p>{escape(finding.remedy.text)}</p><pre>{escape(finding.remedy.call)}</pre>")
        if finding.remedy.result is not None:
            parts.append(f"<p>Tried: {escape(finding.remedy.result.statement)}</p>")
    return "\n".join(parts)


def _table(rows: list[tuple[str, str]], kind: str = "") -> str:
    mark = f' class="{kind}"' if kind else ""
    body = "".join(f"<tr><th>{escape(name)}</th><td{mark}>{escape(value)}</td></tr>" for name, value in rows)
    return f"<table>{body}</table>"


def _waits(run: Run) -> str:
    """Sweeps waited since the last deflation, one column a step: a low hedge is healthy, a tower is a stall."""
    waits = [int(value) for value in run.waits]
    if not waits or max(waits) == 0:
        return ""
    columns = min(COLUMNS, len(waits))
    edges = [len(waits) * i // columns for i in range(columns + 1)]
    tallest = max(waits)
    width = COLUMNS / columns
    bars = []
    for i in range(columns):
        height = HEIGHT * max(waits[edges[i] : edges[i + 1]]) / tallest
        bars.append(f"M{i * width:.2f} {HEIGHT}v-{height:.2f}h{width:.2f}v{height:.2f}z")
    return (
        f'<figure><svg viewBox="0 0 {COLUMNS} {HEIGHT}" role="img" aria-label="Sweeps since the last deflation">'
        f'<path fill="#0072b2" d="{"".join(bars)}"/></svg><figcaption>Sweeps since the last deflation, at each of '
        f"{len(waits)} steps from left to right; the longest wait is {tallest}.</figcaption></figure>"
    )
