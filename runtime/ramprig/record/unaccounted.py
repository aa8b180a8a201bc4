"""What the rows of a part that broke off say against its events: it has no account, so what is missing is inferred.

The period is that of the rows themselves, and where their ticks stop fitting it (another logging began, or the board
restarted) it is looked for anew. All is done in one pass, in memory that does not grow with the log.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field

import numpy as np

from . import expected
from .expected import DISORDERED, EXAMPLES_MAX, FOREVER, Holes, Ints, KeptTicks, Source, Told, expected_of, some
from .thinning import kept_by_number

PERIOD_ROWS = 1000
"""The shortest step of so many rows is the period of a thinned log: each of its loggings begins at full rate. Of a
whole log it is the median step of any so many rows, the least one so far."""
STEPS_LEAST = 16
"""Fewer steps than this at the end of a log do not tell a usual one, where those before did."""
JUMP_WINDOWS = 50_000
"""A log without rows for more windows than this (longer than a year at 1 kHz) has a tick that cannot be right."""


@dataclass(frozen=True, slots=True)
class Unaccounted:
    """The rows of a part that has no account, the tick of the last one, and what is not as it should be."""

    rows: int
    last_tick: int | None
    statements: list[str]


@dataclass(slots=True)
class _Places:
    """A count of ticks, and the first few of them."""

    count: int = 0
    examples: list[int] = field(default_factory=list)

    def take(self, ticks: Ints) -> None:
        self.count += len(ticks)
        self.examples += ticks[: max(0, EXAMPLES_MAX + 1 - len(self.examples))].tolist()

    def take_all(self, more: _Places) -> None:
        self.count += more.count
        self.examples = (self.examples + more.examples)[: EXAMPLES_MAX + 1]


def without_account(pieces: Iterable[Ints], told: Told, kept: KeptTicks | None) -> Unaccounted:
    """For a part that broke off: whether the ticks in the file agree with what its events tell."""
    return _Whole(told).look(pieces) if kept is None else _Thinned(told, kept).look(pieces)


class _Whole:
    """A log that has every row: each step longer than the usual one must be told as a gap."""

    def __init__(self, told: Told) -> None:
        self._gaps = _Gaps(told.gaps)
        self._restarted = told.restarted
        self._untold = _Places()
        self._usual: int | None = None
        self._disordered = False
        self._before: tuple[int, bool] | None = None  # the step before, and whether it was untold
        self._rows = 0
        self._last: int | None = None

    def look(self, pieces: Iterable[Ints]) -> Unaccounted:
        for batch in _batches(pieces):
            self._take(batch)
        statements = [DISORDERED] if self._disordered else []
        if self._untold.count:
            places = f"at {self._untold.count} places: ticks {some(self._untold.examples)}"
            statements.append(f"rows are missing, or the period changed, {places}")
        return Unaccounted(self._rows, self._last, statements)

    def _take(self, ticks: Ints) -> None:
        self._rows += len(ticks)
        if self._last is not None:
            ticks = np.concatenate([[self._last], ticks])
        self._last = int(ticks[-1])
        steps = np.diff(ticks)
        if not len(steps):
            return
        self._disordered |= bool((steps == 0).any()) or (bool((steps < 0).any()) and not self._restarted)
        middle = int(np.sort(steps)[len(steps) // 2])  # one of them, and not what lies between two
        if self._usual is None or (len(steps) >= STEPS_LEAST and middle < self._usual):
            self._usual = middle
        usual = self._usual
        untold = steps > usual
        untold[untold] = self._gaps.ends_of(ticks[:-1][untold] + usual) != ticks[1:][untold]
        before = np.concatenate([[self._before == (int(steps[0]), True)], untold[:-1] & (steps[1:] == steps[:-1])])
        self._untold.take(ticks[:-1][untold & ~before] + usual)  # of a changed period only its begin
        self._before = int(steps[-1]), bool(untold[-1])


def _batches(pieces: Iterable[Ints]) -> Iterator[Ints]:
    """The pieces, the short ones together."""
    parts: list[Ints] = []
    for piece in pieces:
        parts.append(piece)
        if sum(map(len, parts)) >= PERIOD_ROWS:
            yield np.concatenate(parts)
            parts = []
    if any(map(len, parts)):
        yield np.concatenate(parts)


class _Gaps:
    """Where the gaps end that begin at a tick; gaps that follow each other at once count as one too."""

    def __init__(self, gaps: Ints) -> None:
        gaps = gaps[np.argsort(gaps[:, 0], kind="stable")]
        ends = gaps[:, 0] + gaps[:, 1] * gaps[:, 2]
        self._begins = gaps[:, 0]
        last = np.flatnonzero(np.append(ends[:-1] != self._begins[1:], np.ones(min(1, len(ends)), np.bool_)))
        self._ends = ends[last[np.searchsorted(last, np.arange(len(ends)))]] if len(ends) else ends

    def ends_of(self, begins: Ints) -> Ints:
        """The tick after each of the gaps that begin at these ticks, -1 where none does."""
        if not len(self._begins):
            return np.full(len(begins), -1, np.int64)
        place = np.minimum(np.searchsorted(self._begins, begins), len(self._begins) - 1)
        return np.where(self._begins[place] == begins, self._ends[place], -1)


class _Thinned:
    """A log that has every n-th row, and all within the spans at full rate."""

    def __init__(self, told: Told, kept: KeptTicks) -> None:
        self._gaps = told.gaps
        self._kept = kept
        self._restarted = told.restarted
        self._open_from = int(kept.begins[-1]) if len(kept.ends) and kept.ends[-1] == FOREVER else None
        self._missing = _Places()
        self._unsure = _Places()
        self._statements: list[str] = []
        self._rows = 0
        self._last: int | None = None

    def look(self, pieces: Iterable[Ints]) -> Unaccounted:
        source = Source(pieces)
        while len(ahead := source.ahead(PERIOD_ROWS)):
            self._logging(source, ahead[:PERIOD_ROWS])
        if self._missing.count:
            self._statements.append(f"{self._missing.count} rows are missing: ticks {some(self._missing.examples)}")
        return Unaccounted(self._rows, self._last, self._statements)

    def _logging(self, source: Source, begin: Ints) -> None:
        """The rows from the next one on whose ticks fit one period."""
        first = int(begin[0])
        steps = np.diff(begin)
        steps = steps[: int(np.argmax(steps <= 0))] if (steps <= 0).any() else steps
        period = int(steps.min()) if len(steps) else 1
        holes = Holes.of(self._gaps, first, period)
        number = 0
        last = first - 1
        while True:
            found = source.before(first + (number + expected.WINDOW_SAMPLES) * period)
            fitting = self._fitting(found, first, period, last)
            source.give_back(found[fitting:])
            if fitting:
                last = self._last = int(found[fitting - 1])
                self._rows += fitting
            rest = source.ahead(1)
            is_last = fitting < len(found) or not len(rest) or self._jumps(int(rest[0]) - first, number, period)
            end = number + expected.WINDOW_SAMPLES
            if is_last:
                end = max(number, (last - first) // period + 1)
            due = expected_of(first, period, number, end, kept=self._kept, holes=holes)
            self._take(np.setdiff1d(due, found[:fitting], assume_unique=True), found[:fitting], period)
            if is_last:
                return
            number = end

    def _fitting(self, found: Ints, first: int, period: int, last: int) -> int:
        """How many of the rows, which follow the one at tick `last`, belong to this logging."""
        back = np.flatnonzero(np.diff(found, prepend=last) <= 0)
        if len(back) and not self._restarted and DISORDERED not in self._statements:
            self._statements.append(DISORDERED)
        odd = np.flatnonzero((found - first) % period)
        return min(int(back[0]) if len(back) else len(found), int(odd[0]) if len(odd) else len(found))

    def _jumps(self, ahead: int, number: int, period: int) -> bool:
        """Whether the next row lies so far ahead of a window that its tick cannot be right."""
        far = ahead // period - number > JUMP_WINDOWS * expected.WINDOW_SAMPLES
        if far:
            self._statements.append(f"the ticks jump ahead after {self._last}, further than a run can last")
        return far

    def _take(self, absent: Ints, found: Ints, period: int) -> None:
        """What is absent is missing, but for the rows of a span that was open and ended with the last row that would
        not be there without it."""
        if self._open_from is None:
            self._missing.take(absent)
            return
        needed = (absent < self._open_from) | kept_by_number(absent, period, self._kept.every)
        odd = found[(found >= self._open_from) & ~kept_by_number(found, period, self._kept.every)]
        if len(odd):
            self._missing.take_all(self._unsure)
            self._unsure = _Places()
            needed |= absent <= odd[-1]
        self._missing.take(absent[needed])
        self._unsure.take(absent[~needed])
