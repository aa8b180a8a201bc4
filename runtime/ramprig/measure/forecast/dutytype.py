"""Which duty type of IEC 60034-1 a run comes nearest to, from one pass of its duty; the words S1 to S9.

The standard's texts are from memory, and where a type begins is ours: a run is matched to the nearest type, no more.
S10 (discrete constant loads) asks for loads that a bench without load measurement does not know.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.quantity import digits

Floats = NDArray[np.float64]

ON_DUTY = 0.005
"""From this duty on a motor counts as driven."""
SETTLED_TAUS = 3.0
"""Driven for so many time constants a winding has reached its steady temperature, within 5 %."""
START_HEAT = 0.10
"""From this share of the heat on, starts count."""
RAMP_PER_S = 0.01
"""A duty that changes faster than this, as a share of full a second, is on a ramp."""
LEVEL_STEP = 0.05
"""Duties nearer than this are one level."""
UNLOADED = 0.25
"""A level whose heat is below this share of the greatest level's runs idle."""
CDF_NAMED = (15, 25, 40, 60)
"""The cyclic duration factors that the standard names, in percent."""


@dataclass(frozen=True, slots=True, kw_only=True)
class DutyType:
    """The type's word, such as `S3`, with the cyclic duration factor (0 to 1), and why in a sentence."""

    word: str
    factor: float
    why: str

    def __str__(self) -> str:
        return self.why


def duty_type(
    duty: Floats, square_a2: Floats, row_s: float, *, tau_s: float, periodic: bool, brakes: bool = False
) -> DutyType:
    """The type of a pass. `duty` (signed share) and `square_a2` have a value each `row_s`.

    `periodic` says that passes like this follow each other, `tau_s` is the winding's time constant, and `brakes` that
    the motor is braked electrically (a shorted winding; a duty ramped down gives energy back as well).
    """
    size = np.abs(duty)
    on = size >= ON_DUTY
    if not on.any():
        return DutyType(word="none", factor=0.0, why="the motor is not driven")
    factor = float(on.mean())
    cdf = f"{100 * factor:.0f} %"
    slope = np.abs(np.diff(size, prepend=size[0])) / row_s
    moving = on & (np.convolve(slope, np.ones(5) / 5, mode="same") > RAMP_PER_S)
    heat = float(square_a2.sum())
    start_share = float(square_a2[moving].sum()) / heat if heat > 0.0 else 0.0
    levels = _levels(duty[on & ~moving], square_a2[on & ~moving])
    longest_s = _longest(on) * row_s
    lasting_off_s = _longest(~on) * row_s
    if not periodic:
        if longest_s >= SETTLED_TAUS * tau_s and len(levels) <= 1:
            return DutyType(word="S1", factor=factor, why="S1: continuous, it reaches its steady temperature")
        if _bursts(on) == 1 and len(levels) <= 1:
            return DutyType(
                word="S2", factor=factor, why=f"S2 {digits(longest_s / 60, 2)} min: one short time, then at rest"
            )
        return DutyType(word="S9", factor=factor, why="S9: load and speed vary without a period")
    if lasting_off_s == 0.0 or factor > 0.99:
        return _continuous(levels, factor, brakes=brakes)
    if start_share < START_HEAT and not brakes and len(levels) <= 1:
        return DutyType(word="S3", factor=factor, why=f"S3 {cdf}: intermittent, starts add little heat")
    if len(levels) > 1:
        why = f"nearest S5 {cdf} (with several speeds and rests between, no type fits well)"
        return DutyType(word="S5", factor=factor, why=why)
    share = f"starts and stops make {100 * start_share:.0f} % of the heat"
    if brakes:
        return DutyType(word="S5", factor=factor, why=f"S5 {cdf}: intermittent with electric braking; {share}")
    return DutyType(word="S4", factor=factor, why=f"S4 {cdf}: intermittent with starting; {share}")


def _continuous(levels: list[tuple[float, float]], factor: float, *, brakes: bool) -> DutyType:
    """Never at rest."""
    if len(levels) <= 1:
        if brakes or len(levels) == 0:
            return DutyType(word="S7", factor=factor, why="S7: without rest, with electric braking")
        return DutyType(word="S1", factor=factor, why="S1: continuous, one load")
    loudest = max(heat for _, heat in levels)
    if len(levels) == 2 and min(heat for _, heat in levels) < UNLOADED * loudest:
        return DutyType(word="S6", factor=factor, why="S6: without rest, loaded and idle by turns")
    return DutyType(word="S8", factor=factor, why=f"S8: without rest, {len(levels)} speeds by turns")


def _levels(duty: Floats, square_a2: Floats) -> list[tuple[float, float]]:
    """The steady duties, each with its mean square of the current; both ways are one level."""
    found: list[tuple[float, float]] = []
    size = np.abs(duty)
    for level in np.unique(np.round(size / LEVEL_STEP)):
        here = np.round(size / LEVEL_STEP) == level
        if here.mean() > 0.02:
            found.append((float(size[here].mean()), float(square_a2[here].mean())))
    merged: list[tuple[float, float]] = []
    for one in found:
        if merged and one[0] - merged[-1][0] < LEVEL_STEP:
            continue
        merged.append(one)
    return merged


def _longest(kept: NDArray[np.bool_]) -> int:
    """The longest run of true values."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], kept, [False]]).astype(np.int8)))
    return int((edges[1::2] - edges[::2]).max(initial=0))


def _bursts(kept: NDArray[np.bool_]) -> int:
    return int(np.count_nonzero(np.diff(np.concatenate([[False], kept]).astype(np.int8)) == 1))
