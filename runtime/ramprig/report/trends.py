"""Features of each cycle from the samples, and what the streaming trends of `endure` make of them.

The features of a test by cycles are those of `endure.features`. For other runs they are what any sequence has: the
fastest speed, the greatest current, the lowest supply and how long a pass took. The limits drawn are those of the
default settings of `endure.trends`: choices of this program and no standard.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.endure.features import is_judged, unit_of
from ramprig.endure.trends import FeatureTrend, Finding, TrendSettings

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


def trends_of(facts: Facts, digest: Digest) -> list[Trend]:
    """The features of the whole cycles of a run; none where there are fewer than CYCLES_MIN.

    Checks between the cycles are not among them: there are too few of them for a baseline.
    """
    by_feature = _by_feature(digest)
    if by_feature:
        return by_feature
    rows = [row for row in digest.intervals if 0 < row.number < digest.interval_edges]
    if len(facts.passes) <= CYCLES_MIN or len(rows) < CYCLES_MIN:
        return []
    numbers = np.array([(row.number - 1.0) * digest.interval_stride + 1 for row in rows])
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


def _by_feature(digest: Digest) -> list[Trend]:
    cycles = [each for each in digest.features if not each.span.is_check]
    if len(cycles) < CYCLES_MIN:
        return []
    numbers = np.array([float(each.span.number) for each in cycles])
    rows = [each.values() for each in cycles]
    columns = {name: np.array([row[name] for row in rows]) for name in rows[0] if is_judged(name)}
    return [
        _judged(name, unit_of(name), numbers, values) for name, values in columns.items() if not np.isnan(values).all()
    ]


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
    judged = FeatureTrend(name, TrendSettings())
    findings: list[Finding] = []
    for number, value in zip(numbers.tolist(), values.tolist(), strict=True):
        findings += judged.add(int(number), value)
    return Trend(name, unit, numbers, values, judged, tuple(findings))
