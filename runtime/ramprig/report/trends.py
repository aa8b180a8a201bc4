"""Features of each cycle, and what the streaming trends of `endure` make of them.

The features of a test by cycles are those that the run itself recorded and judged, and they are judged here by the same
judge and the same rules, so that the report says what the run said. For other runs they are what any sequence has: the
fastest speed, the greatest current, the lowest supply and how long a pass took, judged by the default settings of
`endure.trends`: choices of this program and no standard.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.endure.features import unit_of
from ramprig.endure.recorded import TurnFeatures
from ramprig.endure.trends import FeatureTrend, Finding
from ramprig.endure.wear import CHECK_DONE, CYCLE_DONE, Cycle, WearJudge, as_recorded
from ramprig.sequence.wear_limits import TurnKind, WearRules, WearWish, rules_of

from .digest import Digest
from .facts import Facts

Floats = NDArray[np.float64]
CYCLES_MIN = 5


@dataclass(frozen=True, slots=True)
class Trend:
    """One feature over the cycles, (n,) each; `judged` is what was made of it, `findings` what it showed, in order."""

    name: str
    unit: str
    numbers: Floats
    values: Floats
    judged: FeatureTrend
    findings: tuple[Finding, ...]


@dataclass(frozen=True, slots=True)
class Seen:
    """What the `turns` of a run, its cycles and checks with features, come to. `drawn` are the features that there are
    turns enough of for a picture, `findings` all that was found, each with the block's name before it where there are
    several. `judged` is how many features were judged against a complete baseline, `waiting` how many had none yet."""

    drawn: tuple[Trend, ...]
    findings: tuple[tuple[str, Finding], ...]
    judged: int
    waiting: int
    turns: int = 0


def rules_in_force(facts: Facts) -> tuple[WearRules, ...]:
    """The limits to wear by which the cycles of a run are judged: those that were in force while it was under way.

    A run that recorded none is judged by the default ones, without waiting for windings to be warm.
    """
    settings = facts.manifest.get("settings") or {}
    if "wear" in settings:
        return rules_of(settings["wear"])
    names = {int(line.get("block") or 1): str(line.get("name")) for line in facts.cycles if "block" in line}
    wish = WearWish()
    return tuple(
        WearRules(
            block=block,
            name=name,
            turn=TurnKind.CYCLE,
            run_in_turns=wish.run_in_cycles,
            run_in_s=0.0,
            baseline=wish.baseline,
            detectors=wish.detectors,
            drives=(*facts.motors, *facts.servos),
            limits=(),
            others=wish.others,
        )
        for block, name in sorted((names or {1: "cycle"}).items())
    )


def seen_of(facts: Facts, digest: Digest) -> Seen:
    """What the whole cycles of a run and its checks show, whether or not there are CYCLES_MIN of them to be drawn."""
    cycles = cycles_of(facts, digest.features)
    if not any(cycle.features for cycle in cycles):
        return _seen(trends := _of_passes(facts, digest), [("", each) for trend in trends for each in trend.findings])
    judge, findings = wear_of(facts, cycles)
    if not judge.blocks:
        return _seen(_unjudged([cycle for cycle in cycles if cycle.number]), [])
    several = len({number for number, _ in judge.blocks}) > 1
    prefixes = {number: f"'{block.rules.name}' " if several else "" for (number, _), block in judge.blocks.items()}
    drawn = _by_feature(judge, cycles, findings, prefixes)
    streams = [trend for block in judge.blocks.values() for trend in block.features.values()]
    judged = sum(trend.established for trend in streams)
    told = tuple((prefixes[number], finding) for number, finding in findings)
    turns = sum(bool(cycle.features) for cycle in cycles)
    return Seen(tuple(drawn), told, judged, len(streams) - judged, turns)


def _seen(trends: list[Trend], findings: list[tuple[str, Finding]]) -> Seen:
    judged = sum(trend.judged.established for trend in trends)
    return Seen(tuple(trends), tuple(findings), judged, len(trends) - judged)


def _of_passes(facts: Facts, digest: Digest) -> list[Trend]:
    """What any sequence with passes has; none where there are fewer than CYCLES_MIN."""
    rows = [row for row in digest.intervals if 0 < row.number < digest.interval_edges]
    if len(facts.passes) <= CYCLES_MIN or len(rows) < CYCLES_MIN:
        return []
    numbers = np.array([float(digest.number_of(row)) for row in rows])
    found = []
    for column in digest.columns:
        if column.endswith((".speed_rpm", ".current_a")):
            values = [_size(row.columns.get(column)) for row in rows]
            what = "fastest speed" if column.endswith("_rpm") else "greatest current"
            name, unit = f"{column.rpartition('.')[0]}: {what}", "rpm" if column.endswith("_rpm") else "A"
        elif column == "supply_v":
            values = [row.columns[column][0] if column in row.columns else math.nan for row in rows]
            name, unit = "lowest supply", "V"
        else:
            continue
        found.append(_judged(name, unit, numbers, np.array(values)))
    times = _times(facts)
    if times is not None:
        found.append(_judged("duration", "s", *times))
    return [trend for trend in found if not np.isnan(trend.values).all()]


def wear_of(facts: Facts, cycles: Sequence[Cycle]) -> tuple[WearJudge, list[tuple[int, Finding]]]:
    """What the run's own judge makes of its turns, and its findings in order, each after its block."""
    judge = WearJudge.of(rules_in_force(facts), tick_us=facts.tick_us)
    return judge, [(cycle.block, finding) for cycle in cycles for finding in judge.take(cycle)]


def cycles_of(facts: Facts, features: Sequence[TurnFeatures]) -> list[Cycle]:
    """The turns of a run with their features: as recorded, all of them, else the cycles given, from the samples."""
    done = [line for line in facts.cycles if line.get("kind") in (CYCLE_DONE, CHECK_DONE)]
    if any(line.get("features") for line in done):
        return [Cycle.of(line) for line in done]
    blocks = {int(line["number"]): int(line.get("block") or 1) for line in done if line.get("kind") == CYCLE_DONE}
    return [
        Cycle(
            number=each.span.number,
            block=blocks.get(each.span.number, 1),
            part=each.span.part,
            begin_tick=each.span.begin_tick,
            end_tick=each.span.end_tick,
            features=as_recorded(each.values()),
        )
        for each in features
        if not each.span.is_check
    ]


def _by_feature(
    judge: WearJudge, cycles: Sequence[Cycle], findings: Sequence[tuple[int, Finding]], prefixes: Mapping[int, str]
) -> list[Trend]:
    """Each judged feature of the blocks, and of their checks, that have CYCLES_MIN turns."""
    found = []
    for (number, turn), block in judge.blocks.items():
        is_check = turn is TurnKind.CHECK
        of_block = [cycle for cycle in cycles if cycle.block == number and (cycle.number == 0) == is_check]
        if len(of_block) < CYCLES_MIN:
            continue
        numbers = np.array([float(cycle.number or place) for place, cycle in enumerate(of_block, 1)])
        for name in dict.fromkeys(name for cycle in of_block for name in cycle.features):
            limit = block.rules.limit_of(name)
            if limit is None:
                continue
            values = np.array([cycle.features.get(name, math.nan) for cycle in of_block])
            judged = block.features.get(name) or FeatureTrend(name, limit=limit, turn=turn)
            of_feature = tuple(
                finding for at, finding in findings if at == number and finding.feature == name and finding.turn == turn
            )
            found.append(Trend(prefixes[number] + name, unit_of(name), numbers, values, judged, of_feature))
    return found


def _unjudged(cycles: Sequence[Cycle]) -> list[Trend]:
    """The features of a run whose file says that no wear is judged."""
    if len(cycles) < CYCLES_MIN:
        return []
    numbers = np.array([float(cycle.number) for cycle in cycles])
    columns = {
        name: np.array([cycle.features.get(name, math.nan) for cycle in cycles])
        for name in dict.fromkeys(name for cycle in cycles for name in cycle.features)
    }
    return [Trend(name, unit_of(name), numbers, values, FeatureTrend(name), ()) for name, values in columns.items()]


def _size(triple: tuple[float, float, float] | None) -> float:
    return math.nan if triple is None else max(abs(triple[0]), abs(triple[2]))


def _times(facts: Facts) -> tuple[Floats, Floats] | None:
    """How long each cycle took that was done, from the count of cycles."""
    done = [event for event in facts.cycles if event.get("kind") == "cycle_done"]
    if len(done) < CYCLES_MIN:
        return None
    numbers = np.array([float(event["number"]) for event in done])
    seconds = np.array([(event["tick"] - event["begin_tick"]) * facts.tick_us / 1e6 for event in done])
    return numbers, seconds


def _judged(name: str, unit: str, numbers: Floats, values: Floats) -> Trend:
    judged = FeatureTrend(name)
    findings: list[Finding] = []
    for number, value in zip(numbers.tolist(), values.tolist(), strict=True):
        findings += judged.add(int(number), value)
    return Trend(name, unit, numbers, values, judged, tuple(findings))
