"""Reduces each cycle of a run to a few numbers per motor that age shows in: currents, speeds, times, energy, position.

Read after the fact from the samples and the count of cycles, in one pass and with the memory of one cycle (at most
`CYCLE_ROWS_MAX` samples of it). Each direction is told apart, since brushes and gears wear by direction. What a cycle
does not show is NaN: a motor that never holds a duty has no steady speed. All the figures below are choices of this
program and no standard.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ramprig.errors import RecordError
from ramprig.record.reading import files_by_part, read_cycles, read_manifest
from ramprig.record.scan import Piece
from ramprig.record.volumes import Stream

Floats = NDArray[np.float64]
Line = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used

CYCLE_ROWS_MAX = 400_000
"""Samples of one cycle that are kept, over an hour at 100 a second; the rest of a longer one is counted only."""
HOLD_S = 0.4
"""A duty held for so long is a hold; its second half is taken as steady."""
AT_SPEED = 0.95
"""Share of the steady speed at which the motor has come to speed."""
AT_REST = 0.05
"""Share of the steady speed below which it has run down."""
UNDER_WAY = 0.15
"""A cycle whose first duty is more than this share of the hold's begins with the motor under way."""
MOVED_COUNTS = 2
"""More counts than this are a motion; fewer are a shaft that trembles on an edge."""
BREAKAWAY_PCT_PER_S = 25.0
"""A ramp steeper than this passes the break-away duty before the counts can tell; none is given then."""
FROM_REST_PCT = 3.0
"""A cycle whose first duty is no more than this is taken to begin at rest."""
GAP_S = 0.5
"""No energy is counted over a gap in the samples longer than this."""
CHANNELS = ("duty_pct", "counts", "position_rev", "speed_rpm", "current_a")
"""The columns of each motor that are read, beside `supply_v`."""


@dataclass(frozen=True, slots=True, kw_only=True)
class DriveFeatures:
    """One direction of one motor, from its longest hold: sizes without sign.

    `time_to_speed_s` counts from the first duty, the ramp included; `coast_down_s` from the end of the hold to
    AT_REST of the steady speed, the fall of the duty included.
    """

    steady_current_a: float = math.nan
    steady_speed_rpm: float = math.nan
    time_to_speed_s: float = math.nan
    coast_down_s: float = math.nan
    breakaway_duty_pct: float = math.nan


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorFeatures:
    """One motor in one cycle.

    `energy_j` goes into the motor: supply times duty times current, summed. `position_error_rev` is how far from its
    beginning a cycle that drives both ways ends, at the output shaft; `travel_ratio` the travel backward for each turn
    forward, which is judged in its place: an error about zero has no share of itself.
    """

    forward: DriveFeatures = DriveFeatures()
    backward: DriveFeatures = DriveFeatures()
    peak_current_a: float = math.nan
    energy_j: float = math.nan
    position_error_rev: float = math.nan
    travel_ratio: float = math.nan


@dataclass(frozen=True, slots=True, kw_only=True)
class Span:
    """Where a cycle, or a check with the number 0, lies: ticks of the board in one part of the run, ends included.

    `after` is how many cycles were done before a check.
    """

    number: int
    part: int
    begin_tick: int
    end_tick: int
    outcome: str = ""
    after: int = 0

    @property
    def is_check(self) -> bool:
        """Whether it is a check between cycles."""
        return self.number == 0


@dataclass(frozen=True, slots=True, kw_only=True)
class CycleFeatures:
    """The features of one cycle or check. `left_out` samples were beyond CYCLE_ROWS_MAX."""

    span: Span
    samples: int
    left_out: int
    duration_s: float
    lowest_supply_v: float
    motors: Mapping[str, MotorFeatures]

    def values(self) -> dict[str, float]:
        """Every feature by its name, such as `vent forward: steady current`, those that are missing as NaN."""
        found = {"duration": self.duration_s, "lowest supply": self.lowest_supply_v}
        for motor, features in self.motors.items():
            for name in MOTOR_NAMES:
                found[f"{motor}: {named(name)}"] = getattr(features, name)
            for way, drive in (("forward", features.forward), ("backward", features.backward)):
                for name in DRIVE_NAMES:
                    found[f"{motor} {way}: {named(name)}"] = getattr(drive, name)
        return found


DRIVE_NAMES = tuple(field.name for field in fields(DriveFeatures))
MOTOR_NAMES = ("peak_current_a", "energy_j", "position_error_rev", "travel_ratio")
_UNITS = {"a": "A", "rpm": "rpm", "s": "s", "j": "J", "pct": "%", "rev": "rev"}
_WORDS = {"coast_down_s": "coast-down time", "breakaway_duty_pct": "break-away duty"}
NOT_JUDGED = ("position error",)
"""Features that are told but have no trend of their own."""


def named(attribute: str) -> str:
    """The words of an attribute without its unit: `steady current` of `steady_current_a`."""
    words, _, unit = attribute.rpartition("_")
    if attribute in _WORDS:
        return _WORDS[attribute]
    return (words if unit in _UNITS else attribute).replace("_", " ")


def unit_of(name: str) -> str:
    """The unit of a feature by its name in `CycleFeatures.values`; empty for a ratio."""
    what = name.rpartition(": ")[2]
    if what in ("duration", "lowest supply"):
        return "s" if what == "duration" else "V"
    attribute = next((each for each in (*MOTOR_NAMES, *DRIVE_NAMES) if named(each) == what), "")
    return _UNITS.get(attribute.rpartition("_")[2], "")


def is_judged(name: str) -> bool:
    """Whether a trend of this feature means something."""
    return name.rpartition(": ")[2] not in NOT_JUDGED


# ---- a run -----------------------------------------------------------------------------------------------------------


def cycle_features(folder: Path) -> Iterator[CycleFeatures]:
    """The features of each cycle and check that was done, in order; nothing where the run has no cycles.

    Raises RecordError where the folder is no run, or its count of cycles or samples cannot be read.
    """
    manifest = read_manifest(folder)
    lines, _ = read_cycles(folder)
    names = [str(name) for name in manifest.get("columns") or []]
    walk = FeatureWalk(names, spans_of(lines), tick_us=int((manifest.get("clocks") or {}).get("tick_us") or 1000))
    if not walk.spans:
        return
    for part, paths in files_by_part(manifest, folder).items():
        for piece in Stream(paths, columns=walk.columns):
            yield from walk.take(part, piece)
        yield from walk.close_part(part)


def spans_of(lines: Iterable[Line]) -> list[Span]:
    """The cycles and checks that were done, from the lines of the count of cycles. Raises RecordError."""
    try:
        return [
            Span(
                number=int(line["number"]) if line["kind"] == "cycle_done" else 0,
                part=int(line.get("part") or 1),
                begin_tick=int(line["begin_tick"]),
                end_tick=int(line["tick"]),
                outcome=str(line.get("outcome", "")),
                after=int(line.get("after") or 0),
            )
            for line in lines
            if line.get("kind") in ("cycle_done", "check_done")
        ]
    except (KeyError, TypeError, ValueError) as error:
        raise RecordError(f"a line of the count of cycles lacks what its features need: {error!r}") from error


class FeatureWalk:
    """Gathers the samples of one cycle after another from the pieces of a samples file, and reduces each.

    `names` are the columns of the file, `columns` those to be read; `spans` are in order of time within a part.
    """

    def __init__(self, names: Sequence[str], spans: Sequence[Span], *, tick_us: int) -> None:
        self.motors = tuple(name.removesuffix(".duty_pct") for name in names if name.endswith(".duty_pct"))
        wanted = [f"{motor}.{channel}" for motor in self.motors for channel in CHANNELS] + ["supply_v"]
        self.columns = tuple(name for name in wanted if name in names)
        self.spans: dict[int, list[Span]] = {}
        for span in spans:
            self.spans.setdefault(span.part, []).append(span)
        self._next: dict[int, int] = {}
        self._tick_s = tick_us / 1e6
        self._chunks: list[tuple[Floats, dict[str, Floats]]] = []
        self._rows = 0
        self._left_out = 0

    def take(self, part: int, piece: Piece) -> list[CycleFeatures]:
        """The cycles that are whole with these samples; pieces come in the order of the file."""
        spans, place, found = self.spans.get(part, []), self._next.get(part, 0), []
        if not len(piece):
            return []
        ticks = np.maximum.accumulate(piece.ticks)  # a board that restarts must not make them run backwards
        while place < len(spans) and spans[place].begin_tick <= ticks[-1]:
            span = spans[place]
            begin = int(np.searchsorted(ticks, span.begin_tick, side="left"))
            end = int(np.searchsorted(ticks, span.end_tick, side="right"))
            self._keep(ticks, piece, begin, end)
            if ticks[-1] < span.end_tick:
                break
            found.append(self._finish(span))
            place += 1
        self._next[part] = place
        return found

    def close_part(self, part: int) -> list[CycleFeatures]:
        """The cycle whose samples end with the file, if there is one."""
        spans, place = self.spans.get(part, []), self._next.get(part, 0)
        if place >= len(spans) or not self._rows:
            return []
        self._next[part] = place + 1
        return [self._finish(spans[place])]

    def _keep(self, ticks: NDArray[np.int64], piece: Piece, begin: int, end: int) -> None:
        room = max(0, CYCLE_ROWS_MAX - self._rows)
        last = min(end, begin + room)
        self._left_out += max(0, end - max(begin, last))
        if last <= begin:
            return
        self._rows += last - begin
        numbers = {name: piece.numbers[name][begin:last].copy() for name in self.columns if name in piece.numbers}
        times: Floats = ticks[begin:last].astype(np.float64) * self._tick_s
        self._chunks.append((times, numbers))

    def _finish(self, span: Span) -> CycleFeatures:
        chunks, rows, left_out = self._chunks, self._rows, self._left_out
        self._chunks, self._rows, self._left_out = [], 0, 0
        times = np.concatenate([np.empty(0), *(times for times, _ in chunks)])
        nothing = np.full(rows, math.nan)

        def column(name: str) -> Floats:
            kept = [numbers[name] for _, numbers in chunks if name in numbers]
            return np.concatenate(kept) if kept and name in self.columns else nothing

        supply = column("supply_v")
        known = supply[~np.isnan(supply)]
        return CycleFeatures(
            span=span,
            samples=rows,
            left_out=left_out,
            duration_s=(span.end_tick - span.begin_tick) * self._tick_s,
            lowest_supply_v=float(known.min()) if len(known) else math.nan,
            motors={
                motor: motor_features(times, {name: column(f"{motor}.{name}") for name in CHANNELS}, supply)
                for motor in self.motors
            },
        )


# ---- one motor in one cycle ------------------------------------------------------------------------------------------


def motor_features(times: Floats, channels: Mapping[str, Floats], supply: Floats) -> MotorFeatures:
    """Reduce one cycle: `times` (n,) s, not decreasing, `channels` by CHANNELS and `supply` (n,) V; NaN is missing."""
    if len(times) < 2:
        return MotorFeatures()
    duty, current = channels["duty_pct"], channels["current_a"]
    sizes = np.abs(current[~np.isnan(current)])
    power = np.nan_to_num(supply * duty / 100.0 * current)
    steps = np.diff(times)
    steps[steps > GAP_S] = 0.0
    has_energy = bool(np.any(~np.isnan(supply) & ~np.isnan(duty) & ~np.isnan(current)))
    error, ratio = _travels(duty, channels["position_rev"])
    return MotorFeatures(
        forward=_drive(times, channels, 1.0),
        backward=_drive(times, channels, -1.0),
        peak_current_a=float(sizes.max()) if len(sizes) else math.nan,
        energy_j=float((power[1:] + power[:-1]) @ steps / 2.0) if has_energy else math.nan,
        position_error_rev=error,
        travel_ratio=ratio,
    )


def _travels(duty: Floats, position: Floats) -> tuple[float, float]:
    """Position error, and travel backward for each turn forward, of a cycle that drives both ways."""
    known = position[~np.isnan(position)]
    if len(known) < 2 or not (np.any(duty > 0) and np.any(duty < 0)):
        return math.nan, math.nan
    moved = np.diff(known)
    out, back = float(moved[moved > 0].sum()), -float(moved[moved < 0].sum())
    return float(known[-1] - known[0]), back / out if out > 0.0 else math.nan


def _drive(times: Floats, channels: Mapping[str, Floats], sign: float) -> DriveFeatures:
    """One direction, told by its longest hold; nothing but a break-away duty where there is no hold."""
    duty = channels["duty_pct"] * sign
    begin, end = _longest_hold(times, duty)
    if end <= begin:
        return DriveFeatures(breakaway_duty_pct=_breakaway(times, duty, channels["counts"]))
    speed, current = channels["speed_rpm"] * sign, channels["current_a"] * sign
    middle = int(np.searchsorted(times, (times[begin] + times[end - 1]) / 2.0))
    steady_speed = _mean(speed[middle:end])
    before = np.flatnonzero(~(duty[:begin] > 0.0))
    # A cycle that begins under way does not show how long the motor took; one that begins with the ramp does.
    begun = end if duty[0] > UNDER_WAY * duty[begin] else 0
    first = int(before[-1]) if len(before) else begun
    driven = np.flatnonzero(duty[end:] != 0.0)
    # The duty falls to zero, stays there, and ends with the next drive: of the other direction, or a rising one.
    zero = np.flatnonzero(duty[end:] == 0.0)
    again = driven[driven > zero[0]] if len(zero) else driven[:0]
    until = end + int(again[0]) if len(again) else len(times)
    return DriveFeatures(
        steady_current_a=_mean(current[middle:end]),
        steady_speed_rpm=steady_speed,
        time_to_speed_s=_crossing(times[first:end], speed[first:end], AT_SPEED * steady_speed),
        coast_down_s=_crossing(times[end - 1 : until], -speed[end - 1 : until], -AT_REST * steady_speed),
        breakaway_duty_pct=_breakaway(times, duty, channels["counts"]),
    )


def _longest_hold(times: Floats, duty: Floats) -> tuple[int, int]:
    """First and last-but-one sample of the longest time at one positive duty; (0, 0) where none is a hold."""
    begins = np.flatnonzero(np.diff(duty, prepend=math.nan) != 0)  # NaN differs from everything
    ends = np.append(begins[1:], len(duty))
    lasts = np.where(duty[begins] > 0.0, times[ends - 1] - times[begins], 0.0)
    longest = int(np.argmax(lasts))
    return (int(begins[longest]), int(ends[longest])) if lasts[longest] >= HOLD_S else (0, 0)


def _mean(values: Floats) -> float:
    known = values[~np.isnan(values)]
    return float(known.mean()) if len(known) else math.nan


def _crossing(times: Floats, values: Floats, level: float) -> float:
    """Time from the first sample until `values` reach `level` from below, between two samples; NaN if never."""
    known = ~np.isnan(values)
    at, values = times[known], values[known]
    reached = np.flatnonzero(values >= level)
    if math.isnan(level) or not len(reached):
        return math.nan
    k = int(reached[0])
    if k == 0:
        return float(at[0] - times[0])
    share = (level - values[k - 1]) / (values[k] - values[k - 1])
    return float(at[k - 1] + share * (at[k] - at[k - 1]) - times[0])


def _breakaway(times: Floats, duty: Floats, counts: Floats) -> float:
    """The duty at which the shaft first moves in a slow ramp from rest; NaN where nothing of the kind is there."""
    driven = np.flatnonzero(duty > 0.0)
    if not len(driven) or (driven[0] == 0 and duty[0] > FROM_REST_PCT):
        return math.nan
    first = int(driven[0])
    before = max(0, first - 1)
    earlier = counts[max(0, first - 5) : first + 1]
    if np.isnan(earlier).any() or np.ptp(earlier) > MOVED_COUNTS:
        return math.nan
    moved = np.flatnonzero(np.abs(counts[first:] - counts[first]) > MOVED_COUNTS)
    if not len(moved):
        return math.nan
    k = first + int(moved[0])
    if not np.all(duty[first : k + 1] > 0.0):
        return math.nan
    slew = (duty[k] - duty[before]) / max(float(times[k] - times[before]), 1e-9)
    return float(duty[k]) if 0.0 < slew <= BREAKAWAY_PCT_PER_S else math.nan
