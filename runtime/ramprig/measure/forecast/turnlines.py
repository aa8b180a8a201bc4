"""What a few simulated turns tell of all of their kind: length, energy and heating over the winding's temperature.

Three kinds of turn are told apart, as each begins as all others of its kind do: a check, the cycle after a check, and
the cycle after a cycle. All of a turn goes with the winding's temperature along straight lines, from the simulation
from ambient to the hot one (one thermal node whose heat grows with the copper's resistance, as in `reduction`).
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from enum import Enum

import numpy as np

from ramprig.mock.plant import MotorParameters

from .play import Play, TurnPlayed

SAME_K = 1e-3
"""Cold and hot windings that are nearer than this tell nothing of what heat changes."""
LEAST_TURN_S = 1e-3


class TurnKind(Enum):
    """How a turn begins."""

    CHECK = "check"
    CHECKED = "cycle after a check, or the first"
    LATER = "cycle after a cycle"


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """A turn in a simulation: its length, and that up to the next turn's begin, in s; the energy of both parts in J,
    and the power of a bench at rest in W.

    Temperatures by motor in degC: where it begins, where it ends, where the next one begins, and the highest.
    """

    took_s: float
    pitch_s: float
    own_j: float
    gap_j: float
    idle_w: float
    begin_c: Mapping[str, float]
    end_c: Mapping[str, float]
    next_c: Mapping[str, float]
    peak_c: Mapping[str, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class TurnLine:
    """One kind of turn: as it is `at` some temperatures, and the changes from cold to hot, which lie `span` apart.

    `slope` is by how much the next turn begins hotter where this one begins a kelvin hotter, `peak_slope` by how much
    the hottest moment in between is, by motor.
    """

    at: Seen
    took_s: float = 0.0
    pitch_s: float = 0.0
    own_j: float = 0.0
    slope: Mapping[str, float]
    peak_slope: Mapping[str, float]
    span: Mapping[str, float]

    def warmth(self, now_c: Mapping[str, float]) -> float:
        """How far the windings are from where the line was taken, 1 being from cold to hot: the motors' mean."""
        shares = [(now_c[name] - self.at.begin_c[name]) / span for name, span in self.span.items()]
        return sum(shares) / len(shares) if shares else 0.0

    def peak(self, name: str, now_c: float) -> float:
        """The highest temperature of a motor, in degC, where its winding is at `now_c` at the begin."""
        return max(now_c, self.at.peak_c[name] + self.peak_slope[name] * (now_c - self.at.begin_c[name]))

    def after(self, now_c: Mapping[str, float], ends_c: Mapping[str, float]) -> dict[str, float]:
        """Where the windings are at the turn's end or the next one's begin, as `ends_c` of the turn seen says."""
        return {name: ends_c[name] + self.slope[name] * (now - self.at.begin_c[name]) for name, now in now_c.items()}


def kinds_of(turns: tuple[TurnPlayed, ...]) -> list[TurnKind]:
    """The kind of each turn of a simulation."""
    kinds = []
    after_cycle = False
    for turn in turns:
        kinds.append(TurnKind.CHECK if turn.check else TurnKind.LATER if after_cycle else TurnKind.CHECKED)
        after_cycle = not turn.check
    return kinds


def row_of(run: Play, tick: int) -> int:
    """The row that begins at a tick of the run."""
    return round(tick * run.tick_s / run.row_s)


def winding_c(run: Play, name: str, tick: int) -> float:
    """The temperature at a tick, in degC."""
    celsius = run.motors[name].winding_c
    return float(celsius[max(0, min(row_of(run, tick), len(celsius)) - 1)])


def seen_in(run: Play) -> dict[TurnKind, list[Seen]]:
    """The turns of a simulation by kind, without the last, after which none begins."""
    found: dict[TurnKind, list[Seen]] = {}
    for number, kind in enumerate(kinds_of(run.turns)[:-1]):
        turn, then = run.turns[number], run.turns[number + 1].begin
        rows = [row_of(run, tick) for tick in (turn.begin, turn.end, then)]
        seen = Seen(
            took_s=(turn.end - turn.begin) * run.tick_s,
            pitch_s=(then - turn.begin) * run.tick_s,
            own_j=float(run.energy_j[rows[0] : rows[1]].sum()),
            gap_j=float(run.energy_j[rows[1] : rows[2]].sum()),
            idle_w=float(run.energy_j[max(0, rows[2] - 1)]) / run.row_s,
            begin_c={name: winding_c(run, name, turn.begin) for name in run.motors},
            end_c={name: winding_c(run, name, turn.end) for name in run.motors},
            next_c={name: winding_c(run, name, then) for name in run.motors},
            peak_c={name: float(one.winding_c[rows[0] : rows[2]].max()) for name, one in run.motors.items()},
        )
        found.setdefault(kind, []).append(seen)
    return found


def lines_of(cold: Play, hot: Play | None, motors: Mapping[str, MotorParameters]) -> dict[TurnKind, TurnLine]:
    """The line of each kind that is seen in `cold`; without a hot one, heat changes no length."""
    cold_seen = seen_in(cold)
    hot_seen = {} if hot is None else seen_in(hot)
    lines = {}
    for kind, seen in cold_seen.items():
        # the very first turn begins as no other does, with motors that have not turned yet
        alike = seen[1:] if kind is not TurnKind.LATER and len(seen) > 1 else seen
        compared = kind if kind in hot_seen else TurnKind.CHECKED
        pair = (cold_seen[compared][0], hot_seen[compared][0]) if compared in hot_seen else None
        lines[kind] = _line(_mean(alike), pair, motors)
    return lines


def _mean(seen: list[Seen]) -> Seen:
    """The mean of alike turns: a wait ends on the runner's grid of 50 ms, so that they differ by as much."""

    def number(values: list[float]) -> float:
        return float(np.mean(values))

    def by_motor(values: list[Mapping[str, float]]) -> dict[str, float]:
        return {name: number([one[name] for one in values]) for name in values[0]}

    return Seen(
        took_s=number([one.took_s for one in seen]),
        pitch_s=number([one.pitch_s for one in seen]),
        own_j=number([one.own_j for one in seen]),
        gap_j=number([one.gap_j for one in seen]),
        idle_w=number([one.idle_w for one in seen]),
        begin_c=by_motor([one.begin_c for one in seen]),
        end_c=by_motor([one.end_c for one in seen]),
        next_c=by_motor([one.next_c for one in seen]),
        peak_c=by_motor([one.peak_c for one in seen]),
    )


def _line(at: Seen, pair: tuple[Seen, Seen] | None, motors: Mapping[str, MotorParameters]) -> TurnLine:
    slope = {name: math.exp(-at.pitch_s / motor.thermal_time_s) for name, motor in motors.items()}
    peak_slope = dict(slope)
    span: dict[str, float] = {}
    if pair is not None:
        cold, hot = pair
        apart = {name: hot.begin_c[name] - cold.begin_c[name] for name in motors}
        span = {name: kelvin for name, kelvin in apart.items() if abs(kelvin) > SAME_K}
    if pair is None or not span:
        return TurnLine(at=at, slope=slope, peak_slope=peak_slope, span={})
    for name, kelvin in span.items():
        slope[name] = _share(hot.next_c[name] - cold.next_c[name], kelvin)
        peak_slope[name] = _share(hot.peak_c[name] - cold.peak_c[name], kelvin)
    return TurnLine(
        at=at,
        took_s=hot.took_s - cold.took_s,
        pitch_s=hot.pitch_s - cold.pitch_s,
        own_j=hot.own_j - cold.own_j,
        slope=slope,
        peak_slope=peak_slope,
        span=span,
    )


def _share(change: float, of: float) -> float:
    """Of a winding's excess heat something is left, and not all of it."""
    return min(0.999_999, max(0.0, change / of))
