"""One pass through all samples of a run: envelopes against time, first and last cycle, the curve, and each interval."""

from __future__ import annotations

import math
from bisect import bisect_right
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from ramprig.endure.features import FeatureWalk, on_output_of, spans_of
from ramprig.endure.recorded import TurnFeatures, recorded_features
from ramprig.record.scan import Piece
from ramprig.record.volumes import Stream

from .envelope import INTERVALS_MAX, Band, Envelope
from .facts import Facts
from .kept import RangeLine, has_cycle_ranges, ranges_path, read_ranges, thinning_of

Floats = NDArray[np.float64]

OVERLAY_INTERVALS = 700
CURVE_LEVELS_MAX = 400
"""Duty levels of a curve that are kept apart, both ways together."""
STEADY_S = 0.3
"""A duty counts as held after so long without a change; the speed follows it within that, as a choice of ours."""
ROWS_MAX = 20_000
"""Lines of the table of intervals; longer runs are summed over several cycles or minutes a line."""
CURVE_STEP_PCT = 0.5
MINUTE_S = 60.0
FEATURES_MAX = 50_000
"""Cycles and checks whose features are kept, at under 1 kB each; a longer run's later ones are left out."""


@dataclass(slots=True)
class Level:
    """Samples at one held duty: `duty_pct`, reached by a duty growing in size or not, and the speeds found there."""

    duty_pct: float
    is_growing: bool
    samples: int = 0
    speed_sum: float = 0.0
    least: float = math.inf
    greatest: float = -math.inf

    @property
    def mean(self) -> float:
        """Mean speed, rpm."""
        return self.speed_sum / self.samples


@dataclass(slots=True)
class Window:
    """A cycle to be laid over another: its number from 1, begin and end in s of the run, and its envelope."""

    number: int
    begin_s: float
    end_s: float
    envelope: Envelope


@dataclass(frozen=True, slots=True)
class Interval:
    """Least, mean and greatest of each column between two times of the run."""

    number: int
    begin_s: float
    end_s: float
    samples: int
    columns: dict[str, tuple[float, float, float]]


@dataclass(slots=True)
class Digest:
    """What the samples of a run come to. `breaks` are times where the board restarted or the run was gone on with.

    An interval is `interval_stride` cycles, or a minute; those from 1 to below `interval_edges` are whole cycles, and
    `interval_numbers` what the first cycle of each is called.
    `features` are those of the cycles and checks of the count of cycles, the first FEATURES_MAX, with
    `features_left_out` more: as they were recorded while the run was under way, else from the samples, unless those
    were thinned. Of a thinned log intervals, totals
    and the envelope's ends are of all samples, from the ranges that were recorded with it.
    """

    columns: tuple[str, ...]
    envelope: Envelope
    windows: list[Window] = field(default_factory=list)
    levels: dict[tuple[str, float, bool], Level] = field(default_factory=dict)
    intervals: list[Interval] = field(default_factory=list)
    rows: int = 0
    first_s: float = math.nan
    last_s: float = math.nan
    breaks: list[float] = field(default_factory=list)
    totals: dict[str, tuple[float, float, float]] = field(default_factory=dict)
    interval_edges: int = 0
    interval_stride: int = 1
    interval_numbers: list[int] = field(default_factory=list)
    features: list[TurnFeatures] = field(default_factory=list)
    features_left_out: int = 0

    def number_of(self, interval: Interval) -> int:
        """What the cycle of an interval is called, the first of several; else the interval's own number."""
        place = interval.number - 1
        return self.interval_numbers[place] if 0 <= place < len(self.interval_numbers) else interval.number

    def band(self, name: str) -> Band:
        """A column against time."""
        return self.envelope.band(name)

    def curve(self, motor: str) -> list[Level]:
        """Held duties of a motor with their speeds, by duty; fewer than three levels are no curve."""
        found = sorted(
            (level for (name, _, _), level in self.levels.items() if name == motor and level.samples >= 3),
            key=lambda level: (level.duty_pct, level.is_growing),
        )
        return found if len({level.duty_pct for level in found if level.duty_pct}) >= 3 else []


def plotted_columns(facts: Facts) -> tuple[str, ...]:
    """The columns that a report shows."""
    wanted = [f"{motor}.{what}" for motor in facts.motors for what in ("duty_pct", "speed_rpm", "current_a")]
    # an earlier ramprig logged a speed of motors without an encoder, too
    wanted = [name for name in wanted if not name.endswith("_rpm") or facts.has_encoder(name.rpartition(".")[0])]
    wanted += [f"{servo}.pulse_us" for servo in facts.servos]
    wanted += ["supply_v", "temperature_degc"]
    return tuple(name for name in wanted if name in facts.columns)


def digest_samples(facts: Facts) -> Digest:
    """Read all samples files of the run once, piece by piece."""
    columns = plotted_columns(facts)
    digest = Digest(columns, Envelope(columns, intervals_max=INTERVALS_MAX))
    digest.windows = _windows(facts, columns)
    edges = _edges(facts)
    if isinstance(edges, list):
        digest.interval_edges = len(edges)
        digest.interval_stride = -(-len(facts.passes) // ROWS_MAX)
        digest.interval_numbers = facts.pass_numbers[:: digest.interval_stride]
    is_thinned = thinning_of(facts) is not None
    table = _from_ranges(facts, columns, edges) if is_thinned else _IntervalTable(columns, edges)
    period_s = facts.period_s
    curves = {
        motor: _CurveWalk(digest, motor, period_s=period_s) for motor in facts.motors if f"{motor}.speed_rpm" in columns
    }
    recorded = recorded_features(facts.cycles)
    _keep_features(digest, recorded or [])
    spans = [] if recorded is not None or is_thinned else spans_of(facts.cycles)
    on_output = on_output_of(facts.manifest)
    aged = FeatureWalk(facts.columns, spans, tick_us=facts.tick_us, on_output=on_output)
    offset_s = 0.0
    for part, paths in facts.files_of_parts.items():
        stream = Stream(paths, columns={"time_s", *columns, *(aged.columns if aged.spans else ())})
        for piece in stream:
            _keep_features(digest, aged.take(part, piece))
            for servo in facts.servos:
                _blank_zero(piece.numbers[f"{servo}.pulse_us"])
            times = piece.numbers["time_s"] + offset_s
            if digest.rows and times[0] <= digest.last_s:
                offset_s += digest.last_s - float(times[0]) + 0.001  # ticks that begin anew must not run backwards
                times = times + (digest.last_s - times[0] + 0.001)
                digest.breaks.append(digest.last_s)
            _take(digest, table, times, piece)
            for walk in curves.values():
                walk.take(times, piece)
        _keep_features(digest, aged.close_part(part))
    if is_thinned:
        _widen(facts, digest)
    digest.intervals = table.rows()
    digest.totals = table.totals()
    return digest


def _from_ranges(facts: Facts, columns: tuple[str, ...], edges: list[float] | float) -> _IntervalTable:
    """A table of intervals that has all samples up to the end of the ranges that were recorded; rows may follow."""
    table = _IntervalTable(columns, edges)
    path = ranges_path(facts, with_cycles=isinstance(edges, list))
    for line in read_ranges(path, columns) if path is not None else ():
        table.add_line(line)
    return table


def _widen(facts: Facts, digest: Digest) -> None:
    """Have the envelope reach to every sample of the finest ranges that were recorded."""
    path = ranges_path(facts, with_cycles=False)
    for line in read_ranges(path, digest.columns) if path is not None else ():
        triples = {name: found[:3] for name, found in line.columns.items()}
        digest.envelope.widen(line.first_s, line.last_s, line.samples, triples)


def _keep_features(digest: Digest, found: Sequence[TurnFeatures]) -> None:
    kept = found[: FEATURES_MAX - len(digest.features)]
    digest.features += kept
    digest.features_left_out += len(found) - len(kept)


def _blank_zero(pulses: Floats) -> None:
    """A servo without pulses stands nowhere."""
    pulses[pulses == 0] = math.nan


def _take(digest: Digest, table: _IntervalTable, times: Floats, piece: Piece) -> None:
    times = np.maximum.accumulate(times)
    if math.isnan(digest.first_s):
        digest.first_s = float(times[0])
    digest.last_s = float(times[-1])
    digest.rows += len(times)
    digest.envelope.add(times, piece.numbers)
    table.add(times, piece)
    for window in digest.windows:
        begin, end = np.searchsorted(times, (window.begin_s, window.end_s))
        if end > begin:
            inside = {name: piece.numbers[name][begin:end] for name in digest.columns}
            window.envelope.add(times[begin:end] - window.begin_s, inside)


def _windows(facts: Facts, columns: tuple[str, ...]) -> list[Window]:
    """The first cycle, one in the middle, and the last whole ones."""
    spans = _spans(facts)
    if len(spans) < 2:
        return []
    chosen = sorted({0, (len(spans) - 1) // 2, len(spans) - 1})
    return [Window(*spans[place], Envelope(columns, intervals_max=OVERLAY_INTERVALS)) for place in chosen]


def _spans(facts: Facts) -> list[tuple[int, float, float]]:
    """Number, begin and end in s of each whole cycle of the block with the most: without the rest after it where that
    is told apart. Cycles of several blocks are not alike."""
    done = [event for event in facts.cycles if event.get("kind") == "cycle_done" and event.get("time_s") is not None]
    if done:
        blocks = Counter(event.get("block") for event in done)
        done = [event for event in done if event.get("block") == blocks.most_common(1)[0][0]]
        tick_s = facts.tick_us / 1e6
        return [
            (int(event["number"]), event["time_s"] - (event["tick"] - event["begin_tick"]) * tick_s, event["time_s"])
            for event in done
        ]
    pairs = zip(facts.passes, facts.passes[1:], strict=False)  # the last begin has no end
    return [(number, begin, end) for number, (begin, end) in enumerate(pairs, 1)]


def _edges(facts: Facts) -> list[float] | float:
    """Where intervals begin: at cycles where there are some, else every minute (given as a width).

    Of a thinned log the ranges that were recorded must fit into them, so a minute may be a little longer.
    """
    rule = thinning_of(facts)
    if rule is not None and rule.ranges_s is not None and not has_cycle_ranges(facts):
        return math.ceil(MINUTE_S / rule.ranges_s) * rule.ranges_s
    if len(facts.passes) < 2:
        return MINUTE_S
    stride = -(-len(facts.passes) // ROWS_MAX)
    return facts.passes[::stride]


class _IntervalTable:
    """Sums over the intervals between edges, a piece at a time."""

    def __init__(self, columns: tuple[str, ...], edges: list[float] | float) -> None:
        self._columns = columns
        self._edges = edges
        self._sums: dict[int, tuple[float, float, int, dict[str, list[float]]]] = {}
        self._summed_s = -math.inf

    def add(self, times: Floats, piece: Piece) -> None:
        """Rows; those in the time of lines that were added before are in these already."""
        known = int(np.searchsorted(times, self._summed_s, side="right"))
        if known:
            times = times[known:]
            piece = Piece(piece.ticks[known:], {name: piece.numbers[name][known:] for name in self._columns})
        if not len(times):
            return
        if isinstance(self._edges, float):
            numbers = (times // self._edges).astype(np.int64)
        else:
            numbers = np.searchsorted(self._edges, times, side="right")
        begins = np.flatnonzero(np.diff(numbers, prepend=numbers[0] - 1))
        for begin, end in zip(begins.tolist(), [*begins[1:].tolist(), len(times)], strict=True):
            self._add_one(int(numbers[begin]), times[begin:end], piece, begin, end)

    def _add_one(self, number: int, times: Floats, piece: Piece, begin: int, end: int) -> None:
        first, _, count, sums = self._sums.get(number, (float(times[0]), 0.0, 0, {}))
        for name in self._columns:
            values = piece.numbers[name][begin:end]
            values = values[~np.isnan(values)]
            if not len(values):
                continue
            low, total, high, known = sums.get(name, [math.inf, 0.0, -math.inf, 0])
            sums[name] = [
                min(low, float(values.min())), total + float(values.sum()),
                max(high, float(values.max())), known + len(values),
            ]  # fmt: skip
        self._sums[number] = first, float(times[-1]), count + len(times), sums

    def add_line(self, line: RangeLine) -> None:
        """A span that was summed up while it was recorded; it belongs where it begins."""
        self._summed_s = max(self._summed_s, line.last_s)
        if isinstance(self._edges, float):
            number = int(line.first_s // self._edges)
        else:
            number = bisect_right(self._edges, line.first_s)
        first, _, count, sums = self._sums.get(number, (line.first_s, 0.0, 0, {}))
        for name, (least, mean, greatest, known) in line.columns.items():
            low, total, high, before = sums.get(name, [math.inf, 0.0, -math.inf, 0])
            sums[name] = [min(low, least), total + mean * known, max(high, greatest), before + known]
        self._sums[number] = first, line.last_s, count + line.samples, sums

    def rows(self) -> list[Interval]:
        """The intervals in order; number 0 is what came before the first cycle."""
        found = []
        for number, (first, last, count, sums) in sorted(self._sums.items()):
            columns = {name: (low, total / known, high) for name, (low, total, high, known) in sums.items()}
            found.append(Interval(number, first, last, count, columns))
        return found

    def totals(self) -> dict[str, tuple[float, float, float]]:
        """Least, mean and greatest of each column over the whole run."""
        found: dict[str, tuple[float, float, float]] = {}
        for name in self._columns:
            parts = [sums[name] for _, _, _, sums in self._sums.values() if name in sums]
            if parts:
                known = sum(part[3] for part in parts)
                found[name] = (min(p[0] for p in parts), sum(p[1] for p in parts) / known, max(p[2] for p in parts))
        return found


class _CurveWalk:
    """Collects the speed at held duties, remembering across pieces since when the duty is held, and from where.

    Where rows are missing, or were thinned, nobody knows that the duty was held: it counts from the next row on.
    """

    def __init__(self, digest: Digest, motor: str, *, period_s: float) -> None:
        self._digest = digest
        self._motor = motor
        self._apart_s = 1.5 * period_s if period_s else math.inf
        self._duty = math.nan
        self._since_s = 0.0
        self._last_s = -math.inf
        self._growing = True

    def take(self, times: Floats, piece: Piece) -> None:
        duty = piece.numbers[f"{self._motor}.duty_pct"]
        speed = piece.numbers[f"{self._motor}.speed_rpm"]
        apart = np.diff(times, prepend=self._last_s) > self._apart_s
        self._last_s = float(times[-1])
        begins = np.flatnonzero((np.diff(duty, prepend=duty[0] + 1) != 0) | apart)
        ends = np.append(begins[1:], len(duty))
        long = times[ends - 1] - times[begins] > STEADY_S
        long[[0, -1]] = True  # the first may have begun in the piece before, the last may go on in the next
        for begin, end in zip(begins[long].tolist(), ends[long].tolist(), strict=True):
            here = float(duty[begin])
            before = float(duty[begin - 1]) if begin else self._duty
            if here != before or apart[begin]:
                if not math.isnan(before) and here != before:
                    self._growing = abs(here) > abs(before)
                self._duty, self._since_s = here, float(times[begin])
            if float(times[end - 1]) - self._since_s > STEADY_S:
                self._hold(times[begin:end], speed[begin:end])

    def _hold(self, times: Floats, speed: Floats) -> None:
        kept = speed[(times - self._since_s > STEADY_S) & ~np.isnan(speed)]
        if not len(kept):
            return
        duty = round(self._duty / CURVE_STEP_PCT) * CURVE_STEP_PCT
        key = self._motor, duty, self._growing
        level = self._digest.levels.get(key)
        if level is None:
            if len(self._digest.levels) >= CURVE_LEVELS_MAX:
                return
            level = self._digest.levels[key] = Level(duty, self._growing)
        level.samples += len(kept)
        level.speed_sum += float(kept.sum())
        level.least = min(level.least, float(kept.min()))
        level.greatest = max(level.greatest, float(kept.max()))
