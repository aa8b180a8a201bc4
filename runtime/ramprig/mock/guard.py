"""The guard: what trips the device by its own judgement (SPEC section 11), one watch an axis and one for the supply.

A watch runs in every state and appends to `found` what would trip; the controller decides whether it latches.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from ramprig_link.words import THERMAL_TICKS, Cap, Trip

from .limits import LimitStore

HEAT_BITS = 24
"""The heat is kept in mA^2 times two to this."""

CURRENT_MAX_MA = 65535
"""The thermal model takes no more than this for a current."""

_UNREACHED = 1 << 40
_HALF = 0x80000000  # within it two counts are as far apart as they seem: `apart` without the call, in every tick


def apart(a: int, b: int) -> int:
    """The difference of two counts, by SPEC section 2."""
    difference = a - b
    if -_HALF < difference < _HALF:
        return difference
    return max((difference + 0x80000000 & 0xFFFFFFFF) - 0x80000000, -0x7FFFFFFF)


@dataclass(frozen=True, slots=True, order=True)
class Finding:
    """A trip that would latch: sorted by its rank, then by the axis. `value` and `bound` as in the notice `trip`."""

    trip: Trip
    index: int
    value: int
    bound: int


class Heat:
    """The first-order thermal model in whole numbers (TRIP-8): current in, heat and its root out.

    The form of IEC 60255-149 with k I_B = `rated_ma`: after I^2 has acted for t from cold, heat = I^2 (1 - e^(-t/tau)).
    """

    __slots__ = ("_gain", "_tick_us", "heat", "limit_ma2")

    def __init__(self, *, tick_us: int) -> None:
        self._tick_us = tick_us
        self._gain = 0
        self.heat = 0
        self.limit_ma2 = 0

    def refresh(self, *, rated_ma: int, thermal_s: int) -> None:
        """Take over the limits."""
        self.limit_ma2 = rated_ma * rated_ma
        self._gain = (THERMAL_TICKS * self._tick_us << HEAT_BITS) // (thermal_s * 1_000_000)

    def add(self, squares_ma2: int) -> None:
        """Take the sum of the squared currents of the last THERMAL_TICKS ticks."""
        self.heat += (squares_ma2 // THERMAL_TICKS - (self.heat >> HEAT_BITS)) * self._gain

    @property
    def squared_ma2(self) -> int:
        """The heat in mA^2."""
        return self.heat >> HEAT_BITS

    @property
    def root_ma(self) -> int:
        """The steady current that would lead to this heat."""
        return math.isqrt(self.squared_ma2)

    @property
    def reached(self) -> bool:
        """Whether the model asks for a trip."""
        return 0 < self.limit_ma2 <= self.squared_ma2

    @property
    def still_hot(self) -> bool:
        """Whether the heat is above 7/8 of its limit, so that `clear` must wait."""
        return self.limit_ma2 > 0 and 8 * self.squared_ma2 > 7 * self.limit_ma2


class AxisWatch:
    """The guard of one axis. `counts` and `current_ma` are the last readings; `still_age` is when the shaft last moved.

    Ages are device ticks that do not wrap.
    """

    __slots__ = (
        "_driven",
        "_found",
        "_index",
        "_offset_ma",
        "_over_ticks",
        "_seen",
        "_sense",
        "_speed_counts",
        "_speed_mark",
        "_squares_ma2",
        "_stall_age",
        "_stall_counts",
        "_stall_duty",
        "_stall_mark",
        "_stall_ticks",
        "_still_counts",
        "_still_mark",
        "_still_ticks",
        "_trip_ma",
        "_trip_ticks",
        "_wrong_counts",
        "_wrong_mark",
        "counts",
        "current_ma",
        "heat",
        "still_age",
    )

    def __init__(self, index: int, limits: LimitStore, *, age: int, found: list[Finding]) -> None:
        """`age` is the tick in which the board starts; the counts begin at 0."""
        self._index = index
        self._found = found
        self.counts = 0
        self.current_ma = 0
        self.still_age = age - 1
        self._still_mark = 0
        self._seen = 0
        self._driven = False
        self._over_ticks = 0
        self._squares_ma2 = 0
        self._stall_age = 0
        self._stall_mark = 0
        self._wrong_mark = 0
        self._speed_mark = 0
        self.heat = Heat(tick_us=limits.board.tick_us)
        self.refresh(limits)

    def refresh(self, limits: LimitStore) -> None:
        """Take over the limits."""
        index = self._index
        self._offset_ma = limits["offset_ma", index]
        self._trip_ma = limits["trip_ma", index]
        self._trip_ticks = limits["trip_ticks", index]
        self._sense = limits["sense", index]
        self._still_counts = limits["still_counts", index]
        self._still_ticks = limits["still_ticks", index]
        self._stall_duty = limits["stall_duty", index] if self._sense else 0
        self._stall_duty = self._stall_duty or _UNREACHED
        self._stall_counts = limits["stall_counts", index]
        self._stall_ticks = limits["stall_ticks", index]
        self._wrong_counts = limits["wrong_counts", index]
        self._speed_counts = limits["speed_counts", index]
        self.heat.refresh(rated_ma=limits["rated_ma", index], thermal_s=limits["thermal_s", index])
        self._seen = _UNREACHED  # no counts are like this: the next reading is judged by the new limits

    def read(self, counts: int, reading_ma: int, age: int, duty: int) -> None:
        """Take a tick's readings; `duty` is what the bridge has had since the tick before."""
        moved = counts != self._seen
        if moved:
            self._move(counts, age)
        self.current_ma = current_ma = reading_ma - self._offset_ma
        if -self._trip_ma <= current_ma <= self._trip_ma:
            self._over_ticks = 0
        else:
            self._over_ticks += 1
            if self._over_ticks >= self._trip_ticks:
                self._found.append(Finding(Trip.OVERCURRENT, self._index, current_ma, self._trip_ma))
        if -CURRENT_MAX_MA <= current_ma <= CURRENT_MAX_MA:
            self._squares_ma2 += current_ma * current_ma
        else:
            self._squares_ma2 += CURRENT_MAX_MA * CURRENT_MAX_MA
        if duty >= self._stall_duty or -duty >= self._stall_duty:
            if not self._driven:
                self._driven = True
                self._stall_mark = self._wrong_mark = counts
                self._stall_age = age
            elif moved:
                self._follow(age, duty)
            if age - self._stall_age >= self._stall_ticks - 1:
                self._found.append(Finding(Trip.STALL, self._index, duty, self._stall_ticks))
        else:
            self._driven = False

    def _move(self, counts: int, age: int) -> None:
        """Take over counts that differ, and mark when they leave the band of standstill."""
        self._seen = self.counts = counts
        off = counts - self._still_mark
        if not -_HALF < off < _HALF:
            off = apart(counts, self._still_mark)
        if off > self._still_counts or -off > self._still_counts:
            self._still_mark = counts
            self.still_age = age

    def _follow(self, age: int, duty: int) -> None:
        """Judge a movement of a driven shaft: is it enough, and is it the right way?"""
        counts = self.counts
        off = counts - self._stall_mark
        if not -_HALF < off < _HALF:
            off = apart(counts, self._stall_mark)
        if off >= self._stall_counts or -off >= self._stall_counts:
            self._stall_mark = counts
            self._stall_age = age
        ahead = counts - self._wrong_mark
        if not -_HALF < ahead < _HALF:
            ahead = apart(counts, self._wrong_mark)
        ahead *= self._sense if duty > 0 else -self._sense
        if ahead > 0:
            self._wrong_mark = counts
        elif ahead <= -self._wrong_counts:
            self._found.append(Finding(Trip.WRONG_WAY, self._index, -ahead, self._wrong_counts))

    def window(self, age: int) -> None:
        """At every tick divisible by SPEED_TICKS: overspeed, and at every second one the heat."""
        if self._speed_counts:
            passed = abs(apart(self.counts, self._speed_mark))
            if passed > self._speed_counts:
                self._found.append(Finding(Trip.OVERSPEED, self._index, passed, self._speed_counts))
        self._speed_mark = self.counts
        if age % THERMAL_TICKS == 0:
            heat = self.heat
            heat.add(self._squares_ma2)
            self._squares_ma2 = 0
            if heat.reached:
                self._found.append(Finding(Trip.OVERLOAD, self._index, heat.root_ma, math.isqrt(heat.limit_ma2)))

    def still(self, age: int) -> bool:
        """Whether the shaft is at standstill as S3 asks, or there is no encoder to tell."""
        return self._sense == 0 or age - self.still_age >= self._still_ticks

    @property
    def over(self) -> bool:
        """Whether the current is above `trip_ma` now."""
        return abs(self.current_ma) > self._trip_ma


class SupplyWatch:
    """The guard of the supply voltage."""

    __slots__ = ("_found", "_high_ticks", "_low_ticks", "_ticks", "over_mv", "quiet", "supply_mv", "under_mv")

    def __init__(self, limits: LimitStore, *, found: list[Finding]) -> None:
        self._found = found
        self._low_ticks = 0
        self._high_ticks = 0
        self.supply_mv = 0
        self.quiet = True
        self.refresh(limits)

    def refresh(self, limits: LimitStore) -> None:
        """Take over the limits."""
        measured = Cap.SUPPLY in limits.board.caps
        self.under_mv = limits["under_mv", 0] if measured else 0
        self.over_mv = limits["over_mv", 0] if measured else _UNREACHED
        self._ticks = limits["supply_ticks", 0]

    def read(self, supply_mv: int) -> None:
        """Take a tick's reading. May be left out, `supply_mv` set aside, where `quiet` and within both bounds."""
        self.supply_mv = supply_mv
        self._low_ticks = self._low_ticks + 1 if supply_mv < self.under_mv else 0
        self._high_ticks = self._high_ticks + 1 if supply_mv > self.over_mv else 0
        self.quiet = not (self._low_ticks or self._high_ticks)
        if self._high_ticks >= self._ticks:
            self._found.append(Finding(Trip.OVERVOLTAGE, 0, supply_mv, self.over_mv))
        if self._low_ticks >= self._ticks:
            self._found.append(Finding(Trip.UNDERVOLTAGE, 0, supply_mv, self.under_mv))

    def beyond(self, trip: Trip) -> bool:
        """Whether the voltage is beyond the bound of this trip now; it can be beyond both, where they are crossed."""
        return self.supply_mv > self.over_mv if trip is Trip.OVERVOLTAGE else self.supply_mv < self.under_mv
