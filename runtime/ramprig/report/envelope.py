"""Least, mean and greatest value over intervals of time, for any number of samples in fixed memory.

No sample is averaged away: every one lies between the least and the greatest of its interval. Intervals begin as short
as the samples are apart, and are joined in pairs whenever there would be too many.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

INTERVALS_MAX = 1600
"""At most so many intervals; there are at least half as many once that many samples have come."""


@dataclass(frozen=True, slots=True)
class Band:
    """One column over the intervals that have samples: (n,) each. NaN where the column had no value in an interval."""

    time_s: Floats
    least: Floats
    mean: Floats
    greatest: Floats
    samples: Ints

    @property
    def is_exact(self) -> bool:
        """Whether every interval holds one sample, so that nothing was joined."""
        return not len(self.samples) or int(self.samples.max()) <= 1


class Envelope:
    """Takes samples in order of time, several columns at once. `is_widened` tells whether ranges stand in for some."""

    def __init__(self, columns: Sequence[str], *, intervals_max: int = INTERVALS_MAX) -> None:
        self._names = tuple(columns)
        self.is_widened = False
        self._max = intervals_max - intervals_max % 2
        self._start_s: float | None = None
        self._width_s = 0.0
        self._samples = np.zeros(self._max, np.int64)
        shape = (len(self._names), self._max)
        self._least = np.full(shape, np.nan)
        self._greatest = np.full(shape, np.nan)
        self._sum: Floats = np.zeros(shape)
        self._known = np.zeros(shape, np.int64)

    @property
    def width_s(self) -> float:
        """How long an interval is now."""
        return self._width_s

    def add(self, time_s: Floats, columns: Mapping[str, Floats]) -> None:
        """(n,) times in s, not decreasing and not before earlier ones, and (n,) values by column, NaN where unknown."""
        if not len(time_s):
            return
        if self._start_s is None:
            steps = np.diff(time_s)
            steps = steps[steps > 0]
            self._width_s = float(np.median(steps)) if len(steps) else 1e-3
            self._start_s = float(time_s[0]) - self._width_s / 2
        while (float(time_s[-1]) - self._start_s) / self._width_s >= self._max:
            self._join_pairs()
        places = ((time_s - self._start_s) / self._width_s).astype(np.int64)
        np.clip(places, 0, self._max - 1, out=places)
        begins = np.flatnonzero(np.diff(places, prepend=-1))
        into = places[begins]
        self._samples[into] += np.diff(begins, append=len(places))
        for row, name in enumerate(self._names):
            values = columns[name]
            known = ~np.isnan(values)
            self._least[row, into] = np.fmin(self._least[row, into], np.fmin.reduceat(values, begins))
            self._greatest[row, into] = np.fmax(self._greatest[row, into], np.fmax.reduceat(values, begins))
            self._sum[row, into] += np.add.reduceat(np.where(known, values, 0.0), begins)
            self._known[row, into] += np.add.reduceat(known.astype(np.int64), begins)

    def widen(
        self, begin_s: float, end_s: float, samples: int, columns: Mapping[str, tuple[float, float, float]]
    ) -> None:
        """From `begin_s` to `end_s` there were so many samples, with this least, mean and greatest value.

        Intervals that were given every one of theirs by `add` stay as they are. The others reach to least and greatest
        now, and have that mean where less than half of their samples was given. Comes after all `add`.
        """
        if self._start_s is None:
            self._start_s, self._width_s = begin_s, max(1e-3, (end_s - begin_s) / self._max)
        while (end_s - self._start_s) / self._width_s >= self._max:
            self._join_pairs()
        first, last = (max(0, int((at - self._start_s) / self._width_s)) for at in (begin_s, end_s))
        whole = self._width_s * (samples - 1) / (end_s - begin_s) if end_s > begin_s else 1.0
        given = self._samples[first : last + 1]
        places = first + np.flatnonzero(given < max(1, int(whole + 1e-6)))
        few = 2 * self._samples[places] < whole
        self._samples[places] = np.maximum(self._samples[places], 2)  # more than one sample lies behind it
        self.is_widened |= bool(len(places))
        for row, name in enumerate(self._names):
            if name not in columns:
                continue
            least, mean, greatest = columns[name]
            self._least[row, places] = np.fmin(self._least[row, places], least)
            self._greatest[row, places] = np.fmax(self._greatest[row, places], greatest)
            unknown = places[few | (self._known[row, places] == 0)]
            self._sum[row, unknown] = mean
            self._known[row, unknown] = 1

    def _join_pairs(self) -> None:
        half = self._max // 2
        self._width_s *= 2

        def put(array: NDArray[np.generic], joined: NDArray[np.generic], empty: float) -> None:
            array[..., :half] = joined
            array[..., half:] = empty

        put(self._samples, self._samples[0::2] + self._samples[1::2], 0)
        put(self._least, np.fmin(self._least[:, 0::2], self._least[:, 1::2]), np.nan)
        put(self._greatest, np.fmax(self._greatest[:, 0::2], self._greatest[:, 1::2]), np.nan)
        put(self._sum, self._sum[:, 0::2] + self._sum[:, 1::2], 0)
        put(self._known, self._known[:, 0::2] + self._known[:, 1::2], 0)

    def band(self, name: str) -> Band:
        """What a column did, over the intervals that have samples."""
        row = self._names.index(name)
        there = np.flatnonzero(self._samples)
        known = self._known[row, there]
        with np.errstate(invalid="ignore", divide="ignore"):
            mean: Floats = self._sum[row, there] / np.where(known, known, np.nan)
        start_s = self._start_s or 0.0
        middles = (start_s + (there + 0.5) * self._width_s).astype(np.float64)
        return Band(
            middles,
            self._least[row, there],
            mean,
            self._greatest[row, there],
            self._samples[there],
        )
