"""What the commands print, and where: data to stdout, progress and faults to stderr."""

from __future__ import annotations

import json
import shutil
import signal
import sys
import textwrap
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from types import FrameType
from typing import TYPE_CHECKING, TextIO

if TYPE_CHECKING:
    from schurbench.journal import Progress

__all__ = ["Console", "figure", "interruptible"]

#: Seconds between two progress lines where stderr is a file or a pipe; a terminal is rewritten more often.
SECONDS_BETWEEN_LINES = 10.0
SECONDS_BETWEEN_REWRITES = 0.1


class Console:
    """The two streams of a command, with a progress line that never mixes with the data."""

    def __init__(self, out: TextIO | None = None, err: TextIO | None = None) -> None:
        self._out = sys.stdout if out is None else out
        self._err = sys.stderr if err is None else err
        for stream in (self._out, self._err):
            # A terminal that cannot show a Greek letter gets a question mark, not a UnicodeEncodeError.
            reconfigure = getattr(stream, "reconfigure", None)
            if reconfigure is not None:
                reconfigure(errors="replace")
        self._tty = self._err.isatty()
        self._shown = 0
        self._last = time.monotonic()

    def say(self, text: str = "") -> None:
        """One line, or several, of data on stdout."""
        self._clear()
        print(text, file=self._out)

    def sentence(self, text: str) -> None:
        """A sentence or paragraph: wrapped in a terminal, one line where another program reads it."""
        if self._out.isatty():
            text = textwrap.fill(text, min(100, shutil.get_terminal_size().columns))
        self.say(text)

    def json(self, value: object) -> None:
        """Strict JSON on stdout: infinities become the strings "inf" and "-inf", NaN becomes null."""
        from schurbench.prepare.plain import plain

        self.say(json.dumps(plain(value), allow_nan=False, indent=2))

    def table(self, header: Sequence[str], rows: Sequence[Sequence[object]], indent: int = 2) -> None:
        """An aligned table: words to the left, numbers to the right."""
        cells = [[figure(cell) for cell in row] for row in rows]
        lines = [list(header), *cells]
        widths = [max(len(line[column]) for line in lines) for column in range(len(header))]
        words = [all(isinstance(row[column], str) for row in rows) for column in range(len(header))]
        for line in lines:
            padded = [
                cell.ljust(width) if word else cell.rjust(width)
                for cell, width, word in zip(line, widths, words, strict=True)
            ]
            self.say((" " * indent + "  ".join(padded)).rstrip())

    def note(self, text: str) -> None:
        """One line about the work on stderr."""
        self._clear()
        print(text, file=self._err, flush=True)

    def fail(self, message: str) -> None:
        """The one line that ends a command that could not be carried out."""
        line = " ".join(message.split())
        self.note(f"schurbench: {line}")

    def progress(self, n: int) -> Callable[[Progress], None]:
        """A callback for `schurbench.iterate` or `schurbench.compare` on a matrix of order `n`."""

        def show(event: Progress) -> None:
            if event.phase == "done":
                self._clear()
            else:
                entry = getattr(event, "entry", None)  # a comparison says which of its entries is at work
                prefix = "" if entry is None else f"{entry}: "
                left = "" if event.forecast is None else f", about {figure(event.forecast)} s left"
                self.status(
                    f"{prefix}{event.sweeps} sweeps, {event.deflated} of {n} rows final, "
                    f"window {event.window[0]} to {event.window[1]}, {figure(event.seconds)} s{left}"
                )

        return show

    def status(self, text: str, *, at_once: bool = False) -> None:
        """Say where the work is: one rewritten line in a terminal, an occasional line elsewhere."""
        now = time.monotonic()
        due = now - self._last >= (SECONDS_BETWEEN_REWRITES if self._tty else SECONDS_BETWEEN_LINES)
        if not (due or (at_once and self._tty)):
            return
        self._last = now
        if self._tty:
            text = text[: max(20, shutil.get_terminal_size().columns - 1)]
            self._err.write("\r" + text.ljust(self._shown))
            self._shown = len(text)
        else:
            self._err.write(text + "\n")
        self._err.flush()

    def close(self) -> None:
        """Leave both streams tidy; a closed pipe shows here at the latest."""
        self._clear()
        self._out.flush()

    def _clear(self) -> None:
        if self._shown:
            self._err.write("\r" + " " * self._shown + "\r")
            self._err.flush()
            self._shown = 0


@contextmanager
def interruptible() -> Iterator[threading.Event]:
    """An event that Ctrl-C sets, so that the work ends between two steps and can be written.

    A second Ctrl-C interrupts at once.
    """
    cancel = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield cancel
        return

    def ask_to_stop(signum: int, frame: FrameType | None) -> None:
        if cancel.is_set():
            raise KeyboardInterrupt
        cancel.set()

    previous = signal.signal(signal.SIGINT, ask_to_stop)
    try:
        yield cancel
    finally:
        signal.signal(signal.SIGINT, previous)


def figure(value: object) -> str:
    """A cell of a table: numbers to three digits, a dash where there is none."""
    from schurbench.prepare.plain import number

    if value is None:
        return "–"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return number(value)
    return str(value)
