"""Mann-Kendall test for a monotonic trend, with ties and exact small-sample tails, and Sen's slope.

Sources: Mann 1945, Kendall 1975, Sen 1968, as described in Gilbert, Statistical Methods for Environmental Pollution
Monitoring (1987), ch. 16, and EPA QA/G-9S. The test does not see how far apart the values are in time; Sen's slope
does. Both take the values as independent of each other.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ramprig.errors import UsageError

EXACT_UP_TO = 40
"""Up to this many values, none tied, the tail is counted instead of approximated (tables go to 10 or 40)."""


@dataclass(frozen=True, slots=True)
class Trend:
    """Outcome of the test: Kendall's `s`, its `variance`, the normal `z` with continuity correction.

    `p_up` and `p_down` are the one-sided probabilities of so large or so small an S without a trend; exact where
    `exact` says so.
    """

    s: int
    variance: float
    z: float
    p_up: float
    p_down: float
    exact: bool

    @property
    def p_two_sided(self) -> float:
        """Twice the smaller one, at most 1."""
        return min(1.0, 2.0 * min(self.p_up, self.p_down))


@lru_cache(maxsize=EXACT_UP_TO + 1)
def _orders(count: int) -> tuple[int, ...]:
    """How many of the orders of `count` values have 0, 1, 2 ... inversions."""
    if count < 2:
        return (1,)
    before = _orders(count - 1)
    most = count * (count - 1) // 2
    found = [0] * (most + 1)
    window = 0
    for inversions in range(most + 1):
        window += before[inversions] if inversions < len(before) else 0
        gone = inversions - count
        window -= before[gone] if 0 <= gone < len(before) else 0
        found[inversions] = window
    return tuple(found)


def exact_tail(count: int, s: int) -> float:
    """Probability of S >= `s` for `count` values without ties and without a trend, all orders being alike."""
    most = count * (count - 1) // 2
    inversions = (most - s) // 2
    if inversions < 0:
        return 0.0
    return sum(_orders(count)[: inversions + 1]) / math.factorial(count)


def _normal_tail(z: float) -> float:
    return 0.5 * math.erfc(z / math.sqrt(2.0))


def kendall_s(values: NDArray[np.float64]) -> int:
    """Pairs that rise less pairs that fall, in order of time."""
    later = np.sign(values[None, :] - values[:, None])
    return round(float(np.triu(later, 1).sum()))


def mann_kendall(values: ArrayLike) -> Trend:
    """Test values in order of time; at least 3, or `UsageError`. Exact without ties up to `EXACT_UP_TO` values."""
    values = np.asarray(values, float)
    count = len(values)
    if count < 3:
        raise UsageError(f"{count} values; a trend needs at least 3")
    s = kendall_s(values)
    _, ties = np.unique(values, return_counts=True)
    spread = count * (count - 1) * (2 * count + 5) - int(np.sum(ties * (ties - 1) * (2 * ties + 5)))
    variance = spread / 18.0
    z = (s - np.sign(s)) / math.sqrt(variance) if variance > 0.0 else 0.0
    if ties.max() == 1 and count <= EXACT_UP_TO:
        return Trend(s, variance, z, exact_tail(count, s), exact_tail(count, -s), True)
    if variance <= 0.0:
        return Trend(s, variance, 0.0, 1.0, 1.0, False)
    root = math.sqrt(variance)
    return Trend(s, variance, z, _normal_tail((s - 1) / root), _normal_tail((-s - 1) / root), False)


def sen_slope(values: ArrayLike, times: ArrayLike | None = None) -> tuple[float, float]:
    """Median of all slopes between pairs, and the intercept median(value) - slope median(time).

    `times` are 0, 1, 2 ... if None. Needs at least 2 values at different times, or `UsageError`.
    """
    values = np.asarray(values, float)
    at = np.arange(len(values), dtype=float) if times is None else np.asarray(times, float)
    first, second = np.triu_indices(len(values), 1)
    gaps = at[second] - at[first]
    apart = gaps != 0.0
    if not apart.any():
        raise UsageError("a slope needs values at two different times")
    slope = float(np.median((values[second] - values[first])[apart] / gaps[apart]))
    return slope, float(np.median(values) - slope * np.median(at))
