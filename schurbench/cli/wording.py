"""What the commands say in words and tables, each from one record of the package."""

from __future__ import annotations

from typing import TYPE_CHECKING

from schurbench.cli.console import Console, figure

if TYPE_CHECKING:
    from schurbench.comparison import Comparison
    from schurbench.intake import WorkingMatrix
    from schurbench.journal import Run
    from schurbench.prepare import Profile

__all__ = ["describe_run", "facts", "introduce", "tabulate"]


def introduce(m: WorkingMatrix, console: Console) -> None:
    """Which matrix this is, and what was done to it on the way in."""
    kind = "real" if m.is_real else "complex"
    console.say(f"{m.name}: {kind}, n = {m.n}, from {m.source}.")
    for note in m.notes:
        console.sentence(note)


def facts(p: Profile) -> list[tuple[str, str]]:
    """The profile as a reader wants it; `--json` has every field by name."""
    lo, hi = p.isolated
    departure = (
        f"{figure(p.departure_lower)} to {figure(p.departure_upper)}" if p.departure is None else figure(p.departure)
    )
    return [
        ("norms (1, ∞, Frobenius)", f"{figure(p.norm_one)}, {figure(p.norm_inf)}, {figure(p.norm_frobenius)}"),
        ("largest entry", figure(p.norm_max)),
        ("structure to rounding", ", ".join(p.structures) or "none"),
        ("departure from normality (Henrici, of the norm)", departure),
        ("balancing shrinks the 1-norm", f"{figure(p.balance_factor)}-fold (balance={p.balance_choice})"),
        ("decades between row norms, column norms", f"{figure(p.row_norm_decades)}, {figure(p.column_norm_decades)}"),
        ("rows left after permuting", f"{hi - lo} of {p.n}"),
        ("strongly connected components", f"{p.components}, the largest with {max(p.component_sizes)}"),
        ("bandwidth below, above the diagonal", f"{p.lower_bandwidth}, {p.upper_bandwidth}"),
        ("entries that are not zero", f"{figure(100.0 * p.density)} %"),
        ("subnormal numbers", figure(p.subnormal)),
        ("estimated run", f"{figure(p.seconds_estimate)} s, {figure(p.memory_estimate / 2**20)} MiB"),
    ]


def describe_run(result: Run, console: Console) -> None:
    """What a run did and why it ended, in a sentence."""
    from schurbench.prepare.plain import plural

    s = result.settings
    console.sentence(
        f"{plural(result.sweeps, 'sweep')} in {figure(result.seconds)} s with strategy {s.strategy}, {s.form} form, "
        f"balance {s.balance}, deflation test {s.deflation}: {result.stop.message}."
    )


def tabulate(result: Comparison, console: Console) -> None:
    """A comparison as a table, what failed, and the outcome."""
    columns = ("entry", "sweeps", "per eigenvalue", "exceptional", "seconds", "backward error", "orthogonality", "stop")
    rows = [
        (
            entry.label,
            entry.figures.sweeps,
            entry.figures.sweeps_per_eigenvalue,
            entry.figures.exceptional_shifts,
            entry.figures.seconds,
            entry.figures.backward_error,
            entry.figures.orthogonality,
            entry.figures.stop,
        )
        for entry in result.entries
        if entry.figures is not None
    ]
    console.table(columns, rows)
    for entry in result.entries:
        if entry.error is not None:
            console.sentence(f"{entry.label} failed: {entry.error}.")
    console.sentence(result.sentence)
