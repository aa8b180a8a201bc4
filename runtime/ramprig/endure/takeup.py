"""What the beginning of a drive shows: break-away, its delay, the resistance, and the gear's lost motion at a reversal.

A slow ramp from rest is a measurement of the motor by itself. By its voltage balance, duty times supply is resistance
times current plus constant times speed (the inductance's share is nothing in a slow ramp). Summed up over time from
rest, the output has turned by

    position = a * sum(duty supply dt) - b * sum(current dt) - lost

with b / a the resistance of winding, brushes, leads and bridge together, whatever friction and load are. Least squares
over the samples after the encoder has begun to move give a, b, and what the motor turned before the output followed.
That is the lost motion of the gear where the encoder sits on the output and the drive before was the other way.

With the encoder on the motor's shaft, lost motion is told where the output is clamped and the motor pressed both ways:
the way between the two stands, the gear's winding up under that torque included. With an output that is free, an
encoder on the motor's shaft cannot tell it.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

MOVED_COUNTS = 2
"""More counts than this are a motion; fewer are a shaft that trembles on an edge."""
SLOW_PCT_PER_S = 25.0
"""A ramp steeper than this passes the break-away duty before the counts can tell; no break-away is given then."""
FROM_REST_PCT = 3.0
"""A cycle whose first duty is no more than this is taken to begin at rest."""
LINE_LEAST = 3
"""Samples before the first motion, fewer than which give no break-away current."""
STAND_S = 0.4
"""A duty held for so long is looked at for a motor that stands under it, in its second half."""
LOST_MOST_REV = 10.0 / 360.0
"""A motor that is pressed both ways and turns its output further than this is between stops, not in its play."""
FIT_LEAST = 12
"""Samples of the ramp after the encoder has begun to move, fewer than which give nothing."""
FIT_GROWTH = 1.5
"""The duty must grow by this factor at least after the encoder has begun to move."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Start:
    """One start from rest in the samples of a motor: `first` is the first driven sample, `moved` that of the motion.

    `sign` is the direction of the duty, `after` that of the drive before it in the same cycle, 0 where there is none.
    The duty grows up to `ends`, the sample that ends the ramp, with a step that may be shorter than the others.
    """

    first: int
    moved: int
    ends: int
    sign: float
    after: float


def starts_of(duty: Floats, counts: Floats) -> list[Start]:
    """The starts from rest, in order; `duty` (n,) %, `counts` (n,); NaN is missing, and no start is found beside it."""
    signs = np.sign(np.nan_to_num(duty))
    changes = np.flatnonzero(signs != np.concatenate(([0.0], signs[:-1])))
    if not len(changes):
        return []
    last_driven = np.maximum.accumulate(np.where(signs != 0.0, np.arange(len(signs)), -1))
    found = []
    for first, end in zip(changes.tolist(), [*changes[1:].tolist(), len(signs)], strict=True):
        if signs[first] == 0.0 or (first == 0 and abs(duty[0]) > FROM_REST_PCT):
            continue
        earlier = counts[max(0, first - 5) : first + 1]
        if np.isnan(earlier).any() or np.ptp(earlier) > MOVED_COUNTS:
            continue
        moved = np.flatnonzero(np.abs(counts[first:end] - counts[first]) > MOVED_COUNTS)
        if not len(moved):
            continue
        falls = np.flatnonzero(np.diff(np.abs(duty[first:end])) <= 0.0)
        ends = first + int(falls[0]) if len(falls) else end
        before = int(last_driven[first - 1]) if first else -1
        after = float(signs[before]) if before >= 0 else 0.0
        found.append(Start(first=first, moved=first + int(moved[0]), ends=ends, sign=float(signs[first]), after=after))
    return found


def moved_s(times: Floats, counts: Floats, start: Start) -> float:
    """When the encoder had moved by MOVED_COUNTS and a half, between two samples."""
    k, level = start.moved, MOVED_COUNTS + 0.5
    before, after = (float(abs(counts[at] - counts[start.first])) for at in (k - 1, k))
    if math.isnan(before):
        return float(times[k])
    return float(times[k - 1] + (level - before) / (after - before) * (times[k] - times[k - 1]))


def delay_s(times: Floats, counts: Floats, start: Start) -> float:
    """Time from the first duty to the first motion of the encoder."""
    return moved_s(times, counts, start) - float(times[max(0, start.first - 1)])


def breakaway(times: Floats, channels: Mapping[str, Floats], start: Start) -> tuple[float, float]:
    """Duty in %, and current in A by a straight line through those before, at the first motion of a slow ramp.

    Sizes without sign; NaN where the ramp is steeper than SLOW_PCT_PER_S, or over before anything moves.
    """
    first, moved = start.first, start.moved
    before = max(0, first - 1)
    duty = channels["duty_pct"] * start.sign
    slew = (duty[moved] - duty[before]) / max(float(times[moved] - times[before]), 1e-9)
    if not 0.0 < slew <= SLOW_PCT_PER_S:
        return math.nan, math.nan
    at_s = moved_s(times, channels["counts"], start)
    current = channels["current_a"][before:moved] * start.sign
    seen = ~np.isnan(current)
    size = math.nan
    if np.count_nonzero(seen) >= LINE_LEAST:
        size = float(np.polynomial.polynomial.polyfit(times[before:moved][seen] - at_s, current[seen], 1)[0])
    return float(np.interp(at_s, times[moved - 1 : moved + 1], duty[moved - 1 : moved + 1])), size


# ---- resistance and lost motion --------------------------------------------------------------------------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class Balance:
    """The voltage balance of a slow ramp: `lost_rev` is in turns of the output.

    `after_other_way` says that the drive before was of the other direction, so that the gear had play to take up.
    """

    lost_rev: float
    resistance_ohm: float
    after_other_way: bool


def balances(
    times: Floats, channels: Mapping[str, Floats], supply: Floats, starts: Sequence[Start]
) -> Iterator[Balance]:
    """That of each slow ramp from rest that shows it; see the first lines. `supply` (n,) is in V."""
    for start in starts:
        begin = max(0, start.first - 1)
        part = slice(begin, start.ends)
        grown, at, bus = np.abs(channels["duty_pct"][part]) / 100.0, times[part], supply[part]
        current = channels["current_a"][part] * start.sign
        turned = (channels["position_rev"][part] - channels["position_rev"][start.first]) * start.sign
        free = start.moved - begin
        if len(at) - free < FIT_LEAST or grown[-1] < FIT_GROWTH * grown[free]:
            continue
        is_slow = 100.0 * (grown[-1] - grown[0]) <= SLOW_PCT_PER_S * (at[-1] - at[0])
        if not is_slow or np.isnan(grown + bus + current + turned).any():
            continue
        columns = (_summed(at, grown * bus)[free:], -_summed(at, current)[free:], -np.ones(len(at) - free))
        driving, dropping, lost = (float(each) for each in np.linalg.lstsq(np.column_stack(columns), turned[free:])[0])
        if driving > 0.0 and dropping > 0.0:  # else it is no motor that was measured
            yield Balance(lost_rev=lost, resistance_ohm=dropping / driving, after_other_way=start.after == -start.sign)


def _summed(times: Floats, values: Floats) -> Floats:
    """The integral up to each sample, by trapezes."""
    parts = (values[1:] + values[:-1]) / 2.0 * np.diff(times)
    return np.concatenate(([0.0], np.cumsum(parts)))


def resistance_ohm(found: Sequence[Balance]) -> float:
    """The mean of the cycle's slow ramps; NaN without one."""
    return float(np.mean([each.resistance_ohm for each in found])) if found else math.nan


def lost_motion_deg(
    times: Floats, channels: Mapping[str, Floats], found: Sequence[Balance], *, on_output: bool
) -> float:
    """Degrees at the output; NaN where the motion or the encoder's place does not show it. See the first lines."""
    if not on_output:
        return 360.0 * _pressed_rev(times, channels["duty_pct"], channels["counts"], channels["position_rev"])
    lost = [each.lost_rev for each in found if each.after_other_way]
    return 360.0 * float(np.mean(lost)) if lost else math.nan


def _pressed_rev(times: Floats, duty: Floats, counts: Floats, position: Floats) -> float:
    """The way between neighbouring stands under opposite duties, the mean of all of them."""
    begins = np.flatnonzero(np.diff(duty, prepend=math.nan) != 0)  # NaN differs from everything
    ends = np.append(begins[1:], len(duty))
    stands: list[tuple[float, float]] = []
    for begin, end in zip(begins.tolist(), ends.tolist(), strict=True):
        if not abs(duty[begin]) > 0.0 or times[end - 1] - times[begin] < STAND_S:
            continue
        middle = int(np.searchsorted(times, (times[begin] + times[end - 1]) / 2.0))
        seen = counts[middle:end]
        if not np.isnan(seen).any() and np.ptp(seen) <= MOVED_COUNTS:
            stands.append((float(np.sign(duty[begin])), float(np.mean(position[middle:end]))))
    ways = [(b - a) * sign for (other, a), (sign, b) in pairwise(stands) if sign * other < 0.0]
    if not ways or max(ways) > LOST_MOST_REV or min(ways) < 0.0:
        return math.nan
    return float(np.mean(ways))
