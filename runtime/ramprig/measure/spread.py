"""The mean of repeats with what is uncertain about it."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from .numbers.uncertainty import Measured, combine


def spread(values: Sequence[float], reading_u: Sequence[float], unit: str, *, factor: float = 1.0) -> Measured:
    """The mean of at least two repeats: their scatter, and what reading each off is uncertain by.

    The latter may be the same in each repeat (the encoder's resolution, the way it is read off), so the repeats do not
    average it away. `factor` turns values and uncertainties into `unit`.
    """
    found = factor * np.asarray(values, float)
    scatter = float(found.std(ddof=1)) / math.sqrt(len(found))
    reading = abs(factor) * float(np.mean(reading_u))
    return combine(float(found.mean()), unit, [(scatter, len(found) - 1), (reading, math.inf)])
