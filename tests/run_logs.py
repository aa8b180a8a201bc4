"""The logs that `ramprig run` leaves, compared between boards that read and drive with different resolution.

The runs are laid over each other piece by piece: a wait ends when the host has seen enough, some ticks sooner or later.
Within a piece the orders' start ticks are the same on both. What may differ then follows from the two boards:

- A tick: within it the firmware reads its inputs and writes its bridge, and a converter's value is up to one tick old.
- The bridge's step, while the duty changes: half of it is some ticks of the ramp. Near standstill it moves the moment
  at which friction lets go or holds, by less than a count for each start and stop.
- The steps of the sensors, and the noise that the bench's model gives the current.
"""

from __future__ import annotations

import csv
import json
from bisect import bisect_right
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt

Numbers = npt.NDArray[np.float64]

TICKS_LATE = 1
"""How much later or earlier within a tick one board may do what the other does."""
PIECES = ("armed", "pass_begun", "wait_ended", "stop_begun")
"""The events with which a piece begins: before each of them the host has waited for something."""
DRIVEN = ("counts", "position_rev", "speed_rpm", "current_a")
"""What follows from the bridge's duty."""
HOP_ROWS = 3
"""So near to a change of its pulse a servo may move."""


@dataclass(frozen=True, slots=True)
class Resolution:
    """What a board can tell apart and make, by the last part of a column's name, in the column's unit."""

    steps: Mapping[str, float]
    bridge_step_pct: float
    servo_moving_v: float
    """By how much the supply falls while a servo moves: it does so in hops shorter than a row."""


@dataclass(frozen=True, slots=True)
class RunLog:
    """One run: its rows as text, head first, and the ticks at which its pieces begin."""

    rows: list[list[str]]
    pieces: list[tuple[str, int]]
    account: dict[str, object]
    verdict: str

    def ticks(self) -> Numbers:
        return np.array([float(row[0]) for row in self.rows[1:]])

    def column(self, name: str) -> Numbers:
        """A column's numbers, NaN where there is none."""
        at = self.rows[0].index(name)
        return np.array([float(row[at] or "nan") for row in self.rows[1:]])


def read_log(folder: Path) -> RunLog:
    """The log in a run folder."""
    with (folder / "samples.csv").open(newline="") as file:
        rows = list(csv.reader(file))
    events = [json.loads(line) for line in (folder / "events.jsonl").read_text("utf-8").splitlines()]
    manifest = json.loads((folder / "run.json").read_text("utf-8"))
    pieces = sorted((event["tick"], event["kind"]) for event in events if event["kind"] in PIECES)
    return RunLog(rows, [(kind, tick) for tick, kind in pieces], manifest["samples"], manifest["verdict"])


def aligned(log: RunLog, other: RunLog) -> list[tuple[int, float]]:
    """Rows of `log` that have their like in `other`: the row's index, and the tick in `other` that is its own.

    What one waited longer than the other is left out. Before the first pass all is laid back from its beginning.
    """
    assert [kind for kind, _ in log.pieces] == [kind for kind, _ in other.pieces]
    ours = [tick for _, tick in log.pieces]
    theirs = [tick for _, tick in other.pieces]
    first = [kind for kind, _ in log.pieces].index("pass_begun")
    found = []
    for index, tick in enumerate(log.ticks()):
        piece = bisect_right(ours, tick) - 1
        if not 0 <= piece < len(ours) - 1:
            continue
        anchor = max(piece, first)
        then = tick - ours[anchor] + theirs[anchor]
        if theirs[0] + 1 < then < theirs[piece + 1]:
            found.append((index, then))
    return found


def drawn_apart(ticks: Numbers, duty: Numbers, bridge_step_pct: float) -> Numbers:
    """How many ticks early or late the bridge may make each duty: half its step at the ramp's rate, at most a row."""
    row_ticks = ticks[1] - ticks[0]
    rate = np.zeros_like(duty)
    rate[:-1] = np.abs(np.diff(duty)) / row_ticks
    rate[1:] = np.maximum(rate[1:], rate[:-1])
    late: Numbers = np.divide(bridge_step_pct / 2, rate, out=np.zeros_like(rate), where=rate > 0)
    capped: Numbers = np.minimum(late, row_ticks)
    return capped


def starts_and_stops(duty: Numbers) -> Numbers:
    """How often the motor was started or stopped up to each row."""
    still = duty == 0
    return np.concatenate([[0.0], np.cumsum(still[1:] != still[:-1]).astype(float)])


def envelope(ticks: Numbers, values: Numbers, then: float, late: float) -> tuple[float, float]:
    """The least and the greatest value around a tick, a bend between two rows included; NaN beside a gap."""
    row = row_before(ticks, then)
    near = np.interp([then - late, then, then + late], ticks, values)
    inside = values[(ticks > then - late) & (ticks < then + late)]
    around = values[max(0, row - 2) : row + 4]
    bend = float(np.abs(np.diff(around, 2)).max()) / 4  # a kink between two rows lies at most so far off their line
    both = np.concatenate([near, inside])
    return float(both.min()) - bend, float(both.max()) + bend


def row_before(ticks: Numbers, then: float) -> int:
    """The last row that is not after a tick."""
    return int(np.searchsorted(ticks, then, side="right")) - 1


def steps_of(kind: str, other: RunLog, resolution: Resolution) -> Numbers:
    """What a value may be off by at each row of `other` for the steps of sensors and bridge."""
    step = np.full(len(other.rows) - 1, resolution.steps[kind])
    if kind in ("counts", "position_rev"):
        step *= 1 + starts_and_stops(other.column("vent.duty_pct"))
    elif kind == "supply_v":
        moves = np.abs(np.diff(other.column("latch.pulse_us"), append=0.0)) > 0
        step[np.convolve(moves, np.ones(2 * HOP_ROWS + 1), "same") > 0] += resolution.servo_moving_v
    return step


def differences(log: RunLog, other: RunLog, resolution: Resolution) -> list[str]:
    """Where a board's log differs from another's by more than both can tell apart."""
    assert log.rows[0] == other.rows[0]
    pairs = aligned(log, other)
    assert len(pairs) > 0.9 * (len(log.rows) - 1), "most of the run has its like in the other"
    names = log.rows[0][2:-1]
    return [text for name in names for text in _column_apart(log, other, resolution, name, pairs)] + _states_apart(
        log, other, pairs
    )


def _column_apart(
    log: RunLog, other: RunLog, resolution: Resolution, name: str, pairs: list[tuple[int, float]]
) -> Iterator[str]:
    kind = name.rpartition(".")[2]
    ticks, ours, theirs = other.ticks(), log.column(name), other.column(name)
    step = steps_of(kind, other, resolution)
    late = np.full(len(step), float(TICKS_LATE))
    if kind in DRIVEN:
        late += drawn_apart(ticks, other.column("vent.duty_pct"), resolution.bridge_step_pct)
    is_known = other.column("latch.pulse_us") > 0 if name.startswith("latch") else np.full(len(step), True)
    for index, then in pairs:
        row = row_before(ticks, then)
        if not is_known[row : row + 2].all() or np.isnan(ours[index]):
            continue  # the first pulse begins in the middle of a row; a speed has to be seen first
        low, high = envelope(ticks, theirs, then, late[row])
        if ours[index] < low - step[row] or ours[index] > high + step[row]:
            yield f"tick {log.rows[index + 1][0]}: {name} {ours[index]:g}, not {low:g} to {high:g} +- {step[row]:g}"


def _states_apart(log: RunLog, other: RunLog, pairs: list[tuple[int, float]]) -> list[str]:
    ticks = other.ticks()
    states = [row[-1] for row in other.rows[1:]]
    found = []
    for index, then in pairs:
        row, ours = row_before(ticks, then), log.rows[index + 1][-1]
        if ours not in states[row : row + 2]:
            found.append(f"tick {log.rows[index + 1][0]}: {ours}, not {' or '.join(states[row : row + 2])}")
    return found
