"""Reduces what one motor did in one cycle to the few numbers that age shows in.

Each direction is told apart, since brushes and gears wear by direction. What the cycle does not show is NaN. The
figures below are choices of this program and no standard.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .takeup import Start, balances, breakaway, delay_s, lost_motion_deg, resistance_ohm, starts_of

Floats = NDArray[np.float64]

HOLD_S = 0.4
"""A duty held for so long is a hold; its second half is taken as steady."""
AT_SPEED = 0.95
"""Share of the steady speed at which the motor has come to speed."""
AT_REST = 0.05
"""Share of the steady speed below which it has run down."""
UNDER_WAY = 0.15
"""A cycle whose first duty is more than this share of the hold's begins with the motor under way."""
GAP_S = 0.5
"""No energy is counted over a gap in the samples longer than this."""
CHANNELS = ("duty_pct", "counts", "position_rev", "speed_rpm", "current_a")
"""The columns of each motor that are read, beside `supply_v`."""


@dataclass(frozen=True, slots=True, kw_only=True)
class DriveFeatures:
    """One direction of one motor, from its longest hold: sizes without sign.

    `time_to_speed_s` counts from the first duty, the ramp included; `coast_down_s` from the end of the hold to
    AT_REST of the steady speed, the fall of the duty included. The others are of its first start from rest:
    `start_delay_s` from the first duty to the first motion of the encoder, behind whose gear the play is taken up
    meanwhile; `breakaway_duty_pct` and `breakaway_current_a` at the first motion of a slow ramp; with
    the encoder on the output, of one that follows a drive the same way.
    """

    steady_current_a: float = math.nan
    steady_speed_rpm: float = math.nan
    time_to_speed_s: float = math.nan
    coast_down_s: float = math.nan
    breakaway_duty_pct: float = math.nan
    breakaway_current_a: float = math.nan
    start_delay_s: float = math.nan


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorFeatures:
    """One motor in one cycle.

    `energy_j` goes into the motor: supply times duty times current, summed. `position_error_rev` is how far from its
    beginning a cycle that drives both ways ends, at the output shaft; `travel_ratio` the travel backward for each turn
    forward, which is judged in its place: an error about zero has no share of itself. `lost_motion_deg` is the gear's
    lost motion at reversal, at the output, `resistance_ohm` that of winding, brushes, leads and bridge, as warm as they
    are (copper's grows by 0.39 % a kelvin); `takeup` says how they are measured, and when they cannot be.
    """

    forward: DriveFeatures = DriveFeatures()
    backward: DriveFeatures = DriveFeatures()
    peak_current_a: float = math.nan
    energy_j: float = math.nan
    position_error_rev: float = math.nan
    travel_ratio: float = math.nan
    lost_motion_deg: float = math.nan
    resistance_ohm: float = math.nan


def motor_features(
    times: Floats, channels: Mapping[str, Floats], supply: Floats, *, on_output: bool = False
) -> MotorFeatures:
    """Reduce one cycle: `times` (n,) s, not decreasing, `channels` by CHANNELS and `supply` (n,) V; NaN is missing.

    `on_output` says where the encoder sits.
    """
    if len(times) < 2:
        return MotorFeatures()
    duty, current = channels["duty_pct"], channels["current_a"]
    sizes = np.abs(current[~np.isnan(current)])
    power = np.nan_to_num(supply * duty / 100.0 * current)
    steps = np.diff(times)
    steps[steps > GAP_S] = 0.0
    has_energy = bool(np.any(~np.isnan(supply) & ~np.isnan(duty) & ~np.isnan(current)))
    error, ratio = _travels(duty, channels["position_rev"])
    starts = starts_of(duty, channels["counts"])
    balance = list(balances(times, channels, supply, starts))
    return MotorFeatures(
        forward=_drive(times, channels, 1.0, starts, on_output=on_output),
        backward=_drive(times, channels, -1.0, starts, on_output=on_output),
        peak_current_a=float(sizes.max()) if len(sizes) else math.nan,
        energy_j=float((power[1:] + power[:-1]) @ steps / 2.0) if has_energy else math.nan,
        position_error_rev=error,
        travel_ratio=ratio,
        lost_motion_deg=lost_motion_deg(times, channels, balance, on_output=on_output),
        resistance_ohm=resistance_ohm(balance),
    )


def _travels(duty: Floats, position: Floats) -> tuple[float, float]:
    """Position error, and travel backward for each turn forward, of a cycle that drives both ways."""
    known = position[~np.isnan(position)]
    if len(known) < 2 or not (np.any(duty > 0) and np.any(duty < 0)):
        return math.nan, math.nan
    moved = np.diff(known)
    out, back = float(moved[moved > 0].sum()), -float(moved[moved < 0].sum())
    return float(known[-1] - known[0]), back / out if out > 0.0 else math.nan


def _drive(
    times: Floats, channels: Mapping[str, Floats], sign: float, starts: Sequence[Start], *, on_output: bool
) -> DriveFeatures:
    """One direction, told by its longest hold; what its starts show is told without a hold, too."""
    duty = channels["duty_pct"] * sign
    started = _started(times, channels, [start for start in starts if start.sign == sign], on_output=on_output)
    begin, end = _longest_hold(times, duty)
    if end <= begin:
        return started
    speed, current = channels["speed_rpm"] * sign, channels["current_a"] * sign
    middle = int(np.searchsorted(times, (times[begin] + times[end - 1]) / 2.0))
    steady_speed = _mean(speed[middle:end])
    before = np.flatnonzero(~(duty[:begin] > 0.0))
    # A cycle that begins under way does not show how long the motor took; one that begins with the ramp does.
    begun = end if duty[0] > UNDER_WAY * duty[begin] else 0
    first = int(before[-1]) if len(before) else begun
    driven = np.flatnonzero(duty[end:] != 0.0)
    # The duty falls to zero, stays there, and ends with the next drive: of the other direction, or a rising one.
    zero = np.flatnonzero(duty[end:] == 0.0)
    again = driven[driven > zero[0]] if len(zero) else driven[:0]
    until = end + int(again[0]) if len(again) else len(times)
    return replace(
        started,
        steady_current_a=_mean(current[middle:end]),
        steady_speed_rpm=steady_speed,
        time_to_speed_s=_crossing(times[first:end], speed[first:end], AT_SPEED * steady_speed),
        coast_down_s=_crossing(times[end - 1 : until], -speed[end - 1 : until], -AT_REST * steady_speed),
    )


def _started(
    times: Floats, channels: Mapping[str, Floats], starts: Sequence[Start], *, on_output: bool
) -> DriveFeatures:
    """What the starts of one direction show: the first one's delay, and the first break-away of a slow ramp.

    An encoder on the output shows a break-away only where the drive before was the same way, so that no play is left.
    """
    if not starts:
        return DriveFeatures()
    ready = [start for start in starts if not on_output or start.after == start.sign]
    found = (breakaway(times, channels, start) for start in ready)
    duty_pct, current_a = next((each for each in found if not math.isnan(each[0])), (math.nan, math.nan))
    return DriveFeatures(
        start_delay_s=delay_s(times, channels["counts"], starts[0]),
        breakaway_duty_pct=duty_pct,
        breakaway_current_a=current_a,
    )


def _longest_hold(times: Floats, duty: Floats) -> tuple[int, int]:
    """First and last-but-one sample of the longest time at one positive duty; (0, 0) where none is a hold."""
    begins = np.flatnonzero(np.diff(duty, prepend=math.nan) != 0)  # NaN differs from everything
    ends = np.append(begins[1:], len(duty))
    lasts = np.where(duty[begins] > 0.0, times[ends - 1] - times[begins], 0.0)
    longest = int(np.argmax(lasts))
    return (int(begins[longest]), int(ends[longest])) if lasts[longest] >= HOLD_S else (0, 0)


def _mean(values: Floats) -> float:
    known = values[~np.isnan(values)]
    return float(known.mean()) if len(known) else math.nan


def _crossing(times: Floats, values: Floats, level: float) -> float:
    """Time from the first sample until `values` reach `level` from below, between two samples; NaN if never."""
    known = ~np.isnan(values)
    at, values = times[known], values[known]
    reached = np.flatnonzero(values >= level)
    if math.isnan(level) or not len(reached):
        return math.nan
    k = int(reached[0])
    if k == 0:
        return float(at[0] - times[0])
    share = (level - values[k - 1]) / (values[k] - values[k - 1])
    return float(at[k - 1] + share * (at[k] - at[k - 1]) - times[0])
