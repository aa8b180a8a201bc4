"""Keeps rows at full rate around events, and of those far from any only some: a ring of rows that are not decided yet.

                    before_s        after_s
    ... . . . . . [||||||||| event |||||||||||||||||] . . . . . (ring: undecided) newest
        every n-th    full rate                         every n-th

A row is decided when it is older than `before_s`: then no event can claim it any more. Which of the others are kept
depends on nothing but their tick: those whose number, tick // period, is a multiple of `every`. So whoever knows the
spans at full rate, which are told as events, knows every tick that must be in the file.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .keeping import Thinning
from .rows import Ints, Rows

RING_ROWS_MAX = 1_000_000
"""More undecided rows than this are not kept waiting: the oldest are decided before their time."""


@dataclass(frozen=True, slots=True, kw_only=True)
class FullRateBegun:
    """From this tick on every row is in the log, because of an event of this kind."""

    tick: int
    because: str


@dataclass(frozen=True, slots=True, kw_only=True)
class FullRateEnded:
    """Up to this tick every row was in the log; from here on only some are."""

    tick: int


def kept_by_number(ticks: Ints, period_ticks: int, every: int | None) -> NDArray[np.bool_]:
    """Which rows a thinned log keeps far from events: (n,) bool for (n,) `ticks`."""
    if every is None:
        return np.zeros(len(ticks), np.bool_)
    kept: NDArray[np.bool_] = ticks // period_ticks % every == 0
    return kept


class Thinner:
    """Takes rows and claims in order, and hands on what is kept, in order. `thinned_rows` counts what is not.

    `tell` is given FullRateBegun and FullRateEnded before the first row that they are about is written.
    """

    def __init__(
        self, rule: Thinning, *, tick_us: int, write: Callable[[Rows], None], tell: Callable[[object], None]
    ) -> None:
        self._every = rule.every
        self._before_ticks = round(rule.before_s * 1e6 / tick_us)
        self._after_ticks = round(rule.after_s * 1e6 / tick_us)
        self._write = write
        self._tell = tell
        self._ring: deque[Rows] = deque()
        self._ring_rows = 0
        self._newest: int | None = None
        self._until: int | None = None
        self.thinned_rows = 0

    def take(self, rows: Rows) -> None:
        """Rows that follow those before; where ticks begin anew, those before are decided."""
        if self._newest is not None and rows.ticks[0] <= self._newest:
            self._decide(None)
        self._newest = int(rows.ticks[-1])
        if self._until is not None:
            count = int(np.searchsorted(rows.ticks, self._until, side="right"))
            self._write(rows[:count])
            rows = rows[count:]
            if len(rows):
                self._tell(FullRateEnded(tick=self._until))
                self._until = None
        if len(rows):
            self._ring.append(rows.bare())
            self._ring_rows += len(rows)
            self._decide(self._newest - self._before_ticks)
            while self._ring_rows > RING_ROWS_MAX:
                self._decide(int(self._ring[0].ticks[-1]) + 1)

    def claim(self, tick: int | None, because: str) -> None:
        """An event at this tick, or now, wants full rate around it."""
        newest = self._newest
        at = newest if tick is None else tick
        if at is None:
            return
        until = at + self._after_ticks
        if self._until is not None:
            self._until = max(self._until, until)
            return
        self._decide(min(at, at if newest is None else newest) - self._before_ticks)
        if newest is not None and until < newest:
            until = newest  # it came too late for the rows after it to be anything but kept
        first = int(self._ring[0].ticks[0]) if self._ring else (at if newest is None else newest + 1)
        self._tell(FullRateBegun(tick=first, because=because))
        self._until = until
        self._release()

    def flush(self) -> None:
        """The part is over: the rows that are not decided yet are kept, as those before an event."""
        if self._ring:
            self._tell(FullRateBegun(tick=int(self._ring[0].ticks[0]), because="end"))
            self._release()

    def _release(self) -> None:
        while self._ring:
            rows = self._ring[0]
            self._write(rows)
            self._ring.popleft()
            self._ring_rows -= len(rows)

    def _decide(self, before_tick: int | None) -> None:
        """No event can claim what comes before this tick (None: all): keep some of it."""
        while self._ring:
            rows = self._ring[0]
            count = len(rows) if before_tick is None else int(np.searchsorted(rows.ticks, before_tick, side="left"))
            if count:
                some = rows[:count]
                kept = kept_by_number(some.ticks, some.period_ticks, self._every)
                self.thinned_rows += count - int(np.count_nonzero(kept))
                self._ring_rows -= count
                self._write(some.only(kept))
            if count < len(rows):
                self._ring[0] = rows[count:]
                return
            self._ring.popleft()
