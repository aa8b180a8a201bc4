"""One motor around a moment of a run: the samples before it and the trail, as arrays, and what can be seen in them."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ramprig.bench import Motor
from ramprig.errors import RecordError
from ramprig.record.scan import Piece, Scan
from ramprig.record.volumes import Stream

from .facts import Facts

Floats = NDArray[np.float64]

STILL_DUTY = 0.004
"""Below this share of full duty a motor counts as not driven."""
NOW_S = 0.025
"""What is `at the moment` is taken over so long before it."""
SETTLED_S = 0.15
"""A current is at rest so long after the duty went to zero."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Around:
    """Samples of one motor in order of time, (n,) each; `time_s` is 0 at the moment and negative before it.

    `duty` is a share, `counts` rise in the direction of positive duty as the bench file has it, `others` and
    `other_duty` are counts and duty of the other motors. NaN where there is nothing.
    """

    motor: str
    time_s: Floats
    duty: Floats
    counts: Floats
    current_a: Floats
    supply_v: Floats
    others: dict[str, Floats]
    other_duty: dict[str, Floats]
    volts: float
    locked_ohm: float | None
    counts_per_rev: float
    has_trail: bool

    @property
    def has_encoder(self) -> bool:
        """Whether anything is known of the shaft; without a bench file it is taken for granted."""
        return not self.counts_per_rev <= 0

    def __len__(self) -> int:
        return len(self.time_s)

    # ---- what was commanded --------------------------------------------------------------------------------------

    @property
    def before(self) -> NDArray[np.bool_]:
        """Samples before the moment."""
        found: NDArray[np.bool_] = self.time_s < 0
        return found

    @property
    def duty_now(self) -> float:
        """The duty just before the moment; 0 where nothing is known."""
        known = self.duty[self.before & ~np.isnan(self.duty)]
        return float(known[-1]) if len(known) else 0.0

    @property
    def started_s(self) -> float | None:
        """How long before the moment the motor was last set going from zero duty; None where it was not driven."""
        if abs(self.duty_now) < STILL_DUTY:
            return None
        driven = np.abs(self.duty[self.before]) >= STILL_DUTY
        times = self.time_s[self.before]
        still = np.flatnonzero(~driven)
        if not len(still):
            return None
        return float(-times[min(still[-1] + 1, len(times) - 1)])

    @property
    def was_driven(self) -> bool:
        """Whether there was any duty before the moment in what is seen."""
        return bool((np.abs(self.duty[self.before]) >= STILL_DUTY).any())

    def duty_change(self, over_s: float) -> float:
        """How the size of the duty changed in the last so long; positive is rising."""
        return abs(self.duty_now) - abs(self._at(self.duty, -over_s))

    def _at(self, values: Floats, time_s: float) -> float:
        place = int(np.searchsorted(self.time_s, time_s, side="right")) - 1
        if not len(values):
            return math.nan
        return float(values[max(0, place)])

    # ---- what came of it -----------------------------------------------------------------------------------------

    def between(self, values: Floats, begin_s: float, end_s: float) -> Floats:
        """The known values of begin <= time < end."""
        kept = values[(self.time_s >= begin_s) & (self.time_s < end_s)]
        return kept[~np.isnan(kept)]

    def moved(self, begin_s: float, end_s: float = 0.0) -> float:
        """How far the counts ranged in this time."""
        counts = self.between(self.counts, begin_s, end_s)
        return float(counts.max() - counts.min()) if len(counts) else 0.0

    def speed(self, begin_s: float, end_s: float = 0.0) -> float:
        """Counts a second over this time; 0 where there are not two samples."""
        inside = (self.time_s >= begin_s) & (self.time_s < end_s) & ~np.isnan(self.counts)
        times, counts = self.time_s[inside], self.counts[inside]
        if len(times) < 2 or times[-1] <= times[0]:
            return 0.0
        return float((counts[-1] - counts[0]) / (times[-1] - times[0]))

    @property
    def speed_now(self) -> float:
        """Counts a second at the moment."""
        return self.speed(-NOW_S if self.has_trail else -0.06)

    def fastest(self, begin_s: float, end_s: float, window_s: float = 0.05) -> float:
        """The largest speed, by size, over windows of this time; signed, counts a second."""
        speeds = [self.speed(at, at + window_s) for at in np.arange(begin_s, end_s - window_s / 2, window_s)]
        return max(speeds, key=abs, default=0.0)

    @property
    def current_now(self) -> float:
        """Mean current over the last moment, signed, A; NaN where there is none."""
        found = self.between(self.current_a, -NOW_S if self.has_trail else -0.06, 0.0)
        return float(found.mean()) if len(found) else math.nan

    def _quiet(self) -> NDArray[np.bool_]:
        """Samples before the moment without duty for some time."""
        driven = np.abs(self.duty) >= STILL_DUTY
        last = np.maximum.accumulate(np.where(driven, self.time_s, -math.inf))
        quiet: NDArray[np.bool_] = (self.time_s - last > SETTLED_S) & self.before
        return quiet

    @property
    def rest_current(self) -> float:
        """Median current without duty, A; NaN where none was seen."""
        found = self.current_a[self._quiet()]
        found = found[~np.isnan(found)]
        return float(np.median(found)) if len(found) else math.nan

    @property
    def rest_volts(self) -> float:
        """Median supply without duty, V; NaN where none was seen."""
        found = self.supply_v[self._quiet()]
        found = found[~np.isnan(found)]
        return float(np.median(found)) if len(found) else math.nan

    @property
    def volts_now(self) -> float:
        """Supply just before the moment, V; NaN where it is not measured."""
        found = self.between(self.supply_v, -0.005 if self.has_trail else -0.03, 0.005)
        return float(found[-1]) if len(found) else math.nan

    def locked_current(self, duty: float | None = None) -> float:
        """What would flow at this duty (the present one) with the shaft held, A; NaN without a model."""
        if self.locked_ohm is None:
            return math.nan
        share = self.duty_now if duty is None else duty
        volts = self.volts if math.isnan(self.rest_volts) else self.rest_volts
        return abs(share) * volts / self.locked_ohm

    @property
    def ran_before(self) -> bool:
        """Whether the shaft turned with the duty for some time before, at more than a crawl."""
        window = 0.2
        for at in np.arange(max(-60.0, float(self.time_s[0])) if len(self) else 0.0, -0.35, window):
            duty = self.between(self.duty, at, at + window)
            if len(duty) and (abs(duty) >= STILL_DUTY).all() and abs(duty.sum()) == abs(duty).sum():
                travel = self.speed(at, at + window) * window
                if travel * duty.mean() > 0 and abs(travel) > 10:
                    return True
        return False


def around(facts: Facts, motor: str, tick: int, *, time_s: float | None) -> Around | None:
    """What was recorded of `motor` up to the tick, and shortly after; None where there is nothing.

    `time_s` is the tick's time in the run, to find it where ticks begin anew in later parts.
    """
    files = facts.last_files
    if not files:
        return None
    try:
        tail = Stream(files).tail()
    except RecordError:
        return None
    if time_s is not None and "time_s" in tail.numbers:
        times = tail.numbers["time_s"] - time_s
    else:
        times = (tail.ticks - tick) * facts.tick_us / 1e6
    trail = _trail_of(facts.folder, motor, tick)
    column = _joined(times, tail, trail, tick, facts.tick_us)
    bench_motor = None
    if facts.bench is not None:
        bench_motor = next((found for found in facts.bench.motors if found.name == motor), None)
    has_encoder = bench_motor is None or bench_motor.encoder is not None
    sense = -1.0 if bench_motor is not None and bench_motor.sense < 0 else 1.0
    return Around(
        motor=motor,
        time_s=column(None),
        duty=column(f"{motor}.duty_pct") / 100,
        counts=column(f"{motor}.counts") * (sense if has_encoder else math.nan),
        current_a=column(f"{motor}.current_a"),
        supply_v=column("supply_v"),
        others={other: column(f"{other}.counts") for other in facts.motors if other != motor},
        other_duty={other: column(f"{other}.duty_pct") / 100 for other in facts.motors if other != motor},
        volts=math.nan if facts.bench is None else facts.bench.supply.voltage_v,
        locked_ohm=_locked_ohm(bench_motor),
        counts_per_rev=float(bench_motor.counts_per_turn) if bench_motor is not None else math.nan,
        has_trail=trail is not None,
    )


def _locked_ohm(motor: Motor | None) -> float | None:
    """Winding and bridge, from the bench's model."""
    if motor is None or motor.model is None:
        return None
    return motor.model.resistance_ohm + motor.model.bridge_ohm


def _trail_of(folder: Path, motor: str, tick: int) -> Piece | None:
    """The trail of this motor that spans the tick."""
    for path in sorted(folder.glob("trail*.csv")):
        try:
            scan = Scan(path)
            if f"{motor}.duty_pct" not in scan.names:
                continue
            piece = scan.tail()
        except RecordError:
            continue
        if len(piece) and piece.ticks[0] <= tick <= piece.ticks[-1] + 1:
            return piece
    return None


def _joined(times: Floats, tail: Piece, trail: Piece | None, tick: int, tick_us: int) -> Callable[[str | None], Floats]:
    """A way to get a column by name (None: the times) of the samples before the trail, the trail, and those after."""
    if trail is None:
        return lambda name: times if name is None else tail.numbers.get(name, np.full(len(times), np.nan))
    trail_times = (trail.ticks - tick) * tick_us / 1e6
    early, late = times < trail_times[0], times > trail_times[-1]

    def column(name: str | None) -> Floats:
        if name is None:
            return np.concatenate((times[early], trail_times, times[late]))
        slow = tail.numbers.get(name, np.full(len(times), np.nan))
        fast = trail.numbers.get(name, np.full(len(trail_times), np.nan))
        return np.concatenate((slow[early], fast, slow[late]))

    return column
