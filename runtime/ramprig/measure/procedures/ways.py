"""What a motor does in each direction, as the procedures find it and the pictures draw it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from ramprig.measure.deadband import Excursion
from ramprig.measure.numbers.fit import Fit
from ramprig.measure.numbers.uncertainty import coverage_factor
from ramprig.measure.trace import Floats, MotorTrace

WAYS = (1, -1)
WORDS = {1: "forward", -1: "backward"}


def facing(trace: MotorTrace, sign: int) -> MotorTrace:
    """The trace with duty, counts and current positive in this direction, counts from 0."""
    return MotorTrace(
        time_s=trace.time_s,
        duty=sign * trace.duty,
        counts=sign * (trace.counts - trace.counts[0]),
        current_a=sign * trace.current_a,
        supply_v=trace.supply_v,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Level:
    """One level of the staircase: duty (share, signed), speed in rpm, current in A without offset, and how it went.

    `speed_u_rpm` and `current_u_a` are standard uncertainties, `rising` tells whether it was approached from below.
    """

    duty: float
    speed_rpm: float
    speed_u_rpm: float
    current_a: float
    current_u_a: float
    rising: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Way:
    """One direction: its ramps through the dead band, its levels, and the line speed = slope (duty - offset)."""

    sign: int
    excursions: tuple[Excursion, ...]
    levels: tuple[Level, ...]
    line: Fit
    linear: tuple[float, float]
    hysteresis_rpm: float

    def band_rpm(self, duty: Floats) -> Floats:
        """Half the width of the 95 % confidence band of the line at these duties (shares, positive), in rpm."""
        design = np.stack([np.ones_like(duty), duty], axis=1)
        variance = np.einsum("ij,jk,ik->i", design, self.line.covariance, design)
        half: Floats = coverage_factor(self.line.dof) * np.sqrt(variance)
        return half


@dataclass(frozen=True, slots=True, kw_only=True)
class RunDown:
    """One run-down: when the bridge went off, the samples since then, and the fit (in counts and s)."""

    sign: int
    trace: MotorTrace
    fit: Fit
    kept_s: float
    length_s: float
    length_u_s: float
    counts: float
