"""The clock a port is read by: real on a serial line, virtual where nothing sleeps."""

from __future__ import annotations

import time
from typing import Protocol

NS_PER_S = 1_000_000_000
GRAIN_NS = 1000
"""The shortest wait in virtual time, so that one that is due in a rounding error's time does not spin."""


class Clock(Protocol):
    """What everything that waits measures time with."""

    def now(self) -> float:
        """Seconds since an arbitrary start; never runs backwards."""
        ...

    def wall(self) -> float:
        """Seconds since 1970-01-01 00:00 UTC (Unix time); may be set by the system at any moment."""
        ...


class SystemClock:
    """The computer's own clocks."""

    __slots__ = ()

    def now(self) -> float:
        """`time.monotonic()`, in seconds."""
        return time.monotonic()

    def wall(self) -> float:
        """`time.time()`, in seconds."""
        return time.time()


class VirtualClock:
    """A clock that stands still until it is advanced; both of its readings move together.

    Time is kept as whole nanoseconds, `now_ns`, so that a million small steps add up exactly.
    """

    __slots__ = ("_wall_start_s", "now_ns")

    def __init__(self, *, start_s: float = 0.0, wall_s: float = 0.0) -> None:
        """`wall_s` is the Unix time at the start."""
        self.now_ns = round(start_s * NS_PER_S)
        self._wall_start_s = wall_s - start_s

    def now(self) -> float:
        """Seconds, beginning at `start_s`."""
        return self.now_ns / NS_PER_S

    def wall(self) -> float:
        """Unix seconds: the start's, plus what has been advanced."""
        return self._wall_start_s + self.now()

    def end_of_wait_ns(self, until_s: float) -> int:
        """Where a wait from now until `until_s` ends: at a whole nanosecond at which this clock is not before it.

        A wait that rounding would end too early, or that is shorter than GRAIN_NS, takes GRAIN_NS more or as much.
        """
        now_ns, until_ns = self.now_ns, round(until_s * NS_PER_S)
        if until_ns - now_ns < GRAIN_NS:
            return now_ns if until_s <= now_ns / NS_PER_S else now_ns + GRAIN_NS
        return until_ns if until_ns / NS_PER_S >= until_s else until_ns + GRAIN_NS

    def end_of_waits_s(self, wait_s: float, count: int) -> float:
        """Where `count` waits of `wait_s` in a row end, each from where the one before did."""
        clock = VirtualClock()
        clock.now_ns = self.now_ns
        for _ in range(count):
            clock.now_ns = clock.end_of_wait_ns(clock.now() + wait_s)
        return clock.now()

    def advance(self, duration_s: float) -> None:
        """Move on by `duration_s`, rounded to whole nanoseconds; raises ValueError where it is negative."""
        if not duration_s >= 0:
            raise ValueError(f"a clock cannot be advanced by {duration_s} s")
        self.now_ns += round(duration_s * NS_PER_S)
