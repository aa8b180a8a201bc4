"""A demand as it was ordered: its value at any tick, by the formula of SPEC.md ORDER-4."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Slope:
    """A value that moves linearly from `start_value` at `start_tick` to `end_value` over `ticks`."""

    start_tick: int
    ticks: int
    start_value: int
    end_value: int

    @property
    def end_tick(self) -> int:
        """The first tick at which the end value is reached."""
        return self.start_tick + self.ticks

    def at(self, tick: int) -> int:
        """The value at a tick; before the start it is the start value."""
        if tick >= self.end_tick:
            return self.end_value
        gone = max(0, tick - self.start_tick)
        size = abs(self.end_value - self.start_value) * gone // max(1, self.ticks)
        return self.start_value + (size if self.end_value > self.start_value else -size)


REST = Slope(0, 0, 0, 0)
"""Nothing was ordered: zero duty, no pulse."""
