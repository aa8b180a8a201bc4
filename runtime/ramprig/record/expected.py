"""Which ticks a samples log must hold by its account, and whether it does.

Its memory does not grow with the log, unless ticks began anew within a part that came to its end.
"""

from __future__ import annotations

import math
from array import array
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .thinning import kept_by_number

Ints = NDArray[np.int64]
Document = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used

WINDOW_SAMPLES = 200_000
"""So many samples of a logging are looked at together."""
EXAMPLES_MAX = 5
"""Ticks that a statement names."""
FOREVER = np.iinfo(np.int64).max


class Told:
    """What the events of one part tell of its samples, in a few bytes for each; `last` is the last event of all."""

    def __init__(self) -> None:
        self._gaps = array("q")  # first tick, count, period, one gap after another
        self._begins, self._ends = array("q"), array("q")
        self.restarted = False
        self.last: Document | None = None

    def take(self, event: Document) -> None:
        """The next event of the part."""
        self.last = event
        match event["kind"]:
            case "gap_found":
                self._gaps.extend((int(event["tick"]), int(event["count"]), int(event["period_ticks"])))
            case "full_rate_begun":
                self._begins.append(int(event["tick"]))
                self._ends.append(FOREVER)
            case "full_rate_ended" if self._ends:
                self._ends[-1] = int(event["tick"])
            case "restarted":
                self.restarted = True

    @property
    def gaps(self) -> Ints:
        """(n, 3) int64: the first tick of each gap, how many samples are lost in it, and their period."""
        return np.array(self._gaps, np.int64).reshape(-1, 3)

    @property
    def spans(self) -> tuple[Ints, Ints]:
        """Begins and ends of the spans at full rate, (n,) int64; a span whose end is not told goes on for ever."""
        return np.array(self._begins, np.int64), np.array(self._ends, np.int64)


@dataclass(frozen=True, slots=True)
class KeptTicks:
    """What a thinned log keeps: all ticks within `begins` to `ends`, (n,) int64 in order, and every n-th elsewhere."""

    every: int | None
    begins: Ints
    ends: Ints

    @classmethod
    def of(cls, part: Document, told: Told) -> KeptTicks | None:
        """By a part's entry in `run.json` and its events; None where the log is not thinned."""
        rule = (part.get("keeping") or {}).get("thinning")
        if rule is None:
            return None
        every = rule.get("every")
        return cls(None if every is None else int(every), *told.spans)

    def mask(self, ticks: Ints, period_ticks: int) -> NDArray[np.bool_]:
        """Which of these ticks are kept, (n,) bool."""
        kept = kept_by_number(ticks, period_ticks, self.every)
        if len(self.begins):
            span = np.searchsorted(self.begins, ticks, side="right") - 1
            kept |= (span >= 0) & (ticks <= self.ends[np.maximum(span, 0)])
        return kept

    def between(self, first: int, period: int, begin: int, end: int) -> Ints:
        """Of the ticks `first` + n * `period` with `begin` <= n < `end` those that are kept, in order."""
        low, high = first + begin * period, first + (end - 1) * period
        spans = int(np.searchsorted(self.begins, high, side="right"))
        if (self.ends[:spans] >= low).any():
            ticks = np.arange(begin, end, dtype=np.int64) * period + first
            return ticks[self.mask(ticks, period)]
        if self.every is None:
            return np.empty(0, np.int64)
        begin += -(first // period + begin) % self.every
        return np.arange(begin, end, self.every, dtype=np.int64) * period + first


@dataclass(slots=True)
class Comparison:
    """What differs: counts, and the first few ticks of each kind."""

    rows: int = 0
    missing: int = 0
    unexpected: int = 0
    is_disordered: bool = False
    absent: list[int] = field(default_factory=list)
    extra: list[int] = field(default_factory=list)

    def take(self, expected: Ints, found: Ints) -> None:
        """Compare the ticks of a stretch of the log, in order, with those expected there."""
        self.rows += len(found)
        if np.array_equal(expected, found):
            return
        absent, extra = np.setdiff1d(expected, found), np.setdiff1d(found, expected)
        self.missing += len(absent)
        self.unexpected += len(extra)
        self.absent += absent[: EXAMPLES_MAX + 1 - len(self.absent)].tolist()
        self.extra += extra[: EXAMPLES_MAX + 1 - len(self.extra)].tolist()
        self.is_disordered |= len(found) - len(extra) != len(expected) - len(absent) or bool(
            (np.diff(found) <= 0).any()
        )

    def statements(self) -> list[str]:
        """In words for the user; nothing where nothing differs."""
        found = []
        if self.missing:
            found.append(f"{self.missing} samples are missing that were received: ticks {some(self.absent)}")
        if self.unexpected:
            found.append(f"{self.unexpected} rows are of ticks that no logging made: {some(self.extra)}")
        if self.is_disordered and not found:
            found.append(DISORDERED)
        return found


DISORDERED = "the rows are not in the order in which they were made, or some are there twice"


def compare(account: Document, kept: KeptTicks | None, pieces: Iterable[Ints]) -> Comparison:
    """The ticks of a log, piece by piece, against those that its loggings made, did not lose, and were to be kept."""
    source = Source(pieces)
    found = Comparison()
    loggings = account["loggings"]
    ends = [each["first_tick"] + each["expected"] * each["period_ticks"] for each in loggings]
    in_order = all(end <= later["first_tick"] for end, later in zip(ends, loggings[1:], strict=False))
    if in_order:
        for expected, end_tick in _windows(account, kept):
            found.take(expected, source.before(end_tick))
        found.take(np.empty(0, np.int64), source.before(math.inf))
    else:  # ticks began anew within the part: no window can be told by its ticks
        whole = [expected for expected, _ in _windows(account, kept)]
        found.take(np.concatenate([np.empty(0, np.int64), *whole]), source.before(math.inf))
    return found


def _windows(account: Document, kept: KeptTicks | None) -> Iterator[tuple[Ints, int]]:
    """The ticks expected in stretches of each logging, and the tick at which each stretch ends."""
    listed = [(gap["first_tick"], gap["count"], gap["period_ticks"]) for gap in account["gaps"]]
    gaps = np.array(listed, np.int64).reshape(-1, 3)
    for logging in account["loggings"]:
        first, period, count = logging["first_tick"], logging["period_ticks"], logging["expected"]
        holes = Holes.of(gaps, first, period, count)
        for begin in range(0, count, WINDOW_SAMPLES):
            end = min(count, begin + WINDOW_SAMPLES)
            yield expected_of(first, period, begin, end, kept=kept, holes=holes), first + end * period


@dataclass(frozen=True, slots=True)
class Holes:
    """The gaps of one logging as numbers of samples, in order: `begins` and `ends` (n,) int64."""

    begins: Ints
    ends: Ints

    @classmethod
    def of(cls, gaps: Ints, first: int, period: int, count: int | None = None) -> Holes:
        """Those of `gaps`, (n, 3) int64 as `Told` has them, that lie in a logging (None: of unknown length)."""
        begins, rest = np.divmod(gaps[:, 0] - first, period)
        own = (rest == 0) & (begins >= 0) & (gaps[:, 2] == period)
        if count is not None:
            own &= begins < count
        begins, ends = begins[own], begins[own] + gaps[own, 1]
        order = np.argsort(begins, kind="stable")
        return cls(begins[order], np.maximum.accumulate(ends[order]))

    def drop(self, ticks: Ints, first: int, period: int) -> Ints:
        """The ticks, in order, that lie in none of them."""
        if not len(self.begins) or not len(ticks):
            return ticks
        numbers = (ticks - first) // period
        place = np.searchsorted(self.begins, numbers, side="right") - 1
        return ticks[(place < 0) | (numbers >= self.ends[np.maximum(place, 0)])]


def expected_of(first: int, period: int, begin: int, end: int, *, kept: KeptTicks | None, holes: Holes) -> Ints:
    """The ticks of the samples `begin` to `end` (not included) of a logging that are kept and not lost, in order."""
    if kept is None:
        ticks = np.arange(begin, end, dtype=np.int64) * period + first
    else:
        ticks = kept.between(first, period, begin, end)
    return holes.drop(ticks, first, period)


class Source:
    """Gives the ticks of a log in stretches that end at given ticks."""

    def __init__(self, pieces: Iterable[Ints]) -> None:
        self._pieces = iter(pieces)
        self._rest: Ints = np.empty(0, np.int64)

    def ahead(self, rows: int) -> Ints:
        """The next ticks, so many at least where there are so many; they stay."""
        parts = [self._rest]
        while sum(map(len, parts)) < rows and (more := next(self._pieces, None)) is not None:
            parts.append(more)
        self._rest = np.concatenate(parts)
        return self._rest

    def give_back(self, ticks: Ints) -> None:
        """These come next."""
        self._rest = np.concatenate([ticks, self._rest])

    def before(self, end_tick: float) -> Ints:
        """The ticks up to the first one that is not before `end_tick`, which stays for the next stretch."""
        parts: list[Ints] = []
        while True:
            later = np.flatnonzero(self._rest >= end_tick)
            if len(later):
                parts.append(self._rest[: later[0]])
                self._rest = self._rest[later[0] :]
                break
            parts.append(self._rest)
            rest = next(self._pieces, None)
            if rest is None:
                self._rest = np.empty(0, np.int64)
                break
            self._rest = rest
        return np.concatenate(parts)


def some(ticks: Sequence[int]) -> str:
    """A few ticks as text; more than EXAMPLES_MAX are hinted at."""
    shown = ", ".join(map(str, ticks[:EXAMPLES_MAX]))
    return shown + (" ..." if len(ticks) > EXAMPLES_MAX else "")
