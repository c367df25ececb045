"""The arguments of every command. Imports nothing but argparse, so that help and usage errors come at once."""

from __future__ import annotations

import argparse
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import NoReturn

from schurbench import __version__

__all__ = ["COMMANDS", "SETTINGS", "build_parser", "parse"]

#: Every command with the line that `schurbench --help` shows for it.
COMMANDS = {
    "profile": "what kind of matrix a file holds",
    "run": "iterate and save every recorded sweep",
    "explain": "why the iteration was slow or failed, with evidence and remedies",
    "compare": "several strategies and settings side by side on one matrix",
    "export": "certified Schur factors with a manifest",
    "check": "whether saved factors still are what their manifest says",
    "twin": "whether a job comes out differently on another kind of machine",
    "survey": "many matrices, one line each",
    "warm": "compile the kernels ahead of the first run",
    "open": "JupyterLab with the workbench on a matrix",
    "demo": "the whole job in the terminal, on the demonstration plant",
}

#: Options that decide what a run does; None where the user left them to `schurbench.iterate`.
SETTINGS = ("strategy", "shifts", "form", "balance", "flip", "deflation", "tol", "exceptional", "limit")


class _OneLineParser(argparse.ArgumentParser):
    """argparse, but a usage error is one line on stderr and nothing else."""

    def error(self, message: str) -> NoReturn:
        line = " ".join(message.split())
        self.exit(2, f"schurbench: {line}; see `{self.prog} --help`.\n")


def parse(argv: Sequence[str]) -> argparse.Namespace:
    """Arguments of one command; ``SystemExit`` after a usage error, the help or the version."""
    return build_parser().parse_args(argv)


def build_parser() -> argparse.ArgumentParser:
    """The parser with all its commands."""
    parser = _OneLineParser(
        prog="schurbench",
        description="Schur decompositions that can be watched, explained, compared and handed on.",
        epilog="Exit codes: 0 done; 1 unexpected fault; 2 bad input or usage; 3 run or export did not converge, "
        "partial result written; 130 interrupted.",
        allow_abbrev=False,
    )
    parser.add_argument("--version", action="version", version=f"schurbench {__version__}")
    commands = parser.add_subparsers(dest="command", required=True, metavar="COMMAND", title="commands")

    def add(name: str, *parents: _OneLineParser) -> argparse.ArgumentParser:
        text = COMMANDS[name]
        return commands.add_parser(
            name, help=text, description=text[0].upper() + text[1:] + ".", parents=parents, allow_abbrev=False
        )

    source, settings, json, replace = _source_options(), _setting_options(), _json_option(), _replace_option()

    add("profile", _positional("FILE", "matrix file"), source, json)

    run = add("run", _positional("FILE|RUN", "matrix file, or a run to go on with"), source, settings, json, replace)
    run.add_argument("-o", "--out", metavar="RUN", type=Path, help="where the run is saved (.npz)")
    run.add_argument(
        "--store", metavar="DIR", type=Path, help="record the run in a directory as it goes, so that nothing is lost"
    )
    run.add_argument("--no-vectors", action="store_true", help="do not accumulate Z: faster, but without factors")
    run.add_argument("--stop-when-stalled", action="store_true", help="stop as soon as nothing moves any more")

    explain = add("explain", _positional("FILE|RUN", "matrix file or saved run"), source, settings, json, replace)
    explain.add_argument("--html", metavar="OUT", type=Path, help="also write the explanation as one page")
    explain.add_argument("--try", dest="try_remedies", action="store_true", help="run each remedy and compare")

    compare = add("compare", _positional("FILE", "matrix file"), source, _setting_options(several=True), json)
    compare.add_argument(
        "--with",
        dest="entries",
        metavar="SETTINGS",
        action="append",
        type=_entry,
        help="one entry, such as 'francis' or 'francis balance=scale flip=yes'; repeat for more "
        "(other options apply to every entry)",
    )

    export = add("export", _positional("FILE|RUN", "matrix file or saved run"), source, settings, json, replace)
    export.add_argument(
        "-o",
        "--out",
        metavar="OUT",
        type=Path,
        required=True,
        help="where the factors go: .mat, .npz, .h5, or .mtx (two files ending in _T and _Z); a manifest stands beside",
    )
    export.add_argument(
        "--reorder",
        metavar="REGION",
        help="left-half-plane or unit-disc: these eigenvalues first (pairs stay together)",
    )

    check = add("check", _positional("MANIFEST", "the .manifest.json file beside saved factors"), json)
    check.add_argument("--input", metavar="FILE", type=Path, help="the input matrix, where it has moved since")
    check.add_argument("--key", metavar="NAME", help="which array, where the input holds several")
    add("twin", _positional("FILE", "matrix file"), source, settings, json)

    survey = add(
        "survey",
        _positional("SOURCE", "folder or pattern of matrix files, or a file with several"),
        settings,
        json,
        replace,
    )
    survey.add_argument(
        "-o", "--out", metavar="OUT", type=Path, required=True, help="where the table goes (.csv or .json)"
    )

    add("warm", json)

    workbench = add(
        "open", _positional("FILE", "matrix file; without it, the demonstration plant", optional=True), source
    )
    workbench.add_argument("--page", action="store_true", help="a plain page without notebook cells")
    workbench.add_argument("--no-browser", action="store_true", help="only print the address")

    demo = add("demo", replace)
    demo.add_argument(
        "-o", "--out", metavar="FOLDER", type=Path, default=Path("schurbench-demo"), help="new folder for the results"
    )
    demo.add_argument("-n", metavar="N", type=int, default=None, help="order of the plant, 20 to 1000")
    return parser


def _positional(name: str, text: str, optional: bool = False) -> _OneLineParser:
    parent = _OneLineParser(add_help=False)
    parent.add_argument("file", metavar=name, type=Path, nargs="?" if optional else None, help=text)
    return parent


def _source_options() -> _OneLineParser:
    parent = _OneLineParser(add_help=False)
    group = parent.add_argument_group("the matrix")
    group.add_argument("--key", metavar="NAME", help="which array, where the file holds several")
    group.add_argument("--labels", metavar="FILE", type=Path, help="text file with the name of one state a line")
    return parent


def _setting_options(several: bool = False) -> _OneLineParser:
    parent = _OneLineParser(add_help=False)
    group = parent.add_argument_group("settings")
    group.add_argument(
        "--strategy",
        metavar="NAME",
        help="zero, rayleigh, wilkinson, francis, multishift, given or auto"
        + ("; several with commas between" if several else ""),
    )
    group.add_argument(
        "--shifts",
        metavar="LIST",
        type=_shifts,
        help="for given: shifts such as --shifts=-1.5,2+3j,2-3j (commas between)",
    )
    group.add_argument("--form", metavar="FORM", help="real, complex or auto")
    group.add_argument("--balance", metavar="HOW", help="none, permute, scale or both")
    group.add_argument("--flip", action="store_true", default=None, help="reverse rows and columns first")
    group.add_argument("--deflation", metavar="TEST", help="neighbour, ahues-tisseur or norm")
    group.add_argument("--tol", metavar="LEVEL", type=float, help="absolute deflation level in the working units of H")
    group.add_argument(
        "--exceptional",
        metavar="SWEEPS",
        type=int,
        help="sweeps without deflation before an exceptional shift; 0 for never",
    )
    group.add_argument("--limit", metavar="SWEEPS", type=int, help="largest number of sweeps")
    return parent


def _json_option() -> _OneLineParser:
    parent = _OneLineParser(add_help=False)
    parent.add_argument("--json", action="store_true", help="print JSON instead of sentences")
    return parent


def _replace_option() -> _OneLineParser:
    parent = _OneLineParser(add_help=False)
    parent.add_argument("--replace", action="store_true", help="overwrite what is already there")
    return parent


def _entry(text: str) -> dict[str, object]:
    """Keywords of `schurbench.iterate` from words such as ``francis balance=scale flip=yes``."""
    keywords: dict[str, object] = {}
    for word in text.split():
        name, equals, value = word.partition("=")
        if not equals:
            name, value = "strategy", word
        if name not in SETTINGS:
            raise argparse.ArgumentTypeError(
                f"there is no setting {name!r} in {text!r}; known are {', '.join(SETTINGS)}"
            )
        if name in keywords:
            raise argparse.ArgumentTypeError(f"{text!r} sets {name} twice; give it once")
        try:
            keywords[name] = _CONVERTERS.get(name, str)(value)
        except (KeyError, ValueError):
            raise argparse.ArgumentTypeError(f"{value!r} is no value for {name} in {text!r}") from None
    if not keywords:
        raise argparse.ArgumentTypeError("an entry is empty; give at least a strategy")
    return keywords


def _shifts(text: str) -> list[complex]:
    try:
        return [complex(part.strip().replace("i", "j")) for part in text.split(",")]
    except ValueError:
        raise argparse.ArgumentTypeError(
            f"{text!r} is not a list of numbers with commas between, such as -1.5,2+3j"
        ) from None


_CONVERTERS: dict[str, Callable[[str], object]] = {
    "shifts": _shifts,
    "flip": lambda text: {"yes": True, "no": False}[text],
    "tol": float,
    "exceptional": int,
    "limit": int,
}
