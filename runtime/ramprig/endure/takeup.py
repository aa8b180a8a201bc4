"""What the beginning of a drive shows: break-away, the delay of the motion, and the gear's lost motion at a reversal.

Lost motion needs both ends of the gear. It is told

- by pressing: the encoder on the motor's shaft, the output clamped, and held duties both ways under which the motor
  stands: the way between the two stands, the gear's winding up under that torque included;
- by a ramp: the encoder on the output, and a slow ramp from rest against the direction of the drive before. At a duty
  that grows evenly the position follows x = A (duty - d0)^2 once the motor turns, and the output is behind that by
  what the motor had to turn first: x + lost. Three factors of a parabola through the positions after the output has
  begun to move give it. Taken for one friction before and behind the play, and no lag: what that amounts to on a rig
  is a constant part of the figure, so trends of it are worth more than its size.

With an encoder on the motor's shaft and an output that is free, nothing here tells it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
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
EVEN_PCT = 0.06
"""How far a ramp's duty may be off a straight line: a ramp moves in whole hundredths."""
FIT_LEAST = 12
"""Samples of the ramp after the output has begun to move, fewer than which give no parabola."""
FIT_GROWTH = 1.5
"""The duty must grow by this factor at least after the output has begun to move."""


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
    begins = np.flatnonzero((signs != 0.0) & (np.concatenate(([0.0], signs[:-1])) != signs))
    found = []
    for first in map(int, begins):
        if first == 0 and abs(duty[0]) > FROM_REST_PCT:
            continue
        over = np.flatnonzero(signs[first:] != signs[first])
        end = first + int(over[0]) if len(over) else len(duty)
        earlier = counts[max(0, first - 5) : first + 1]
        if np.isnan(earlier).any() or np.ptp(earlier) > MOVED_COUNTS:
            continue
        moved = np.flatnonzero(np.abs(counts[first:end] - counts[first]) > MOVED_COUNTS)
        if not len(moved):
            continue
        falls = np.flatnonzero(np.diff(np.abs(duty[first:end])) <= 0.0)
        ends = first + int(falls[0]) if len(falls) else end
        driven = np.flatnonzero(signs[:first])
        after = float(signs[driven[-1]]) if len(driven) else 0.0
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


# ---- lost motion -----------------------------------------------------------------------------------------------------


def lost_motion_deg(
    times: Floats, channels: Mapping[str, Floats], starts: Sequence[Start], *, on_output: bool
) -> float:
    """Degrees at the output; NaN where the motion or the encoder's place does not show it. See the first lines."""
    duty, counts, position = channels["duty_pct"], channels["counts"], channels["position_rev"]
    if not on_output:
        return 360.0 * _pressed_rev(times, duty, counts, position)
    lost = [
        360.0 * _by_ramp_rev(duty, position, start)
        for start in starts
        if start.after == -start.sign and _is_even(times, duty, start)
    ]
    known = [each for each in lost if not math.isnan(each)]
    return float(np.mean(known)) if known else math.nan


def _is_even(times: Floats, duty: Floats, start: Start) -> bool:
    """Whether the duty grows slowly, and as a straight line, from the first sample to `ends`."""
    at, grown = times[start.first : start.ends], np.abs(duty[start.first : start.ends])
    if len(at) < FIT_LEAST or at[-1] <= at[0]:
        return False
    slew = (grown[-1] - grown[0]) / (at[-1] - at[0])
    line = grown[0] + slew * (at - at[0])
    return bool(slew <= SLOW_PCT_PER_S and np.abs(grown - line).max() <= EVEN_PCT)


def _by_ramp_rev(duty: Floats, position: Floats, start: Start) -> float:
    """The parabola's constant part; see the first lines."""
    grown, turned = np.abs(duty[start.moved : start.ends]), position[start.moved : start.ends]
    turned = (turned - position[start.first]) * start.sign
    known = ~np.isnan(turned)
    grown, turned = grown[known], turned[known]
    if len(grown) < FIT_LEAST or grown[-1] < FIT_GROWTH * grown[0]:
        return math.nan
    c0, c1, c2 = (float(each) for each in np.polynomial.Polynomial.fit(grown, turned, 2).convert().coef)
    if c2 <= 0.0 or c1 >= 0.0:
        return math.nan  # no motor that gets faster with its duty, from a duty above zero
    return c1 * c1 / (4.0 * c2) - c0


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
