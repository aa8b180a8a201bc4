"""A night of cycles, followed turn by turn along the lines that a few simulated ones gave.

Cycles and checks come in the order in which the run takes them. The starts per hour are left out of what is simulated:
here the same guard as in the run spaces the turns, and a winding cools exponentially through the pause. Where a cycle
is as the one before it, or a group (a check and the cycles up to the next), those after it are taken to be like it.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

from ramprig.mock.plant import MotorParameters
from ramprig.sequence.plan import Cycles
from ramprig.sequence.spacing import HOUR_S, StartsGuard
from ramprig.sequence.steps import Cycle

from .play import Play
from .turnlines import LEAST_TURN_S, TurnKind, TurnLine, lines_of, winding_c

FOLLOWED_MAX = 20_000
"""After so many turns followed one by one, the groups that are left are taken to be as the last, steady or not."""
STEADY_K = 1e-3
STEADY_S = 1e-3
"""A cycle or a group is as the one before where its temperatures and its length are as near."""


@dataclass(frozen=True, slots=True, kw_only=True)
class TurnNight:
    """The whole of a run of cycles: how many, with their checks, time and energy, each winding at its hottest and at
    the end. `pause_s` is the shortest pause before a cycle that was not simulated, `last_c` the windings where the last
    turn begins.
    """

    passes: int
    checks: int
    elapsed_s: float
    energy_j: float
    hottest_c: Mapping[str, float]
    end_c: Mapping[str, float]
    pause_s: float
    last_c: Mapping[str, float]


@dataclass(slots=True)
class _Last:
    """The turn that was followed last."""

    line: TurnLine
    begin_s: float
    took_s: float
    begin_c: dict[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class _Mark:
    """Where the night stood at the begin of a cycle or of a group."""

    begin_s: float
    energy_j: float
    cycles: int
    checks: int
    now_c: dict[str, float]
    length_s: float


class _Follower:
    """Goes through the night. `begin_s` is where the next turn begins, from the first one's begin on, but for
    `ahead_s`, the turns that were not followed; `now_c` are the windings there."""

    def __init__(
        self,
        block: Cycle,
        part: Cycles,
        lines: Mapping[TurnKind, TurnLine],
        motors: Mapping[str, MotorParameters],
        begin_c: Mapping[str, float],
    ) -> None:
        self._block, self._part, self._lines, self._motors = block, part, lines, motors
        self._guard = StartsGuard()
        if part.before is not None:
            self._guard.note(part.before.totals.starts, 0.0)
        self._marks: dict[TurnKind, _Mark] = {}
        self._since_check: int | None = None
        self.begin_s = self.ahead_s = self.energy_j = 0.0
        self.now_c = dict(begin_c)
        self.peak_c = dict(begin_c)
        self.cycles = self.checks = self.followed = 0
        self.pause_s = math.inf
        self.last: _Last | None = None

    def go(self) -> None:
        """Follow the whole night."""
        while (kind := self._due()) is not None:
            if kind is not TurnKind.CHECKED:
                self._leap(kind)
            self._turn(kind)
            self.followed += 1

    def _due(self) -> TurnKind | None:
        """The kind of the next turn, at whose begin the night then stands; None where the block is over."""
        block, part = self._block, self._part
        if block.check and (self._since_check is None or self._since_check >= (block.check_every or 1)):
            self._rest(self._allowed_s(part.check_starts))
            return TurnKind.CHECK
        if block.times is not None and self.cycles >= block.times:
            return None
        allowed_s = self._allowed_s(part.starts)
        if block.for_s is not None and allowed_s + self.ahead_s >= float(block.for_s) - 1e-9:
            return None
        if self.cycles:
            self.pause_s = min(self.pause_s, allowed_s - self.begin_s)
        self._rest(allowed_s)
        first = self.last is None or self._since_check == 0
        return TurnKind.CHECKED if first else TurnKind.LATER

    def _allowed_s(self, starts: Mapping[str, int]) -> float:
        per_hour = self._part.starts_per_hour
        if per_hour is None:
            return self.begin_s
        return self._guard.earliest_s(starts, self.begin_s, per_hour=per_hour)

    def _rest(self, until_s: float) -> None:
        """The gap after the last turn, as it was simulated, and a pause until the next one may begin."""
        if self.last is None:
            self.begin_s = until_s
            return
        pause_s = until_s - self.begin_s
        self.energy_j += self.last.line.at.gap_j + self.last.line.at.idle_w * pause_s
        self.begin_s = until_s
        for name, motor in self._motors.items():
            fade = math.exp(-pause_s / motor.thermal_time_s)
            self.now_c[name] = motor.ambient_c + (self.now_c[name] - motor.ambient_c) * fade

    def _turn(self, kind: TurnKind) -> None:
        line = self._lines[kind]
        warmth = line.warmth(self.now_c)
        took_s = max(LEAST_TURN_S, line.at.took_s + warmth * line.took_s)
        self.energy_j += line.at.own_j + warmth * line.own_j
        for name, now in self.now_c.items():
            self.peak_c[name] = max(self.peak_c[name], line.peak(name, now))
        self.last = _Last(line, self.begin_s, took_s, dict(self.now_c))
        starts = self._part.check_starts if kind is TurnKind.CHECK else self._part.starts
        self._guard.note(starts, self.begin_s + took_s, took_s=took_s)
        self.now_c = line.after(self.now_c, line.at.next_c)
        self.begin_s += max(took_s, line.at.pitch_s + warmth * line.pitch_s)
        if kind is TurnKind.CHECK:
            self.checks += 1
            self._since_check = 0
            self._marks.pop(TurnKind.LATER, None)
            return
        self.cycles += 1
        if self._since_check is not None:
            self._since_check += 1

    def _leap(self, kind: TurnKind) -> None:
        """At the begin of a later cycle or of a check: pass over all those that would be as the last one was."""
        before, now = self._marks.get(kind), self._mark(self._marks.get(kind))
        self._marks[kind] = now
        if before is None or not self._steady(before, now):
            return
        cycles, length_s = now.cycles - before.cycles, now.length_s
        number = self._left(kind, cycles, length_s)
        if number <= 0:
            return
        self.cycles += number * cycles
        self.checks += number * (now.checks - before.checks)
        self.energy_j += number * (now.energy_j - before.energy_j)
        self.ahead_s += number * length_s
        if kind is TurnKind.LATER and self._since_check is not None:
            self._since_check += number
        self._marks.clear()

    def _mark(self, before: _Mark | None) -> _Mark:
        return _Mark(
            begin_s=self.begin_s,
            energy_j=self.energy_j,
            cycles=self.cycles,
            checks=self.checks,
            now_c=dict(self.now_c),
            length_s=0.0 if before is None else self.begin_s - before.begin_s,
        )

    def _steady(self, before: _Mark, now: _Mark) -> bool:
        if now.cycles == before.cycles:
            return False
        if self.followed >= FOLLOWED_MAX:
            return True
        if self._part.starts_per_hour is not None and self.begin_s < HOUR_S:
            return False
        near = all(abs(now.now_c[name] - before.now_c[name]) < STEADY_K for name in now.now_c)
        return near and abs(now.length_s - before.length_s) < STEADY_S

    def _left(self, kind: TurnKind, cycles: int, length_s: float) -> int:
        """How many more of this length and so many cycles there certainly are."""
        bounds = []
        if self._block.times is not None:
            bounds.append((self._block.times - self.cycles) // cycles)
        if self._block.for_s is not None:
            bounds.append(int((float(self._block.for_s) - self.begin_s - self.ahead_s) / length_s))
        if kind is TurnKind.LATER and self._since_check is not None:
            bounds.append((self._block.check_every or 1) - self._since_check)
        return min(bounds) - 1


def follow(
    block: Cycle, part: Cycles, cold: Play, hot: Play | None, motors: Mapping[str, MotorParameters]
) -> TurnNight:
    """The night of a `block` of cycles, of which `cold` and `hot` show a few; `part` is the plan's.

    Without `hot` heat changes no length, and the slopes are those of cooling alone.
    """
    begin = cold.turns[0].begin
    lines = lines_of(cold, hot, motors)
    begin_c = {name: winding_c(cold, name, begin) for name in motors}
    night = _Follower(block, part, lines, motors, begin_c)
    night.go()
    last = night.last
    assert last is not None, "a block of cycles has at least one"
    end_run = cold if hot is None else hot
    tail = end_run.turns[-1].end
    lead_s, tail_s = begin * cold.tick_s, end_run.elapsed_s - tail * end_run.tick_s
    rows = round(tail * end_run.tick_s / end_run.row_s)
    lead = round(lead_s / cold.row_s)
    ends_c = last.line.after(last.begin_c, last.line.at.end_c)
    hottest, end = {}, {}
    for name, motor in motors.items():
        tail_c = end_run.motors[name].winding_c[rows:]
        off = (ends_c[name] - winding_c(end_run, name, tail)) * math.exp(-tail_s / motor.thermal_time_s)
        end[name] = (float(tail_c[-1]) if len(tail_c) else winding_c(end_run, name, tail)) + off
        lead_c = float(cold.motors[name].winding_c[:lead].max(initial=-273.0))
        hottest[name] = max(lead_c, night.peak_c[name], float((tail_c + off).max(initial=-273.0)))
    return TurnNight(
        passes=night.cycles,
        checks=night.checks,
        elapsed_s=lead_s + last.begin_s + last.took_s + night.ahead_s + tail_s,
        energy_j=float(cold.energy_j[:lead].sum()) + night.energy_j + float(end_run.energy_j[rows:].sum()),
        hottest_c=hottest,
        end_c=end,
        pause_s=night.pause_s if math.isfinite(night.pause_s) else 0.0,
        last_c=last.begin_c,
    )
