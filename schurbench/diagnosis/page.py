"""A diagnosis as a page for a ticket: plain text, or HTML that stands alone."""

from __future__ import annotations

import shlex
from collections.abc import Iterator
from html import escape
from typing import TYPE_CHECKING, Any

from schurbench.diagnosis.case import Case
from schurbench.diagnosis.finding import Diagnosis, Finding, SettingsRemedy
from schurbench.diagnosis.plots import spectrum_drawing, waiting_drawing
from schurbench.prepare.plain import number

if TYPE_CHECKING:
    from schurbench.journal import Run

__all__ = ["CAUTION", "html_page", "page"]

CAUTION = (
    "A diagnosis explains an iteration; it does not vouch for an eigenvalue. Where stability, damping or another "
    "safety margin depends on one, have it confirmed by an independent method and decided by the engineer licensed to "
    "do so."
)

_STYLE = (
    "body{font:16px/1.5 system-ui,sans-serif;color:#1b1b1b;max-width:48rem;margin:2rem auto;padding:0 1rem}"
    "h1{font-size:1.4rem}h2{font-size:1.1rem;margin-top:2rem}svg{width:100%;height:auto}"
    "table{border-collapse:collapse}th,td{text-align:left;vertical-align:top;padding:.1rem 1.2rem .1rem 0;"
    "font-weight:normal}th{color:#555}td{overflow-wrap:anywhere}"
    "pre{background:#f3f3f3;padding:.5rem .7rem;white-space:pre-wrap;overflow-wrap:anywhere}.quiet{color:#555}"
)


def page(run: Run, diagnosis: Diagnosis) -> str:
    """Plain text: matrix, settings, outcome, findings with evidence and remedies, versions and hashes.

    Parameters
    ----------
    run : Run
    diagnosis : Diagnosis
        Of this run.
    """
    lines = [_title(run), "=" * len(_title(run)), ""]
    lines += [f"{name}: {value}" for name, value in _facts(run)]
    lines += ["", *_remarks(run)]
    for place, finding in enumerate(diagnosis.findings, 1):
        lines += [
            "",
            f"{place}. {finding.statement}",
            f"   cause: {finding.cause}, confidence {finding.confidence:.2f}",
        ]
        lines += [f"   {name}: {value}" for name, value in _evidence(finding)]
        if finding.remedy is not None:
            lines += ["", f"   What to try: {finding.remedy.text}"]
            lines += [f"       {line}" for block in _calls(run, finding) for line in block.splitlines()]
            if finding.remedy.result is not None:
                lines.append(f"   Tried: {finding.remedy.result.statement}")
    if diagnosis.forecast is not None:
        lines += ["", diagnosis.forecast.statement]
    lines += ["", CAUTION, ""]
    lines += [f"{name}: {value}" for name, value in _provenance(run)]
    return "\n".join(lines) + "\n"


def html_page(run: Run, diagnosis: Diagnosis) -> str:
    """HTML with two drawings; no script, no font, no picture, nothing fetched. Every value is escaped."""
    case = Case(run)
    parts = [
        '<!doctype html><html lang="en"><head><meta charset="utf-8">',
        "<meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\">",
        f"<title>{escape(_title(run))}</title><style>{_STYLE}</style></head><body><h1>{escape(_title(run))}</h1>",
        _table(_facts(run)),
        *(f"<p>{escape(sentence)}</p>" for sentence in _remarks(run)),
        waiting_drawing(case),
        '<p class="quiet">Sweeps waited since the last deflation; the shaded band is healthy, triangles mark '
        "exceptional shifts.</p>",
    ]
    for place, finding in enumerate(diagnosis.findings, 1):
        parts.append(f"<h2>{place}. {escape(finding.cause)}</h2><p>{escape(finding.statement)}</p>")
        parts.append(_table([*_evidence(finding), ("confidence", f"{finding.confidence:.2f}")]))
        if finding.remedy is not None:
            parts.append(f"<p>What to try: {escape(finding.remedy.text)}</p>")
            parts += [f"<pre>{escape(block)}</pre>" for block in _calls(run, finding)]
            if finding.remedy.result is not None:
                parts.append(f"<p>Tried: {escape(finding.remedy.result.statement)}</p>")
    if diagnosis.forecast is not None:
        parts.append(f"<p>{escape(diagnosis.forecast.statement)}</p>")
    parts.append(spectrum_drawing(case))
    parts.append(
        '<p class="quiet">Eigenvalues in the units of the matrix, real part to the right, imaginary part upward. '
        "Circles converged, crosses belong to rows still unfinished.</p>"
    )
    parts.append(f"<p>{escape(CAUTION)}</p>{_table(list(_provenance(run)))}</body></html>")
    return "\n".join(part for part in parts if part)


def _title(run: Run) -> str:
    return f"Diagnosis of {_line(run.matrix.name)}"


def _line(text: str) -> str:
    """One line of printable text: names come from files and may hold anything."""
    return " ".join("".join(c if c.isprintable() else " " for c in text).split())


def _facts(run: Run) -> list[tuple[str, str]]:
    m, s = run.matrix, run.settings
    kind = "real" if m.is_real else "complex"
    norm = float(run.to_matrix_units(run.norm))
    settings = [
        f"strategy {_line(s.strategy)}",
        f"{s.form} form",
        f"balance {s.balance}",
        f"deflation test {s.deflation}",
    ]
    settings += ["flipped"] if s.flip else []
    settings += [f"tol {number(s.tol)}"] if s.tol is not None else []
    settings.append(f"exceptional shifts after {s.exceptional} sweeps" if s.exceptional else "no exceptional shifts")
    settings.append(f"limit {s.limit} sweeps")
    return [
        ("Matrix", f"{_line(m.name)}, {kind}, n = {m.n}, Frobenius norm {number(norm)}, from {_line(m.source)}"),
        ("Settings", ", ".join(settings)),
        ("Outcome", f"{run.stop.message}; {number(run.seconds)} s"),
    ]


def _remarks(run: Run) -> tuple[str, ...]:
    from schurbench.prepare.profile import profile_of

    return tuple(_line(remark) for remark in profile_of(run.matrix, exact_departure=False).remarks)


def _evidence(finding: Finding) -> list[tuple[str, str]]:
    return [(name.replace("_", " "), number(float(value))) for name, value in finding.evidence.items()]


def _calls(run: Run, finding: Finding) -> Iterator[str]:
    """The remedy as Python that loads the matrix first, and as a command line where there is a file and one exists."""
    remedy = finding.remedy
    if remedy is None:
        return
    m = run.matrix
    from_file = m.file_sha256 is not None
    where = f"{m.source!r}" if from_file else "..."
    key = f", key={m.key!r}" if m.key is not None else ""
    comment = "" if from_file else f"  # the array this run was made on, SHA-256 {m.sha256[:12]}…"
    lines = ["import schurbench", f"matrix = schurbench.load({where}{key}){comment}"]
    if not isinstance(remedy, SettingsRemedy):
        lines[1] = lines[1].replace(f"{where}{key})", f"{where}{key}).array", 1)
    yield "\n".join([*lines, remedy.call])
    if from_file and isinstance(remedy, SettingsRemedy):
        words = ["schurbench", "run", m.source, "-o", "remedy.npz"]
        words += ["--key", m.key] if m.key is not None else []
        yield " ".join([*(shlex.quote(word) for word in words), *_options(remedy.settings)])


def _options(settings: dict[str, Any]) -> Iterator[str]:
    for name, value in settings.items():
        if name == "shifts":
            yield shlex.quote("--shifts=" + ",".join(str(v).strip("()").replace("j", "i") for v in value))
        elif value is True:
            yield f"--{name}"
        elif value is not None and value is not False:
            yield f"--{name}={shlex.quote(str(value))}"


def _provenance(run: Run) -> Iterator[tuple[str, str]]:
    yield "SHA-256 of the matrix", run.matrix.sha256
    if run.matrix.file_sha256 is not None:
        yield "SHA-256 of the file", run.matrix.file_sha256
    for name, value in run.environment.items():
        yield name.replace("_", " "), _line(_words(value))


def _words(value: Any) -> str:
    """A nested record of the environment in words."""
    if isinstance(value, dict):
        return ", ".join(f"{name} {_words(item)}" for name, item in value.items())
    if isinstance(value, (list, tuple)):
        return "; ".join(_words(item) for item in value)
    return str(value)


def _table(rows: list[tuple[str, str]]) -> str:
    if not rows:
        return ""
    body = "".join(f"<tr><th>{escape(name)}</th><td>{escape(value)}</td></tr>" for name, value in rows)
    return f"<table>{body}</table>"
