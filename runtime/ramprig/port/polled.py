"""A wire over any pyserial object, by its own methods: for Windows and for `rfc2217://`, which offer no
descriptor to wait on.
"""

from __future__ import annotations

import contextlib
import threading
import time
from collections.abc import Callable
from typing import Protocol

from ramprig.port.base import READ_CHUNK_BYTES
from ramprig.port.causes import FOREIGN, FarEndStuck

POLL_SLICE_S = 0.01
"""pyserial's timeout, set once: with `rfc2217://` each change of it is negotiated with the server again."""

BREAK_S = 0.02
"""Length of a BREAK: two and a half characters at 1200 baud, the slowest rate in use (10 bits a character)."""


class SerialLike(Protocol):
    """What is used of a pyserial port."""

    break_condition: bool

    @property
    def in_waiting(self) -> int:
        """Bytes that can be read at once."""
        ...

    def read(self, size: int = 1, /) -> bytes:
        """Up to `size` bytes, fewer after the timeout."""
        ...

    def write(self, data: bytes, /) -> int | None:
        """The count of bytes taken, or None, which means all."""
        ...

    def reset_output_buffer(self) -> None:
        """Throw away what is unsent."""
        ...

    def close(self) -> None:
        """Close the port."""
        ...


def hold_break(serial: SerialLike, *, sleep: Callable[[float], None] = time.sleep) -> bool:
    """Hold BREAK for `BREAK_S`; True, or an exception of the port."""
    serial.break_condition = True
    try:
        sleep(BREAK_S)
    finally:
        serial.break_condition = False
    return True


class PolledWire:
    """A wire that asks pyserial in slices of `POLL_SLICE_S`, by which a read may outlast its timeout.

    `write` is bounded by the object's own write timeout, where it has one. `urgent` runs in a thread of its
    own, since nothing else bounds a write that hangs in a driver; while one hangs, the next one is refused.
    """

    def __init__(
        self,
        serial: SerialLike,
        *,
        purges: bool = True,
        now: Callable[[], float] = time.monotonic,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        """`serial` is open, with its read timeout at `POLL_SLICE_S`. `purges` is False where dropping unsent
        bytes takes a round trip of its own, as with `rfc2217://`: `urgent` then sends without it.
        """
        self._purges = purges
        self._serial = serial
        self._now = now
        self._sleep = sleep
        self._urgent_thread: threading.Thread | None = None
        self._overtakings = 0

    def read(self, timeout_s: float) -> bytes:
        """What waits, else what comes within `timeout_s`."""
        deadline_s = self._now() + timeout_s
        while True:
            waiting = self._serial.in_waiting
            if waiting:
                return self._serial.read(min(waiting, READ_CHUNK_BYTES))
            if self._now() >= deadline_s:
                return b""
            first = self._serial.read(1)
            if first:
                waiting = min(self._serial.in_waiting, READ_CHUNK_BYTES - 1)
                return first + self._serial.read(waiting) if waiting else first

    def write(self, data: bytes, timeout_s: float) -> None:
        """Send `data`, or the part before an `urgent` overtook it; the timeout is the one of the object's opening."""
        overtakings = self._overtakings
        try:
            taken = self._serial.write(data)
        except OSError:
            if self._overtakings == overtakings:
                raise
            return  # the purge ended it; where the port is gone as well, the next read says so
        if taken is not None and taken != len(data) and self._overtakings == overtakings:
            raise FarEndStuck(f"{len(data) - taken} of {len(data)} bytes unsent after {timeout_s} s")

    def urgent(self, data: bytes, bound_s: float) -> bool:
        """Purge and send in a thread of its own; whether that ended within `bound_s`, all bytes taken."""
        if self._urgent_thread is not None and self._urgent_thread.is_alive():
            return False
        accepted = threading.Event()

        def attempt() -> None:
            try:
                self._purge()
                if self._serial.write(data) in (None, len(data)):
                    accepted.set()
            except Exception:  # whatever the port raises means the same here: not accepted
                return

        self._urgent_thread = threading.Thread(target=attempt, name="ramprig-urgent", daemon=True)
        self._urgent_thread.start()
        return accepted.wait(bound_s)

    def _purge(self) -> None:
        if self._purges:
            self._overtakings += 1
            with contextlib.suppress(*FOREIGN):  # what is queued then goes out first; the stop is sent all the same
                self._serial.reset_output_buffer()

    def send_break(self) -> bool:
        """Hold BREAK by the object's own switch."""
        return hold_break(self._serial, sleep=self._sleep)

    def close(self) -> None:
        """Close the object."""
        self._serial.close()
