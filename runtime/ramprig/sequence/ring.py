"""The samples of the recent past, as the blocks they came in: what expectations and waits look back into."""

from __future__ import annotations

from collections import deque

import numpy as np
from numpy.typing import NDArray

from ramprig.session.blocks import Block

Ints = NDArray[np.int64]


class Ring:
    """Keeps blocks until they are `keep_ticks` older than the newest sample; at most BLOCKS_MAX of them."""

    BLOCKS_MAX = 100_000

    def __init__(self, keep_ticks: int) -> None:
        self._keep_ticks = keep_ticks
        self._blocks: deque[Block] = deque(maxlen=self.BLOCKS_MAX)
        self.newest: int | None = None
        self.period_ticks = 1
        self.added = 0

    def add(self, block: Block) -> None:
        """Take a block; blocks come in order of their ticks."""
        self._blocks.append(block)
        self.newest = int(block.ticks[-1])
        self.period_ticks = block.layout.period_ticks
        self.added += 1
        oldest = self.newest - self._keep_ticks
        while self._blocks[0].ticks[-1] < oldest:
            self._blocks.popleft()

    def covers(self, tick: int) -> bool:
        """Whether no sample of `tick` or before is still to come."""
        return self.newest is not None and self.newest + self.period_ticks > tick

    def between(self, kind: str, index: int, after: int, until: int) -> tuple[Ints, Ints]:
        """Ticks and values of a channel with `after` < tick <= `until`, oldest first; both (n,) int64.

        Counts wrap at 32 bits as the device's do. Raises KeyError where the channel is not logged.
        """
        ticks: list[Ints] = []
        values: list[Ints] = []
        for block in reversed(self._blocks):
            if block.ticks[-1] <= after:
                break
            low, high = block.ticks.searchsorted((after, until), side="right").tolist()
            if high > low:
                ticks.append(block.ticks[low:high])
                values.append(block.column(kind, index)[low:high].astype(np.int64))
        if not ticks:
            return np.empty(0, np.int64), np.empty(0, np.int64)
        return np.concatenate(ticks[::-1]), np.concatenate(values[::-1])

    def last_at(self, kind: str, index: int, tick: int) -> int | None:
        """The newest value of a channel at `tick` or before; None where none is kept."""
        for block in reversed(self._blocks):
            if block.ticks[0] <= tick:
                place = int(block.ticks.searchsorted(tick, side="right")) - 1
                return int(block.column(kind, index)[place])
        return None

    def first(self, kind: str, index: int) -> int | None:
        """The oldest value kept of a channel."""
        return int(self._blocks[0].column(kind, index)[0]) if self._blocks else None
