"""What samples say of a measurement: value, verdict, and why there is none where there is none.

Nothing here waits or sends. Speeds and counts are positive in the direction of positive duty. A mean speed is the
counts of the window over its time; single speeds come from the estimator that also fills the log. Currents are judged
by their size, whatever their direction.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from ramprig.quantity import Band, format_duration, show
from ramprig.record.speed import SpeedEstimator, SpeedMethod

from .rig import Axis
from .ring import Ring
from .steps import By, Measure, What

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

SAMPLES_SHARE = 0.9
"""At least this share of a window's samples must be there for a verdict."""
SPEED_METHOD = SpeedMethod()
LEAD_IN_S = SPEED_METHOD.standstill_s + 0.1
"""The speed estimator hears the counts from so long before a window on."""


@dataclass(frozen=True, slots=True)
class Finding:
    """What was found: `value` in the base unit of the measurement's kind, None where there is none, with `why`."""

    holds: bool
    value: float | None
    text: str
    why: str = ""


@dataclass(slots=True)
class Bearings:
    """What measurements are counted from: counts at marks and at the run's start, and where ramps ended.

    `counts` are raw counts by mark (empty name: the run's start) and axis; `ramp_ends` ticks by motor name.
    """

    counts: dict[tuple[str, int], int] = field(default_factory=dict)
    ramp_ends: dict[str, int] = field(default_factory=dict)

    def note(self, name: str, ring: Ring, axes: Mapping[str, Axis], tick: int) -> None:
        """Keep the counts of all motors at `tick` under a mark's name."""
        for axis in axes.values():
            counts = ring.last_at("counts", axis.index, tick)
            if counts is not None:
                self.counts[name, axis.index] = counts


@dataclass(frozen=True, slots=True)
class Eye:
    """Looks at one motor through the ring."""

    ring: Ring
    axis: Axis
    tick_s: float

    def finding(self, measure: Measure, tick: int, bearings: Bearings) -> Finding:
        """What the samples up to `tick` say of the measurement."""
        match measure.what:
            case What.SPEED | What.CURRENT:
                return self._over_window(measure, tick)
            case What.SETTLING:
                return self._settling(measure, tick, bearings)
            case _:
                return self._travel(measure, tick, bearings)

    # ---- speed and current ---------------------------------------------------------------------------------------

    def _over_window(self, measure: Measure, tick: int) -> Finding:
        begin = tick - round(float(measure.over_s) / self.tick_s)
        kind = "counts" if measure.what is What.SPEED else "current_ma"
        ticks, _ = self.ring.between(kind, self.axis.index, begin, tick)
        expected = (tick - begin) // self.ring.period_ticks
        if len(ticks) < max(1.0, SAMPLES_SHARE * expected):
            return _nothing(f"only {len(ticks)} of {expected} samples of its window have come")
        if measure.what is What.CURRENT:
            currents = self._currents(begin, tick)
            return _every(measure, currents) if measure.by is By.EVERY_SAMPLE else _single(measure, currents.mean())
        if measure.by is By.EVERY_SAMPLE:
            speeds = self._speeds(begin, tick)
            return _every(measure, speeds) if len(speeds) else _nothing("the speed is not known yet")
        mean = self._mean_speed(begin, tick)
        return _nothing("its window has less than two samples") if mean is None else _single(measure, mean)

    def _currents(self, begin: int, tick: int) -> Floats:
        _, values = self.ring.between("current_ma", self.axis.index, begin, tick)
        return np.abs(values) / 1000.0

    def _mean_speed(self, begin: int, tick: int) -> float | None:
        ticks, counts = self.ring.between("counts", self.axis.index, begin - self.ring.period_ticks, tick)
        if len(ticks) < 2:
            return None
        return _travelled(counts) * self.axis.count_sign * self._rpm_per_count() / (int(ticks[-1] - ticks[0]))

    def _rpm_per_count(self) -> float:
        """The speed in rpm of one count a tick."""
        return 60.0 / float(self.axis.motor.counts_per_turn) / self.tick_s

    def _speeds(self, begin: int, tick: int) -> Floats:
        """The estimated speed at each sample of the window; unknown ones are left out."""
        ticks, speeds = self._estimate(begin, tick)
        inside = speeds[ticks > begin]
        return inside[~np.isnan(inside)]

    def _estimate(self, begin: int, tick: int) -> tuple[Ints, Floats]:
        lead_in = round(LEAD_IN_S / self.tick_s)
        ticks, counts = self.ring.between("counts", self.axis.index, begin - lead_in, tick)
        if not len(ticks):
            return ticks, np.empty(0)
        estimator = SpeedEstimator(
            counts_per_rev=float(self.axis.motor.counts_per_turn), tick_s=self.tick_s, method=SPEED_METHOD
        )
        speeds = estimator.feed(ticks, counts.astype(np.int32), period_ticks=self.ring.period_ticks)
        return ticks, speeds * self.axis.count_sign

    # ---- settling ------------------------------------------------------------------------------------------------

    def _settling(self, measure: Measure, tick: int, bearings: Bearings) -> Finding:
        end = bearings.ramp_ends.get(measure.motor)
        assert measure.settle is not None  # the reader asks for it
        if end is None:
            return _nothing(f"{measure.motor} has not ended a ramp")
        ticks, speeds = self._estimate(end, tick)
        speeds = speeds[ticks > end]
        ticks = ticks[ticks > end]
        expected = (tick - end) // self.ring.period_ticks
        if len(ticks) < max(1.0, SAMPLES_SHARE * expected):
            return _nothing(f"only {len(ticks)} of {expected} samples since the ramp's end are there")
        outside = np.flatnonzero(~_inside(measure.settle, speeds))
        if len(outside) and outside[-1] == len(ticks) - 1:
            last = show(float(speeds[-1]), What.SPEED.kind) if not np.isnan(speeds[-1]) else "an unknown speed"
            after = format_duration((tick - end) * self.tick_s)
            return Finding(False, None, f"not settled {after} after the ramp: {last}")
        settled = end if not len(outside) else int(ticks[outside[-1] + 1])
        return _single(measure, (settled - end) * self.tick_s)

    # ---- counts and position -------------------------------------------------------------------------------------

    def _travel(self, measure: Measure, tick: int, bearings: Bearings) -> Finding:
        begin = bearings.counts.get((measure.since, self.axis.index))
        now = self.ring.last_at("counts", self.axis.index, tick)
        if begin is None or now is None:
            return _nothing("no counts have come")
        counts = _wrapped(now - begin) * self.axis.count_sign
        if measure.what is What.COUNTS:
            return _single(measure, counts)
        return _single(measure, 360.0 * counts / float(self.axis.motor.counts_per_turn))

    def stands_still(self, since: int) -> bool:
        """Whether the counts stayed in the standstill band for the time that the bench asks for, all after `since`.

        The newest samples decide.
        """
        newest = self.ring.newest
        begin = None if newest is None else newest - self.axis.still_ticks
        if newest is None or begin is None or begin < since:
            return False
        ticks, counts = self.ring.between("counts", self.axis.index, begin - self.ring.period_ticks, newest)
        if len(ticks) < max(2.0, SAMPLES_SHARE * (self.axis.still_ticks // self.ring.period_ticks + 1)):
            return False
        path = np.cumsum(_steps(counts))
        return int(path.max() - path.min()) <= self.axis.still_counts


def _steps(counts: Ints) -> Ints:
    """The differences of wrapping counts, the first 0."""
    return np.diff(counts.astype(np.int32), prepend=np.int32(counts[0])).astype(np.int64)


def _travelled(counts: Ints) -> int:
    return int(_steps(counts).sum())


def _wrapped(difference: int) -> int:
    return (difference + 2**31) % 2**32 - 2**31


def _inside(band: Band, values: Floats) -> NDArray[np.bool_]:
    """Which values lie inside; NaN does not."""
    low = -np.inf if band.low is None else float(band.low)
    high = np.inf if band.high is None else float(band.high)
    inside: NDArray[np.bool_] = (values >= low) & (values <= high)
    return inside


def _single(measure: Measure, value: float) -> Finding:
    return Finding(measure.band.holds(value), float(value), show(float(value), measure.what.kind))


def _every(measure: Measure, values: Floats) -> Finding:
    """All values must lie inside; the value told is the one farthest out, or the middle of all."""
    low, high = float(values.min()), float(values.max())
    kind = measure.what.kind
    text = f"{show(low, kind)} to {show(high, kind)}"
    holds = bool(_inside(measure.band, values).all())
    if holds:
        return Finding(True, float(np.median(values)), text)
    under = float(measure.band.low) - low if measure.band.low is not None else 0.0
    over = high - float(measure.band.high) if measure.band.high is not None else 0.0
    return Finding(False, low if under >= over else high, text)


def _nothing(why: str) -> Finding:
    return Finding(False, None, "not measured", why)
