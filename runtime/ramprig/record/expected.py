"""Which ticks a samples log must hold by its account, and whether it does; its memory does not grow with the log."""

from __future__ import annotations

import math
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


@dataclass(frozen=True, slots=True)
class KeptTicks:
    """What a thinned log keeps: all ticks within `begins` to `ends`, (n,) int64 in order, and every n-th elsewhere."""

    every: int | None
    begins: Ints
    ends: Ints

    @classmethod
    def of(cls, part: Document, events: Sequence[Document]) -> KeptTicks | None:
        """By a part's entry in `run.json` and its events; None where the log is not thinned.

        A span whose end is not told goes on for ever.
        """
        rule = (part.get("keeping") or {}).get("thinning")
        if rule is None:
            return None
        begins: list[int] = []
        ends: list[int] = []
        for event in events:
            if event["kind"] == "full_rate_begun":
                begins.append(int(event["tick"]))
                ends.append(FOREVER)
            elif event["kind"] == "full_rate_ended" and ends:
                ends[-1] = int(event["tick"])
        every = rule.get("every")
        return cls(None if every is None else int(every), np.array(begins, np.int64), np.array(ends, np.int64))

    def mask(self, ticks: Ints, period_ticks: int) -> NDArray[np.bool_]:
        """Which of these ticks are kept, (n,) bool."""
        kept = kept_by_number(ticks, period_ticks, self.every)
        if len(self.begins):
            span = np.searchsorted(self.begins, ticks, side="right") - 1
            kept |= (span >= 0) & (ticks <= self.ends[np.maximum(span, 0)])
        return kept


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
            found.append("the rows are not in the order in which they were made, or some are there twice")
        return found


def compare(account: Document, kept: KeptTicks | None, pieces: Iterable[Ints]) -> Comparison:
    """The ticks of a log, piece by piece, against those that its loggings made, did not lose, and were to be kept."""
    source = _Source(pieces)
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
    for logging in account["loggings"]:
        first, period, count = logging["first_tick"], logging["period_ticks"], logging["expected"]
        holes = sorted(_holes(account["gaps"], first, period, count))
        for begin in range(0, count, WINDOW_SAMPLES):
            end = min(count, begin + WINDOW_SAMPLES)
            numbers = np.arange(begin, end, dtype=np.int64)
            there = np.ones(len(numbers), np.bool_)
            for hole, size in holes:
                there[max(0, hole - begin) : max(0, hole + size - begin)] = False
            ticks = (numbers * period + first)[there]
            yield (ticks if kept is None else ticks[kept.mask(ticks, period)]), first + end * period


def _holes(gaps: Sequence[Document], first: int, period: int, count: int) -> Iterator[tuple[int, int]]:
    """Where the gaps of a logging lie, as the number of their first sample and how many."""
    for gap in gaps:
        begin, rest = divmod(gap["first_tick"] - first, period)
        if rest == 0 and 0 <= begin < count and gap["period_ticks"] == period:
            yield begin, gap["count"]


class _Source:
    """Gives the ticks of a log in stretches that end at given ticks."""

    def __init__(self, pieces: Iterable[Ints]) -> None:
        self._pieces = iter(pieces)
        self._rest: Ints = np.empty(0, np.int64)

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


def without_account(ticks: Ints, events: Sequence[Document], kept: KeptTicks | None) -> tuple[int, list[str]]:
    """For a part that broke off: what its events tell as lost, and whether the ticks in the file agree."""
    told = {int(event["tick"]): int(event["count"]) for event in events if event["kind"] == "gap_found"}
    steps = np.diff(ticks)
    if len(steps) == 0:
        return sum(told.values()), []
    if kept is not None:
        return sum(told.values()), _thinned_without_account(ticks, told, kept)
    changes = np.flatnonzero(steps[1:] != steps[:-1]) + 1
    usual = int(np.median(steps))
    untold = [
        int(ticks[place]) + usual
        for place in ({0} | set(changes.tolist()))
        if steps[place] > usual and int(ticks[place]) + usual not in told
    ]
    statements = []
    if untold:
        examples = sorted(untold)[: EXAMPLES_MAX + 1]
        statements.append(f"rows are missing, or the period changed, at {len(untold)} places: ticks {some(examples)}")
    return sum(told.values()), statements


def _thinned_without_account(ticks: Ints, told: Mapping[int, int], kept: KeptTicks) -> list[str]:
    """The shortest step is the period, as every part begins at full rate. An open span ends with
    the last row that would not be there without it."""
    period = int(np.diff(ticks).min())
    if period <= 0:
        return ["the rows are not in the order in which they were made, or some are there twice"]
    made = np.arange(ticks[0], ticks[-1] + 1, period, dtype=np.int64)
    for tick, count in told.items():
        made = made[(made < tick) | (made >= tick + count * period)]
    ends = kept.ends.copy()
    if len(ends) and ends[-1] == FOREVER:
        odd = ticks[(ticks >= kept.begins[-1]) & ~kept_by_number(ticks, period, kept.every)]
        ends[-1] = odd[-1] if len(odd) else kept.begins[-1]
    expected = made[KeptTicks(kept.every, kept.begins, ends).mask(made, period)]
    missing = np.setdiff1d(expected, ticks)
    if not len(missing):
        return []
    return [f"{len(missing)} rows are missing: ticks {some(missing[: EXAMPLES_MAX + 1].tolist())}"]


def some(ticks: Sequence[int]) -> str:
    """A few ticks as text; more than EXAMPLES_MAX are hinted at."""
    shown = ", ".join(map(str, ticks[:EXAMPLES_MAX]))
    return shown + (" ..." if len(ticks) > EXAMPLES_MAX else "")
