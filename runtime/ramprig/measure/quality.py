"""Whether data carry a result: each check raises NotMeasurable and says what is missing."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from ramprig.bench import Motor
from ramprig.quantity import format_current, format_duty

from .refusal import NotMeasurable
from .trace import MotorTrace

SATURATED_SHARE = 0.02
"""So many of the samples at the very greatest reading are no chance."""
SATURATED_LEAST = 10
MOTION_COUNTS = 12
REST_SAMPLES = 20


@dataclass(frozen=True, slots=True, kw_only=True)
class Zero:
    """The current sensor with the outputs off: mean, its standard uncertainty, and the noise of one reading."""

    mean_a: float
    mean_u_a: float
    noise_a: float

    @classmethod
    def of(cls, rest: MotorTrace) -> Zero:
        """From samples with the outputs off. Raises NotMeasurable where they are too few."""
        if len(rest) < REST_SAMPLES:
            raise NotMeasurable(f"{len(rest)} samples came with the outputs off", wanted=f"{REST_SAMPLES} or more")
        noise_a = float(rest.current_a.std(ddof=1))
        return cls(mean_a=float(rest.current_a.mean()), mean_u_a=noise_a / math.sqrt(len(rest)), noise_a=noise_a)


def need_encoder(motor: Motor) -> None:
    """Speed and position must be measured."""
    if motor.encoder is None:
        raise NotMeasurable(f"{motor.name} has no encoder", wanted="its speed and position are not measured")


def check_moves(motor: Motor, trace: MotorTrace, duty: int) -> None:
    """The shaft must have moved, in the direction of the duty; both are positive in `trace`."""
    moved = float(trace.counts[-1] - trace.counts[0]) if len(trace) else 0.0
    wanted = f"run `ramprig measure wiring --motor {motor.name}` first"
    if abs(moved) < MOTION_COUNTS:
        raise NotMeasurable(f"{motor.name} did not move up to {format_duty(abs(duty))}", wanted=wanted)
    if moved < 0:
        raise NotMeasurable(f"{motor.name} counts against the duty", wanted=wanted)


def check_not_saturated(trace: MotorTrace, *, noise_a: float) -> None:
    """The current sensor must not stand at its end: its greatest reading would come again and again.

    `noise_a` is the sensor's noise with the outputs off. One with less noise than its own resolution repeats every
    reading, so that nothing can be said of it.
    """
    size = np.abs(trace.current_a)
    differences = np.abs(np.diff(trace.current_a))
    step_a = float(differences[differences > 0].min(initial=np.inf)) if len(differences) else np.inf
    if not len(size) or not noise_a > 0.0 or (np.isfinite(step_a) and noise_a < step_a):
        return
    greatest = float(size.max())
    there = int(np.count_nonzero(size == greatest))
    if there >= max(SATURATED_LEAST, SATURATED_SHARE * len(size)):
        raise NotMeasurable(
            f"the current sensor stands at {format_current(greatest)} in {there} samples",
            wanted="it is saturated: a sensor with a wider range",
        )
