"""Sample blocks: what one data line of the device becomes for the recorder, the expectations and the live status.

One `Block` object goes to all of them; its arrays are read-only, so that nobody can change what another still reads.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from ramprig_link.samples import ChannelRef, SampleBlock, channels_of

LAYOUTS_KEPT = 64
"""So many layouts are remembered: a line of samples names its own anew."""

Ticks = NDArray[np.int64]
Values = NDArray[np.int32]


@dataclass(frozen=True, slots=True)
class Layout:
    """Which channels a logging has, in order of their bits, and how many ticks lie between two samples.

    `period_ticks` is 1 to 65535. Two layouts are equal when their channels and their period are.
    """

    channels: tuple[ChannelRef, ...]
    period_ticks: int

    @classmethod
    @lru_cache(LAYOUTS_KEPT)
    def of(cls, mask: int, period_ticks: int) -> Layout:
        """The layout of a `log` request with this mask; raises `SampleFault` for a mask with unknown bits."""
        return cls(channels_of(mask), period_ticks)

    @property
    def mask(self) -> int:
        """The channel mask of the `log` request."""
        return sum(1 << channel.bit for channel in self.channels)

    def position(self, kind: str, index: int = 0) -> int | None:
        """The column of this channel in `Block.values`, or None where it is not logged."""
        for place, channel in enumerate(self.channels):
            if channel.kind == kind and channel.index == index:
                return place
        return None


@dataclass(frozen=True, slots=True, eq=False)
class Block:
    """Samples one period apart, oldest first.

    `ticks` is (n,) int64: unwrapped device ticks, n at least 1; `values` is (n, channels) int32 in the protocol's
    units. Both are read-only. Ticks increase strictly from block to block within one start of the device; a jump
    larger than the period is a gap that was announced by a `GapFound` event before the block.
    """

    ticks: Ticks
    values: Values
    layout: Layout

    def __len__(self) -> int:
        return len(self.ticks)

    def column(self, kind: str, index: int = 0) -> Values:
        """The values of one channel, (n,) int32, oldest first; raises KeyError where it is not logged."""
        place = self.layout.position(kind, index)
        if place is None:
            raise KeyError(f"channel {kind} {index} is not logged")
        return self.values[:, place]

    def after(self, tick: int) -> Block | None:
        """The part of the block later than `tick`, the block itself where that is all of it, None where it is none."""
        if self.ticks[0] > tick:
            return self
        if self.ticks[-1] <= tick:
            return None
        start = int(self.ticks.searchsorted(tick, side="right"))
        return Block(self.ticks[start:], self.values[start:], self.layout)


def block_from(sample: SampleBlock, first_tick: int) -> Block:
    """The block of a decoded data line whose first sample was taken at the unwrapped tick `first_tick`."""
    ticks = np.arange(first_tick, first_tick + sample.rows * sample.period, sample.period, dtype=np.int64)
    values = np.asarray(sample.columns, dtype=np.int32).T
    ticks.setflags(write=False)
    values.setflags(write=False)
    return Block(ticks, values, Layout.of(sample.mask, sample.period))
