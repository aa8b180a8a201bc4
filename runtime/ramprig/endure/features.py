"""Reduces each cycle of a run to a few numbers for each motor and servo that age shows in: currents, speeds, times.

Read after the fact from the samples and the count of cycles, in one pass and with the memory of one cycle (at most
`CYCLE_ROWS_MAX` samples of it). What a cycle does not show is NaN: a motor that never holds a duty has no steady speed.
`NEEDS` says what each feature asks for, `motorfeatures`, `takeup` and `servotiming` how it is measured.
"""

from __future__ import annotations

import math
from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ramprig.errors import RecordError
from ramprig.record.reading import files_by_part, read_cycles, read_manifest
from ramprig.record.scan import Piece
from ramprig.record.volumes import Stream

from .motorfeatures import CHANNELS, DriveFeatures, MotorFeatures, motor_features
from .servotiming import ServoFeatures, servo_features

Floats = NDArray[np.float64]
Line = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used

CYCLE_ROWS_MAX = 400_000
"""Samples of one cycle that are kept, over an hour at 100 a second; the rest of a longer one is counted only."""


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
    servos: Mapping[str, ServoFeatures] = field(default_factory=dict)

    def values(self) -> dict[str, float]:
        """Every feature by its name, such as `vent forward: steady current`, those that are missing as NaN."""
        found = {"duration": self.duration_s, "lowest supply": self.lowest_supply_v}
        for motor, features in self.motors.items():
            for name in MOTOR_NAMES:
                found[f"{motor}: {named(name)}"] = getattr(features, name)
            for way, drive in (("forward", features.forward), ("backward", features.backward)):
                for name in DRIVE_NAMES:
                    found[f"{motor} {way}: {named(name)}"] = getattr(drive, name)
        for servo, timing in self.servos.items():
            for name in SERVO_NAMES:
                found[f"{servo}: {named(name)}"] = getattr(timing, name)
        return found


DRIVE_NAMES = tuple(each.name for each in fields(DriveFeatures))
MOTOR_NAMES = ("peak_current_a", "energy_j", "position_error_rev", "travel_ratio", "lost_motion_deg", "resistance_ohm")
SERVO_NAMES = tuple(each.name for each in fields(ServoFeatures))
_UNITS = {"a": "A", "rpm": "rpm", "s": "s", "j": "J", "pct": "%", "rev": "rev", "deg": "deg", "v": "V", "ohm": "ohm"}
_WORDS = {
    "coast_down_s": "coast-down time",
    "breakaway_duty_pct": "break-away duty",
    "breakaway_current_a": "break-away current",
}
NEEDS = {
    "steady current": "a duty held for 0.4 s, and a current sensor",
    "steady speed": "a duty held for 0.4 s, and an encoder",
    "time to speed": "a start and a held duty in the same cycle, and an encoder",
    "coast-down time": "a held duty, then zero until the motor has run down, and an encoder",
    "break-away duty": "a ramp from rest of at most 25 %/s, and an encoder; with that on the output, after a drive the "
    "same way",
    "break-away current": "as the break-away duty, and a current sensor",
    "start delay": "a start from rest, and an encoder",
    "position error": "a drive both ways, and an encoder",
    "travel ratio": "a drive both ways, and an encoder",
    "resistance": "a ramp from rest of at most 25 %/s that goes on after the first motion, an encoder, a current "
    "sensor and the supply's reading",
    "lost motion": "the encoder on the output shaft, and such a ramp from rest right after a drive the other way; or "
    "the output clamped, and the motor pressed both ways. An encoder on the motor's shaft alone cannot show it",
    "move time": "a supply that sags measurably under the servo, while no motor is driven: a hobby servo tells nothing "
    "itself",
    "supply sag": "as the move time",
    "commanded move time": "a move",
}
"""What a cycle must have for a feature to be told, by its words."""
NOT_JUDGED = ("position error", "commanded move time", "supply sag")
"""Features that are told but have no trend: one lies about zero, one is the board's doing, one is a few steps high."""


def named(attribute: str) -> str:
    """The words of an attribute without its unit: `steady current` of `steady_current_a`."""
    words, _, unit = attribute.rpartition("_")
    if attribute in _WORDS:
        return _WORDS[attribute]
    return (words if unit in _UNITS else attribute).replace("_", " ")


def absent(known: Iterable[str], *, motors: Sequence[str], servos: Sequence[str]) -> dict[str, str]:
    """The features that are not among the `known` full names, such as `vent: lost motion`, with what each asks for.

    One that has directions is absent where neither has it; a motor or servo of which nothing is known did not move.
    """
    seen = {(name.rpartition(": ")[0].partition(" ")[0], name.rpartition(": ")[2]) for name in known}
    moved = {drive for drive, _ in seen}
    of_servos = {named(name) for name in SERVO_NAMES}
    return {
        f"{drive}: {word}": why
        for drive in (*motors, *servos)
        for word, why in NEEDS.items()
        if (word in of_servos) == (drive in servos) and drive in moved and (drive, word) not in seen
    }


def unit_of(name: str) -> str:
    """The unit of a feature by its name in `CycleFeatures.values`; empty for a ratio."""
    what = name.rpartition(": ")[2]
    if what in ("duration", "lowest supply"):
        return "s" if what == "duration" else "V"
    attribute = next((each for each in (*MOTOR_NAMES, *DRIVE_NAMES, *SERVO_NAMES) if named(each) == what), "")
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
    tick_us = int((manifest.get("clocks") or {}).get("tick_us") or 1000)
    walk = FeatureWalk(names, spans_of(lines), tick_us=tick_us, on_output=on_output_of(manifest))
    if not walk.spans:
        return
    for part, paths in files_by_part(manifest, folder).items():
        for piece in Stream(paths, columns=walk.columns):
            yield from walk.take(part, piece)
        yield from walk.close_part(part)


def on_output_of(manifest: Line) -> frozenset[str]:
    """The motors of a run whose encoder sits on the output shaft."""
    columns = (manifest.get("speed") or {}).get("columns") or []
    return frozenset(str(each["column"]).rpartition(".")[0] for each in columns if each.get("encoder_on_output"))


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
    `on_output` names the motors whose encoder sits on the output shaft.
    """

    def __init__(
        self, names: Sequence[str], spans: Sequence[Span], *, tick_us: int, on_output: Collection[str] = ()
    ) -> None:
        self._on_output = on_output
        self.servos = tuple(name.removesuffix(".pulse_us") for name in names if name.endswith(".pulse_us"))
        self.motors = tuple(name.removesuffix(".duty_pct") for name in names if name.endswith(".duty_pct"))
        wanted = [f"{motor}.{channel}" for motor in self.motors for channel in CHANNELS] + ["supply_v"]
        wanted += [f"{servo}.pulse_us" for servo in self.servos]
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
        driven = np.zeros(rows, np.bool_)
        for motor in self.motors:
            driven |= np.nan_to_num(column(f"{motor}.duty_pct")) != 0.0
        return CycleFeatures(
            span=span,
            samples=rows,
            left_out=left_out,
            duration_s=(span.end_tick - span.begin_tick) * self._tick_s,
            lowest_supply_v=float(known.min()) if len(known) else math.nan,
            motors={
                motor: motor_features(
                    times,
                    {name: column(f"{motor}.{name}") for name in CHANNELS},
                    supply,
                    on_output=motor in self._on_output,
                )
                for motor in self.motors
            },
            servos={servo: servo_features(times, column(f"{servo}.pulse_us"), supply, driven) for servo in self.servos},
        )
