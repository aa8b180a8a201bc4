"""What was sampled in one stage of a procedure, as arrays, with its marks and how it ended."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.bench import Motor
from ramprig.session.blocks import Block
from ramprig.session.events import Restarted, Tripped

Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorTrace:
    """One motor's samples in SI units, (n,) each, oldest first.

    `duty` is a share, -1 to 1; `counts` go on past the wrap and rise in the direction of positive duty as the bench
    file has it, from 0; `current_a` is as the board tells it.
    """

    time_s: Floats
    duty: Floats
    counts: Floats
    current_a: Floats
    supply_v: Floats

    def __len__(self) -> int:
        return len(self.time_s)

    def where(self, kept: NDArray[np.bool_]) -> MotorTrace:
        """The samples for which `kept` is true."""
        return MotorTrace(
            time_s=self.time_s[kept],
            duty=self.duty[kept],
            counts=self.counts[kept],
            current_a=self.current_a[kept],
            supply_v=self.supply_v[kept],
        )

    def between(self, begin_s: float, end_s: float) -> MotorTrace:
        """The samples of begin < time <= end."""
        return self.where((self.time_s > begin_s) & (self.time_s <= end_s))


@dataclass(frozen=True, slots=True, kw_only=True)
class Trace:
    """One stage. `ticks` is (n,) int64; `columns` by channel (kind, index), (n,) int64 in the protocol's units.

    `marks` are (tick, name) in order. `whole` is True where the stage was carried out to its end; else `ending` says
    what came between, with `trip` or `restarted` where that was it.
    """

    name: str
    tick_s: float
    ticks: Ints
    columns: Mapping[tuple[str, int], Ints]
    marks: tuple[tuple[int, str], ...]
    whole: bool = True
    ending: str = ""
    trip: Tripped | None = None
    restarted: Restarted | None = None

    @property
    def time_s(self) -> Floats:
        """Seconds since the first sample."""
        return (self.ticks - self.ticks[0]) * self.tick_s if len(self.ticks) else np.empty(0)

    def at(self, mark: str) -> list[float]:
        """When the marks of this name were, in s since the first sample."""
        return [float((tick - self.ticks[0]) * self.tick_s) for tick, name in self.marks if name == mark]

    def motor(self, motor: Motor) -> MotorTrace:
        """The samples of a motor."""
        index = motor.axis
        raw = self.columns["counts", index]
        steps = np.diff(raw.astype(np.int32), prepend=np.int32(raw[0]) if len(raw) else np.int32(0))
        sign = -1 if motor.sense < 0 else 1
        return MotorTrace(
            time_s=self.time_s,
            duty=self.columns["duty", index] / 10_000.0,
            counts=sign * np.cumsum(steps.astype(np.int64)).astype(float),
            current_a=self.columns["current_ma", index] / 1000.0,
            supply_v=self.columns["supply_mv", 0] / 1000.0,
        )


def columns_of(blocks: Iterable[Block]) -> tuple[Ints, dict[tuple[str, int], Ints]]:
    """Ticks and columns of blocks in order; blocks of another layout than the first one's are left out."""
    kept = list(blocks)
    if not kept:
        return np.empty(0, np.int64), {}
    layout = kept[0].layout
    same = [block for block in kept if block.layout == layout]
    ticks = np.concatenate([block.ticks for block in same])
    values = np.concatenate([block.values for block in same]).astype(np.int64)
    columns = {(channel.kind, channel.index): values[:, place] for place, channel in enumerate(layout.channels)}
    return ticks, columns
