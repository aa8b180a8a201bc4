"""Where a shaft breaks away and where it stops again, read off a slow ramp of the duty up and down. Pure.

A ramp changes the duty steadily. The shaft breaks away before its first count comes, and its speed lags behind the duty
by the mechanical time constant; both are taken out, so that what is left belongs to the motor and not to the encoder's
resolution or the ramp's steepness.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .trace import Floats, MotorTrace

FIRST_COUNTS = 12
"""The curve of the first motion is laid through so many counts."""
LAST_COUNTS = 24
"""The curve of the last motion is laid through so many counts."""
BEGINS_TRIED = 200
RUN_COUNTS_MIN = 24
"""Fewer counts than this on one ramp are no run."""
FLICKER_S = 0.5
"""A gap this long between two counts ends a run."""
STILL_COUNTS = 2
"""A count this near the rest position may be an edge that flickers."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Excursion:
    """One ramp up and down: duties as shares of full drive, both positive.

    `breakaway` is where the shaft began to turn, `dropout` where it came to rest; each with what reading it off is
    uncertain by (standard uncertainty). `angle` is the count at which the shaft stood before it.
    """

    breakaway: float
    breakaway_u: float
    dropout: float
    dropout_u: float
    angle: float


def excursion(up: MotorTrace, down: MotorTrace) -> Excursion | None:
    """What one ramp shows; None where the shaft did not run.

    `up` begins with the shaft at rest and ends at the top, `down` goes on from there until it rests again. Counts and
    duty must be positive in the direction of the motion.
    """
    if len(up) < 10 or len(down) < 10:
        return None
    start = float(up.counts[0])
    if float(up.counts[-1] - start) < RUN_COUNTS_MIN or float(down.counts[-1] - down.counts[0]) < RUN_COUNTS_MIN:
        return None
    times, reached = _first_run(up.time_s, up.counts - start)
    lag, growth = _lag(up, down, float(times[0]))
    rate = _rate(up)
    begin_s, begin_u_s = _begin_of_motion(times, reached, lag_s=lag / rate if rate else 0.0, growth=growth)
    stop_s, stop_u_s = _end_of_motion(down)
    return Excursion(
        breakaway=_duty_at(up, begin_s),
        breakaway_u=rate * begin_u_s,
        dropout=_duty_at(down, stop_s) + lag,
        dropout_u=float(np.hypot(_rate(down) * stop_u_s, 0.3 * lag)),
        angle=start,
    )


def _rate(trace: MotorTrace) -> float:
    """Change of the duty a second, over the part in which it changes."""
    moving = np.flatnonzero(np.diff(trace.duty))
    if len(moving) < 2:
        return 0.0
    first, last = moving[0], moving[-1] + 1
    return float((trace.duty[last] - trace.duty[first]) / (trace.time_s[last] - trace.time_s[first]))


def _duty_at(trace: MotorTrace, time_s: float) -> float:
    return float(np.interp(time_s, trace.time_s, trace.duty))


def _first_times(time_s: Floats, counts: Floats) -> tuple[Floats, Floats]:
    """When each further count was first passed, and that count; a flicker of edges is passed over."""
    highest = np.maximum.accumulate(counts)
    places = np.flatnonzero(np.diff(highest, prepend=0.0) > 0)
    return time_s[places], highest[places]


def _first_run(time_s: Floats, counts: Floats) -> tuple[Floats, Floats]:
    """The first counts of the run, each with its time; an edge that flickered long before is none of it."""
    times, reached = _first_times(time_s, counts)
    steady = np.flatnonzero(reached > STILL_COUNTS)
    first = int(steady[0]) if len(steady) else 0
    while first > 0 and times[first] - times[first - 1] < FLICKER_S:
        first -= 1
    return times[first : first + FIRST_COUNTS], reached[first : first + FIRST_COUNTS]


def _begin_of_motion(times: Floats, reached: Floats, *, lag_s: float, growth: float) -> tuple[float, float]:
    """When the shaft broke away, with its standard uncertainty.

    At break-away the torque jumps from the static to the running friction, and the speed begins to follow the duty with
    its lag T: the angle is A (s - T (1 - e^(-s/T))) + G (s^2/2 - T s + T^2 (1 - e^(-s/T))) for s since then, G being
    the growth of the speed on the ramp. Begins are tried one by one; the jump A and the part of a count at which the
    shaft stood follow by least squares.
    """
    first = float(times[0])
    if len(times) < 4:
        return first, float(times[-1] - times[0]) / 2 or 0.01
    span = float(times[-1] - times[0])
    lag_s = max(lag_s, 1e-3)
    best = (np.inf, first)
    for begin in np.linspace(first - span, first, BEGINS_TRIED):
        since = times - begin
        rest = -np.expm1(-since / lag_s)
        grown = growth * (since**2 / 2 - lag_s * since + lag_s**2 * rest)
        shape = since - lag_s * rest
        jump, part = np.linalg.lstsq(np.stack([shape, np.ones_like(shape)], axis=1), reached - grown, rcond=None)[0]
        jump, part = max(float(jump), 0.0), min(max(float(part), 0.0), 1.0)
        left = reached - grown - jump * shape - part
        best = min(best, (float(left @ left), float(begin)))
    return best[1], max(first - best[1], float(times[1] - times[0]), span / BEGINS_TRIED) / np.sqrt(12.0)


def _end_of_motion(down: MotorTrace) -> tuple[float, float]:
    """When the shaft came to rest: the speed falls with the duty, so the counts end in a parabola."""
    left = down.counts[-1] - down.counts
    times, reached = _first_times(-down.time_s[::-1], left[::-1])
    times = -times
    last = float(times[0])
    near = slice(0, min(len(times), LAST_COUNTS))
    if len(times[near]) < 4:
        return last, abs(float(times[-1] - times[0])) / 2
    gap = float(times[0] - times[1])
    curve, slope, _ = np.polyfit(times[near] - last, reached[near], 2)
    vertex = -slope / (2 * curve) if curve > 0 else 0.0
    vertex = min(max(vertex, 0.0), 2.0 * gap)
    return last + vertex, max(vertex, gap) / np.sqrt(12.0)


def _line(time_s: Floats, counts: Floats, duty: Floats) -> tuple[float, float] | None:
    """Of a run on a ramp: the duty at which the speed, as a line over the time, is zero, and its growth a second.

    Counts are the integral of the speed: a parabola over the time, whose slope is zero at the duty wanted.
    """
    if len(time_s) < 12:
        return None
    middle = float(time_s.mean())
    curve, slope, _ = np.polyfit(time_s - middle, counts, 2)
    if curve == 0.0:
        return None
    rate, begin = np.polyfit(time_s - middle, duty, 1)
    return float(begin - rate * slope / (2 * curve)), float(2 * curve)


def _lag(up: MotorTrace, down: MotorTrace, begin_s: float) -> tuple[float, float]:
    """How far the speed lags behind the duty, as a duty, and how fast it grows on the ramp up, in counts/s^2.

    The lag is half of what the two runs differ by, never below 0.
    """
    length_s = float(up.time_s[-1] - begin_s)
    late = up.where((up.time_s > begin_s + 0.4 * length_s) & _changing(up.duty))
    early = down.where((down.time_s < down.time_s[0] + 0.6 * length_s) & _changing(down.duty))
    rising, falling = (_line(run.time_s, run.counts, run.duty) for run in (late, early))
    if rising is None or falling is None:
        return 0.0, 0.0
    return max(0.0, min((rising[0] - falling[0]) / 2, 0.5 * float(up.duty.max()))), max(0.0, rising[1])


def _changing(duty: Floats) -> NDArray[np.bool_]:
    found: NDArray[np.bool_] = np.diff(duty, prepend=duty[0] - 1.0) != 0.0
    return found
