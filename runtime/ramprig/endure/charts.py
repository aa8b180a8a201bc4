"""Streaming statistics for one feature, each in constant memory: mean and spread, CUSUM, EWMA, k of n, blocks.

Sources: Welford 1962 for the mean and variance; Page 1954 (CUSUM) and Roberts 1959 (EWMA) as in the NIST/SEMATECH
e-Handbook 6.3.2.3 and 6.3.2.4.
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, field

from ramprig.errors import UsageError


@dataclass(slots=True)
class Spread:
    """Mean, standard deviation and lag-1 autocorrelation of a stream, numerically stable (Welford)."""

    count: int = 0
    mean: float = 0.0
    _squares: float = 0.0
    _products: float = 0.0
    _last: float = 0.0
    _first: float = 0.0

    def add(self, value: float) -> None:
        """Take one more value."""
        self.count += 1
        if self.count == 1:
            self.mean = self._first = value
        else:
            # Products are kept about the first value, which is near the mean, so that nothing large cancels.
            self._products += (value - self._first) * (self._last - self._first)
            away = value - self.mean
            self.mean += away / self.count
            self._squares += away * (value - self.mean)
        self._last = value

    @property
    def sd(self) -> float:
        """With n - 1 in the denominator; 0 for fewer than two values."""
        return math.sqrt(self._squares / (self.count - 1)) if self.count > 1 else 0.0

    @property
    def autocorrelation(self) -> float:
        """At lag 1, NIST's definition; 0 where nothing varies."""
        if self._squares <= 0.0:
            return 0.0
        about = self.mean - self._first
        pairs = self.count - 1
        # Sum over pairs of (x - mean)(y - mean), from the sums about the first value.
        total = self.count * about
        before, after = total - (self._last - self._first), total
        return (self._products - about * (before + after) + pairs * about * about) / self._squares


@dataclass(slots=True)
class Cusum:
    """Tabular CUSUM of both sides about `target`, with `slack` (k) and `limit` (h) in the data's unit."""

    target: float
    slack: float
    limit: float
    high: float = 0.0
    low: float = 0.0

    def add(self, value: float) -> int:
        """Take one value; 1 or -1 while the sum of that side is above the limit, else 0."""
        self.high = max(0.0, self.high + value - self.target - self.slack)
        self.low = max(0.0, self.low + self.target - self.slack - value)
        if self.high > self.limit:
            return 1
        return -1 if self.low > self.limit else 0


@dataclass(slots=True)
class Ewma:
    """Exponentially weighted mean with the weight `share` of the newest value, started at `target`."""

    target: float
    share: float
    value: float = field(init=False)

    def __post_init__(self) -> None:
        if not 0.0 < self.share <= 1.0:
            raise UsageError(f"a share of {self.share} for the newest value; it must be above 0 and at most 1")
        self.value = self.target

    def add(self, value: float) -> float:
        """Take one value and return the new mean."""
        self.value += self.share * (value - self.value)
        return self.value

    def limits(self, sd: float, width: float) -> tuple[float, float]:
        """Lower and upper control limit at `width` standard deviations, for large times."""
        half = width * sd * math.sqrt(self.share / (2.0 - self.share))
        return self.target - half, self.target + half


@dataclass(slots=True)
class KOfN:
    """True while at least `k` of the last `n` answers were yes."""

    k: int
    n: int
    _last: deque[tuple[int, bool]] = field(init=False)

    def __post_init__(self) -> None:
        if not 1 <= self.k <= self.n:
            raise UsageError(f"{self.k} of {self.n}; the first must be between 1 and the second")
        self._last = deque(maxlen=self.n)

    def add(self, yes: bool, at: int = 0) -> bool:
        """Take one answer, of the cycle `at`, and return whether enough of the last ones are yes."""
        self._last.append((at, yes))
        return sum(answer for _, answer in self._last) >= self.k

    @property
    def where(self) -> tuple[int, ...]:
        """The cycles among the last ones whose answer was yes."""
        return tuple(at for at, answer in self._last if answer)


@dataclass(slots=True)
class Blocks:
    """Means over blocks of equal length, at most `most` of them: when full, neighbours are merged and blocks doubled.

    So any number of values is kept as a bounded, evenly spaced picture of the whole; the last, unfinished block is not
    in it. `most` must be even.
    """

    most: int = 128
    size: int = 8
    means: list[float] = field(default_factory=list)
    centres: list[float] = field(default_factory=list)
    _sum: float = 0.0
    _sum_at: float = 0.0
    _filled: int = 0

    def add(self, at: float, value: float) -> bool:
        """Take one value and its place; True when that finished a block."""
        self._sum += value
        self._sum_at += at
        self._filled += 1
        if self._filled < self.size:
            return False
        self.means.append(self._sum / self.size)
        self.centres.append(self._sum_at / self.size)
        self._sum = self._sum_at = 0.0
        self._filled = 0
        if len(self.means) == self.most:
            self.means = [(a + b) / 2.0 for a, b in zip(self.means[::2], self.means[1::2], strict=True)]
            self.centres = [(a + b) / 2.0 for a, b in zip(self.centres[::2], self.centres[1::2], strict=True)]
            self.size *= 2
        return True
