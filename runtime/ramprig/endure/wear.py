"""Judges the features of the cycles of a run by its rules, cycle after cycle, in memory that does not grow with it.

There is one judge for a run under way, for one that is gone on with, and for the report: the same rules and the same
recorded cycles give the same findings, and the same state.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from ramprig.errors import RecordError
from ramprig.sequence.wear_limits import TurnKind, WearLimit, WearRules

from .trends import FeatureTrend, Finding, Level, TrendSettings, TrendWatch

Line = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used

CYCLE_DONE, CHECK_DONE = "cycle_done", "check_done"
FIGURES = 7
"""Significant figures of a feature that are recorded and judged; no sensor of a bench has as many."""
TOLD_MAX = 3
"""Features that the end of a run names; the report has them all."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Cycle:
    """One cycle that was done, or a check with the number 0, as it is recorded: ticks, ends included, and features.

    These are by full name; those that it does not show are left out.
    """

    number: int
    block: int
    part: int
    begin_tick: int
    end_tick: int
    features: Mapping[str, float]

    @classmethod
    def of(cls, line: Line) -> Cycle:
        """That of a `cycle_done` or `check_done` line of the count of cycles. Raises RecordError."""
        try:
            return cls(
                number=int(line["number"]) if line["kind"] == CYCLE_DONE else 0,
                block=int(line.get("block") or 1),
                part=int(line.get("part") or 1),
                begin_tick=int(line["begin_tick"]),
                end_tick=int(line["tick"]),
                features={str(name): float(value) for name, value in (line.get("features") or {}).items()},
            )
        except (KeyError, TypeError, ValueError) as error:
            raise RecordError(f"a line of the count of cycles lacks what its features need: {error!r}") from error


def as_recorded(values: Mapping[str, float]) -> dict[str, float]:
    """The features of a cycle as they are written down: known ones only, to FIGURES figures."""
    return {name: float(f"{value:.{FIGURES}g}") for name, value in values.items() if math.isfinite(value)}


@dataclass(slots=True)
class BlockJudge:
    """The features of the cycles of one block, or of its checks, judged by their rules.

    Two that are equal will judge alike. `turns` counts those that it took, `run_in` those of them that were not looked
    at. Cycles go by their numbers, checks by their count.
    """

    rules: WearRules
    tick_us: int
    turns: int = 0
    run_in: int = 0
    _watch: TrendWatch = field(init=False)
    _part: int = 0
    _since_tick: int = 0

    def __post_init__(self) -> None:
        settings = TrendSettings(run_in=0, baseline=self.rules.baseline, detectors=self.rules.detectors)
        self._watch = TrendWatch(settings, self.rules)

    def take(self, cycle: Cycle) -> list[Finding]:
        """Take the next cycle and return what it newly shows, in the features' order."""
        if cycle.part != self._part:  # also after an interruption: the windings have cooled meanwhile
            self._part, self._since_tick = cycle.part, cycle.begin_tick
        self.turns += 1
        gone_s = (cycle.begin_tick - self._since_tick) * self.tick_us / 1e6
        if self.turns <= self.rules.run_in_turns or gone_s < self.rules.run_in_s:
            self.run_in += 1
            return []
        return self._watch.add(cycle.number or self.turns, cycle.features)

    @property
    def features(self) -> Mapping[str, FeatureTrend]:
        """The streams of the features that are judged, by name."""
        return self._watch.features

    @property
    def level(self) -> Level:
        """The worst of all features."""
        return self._watch.level

    @property
    def established(self) -> bool:
        """Whether anything is judged against a baseline yet."""
        return any(trend.established for trend in self.features.values())


@dataclass(slots=True)
class WearJudge:
    """All blocks of a run, by number and kind of turn. Turns without rules are passed over."""

    blocks: dict[tuple[int, TurnKind], BlockJudge]
    worst: Finding | None = None
    failing: WearLimit | None = None
    """The first finding that ends the run, and the limit it is beyond."""

    @classmethod
    def of(cls, rules: Iterable[WearRules], *, tick_us: int) -> WearJudge:
        """A judge that has seen nothing."""
        return cls({(each.block, each.turn): BlockJudge(each, tick_us) for each in rules})

    def take(self, cycle: Cycle) -> list[Finding]:
        """Take the next turn of the run and return what it newly shows."""
        block = self.blocks.get((cycle.block, TurnKind.CYCLE if cycle.number else TurnKind.CHECK))
        if block is None:
            return []
        found = block.take(cycle)
        if self.worst is None:
            self.worst = next((finding for finding in found if finding.level is Level.FAIL), None)
            self.failing = None if self.worst is None else block.rules.limit_of(self.worst.feature)
        return found

    def replay(self, lines: Iterable[Line]) -> Iterator[tuple[Cycle, list[Finding]]]:
        """Take every turn that lines of the count of cycles tell as done. Raises RecordError."""
        for line in lines:
            if line.get("kind") in (CYCLE_DONE, CHECK_DONE):
                cycle = Cycle.of(line)
                yield cycle, self.take(cycle)

    def to_watch(self) -> list[str]:
        """The features beyond a limit to watch, or that a detector has found, with their change; none that fail."""
        return [
            f"{name} {_change(trend)}"
            for block in self.blocks.values()
            for name, trend in block.features.items()
            if trend.level is Level.WATCH
        ]


def _change(trend: FeatureTrend) -> str:
    change = trend.change_of(trend.now)
    return "beyond its limit" if math.isnan(change) else f"{100.0 * change:+.1f} %"


def listed(texts: Sequence[str], most: int = TOLD_MAX) -> str:
    """Some of the texts in a row, the rest counted."""
    more = len(texts) - most
    return ", ".join(texts[:most]) + (f" and {more} more" if more > 0 else "")
