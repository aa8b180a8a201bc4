"""How long a servo takes, as far as a bench without an encoder on its horn can tell: by the supply's sag.

A hobby servo tells nothing of where it is. What is known is the pulse that the board sent, and that a servo draws more
while it moves: the supply sags, and recovers when the servo has arrived. That shows where no motor is driven meanwhile
and the supply's reading is fine enough. A servo that stands against something keeps drawing: then there is no time.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

QUIET_S = 0.2
"""The supply is looked at for so long before the move."""
SAG_LEAST_V = 0.01
"""A sag smaller than this, or than SAG_SIGMAS of the reading's noise, tells nothing."""
SAG_SIGMAS = 6.0
STEADY_US = 1.0
"""A pulse that changes by no more than this from sample to sample stands."""
PAUSE_S = 0.1
"""A pulse that stands for so long has arrived."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ServoFeatures:
    """One servo in one cycle, from its longest move.

    `commanded_move_time_s` is how long the pulse was on its way, which the board decides; `move_time_s` how long the
    supply sagged, from the pulse's first change to where half of the sag has gone, after the pulse had arrived;
    `supply_sag_v` by how much it sagged at the move's middle half. NaN is what the bench does not show.
    """

    commanded_move_time_s: float = math.nan
    move_time_s: float = math.nan
    supply_sag_v: float = math.nan


def servo_features(times: Floats, pulse_us: Floats, supply: Floats, driven: NDArray[np.bool_]) -> ServoFeatures:
    """Reduce one cycle: (n,) each; `driven` says whether any motor is, in each sample. A pulse of 0 is none."""
    begin, end = _longest_move(times, pulse_us)
    if end <= begin:
        return ServoFeatures()
    commanded_s = float(times[end] - times[begin])
    quiet = int(np.searchsorted(times, times[begin] - QUIET_S))
    changed = np.flatnonzero(np.abs(np.diff(pulse_us[end:])) > STEADY_US)
    until = end + int(changed[0]) + 1 if len(changed) else len(times)
    busy = np.flatnonzero(driven[end:until])
    until = end + int(busy[0]) if len(busy) else until
    before = supply[quiet:begin]
    if driven[quiet:end].any() or len(before) < 3 or np.isnan(supply[quiet:until]).any():
        return ServoFeatures(commanded_move_time_s=commanded_s)
    level_v, noise_v = float(before.mean()), float(before.std(ddof=1))
    quarter = (end - begin) // 4
    sag_v = level_v - float(supply[begin + quarter : max(begin + quarter + 1, end - quarter)].mean())
    if sag_v < max(SAG_LEAST_V, SAG_SIGMAS * noise_v):
        return ServoFeatures(commanded_move_time_s=commanded_s)
    recovered = np.flatnonzero(supply[end:until] >= level_v - sag_v / 2.0)
    move_s = float(times[end + int(recovered[0])] - times[begin]) if len(recovered) else math.nan
    return ServoFeatures(commanded_move_time_s=commanded_s, move_time_s=move_s, supply_sag_v=sag_v)


def _longest_move(times: Floats, pulse_us: Floats) -> tuple[int, int]:
    """Last sample before the pulse's longest change and first one after it; (0, 0) where it does not change."""
    steps = np.abs(np.diff(pulse_us))
    is_on = (pulse_us[:-1] > 0.0) & (pulse_us[1:] > 0.0)
    moving = np.flatnonzero(is_on & (steps > STEADY_US))
    if not len(moving):
        return 0, 0
    breaks = np.flatnonzero(np.diff(times[moving]) > PAUSE_S)
    firsts = np.concatenate(([0], breaks + 1))
    lasts = np.concatenate((breaks, [len(moving) - 1]))
    ways = [abs(float(pulse_us[moving[b] + 1] - pulse_us[moving[a]])) for a, b in zip(firsts, lasts, strict=True)]
    longest = int(np.argmax(ways))
    return int(moving[firsts[longest]]), int(moving[lasts[longest]]) + 1
