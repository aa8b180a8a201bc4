"""The keys that stop, found in the raw bytes of a terminal before anything else looks at them."""

from __future__ import annotations

import time
from collections.abc import Callable

from ramprig.session.signals import AGAIN_WITHIN_S, Panics

SINGLE = (0x03, 0x1C)
"""Ctrl-C and Ctrl-\\ as bytes."""
F12 = b"\x1b[24~"
"""F12 as terminals of the VT220 line send it (the common practice of today's terminals)."""


class StopKey:
    """Stops on the first press with category 1, and cuts with category 0 on another within AGAIN_WITHIN_S.

    `press` may come from any thread; it never raises and never waits. `pressed` counts.
    """

    def __init__(self, target: Panics, *, now: Callable[[], float] = time.monotonic) -> None:
        self._target = target
        self._now = now
        self._last_s: float | None = None
        self.pressed = 0

    def press(self) -> None:
        """Stop."""
        now_s = self._now()
        again = self._last_s is not None and now_s - self._last_s <= AGAIN_WITHIN_S
        self._last_s = now_s
        self._target.panic(0 if again else 1)
        self.pressed += 1


class StopBytes:
    """Finds stop keys in a stream of bytes: calls `on_stop` for each at once, and takes Ctrl-C and Ctrl-\\ out of it.

    They count inside a paste too. F12 is found across pieces and left in, since what reads keys has no use for it.
    """

    def __init__(self, on_stop: Callable[[], None]) -> None:
        self._on_stop = on_stop
        self._tail = b""

    def take(self, data: bytes) -> tuple[bytes, bool]:
        """The bytes without stop keys, and whether there was one."""
        joined = self._tail + data
        count = sum(data.count(key) for key in SINGLE) + joined.count(F12)
        for _ in range(min(count, 2)):  # two are a cut; more say nothing new
            self._on_stop()
        self._tail = _begun(joined)
        if any(key in data for key in SINGLE):
            data = bytes(byte for byte in data if byte not in SINGLE)
        return data, count > 0


def _begun(data: bytes) -> bytes:
    """The end of `data` that may be the begin of F12."""
    for length in range(len(F12) - 1, 0, -1):
        if data.endswith(F12[:length]):
            return F12[:length]
    return b""
