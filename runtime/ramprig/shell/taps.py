"""The terminal's input, read in a thread of its own, so that a stop never waits for what the screen is doing.

    terminal -> tap thread -> stop keys: straight to the port
                           -> everything else -> event loop -> parser -> key bindings

A blocked event loop, a slow terminal, an unfinished paste, a search, a handler that raises: none of them is in front of
the tap. What it hands on is bounded; more is dropped and counted.
"""

from __future__ import annotations

import asyncio
import codecs
import os
import select
import signal
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import AbstractContextManager, contextmanager, nullcontext, suppress

from prompt_toolkit.input.base import Input
from prompt_toolkit.input.vt100_parser import Vt100Parser
from prompt_toolkit.key_binding import KeyPress

from .stopkeys import StopBytes

READ_BYTES = 1024
"""So much is read at a time."""
WAITING_MAX = 64 * 1024
"""Most bytes that wait for the event loop; what is typed or pasted beyond is dropped."""
PASTE_MAX = 64 * 1024
"""A paste longer than this is given up."""
PASTE_WAIT_S = 1.0
"""A paste that has not ended so long after its last bytes is given up: its end was lost."""
_PASTE_BEGIN, _PASTE_END = "\x1b[200~", "\x1b[201~"


class TappedInput(Input):
    """Keys for an application, out of bytes that `take` is given from the tap's thread."""

    def __init__(self, on_stop: Callable[[], None], *, now: Callable[[], float] = time.monotonic) -> None:
        self._stops = StopBytes(on_stop)
        self._now = now
        self._keys: list[KeyPress] = []
        self._parser = Vt100Parser(self._keys.append)
        self._decoder = codecs.getincrementaldecoder("utf-8")("surrogateescape")
        self._ready: Callable[[], None] | None = None
        self._loop: asyncio.AbstractEventLoop | None = None
        self._lock = threading.Lock()
        self._waiting = 0
        self._paste: tuple[int, float] | None = None
        self._closed = False
        self.dropped_bytes = 0

    # ---- the tap's thread ----------------------------------------------------------------------------------------

    def take(self, data: bytes) -> None:
        """Bytes from the terminal, `b""` at its end: stop keys act now, the rest goes to the event loop."""
        rest, stopped = self._stops.take(data)
        with self._lock:
            if self._waiting + len(rest) > WAITING_MAX:
                self.dropped_bytes += len(rest)
                rest = b""
            self._waiting += len(rest)
        loop = self._loop
        if loop is None or not (rest or stopped or not data):
            return
        try:
            loop.call_soon_threadsafe(self._arrive, rest, stopped, not data)
        except RuntimeError:  # the event loop is closed: nobody reads keys any more
            self._loop = None

    # ---- the event loop ------------------------------------------------------------------------------------------

    def _arrive(self, data: bytes, stopped: bool, over: bool) -> None:
        with self._lock:
            self._waiting -= len(data)
        if stopped:
            self._give_up_paste()
        text = self._decoder.decode(data)
        self._follow_paste(text)
        self._parser.feed(text)
        if stopped:  # a paste may have begun in the same bytes
            self._give_up_paste()
        self._closed = self._closed or over
        if self._ready is not None:
            self._ready()

    def _follow_paste(self, text: str) -> None:
        """Know whether a paste is under way, and bound it."""
        begun, ended = text.rfind(_PASTE_BEGIN), text.rfind(_PASTE_END)
        if begun > ended:
            self._paste = (len(text) - begun, self._now())
        elif ended >= 0:
            self._paste = None
        elif self._paste is not None:
            self._paste = (self._paste[0] + len(text), self._now())
            if self._paste[0] > PASTE_MAX:
                self._give_up_paste()

    def _give_up_paste(self) -> None:
        if self._paste is not None:
            self._paste = None
            self._parser.reset()

    def expire_paste(self) -> bool:
        """Give a paste up whose end does not come; whether one was. Call it now and then from the event loop."""
        if self._paste is None or self._now() - self._paste[1] < PASTE_WAIT_S:
            return False
        self._give_up_paste()
        return True

    # ---- prompt_toolkit's interface ------------------------------------------------------------------------------

    def fileno(self) -> int:
        """There is none: the tap reads it."""
        raise NotImplementedError("a tapped input has no file descriptor of its own")

    def typeahead_hash(self) -> str:
        """One per input."""
        return f"tapped-{id(self)}"

    def read_keys(self) -> list[KeyPress]:
        """Keys that have come."""
        keys = list(self._keys)
        self._keys.clear()
        return keys

    def flush_keys(self) -> list[KeyPress]:
        """Keys out of a sequence that was begun and not ended, such as a lone Esc."""
        self._parser.flush()
        return self.read_keys()

    @property
    def closed(self) -> bool:
        """Whether the terminal is gone."""
        return self._closed

    def raw_mode(self) -> AbstractContextManager[None]:
        """Nothing: `tapped_terminal` sets the terminal's mode for as long as the shell lives."""
        return nullcontext()

    def cooked_mode(self) -> AbstractContextManager[None]:
        """Nothing, as above."""
        return nullcontext()

    @contextmanager
    def _attached(self, ready: Callable[[], None] | None) -> Iterator[None]:
        before = self._ready
        self._loop = asyncio.get_running_loop()
        self._ready = ready
        try:
            yield
        finally:
            self._ready = before
            if before is not None and self._keys:  # they came meanwhile
                self._loop.call_soon(before)

    def attach(self, input_ready_callback: Callable[[], None]) -> AbstractContextManager[None]:
        """Call back when keys have come."""
        return self._attached(input_ready_callback)

    def detach(self) -> AbstractContextManager[None]:
        """Do not call back meanwhile."""
        return self._attached(None)


@contextmanager
def tapping(descriptor: int, keys: TappedInput) -> Iterator[None]:
    """A thread that reads a file descriptor into `keys` until the end of the block. POSIX."""
    wake, waker = os.pipe()

    def read() -> None:
        while True:
            ready, _, _ = select.select([descriptor, wake], [], [])
            if wake in ready:
                return
            try:
                data = os.read(descriptor, READ_BYTES)
            except OSError:  # the terminal is gone
                data = b""
            keys.take(data)
            if not data:
                return

    thread = threading.Thread(target=read, name="ramprig keys", daemon=True)
    thread.start()
    try:
        yield
    finally:
        os.write(waker, b".")
        thread.join()
        os.close(wake)
        os.close(waker)


@contextmanager
def tapped_terminal(descriptor: int, keys: TappedInput) -> Iterator[None]:
    """The terminal in raw mode, read into `keys`; put back as it was at the end. POSIX."""
    from prompt_toolkit.input.vt100 import raw_mode

    with raw_mode(descriptor), _raw_again(descriptor), tapping(descriptor, keys):
        yield


@contextmanager
def _raw_again(descriptor: int) -> Iterator[None]:
    """After a suspension the command line hands the terminal back in its own mode, in which keys wait for Enter."""
    import termios

    if threading.current_thread() is not threading.main_thread():
        yield
        return
    mode = termios.tcgetattr(descriptor)

    def resume(number: int, frame: object) -> None:
        if _is_in_front(descriptor):  # in the background it would be suspended for trying
            with suppress(termios.error):
                termios.tcsetattr(descriptor, termios.TCSANOW, mode)

    before = signal.signal(signal.SIGCONT, resume)
    try:
        yield
    finally:
        signal.signal(signal.SIGCONT, before)


def _is_in_front(descriptor: int) -> bool:
    """Whether this process may set the terminal's mode: it has it in the foreground, or it is not its own at all."""
    try:
        return os.tcgetpgrp(descriptor) == os.getpgrp()
    except OSError:
        return True
