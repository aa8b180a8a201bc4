"""Sweeps as strokes: triangle, steps and sine between two whole values, in ticks."""

from __future__ import annotations

import math
from itertools import pairwise

from .plan import Stroke

STROKE_TICKS_MIN_S = 0.02
"""No stroke of a sine is shorter: the link carries so many orders easily."""
STROKES_MIN = 4
STROKES_MAX = 400


def triangle(low: int, high: int, period: int) -> tuple[Stroke, ...]:
    """Up in the first half of `period` ticks, down in the rest."""
    half = period // 2
    return Stroke(0, half, high), Stroke(half, period - half, low)


def stairs(low: int, high: int, steps: int, change: int, pause: int) -> tuple[Stroke, ...]:
    """`steps` equal changes up, each in `change` ticks and followed by `pause`, and as many down."""
    levels = [low + round((high - low) * number / steps) for number in range(steps + 1)]
    targets = levels[1:] + levels[-2::-1]
    return tuple(Stroke(number * (change + pause), change, value) for number, value in enumerate(targets))


def largest_step(low: int, high: int, steps: int) -> int:
    """The greatest difference between two neighbouring levels of `stairs`."""
    levels = [low + round((high - low) * number / steps) for number in range(steps + 1)]
    return max(abs(after - before) for before, after in pairwise(levels))


def sine_strokes(low: int, high: int, period: int, *, error: float, shortest: int) -> int:
    """How many strokes a pass needs so that straight lines stay within `error` of the sine; even, 4 to 400.

    A chord over the angle h lies at most amplitude x h^2 / 8 from the curve (the error of linear interpolation).
    """
    amplitude = abs(high - low) / 2
    needed = 2 * math.pi / math.sqrt(8 * error / amplitude) if amplitude > 0 else STROKES_MIN
    allowed = max(STROKES_MIN, period // shortest)
    return 2 * math.ceil(min(max(needed, STROKES_MIN), allowed, STROKES_MAX) / 2)


def sine(low: int, high: int, period: int, strokes: int) -> tuple[Stroke, ...]:
    """One period of a sine that begins and ends at `low`, as `strokes` straight lines of nearly equal length."""
    ticks = [round(period * number / strokes) for number in range(strokes + 1)]
    middle, amplitude = (low + high) / 2, (high - low) / 2
    values = [round(middle - amplitude * math.cos(2 * math.pi * number / strokes)) for number in range(strokes + 1)]
    values[0] = values[-1] = low
    return tuple(
        Stroke(begin, end - begin, value) for begin, end, value in zip(ticks, ticks[1:], values[1:], strict=False)
    )
