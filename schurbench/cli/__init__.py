"""The command line: the public names of the package, one command each.

Data go to standard output and progress to standard error, so that a command can stand in a pipe. Nothing heavier
than argparse is imported before the arguments are known to be right.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Sequence

from schurbench.cli.console import Console
from schurbench.cli.options import parse
from schurbench.errors import SchurbenchError

__all__ = ["main"]

#: Exit codes, as README.md lists them.
DONE, FAULT, BAD_INPUT, INTERRUPTED = 0, 1, 2, 130

#: What a shell reports for a program whose reader went away (128 + SIGPIPE).
READER_GONE = 141

#: Set to 1 to see the stack of an unexpected fault instead of one line.
DEBUG_VARIABLE = "SCHURBENCH_DEBUG"


def main(argv: Sequence[str] | None = None) -> int:
    """Carry out one command.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments without the program's name; those of the process when not given.

    Returns
    -------
    int
        The exit code: 0 done; 1 an unexpected fault; 2 bad input or usage; 3 no convergence, partial result
        written; 130 interrupted.
    """
    console = Console()
    try:
        arguments = parse(sys.argv[1:] if argv is None else argv)
    except SystemExit as stop:  # argparse has printed its line, the help or the version
        return int(stop.code or 0)
    try:
        code = _carry_out(arguments, console)
        console.close()
        return code
    except BrokenPipeError:
        # The interpreter flushes stdout once more on its way out; that must not find the broken pipe again.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return READER_GONE


def _carry_out(arguments: argparse.Namespace, console: Console) -> int:
    from schurbench.cli import commands

    try:
        return commands.carry_out(arguments, console)
    except SchurbenchError as error:
        console.fail(str(error))
        return BAD_INPUT
    except KeyboardInterrupt:
        console.fail("interrupted; start the command again to finish it.")
        return INTERRUPTED
    except BrokenPipeError:
        raise
    except OSError as error:
        if os.environ.get(DEBUG_VARIABLE):
            raise
        where = f"{error.filename}: " if error.filename else ""
        console.fail(f"{where}{error.strerror or error}; check the path, its permissions and the space left.")
        return BAD_INPUT
    except MemoryError as error:
        console.fail(f"out of memory ({error}); use a smaller matrix or a machine with more memory.")
        return FAULT
    except Exception as error:
        if os.environ.get(DEBUG_VARIABLE):
            raise
        console.fail(
            f"unexpected {type(error).__name__}: {error}; set {DEBUG_VARIABLE}=1 to see where, and please report it."
        )
        return FAULT
