"""One function a command: arguments in, public names called, exit code out."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

from schurbench.cli.console import Console, interruptible
from schurbench.cli.options import SETTINGS
from schurbench.cli.wording import describe_run, facts, introduce, tabulate
from schurbench.errors import InputError, SchurbenchError, SettingsError

if TYPE_CHECKING:
    from threading import Event

    from schurbench.factors import Factors
    from schurbench.intake import WorkingMatrix
    from schurbench.journal import Run

__all__ = ["carry_out"]

DONE, BAD_INPUT, NOT_CONVERGED, INTERRUPTED = 0, 2, 3, 130


def carry_out(args: argparse.Namespace, console: Console) -> int:
    """The command that the arguments name; returns its exit code."""
    return _COMMANDS[args.command](args, console)


def profile(args: argparse.Namespace, console: Console) -> int:
    """What kind of matrix FILE holds."""
    import schurbench as sb

    m = _load(args)
    p = sb.profile(m)
    if args.json:
        console.json(p.to_dict())
        return DONE
    introduce(m, console)
    for remark in p.remarks or ("Nothing stands out.",):
        console.sentence(remark)
    console.say()
    console.table(("property", "value"), facts(p))
    return DONE


def run(args: argparse.Namespace, console: Console) -> int:
    """Iterate on FILE, or go on with RUN, and save the run."""
    going_on = _is_run(args.file)
    if args.out is None and args.store is None and not args.file.is_dir():
        raise SettingsError("nothing says where the run is to be kept; give -o RUN, or --store DIR for a directory")
    if args.out is not None:
        _require_free([args.out], args.replace, args.file)
    with interruptible() as cancel:  # around the saving too: a late Ctrl-C must not cost the run
        if going_on:
            result = _go_on(args, console, cancel)
        else:
            result = _iterate(
                _load(args),
                args,
                console,
                cancel,
                accumulate=not args.no_vectors,
                stop_when_stalled=args.stop_when_stalled,
                store=args.store,
            )
        if args.out is not None:
            result.save(args.out, replace=args.replace)
    if args.json:
        console.json(result.to_dict())
    else:
        introduce(result.matrix, console)
        describe_run(result, console)
        console.say(f"Saved to {' and '.join(str(place) for place in (args.out, result.store) if place is not None)}.")
    return _code(result)


def _go_on(args: argparse.Namespace, console: Console, cancel: Event) -> Run:
    """The run in RUN, continued from where it stopped."""
    import schurbench as sb

    fixed = [name for name in ("key", "labels", *SETTINGS) if name != "limit"]
    unused = [f"--{name}" for name in fixed if getattr(args, name, None) is not None]
    unused += ["--no-vectors"] if args.no_vectors else []
    if unused:
        raise SettingsError(f"{args.file} is a run, which {', '.join(unused)} cannot change; only --limit can")
    earlier = sb.open_run(args.file)
    return earlier.resume(
        limit=args.limit,
        stop_when_stalled=args.stop_when_stalled or None,
        store=args.store,
        progress=console.progress(earlier.n),
        cancel=cancel,
    )


def explain(args: argparse.Namespace, console: Console) -> int:
    """Why the iteration on FILE, or in RUN, went as it did."""
    import schurbench as sb
    from schurbench.diagnosis.page import html_page, page

    if args.html is not None:
        _require_free([args.html], args.replace, args.file)
    with interruptible() as cancel:
        result = _run_of(args, console, cancel)
    diagnosis = sb.diagnose(result, try_remedies=args.try_remedies)
    if args.html is not None:
        args.html.write_text(html_page(result, diagnosis), encoding="utf-8")
    if args.json:
        console.json(diagnosis.to_dict())
    else:
        console.say(page(result, diagnosis).rstrip())
        if args.html is not None:
            console.say(f"\nWritten to {args.html}.")
    return INTERRUPTED if result.stop.reason == "cancelled" and not _is_run(args.file) else DONE


def compare(args: argparse.Namespace, console: Console) -> int:
    """Several settings side by side on FILE."""
    import schurbench as sb

    m = _load(args)
    common = _settings(args)
    named = str(common.pop("strategy", "")).replace(",", " ").split()
    entries = [*named, *(args.entries or [])] or None
    with interruptible() as cancel:
        result = sb.compare(m, entries, progress=console.progress(m.n), cancel=cancel, **common)
    if all(entry.run is None for entry in result.entries) and not cancel.is_set():
        raise SettingsError(f"no entry could be run: {result.entries[0].error}")
    if args.json:
        console.json(result.to_dict())
    else:
        introduce(m, console)
        tabulate(result, console)
    return INTERRUPTED if cancel.is_set() else DONE


def export(args: argparse.Namespace, console: Console) -> int:
    """Certified factors of FILE, or of the matrix in RUN."""
    from schurbench.factors.reorder import REGIONS

    _require_free(_files_of(args.out), args.replace, args.file)
    if args.reorder is not None and args.reorder not in REGIONS:
        raise SettingsError(f"there is no region {args.reorder!r} to bring first; choose {' or '.join(REGIONS)}")
    with interruptible() as cancel:
        result = _run_of(args, console, cancel)
        if not result.settings.accumulate:
            raise SettingsError(f"{args.file} was run with --no-vectors and has no Z; run it again without that option")
        factors: Factors = result.factors()
        if args.reorder is not None and factors.complete:
            factors = factors.reorder(args.reorder)
        written = factors.save(args.out, replace=args.replace)
    certificate = factors.certificate()
    if args.json:
        console.json({"files": [str(path) for path in written], **factors.to_dict()})
    else:
        introduce(result.matrix, console)
        describe_run(result, console)
        for sentence in (certificate.sentence, factors.trust, *factors.notes):
            console.sentence(sentence)
        if args.reorder is not None and not factors.complete:
            console.sentence("T is not finished, so its eigenvalues were left in the order in which they were found.")
        console.say(f"Saved {', '.join(str(path) for path in written)}.")
    return _code(result)


def check(args: argparse.Namespace, console: Console) -> int:
    """Whether saved factors still are what MANIFEST says."""
    import schurbench as sb
    from schurbench.factors import check_manifest

    matrix = sb.load(args.input, key=args.key) if args.input is not None else None
    report = check_manifest(args.file, matrix)
    if args.json:
        console.json(report.to_dict())
    else:
        for line in (*report.checked, *report.unchecked):
            console.say(line)
    if not report.passed:
        console.fail(" ".join(report.failures))
        return BAD_INPUT
    if not args.json:
        console.say("Passed." if not report.unchecked else "Passed as far as it could be checked.")
    return DONE


def twin(args: argparse.Namespace, console: Console) -> int:
    """Whether the job on FILE comes out differently on another kind of machine."""
    import schurbench as sb

    m = _load(args)
    console.note("Running the job in two fresh processes; the first time, kernels are compiled for both.")
    with interruptible() as cancel:
        try:
            result = sb.twin(m, cancel=cancel, **_settings(args))
        except SchurbenchError:
            if cancel.is_set():
                raise KeyboardInterrupt from None
            raise
    if args.json:
        console.json(result.to_dict())
        return DONE
    introduce(m, console)
    rows = [
        (name, " ".join(f"{key}={value}" for key, value in job.conditions.items()), job.sweeps, job.seconds, job.stop)
        for name, job in (("first", result.first), ("second", result.second))
    ]
    console.table(("job", "conditions", "sweeps", "seconds", "stop"), rows)
    console.sentence(result.sentence)
    return DONE


def survey(args: argparse.Namespace, console: Console) -> int:
    """The same settings on every matrix of SOURCE."""
    import schurbench as sb

    _require_free([args.out], args.replace, args.file)

    def show(name: str, place: int, count: int) -> None:
        console.status(f"matrix {place + 1} of {count}: {name}")

    with interruptible() as cancel:
        result = sb.survey(
            args.file, out=args.out, replace=args.replace, progress=show, cancel=cancel, **_settings(args)
        )
    if args.json:
        console.json(result.to_dict())
    else:
        rows = [
            (
                row.name,
                row.n,
                row.figures.sweeps,
                row.figures.stop,
                row.figures.backward_error,
                row.condition,
                row.cause,
            )
            for row in result.rows
            if row.figures is not None
        ]
        console.table(("matrix", "n", "sweeps", "stop", "backward error", "worst condition", "first finding"), rows)
        for row in result.failures:
            console.sentence(f"{row.name} failed: {row.error}.")
        console.sentence(result.sentence)
        console.say(f"Saved to {args.out}.")
    return INTERRUPTED if cancel.is_set() else DONE


def warm(args: argparse.Namespace, console: Console) -> int:
    """Compile the kernels ahead of the first run."""
    console.note("Compiling the kernels; this takes up to a minute the first time.")
    from schurbench import kernels

    seconds = kernels.warm()
    where = kernels.cache_directory()
    if args.json:
        console.json({"seconds": seconds, "cache": where})
        return DONE
    console.table(("kernel", "seconds"), list(seconds.items()))
    if where is None:
        console.say("No directory could be written for them, so they are compiled again in every process.")
    else:
        console.say(f"Kept in {where}.")
    return DONE


def open_workbench(args: argparse.Namespace, console: Console) -> int:
    """JupyterLab with the workbench."""
    from schurbench.panels import serve

    code: int = serve.open_workbench(
        args.file, key=args.key, labels=args.labels, page=args.page, browser=not args.no_browser
    )
    return code


def demo(args: argparse.Namespace, console: Console) -> int:
    """The whole job on the demonstration plant."""
    from schurbench.cli.demo import tell

    return tell(args.out, args.n, args.replace, console)


def _load(args: argparse.Namespace) -> WorkingMatrix:
    import schurbench as sb

    return sb.load(args.file, key=args.key, labels=args.labels)


def _settings(args: argparse.Namespace) -> dict[str, Any]:
    """Keywords of `schurbench.iterate` that the user gave."""
    given = {name: getattr(args, name) for name in SETTINGS if getattr(args, name, None) is not None}
    if "shifts" in given:
        given.setdefault("strategy", "given")
    elif given.get("strategy") == "given":
        raise SettingsError("strategy 'given' needs its list of shifts; add for example --shifts=-1.5,2+3j,2-3j")
    return given


def _is_run(path: Path) -> bool:
    from schurbench.journal import is_run

    return path.exists() and is_run(path)


def _run_of(args: argparse.Namespace, console: Console, cancel: Event) -> Run:
    """The run saved in FILE|RUN, or a new one on the matrix it holds."""
    import schurbench as sb

    if not _is_run(args.file):
        return _iterate(_load(args), args, console, cancel)
    unused = [f"--{name}" for name in ("key", "labels", *SETTINGS) if getattr(args, name, None) is not None]
    if unused:
        raise SettingsError(
            f"{args.file} is a saved run, which {', '.join(unused)} cannot change; run the matrix again"
        )
    return sb.open_run(args.file)


def _iterate(m: WorkingMatrix, args: argparse.Namespace, console: Console, cancel: Event, **further: Any) -> Run:
    import schurbench as sb

    console.status("starting; the first run of all compiles its kernels, which takes up to a minute", at_once=True)
    return sb.iterate(m, progress=console.progress(m.n), cancel=cancel, **_settings(args), **further)


def _code(result: Run) -> int:
    if result.stop.reason == "cancelled":
        return INTERRUPTED
    return DONE if result.converged else NOT_CONVERGED


def _require_free(paths: list[Path], replace: bool, source: Path | None = None) -> None:
    """Refuse to touch what is already there, before any work is done."""
    for path in paths:
        if not path.parent.is_dir():
            raise InputError(f"{path.parent} is not a folder, so {path.name} cannot be written there; make it first")
        if path.is_dir():
            raise InputError(f"{path} is a folder; give the name of a file")
        if source is not None and path.exists() and source.exists() and path.samefile(source):
            raise InputError(f"{path} is the input itself; give another name for the output")
        if path.exists() and not replace:
            raise InputError(f"{path} already exists; choose another name, or add --replace to overwrite it")


def _files_of(out: Path) -> list[Path]:
    """Every file that saving factors as `out` writes."""
    from schurbench.factors.writers import FORMATS, MANIFEST_SUFFIX

    layout = FORMATS.get(out.suffix.lower())
    if layout is None:
        raise InputError(f"factors cannot be saved as {out.name!r}; end the name in one of {', '.join(FORMATS)}")
    return [*(out.with_name(f"{out.stem}{part}{out.suffix}") for part in layout.parts), Path(f"{out}{MANIFEST_SUFFIX}")]


_COMMANDS: dict[str, Callable[[argparse.Namespace, Console], int]] = {
    "profile": profile,
    "run": run,
    "explain": explain,
    "compare": compare,
    "export": export,
    "check": check,
    "twin": twin,
    "survey": survey,
    "warm": warm,
    "open": open_workbench,
    "demo": demo,
}
