"""Turns the system's ways to end a program into a stop: interrupt, quit, termination, hang-up, a closed console.

The handler sends the stop itself, past every queue, and the main flow learns of it at the next pump (StoppedByUser), so
that the stop is confirmed and written down. A second signal within a second cuts the power to the motor at once.
"""

from __future__ import annotations

import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from types import FrameType, TracebackType
from typing import Protocol, Self

AGAIN_WITHIN_S = 1.0
"""A second signal within this time means: cut at once."""
CONSOLE_WAIT_S = 4.0
"""Windows ends a closed console's program after about 5 s (from memory); the handler keeps it alive for so long."""

_NAMES = ("SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT", "SIGBREAK")
_CONSOLE_EVENTS = (2, 5, 6)  # CTRL_CLOSE_EVENT, CTRL_LOGOFF_EVENT, CTRL_SHUTDOWN_EVENT


@contextmanager
def interrupted_by_signals() -> Iterator[None]:
    """Where nothing is driven yet, or any more: every way to end the program is a KeyboardInterrupt, so that what is
    to be written down or closed still is. `StopOnSignals` takes its place while it is entered.

    A hang-up that was ignored before stays so. Outside the main thread it does nothing.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = {number: signal.signal(number, signal.default_int_handler) for number in _numbers()}
    try:
        yield
    finally:
        _put_back(before)


def _numbers() -> list[int]:
    """The signals that this system has and that are not to be left alone."""
    found = ((name, getattr(signal, name, None)) for name in _NAMES)
    return [
        number
        for name, number in found
        if number is not None and not (name == "SIGHUP" and signal.getsignal(number) is signal.SIG_IGN)
    ]


def _put_back(before: Mapping[int, signal._HANDLER]) -> None:
    for number, handler in before.items():
        # None: the earlier handler was not set from Python and cannot be put back; the default is the next best.
        signal.signal(number, signal.SIG_DFL if handler is None else handler)


class Panics(Protocol):
    """What can be stopped from anywhere."""

    def panic(self, category: int) -> bool:
        """Send a stop of this category at once."""
        ...


class StopOnSignals:
    """While it is entered, signals stop `session`; leaving it puts the earlier handlers back.

    A hang-up that was ignored before stays so: who begins the program with `nohup` (POSIX) wants it to outlast the
    terminal. Enter it in the main thread (ValueError elsewhere). `now` is the clock for a second signal. `received` has
    the names of the signals that came, in order.
    """

    def __init__(self, session: Panics, *, now: Callable[[], float] = time.monotonic) -> None:
        self._session = session
        self._now = now
        self._last_s: float | None = None
        self._before: dict[int, signal._HANDLER] = {}
        self._console: object | None = None
        self.received: list[str] = []

    def __enter__(self) -> Self:
        for number in _numbers():
            self._before[number] = signal.signal(number, self._handle)
        if sys.platform == "win32":
            self._watch_console()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        _put_back(self._before)
        self._before.clear()
        if sys.platform == "win32":
            self._leave_console()

    def _handle(self, number: int, frame: FrameType | None) -> None:
        self.stop(signal.Signals(number).name)

    def stop(self, name: str) -> None:
        """What a signal of this name does."""
        now_s = self._now()
        again = self._last_s is not None and now_s - self._last_s <= AGAIN_WITHIN_S
        self._last_s = now_s
        self._session.panic(0 if again else 1)
        self.received.append(name)

    if sys.platform == "win32":

        def _watch_console(self) -> None:
            """A closed console calls the handler in a thread of its own and ends the program when it returns."""
            import ctypes
            from ctypes import wintypes

            def closed(event: int) -> bool:
                if event not in _CONSOLE_EVENTS:
                    return False
                self.stop("console closed")
                time.sleep(CONSOLE_WAIT_S)
                return True

            self._console = ctypes.WINFUNCTYPE(wintypes.BOOL, wintypes.DWORD)(closed)
            ctypes.windll.kernel32.SetConsoleCtrlHandler(self._console, True)

        def _leave_console(self) -> None:
            import ctypes

            ctypes.windll.kernel32.SetConsoleCtrlHandler(self._console, False)
            self._console = None
