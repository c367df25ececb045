"""Working behind the page's back: one long job at a time, and a painter that skips what was overtaken. No widgets."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from typing import Any

from schurbench.errors import SchurbenchError

__all__ = ["Job", "Latest"]


class Job:
    """One piece of work at a time, in a thread of its own; a failure is kept for whoever waits.

    Parameters
    ----------
    failed : callable
        Called with the exception when the work raises one.
    ended : callable
        Called after the work, whatever came of it.
    """

    def __init__(self, failed: Callable[[Exception], None], ended: Callable[[], None]) -> None:
        self.cancelled = threading.Event()
        self._failed = failed
        self._ended = ended
        self._lock = threading.RLock()
        self._thread: threading.Thread | None = None
        self._failure: Exception | None = None

    def refuse_second(self) -> None:
        """Raise unless other work may begin.

        Raises
        ------
        SchurbenchError
            Work is under way, and the caller is no part of it.
        """
        if self._thread is not None and self._thread.is_alive() and self._thread is not threading.current_thread():
            raise SchurbenchError("work is under way; cancel it or wait for it first")

    def begin(self, work: Callable[[], None], announce: Callable[[], None]) -> None:
        """Announce the work and start it.

        Raises
        ------
        SchurbenchError
            Other work is under way.
        """
        with self._lock:
            self.refuse_second()
            self.cancelled = threading.Event()
            self._failure = None
            announce()
            self._thread = threading.Thread(
                target=self._carry_out, args=(work,), name="schurbench workbench", daemon=True
            )
            self._thread.start()

    def wait(self, until: float | None) -> None:
        """Wait for the work, but no longer than the monotonic clock shows ``until``.

        Raises
        ------
        TimeoutError
        """
        thread = self._thread
        if thread is None or thread is threading.current_thread():
            return
        thread.join(_left(until))
        if thread.is_alive():
            raise TimeoutError("work is still under way")

    def raise_failure(self) -> None:
        """Raise what the work raised, once."""
        failure, self._failure = self._failure, None
        if failure is not None:
            raise failure

    def _carry_out(self, work: Callable[[], None]) -> None:
        try:
            work()
        except Exception as failure:
            self._failure = failure
            self._failed(failure)
        finally:
            self._ended()


class Latest:
    """Carries out the most recent request in a thread of its own and drops those that were overtaken.

    Parameters
    ----------
    prepare : callable
        Does the slow part of a request and returns a call that finishes it.
    failed : callable
        Called with what either of them raised.
    """

    def __init__(self, prepare: Callable[[Any], Callable[[], None]], failed: Callable[[Exception], None]) -> None:
        self._prepare = prepare
        self._failed = failed
        self._condition = threading.Condition()
        self._pending: Any = None
        self._running = False

    def request(self, what: Any) -> None:
        with self._condition:
            self._pending = what
            if not self._running:
                self._running = True
                threading.Thread(target=self._loop, name="schurbench painter", daemon=True).start()

    def wait(self, until: float | None) -> None:
        """Wait until nothing is pending, but no longer than the monotonic clock shows ``until``.

        Raises
        ------
        TimeoutError
        """
        with self._condition:
            if not self._condition.wait_for(lambda: not self._running, _left(until)):
                raise TimeoutError("the panels are still being drawn")

    def _loop(self) -> None:
        while True:
            with self._condition:
                if self._pending is None:
                    self._running = False
                    self._condition.notify_all()
                    return
                what, self._pending = self._pending, None
            try:
                self._prepare(what)()
            except Exception as failure:
                self._failed(failure)


def _left(until: float | None) -> float | None:
    return None if until is None else max(0.0, until - time.monotonic())
