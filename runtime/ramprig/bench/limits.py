"""What a bench file says of a limit, turned into the protocol's whole numbers in the safe direction."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from enum import Enum
from fractions import Fraction

from ramprig_link.words import LIMITS, SPEED_TICKS, Tighter

from ..quantity import COUNTS, CURRENT, DURATION, DUTY, DUTY_RATE, PULSE, SPEED, VOLTAGE, Kind, Quantity, show
from ..yamlfile import Mark

LimitKey = tuple[str, int]
"""The limit's name as in the protocol, and the axis or servo (0 for the device's own)."""


OFF_AT_ZERO = frozenset({"under_mv", "rated_ma", "stall_duty", "speed_counts"})
"""Limits of which 0 means to the board that the trip is off: no other value may be rounded to it."""


class Scale(Enum):
    """How a limit's number depends on the board's tick."""

    PLAIN = "none"
    TICKS = "a time, counted in ticks"
    PER_TICK = "a rate, as the change in one tick"
    PER_WINDOW = "a speed, as the counts in SPEED_TICKS ticks"

    def factor(self, tick_us: int) -> Fraction:
        """What an amount in seconds, or a rate per second, is multiplied with."""
        if self is Scale.TICKS:
            return Fraction(1_000_000, tick_us)
        if self is Scale.PER_TICK:
            return Fraction(tick_us, 1_000_000)
        return Fraction(SPEED_TICKS * tick_us, 1_000_000) if self is Scale.PER_WINDOW else Fraction(1)


@dataclass(frozen=True, slots=True, kw_only=True)
class Setting:
    """One limit as the file says it.

    `value` is in the base unit of `kind`; `units` are the protocol's units in one of those (for a rate: per second;
    for a time: seconds).
    """

    item: str
    value: Fraction
    kind: Kind
    units: Fraction
    scale: Scale
    text: str = field(compare=False)
    mark: Mark = field(compare=False, repr=False)

    def in_units(self, tick_us: int) -> int:
        """The protocol's number, rounded to the tighter side. Raises `FileError` at the value if it is out of range."""
        exact = self.value * self.units * self.scale.factor(tick_us)
        limit = LIMITS[self.item]
        number = math.ceil(exact) if limit.tighter is Tighter.HIGHER else math.floor(exact)
        if not limit.lowest <= number <= limit.highest:
            low, high = self._shown(limit.lowest, tick_us), self._shown(limit.highest, tick_us)
            wanted = f"the protocol's {self.item} takes {low} to {high}"
            raise self.mark.error(f"found '{self.text}', beyond what a board can keep", wanted)
        if number == 0 and self.value > 0 and self.item in OFF_AT_ZERO:
            least = f"{self._shown(1, tick_us)} is the least that it can hold"
            raise self.mark.error(f"found '{self.text}', which the board would take for no limit at all", least)
        return number

    def carried_out(self, tick_us: int) -> str:
        """What the board will hold, where that is not exactly what the file says; else an empty text."""
        number = self.in_units(tick_us)
        if number == self.value * self.units * self.scale.factor(tick_us):
            return ""
        return self._shown(number, tick_us)

    def _shown(self, number: int, tick_us: int) -> str:
        return show(Fraction(number) / self.units / self.scale.factor(tick_us), self.kind)


PARTS_PER_PERCENT = Fraction(100)

_UNITS: dict[str, tuple[Kind, Fraction, Scale]] = {
    "lease_ms": (DURATION, Fraction(1000), Scale.PLAIN),
    "stop_ticks": (DURATION, Fraction(1), Scale.TICKS),
    "under_mv": (VOLTAGE, Fraction(1000), Scale.PLAIN),
    "over_mv": (VOLTAGE, Fraction(1000), Scale.PLAIN),
    "supply_ticks": (DURATION, Fraction(1), Scale.TICKS),
    "ceiling_duty": (DUTY, PARTS_PER_PERCENT, Scale.PLAIN),
    "slew_up_duty": (DUTY_RATE, PARTS_PER_PERCENT, Scale.PER_TICK),
    "slew_down_duty": (DUTY_RATE, PARTS_PER_PERCENT, Scale.PER_TICK),
    "dwell_ticks": (DURATION, Fraction(1), Scale.TICKS),
    "still_counts": (COUNTS, Fraction(1), Scale.PLAIN),
    "still_ticks": (DURATION, Fraction(1), Scale.TICKS),
    "trip_ma": (CURRENT, Fraction(1000), Scale.PLAIN),
    "trip_ticks": (DURATION, Fraction(1), Scale.TICKS),
    "offset_ma": (CURRENT, Fraction(1000), Scale.PLAIN),
    "rated_ma": (CURRENT, Fraction(1000), Scale.PLAIN),
    "thermal_s": (DURATION, Fraction(1), Scale.PLAIN),
    "stall_duty": (DUTY, PARTS_PER_PERCENT, Scale.PLAIN),
    "stall_counts": (COUNTS, Fraction(1), Scale.PLAIN),
    "stall_ticks": (DURATION, Fraction(1), Scale.TICKS),
    "wrong_counts": (COUNTS, Fraction(1), Scale.PLAIN),
    "pulse_min_us": (PULSE, Fraction(1), Scale.PLAIN),
    "pulse_max_us": (PULSE, Fraction(1), Scale.PLAIN),
    "pulse_slew_ns": (PULSE, Fraction(1000), Scale.PER_TICK),
    "pulse_home_us": (PULSE, Fraction(1), Scale.PLAIN),
}
"""Kind, protocol units per base unit, and scale of the limits that need no figure of the motor."""


def setting(item: str, quantity: Quantity, mark: Mark) -> Setting:
    """The setting of a limit by a quantity of its kind."""
    kind, units, scale = _UNITS[item]
    return Setting(item=item, value=quantity.value, kind=kind, units=units, scale=scale, text=str(quantity), mark=mark)


def speed_setting(speed: Quantity, counts_per_turn: Fraction, mark: Mark) -> Setting:
    """The overspeed limit from a speed of the output shaft."""
    return Setting(
        item="speed_counts",
        value=speed.value,
        kind=SPEED,
        units=counts_per_turn / 60,
        scale=Scale.PER_WINDOW,
        text=str(speed),
        mark=mark,
    )


def pulse_setting(item: str, pulse_us: Fraction, text: str, mark: Mark) -> Setting:
    """A servo limit from a pulse in us (a slew: in us/s)."""
    kind, units, scale = _UNITS[item]
    return Setting(item=item, value=pulse_us, kind=kind, units=units, scale=scale, text=text, mark=mark)
