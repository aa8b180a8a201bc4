"""One run of a sequence on a simulated board, with what the plant truly did beside how the run ended."""

from __future__ import annotations

import bisect
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from ramprig.bench import Bench
from ramprig.errors import LinkError, UsageError
from ramprig.mock.core.library import defines, load
from ramprig.mock.core.watched import AXIS_COLUMNS, BUS_COLUMNS, EVERY_TICKS, Watched, WatchedCore, WatchedMock
from ramprig.mock.port import DevicePort
from ramprig.mock.setup import MockSetup
from ramprig.sequence.cycle_run import CycleOutcome
from ramprig.sequence.ending import run_plan
from ramprig.sequence.happened import CheckDone, CycleDone, PassBegun
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.outcome import Outcome, Verdict
from ramprig.sequence.plan import Part, Plan
from ramprig.sequence.rig import Rig
from ramprig.sequence.running import wanted_of
from ramprig.session.blocks import Block
from ramprig.session.events import Event, Tripped
from ramprig.session.session import Session

Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorPlay:
    """One motor, a value a row: extremes in A and rad/s, mean square in A^2, mean duty, winding in degC."""

    peak_a: Floats
    lasting_a: Floats
    speed_rad_s: Floats
    square_a2: Floats
    duty: Floats
    winding_c: Floats


@dataclass(frozen=True, slots=True)
class TurnPlayed:
    """A cycle or a check that was done, in ticks since the run's begin; `failed` is a cycle that was not confirmed."""

    check: bool
    begin: int
    end: int
    failed: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Play:
    """A run that is over. Rows are `row_s` apart and begin with the run's first tick, `bus_*` in V, energy in J.

    They end with the run, or with the trip: what the trip does to the bench then, such as a supply that has shut down,
    says nothing of the limits.
    `passes` are the ticks since the run's begin at which passes began, by where the repeat stands; `turns` are the
    cycles and checks that were done; `step_ticks` and `step_names` the steps that began. `tripped` says what ended it
    before its end, a trip or the loss of the board with its supply; empty where nothing did.
    """

    verdict: Verdict
    sentence: str
    place: str
    tripped: str
    elapsed_s: float
    row_s: float
    tick_s: float
    bus_high_v: Floats
    bus_low_v: Floats
    energy_j: Floats
    motors: Mapping[str, MotorPlay]
    passes: Mapping[str, tuple[int, ...]]
    turns: tuple[TurnPlayed, ...]
    step_ticks: tuple[int, ...]
    step_names: tuple[str, ...]

    def step_at(self, row: int) -> str:
        """The step under way in a row."""
        tick = round(row * self.row_s / self.tick_s)
        at = bisect.bisect_right(self.step_ticks, tick) - 1
        return self.step_names[at] if at >= 0 else "before the first step"


@dataclass
class _Notes:
    """Listens to the run."""

    passes: dict[str, list[int]] = field(default_factory=dict)
    turns: list[TurnPlayed] = field(default_factory=list)
    steps: list[tuple[int, str]] = field(default_factory=list)
    trip_tick: int | None = None

    def on_event(self, event: object) -> None:
        """Passes, cycles and checks."""
        match event:
            case PassBegun(tick=tick, place=place):
                self.passes.setdefault(place, []).append(tick)
            case CycleDone(tick=tick, begin_tick=begin, outcome=outcome):
                self.turns.append(TurnPlayed(False, begin, tick, outcome == CycleOutcome.FAILED))
            case CheckDone(tick=tick, begin_tick=begin):
                self.turns.append(TurnPlayed(True, begin, tick, False))

    def on_device(self, event: Event) -> None:
        """The first trip."""
        if isinstance(event, Tripped) and self.trip_tick is None:
            self.trip_tick = event.tick

    def on_trail(self, blocks: Sequence[Block]) -> None:
        """Not needed."""

    def begun(self, tick: int, part: Part) -> None:
        """A step."""
        self.steps.append((tick, f"line {part.mark.line}: {part.text}"))


def core_is_there(setup: MockSetup) -> bool:
    """Whether the board can be the firmware core in C."""
    try:
        load(defines(setup.board))
    except UsageError:
        return False
    return True


def play(
    plan: Plan,
    bench: Bench,
    setup: MockSetup,
    *,
    seed: int,
    windings_c: Mapping[str, float] | None = None,
    on_core: bool = True,
) -> Play:
    """Run a plan on a board made of `setup`, its windings warm as given. Raises what opening a device raises."""
    rig = Rig.of(bench, tick_us=setup.board.tick_us)
    holds = [1] * setup.board.axes
    for axis in rig.axes.values():
        holds[axis.index] = rig.limits["trip_ticks", axis.index]
    device: Watched = (WatchedCore if on_core else WatchedMock)(setup, seed=seed, hold_ticks=holds)
    for name, celsius in (windings_c or {}).items():
        device.set_winding(rig.axes[name].index, celsius)
    port = DevicePort(device, pace="virtual", seed=seed)
    listeners, notes = Listeners(), _Notes()

    def on_event(event: Event) -> None:
        notes.on_device(event)
        listeners.on_event(event)

    session = Session.open(port, wanted=wanted_of(bench), seed=seed, on_block=listeners.on_block, on_event=on_event)
    played: Play | None = None
    try:
        with session:
            outcome = run_plan(
                session, plan, rig, clock=port.clock, listeners=listeners, keeper=notes, begun=notes.begun
            )
            played = _play(rig, outcome, notes, device.rows)
    except LinkError:
        # Closing asks a board that has gone, with its supply, for its account; how the run ended is known by then.
        if played is None:
            raise
    return played


def _play(rig: Rig, outcome: Outcome, notes: _Notes, rows: Floats) -> Play:
    start = notes.steps[0][0] if notes.steps else 0
    tick_s = rig.tick_us / 1e6
    rows = rows[start // EVERY_TICKS :]
    kept = int(np.ceil(outcome.elapsed_s / (EVERY_TICKS * tick_s))) + 1
    if outcome.verdict is Verdict.TRIPPED:
        kept = len(rows) if notes.trip_tick is None else max(0, notes.trip_tick - start) // EVERY_TICKS + 1
    rows = rows[:kept]
    motors = {}
    for axis in rig.axes.values():
        first = BUS_COLUMNS + AXIS_COLUMNS * axis.index
        motors[axis.name] = MotorPlay(
            peak_a=rows[:, first],
            lasting_a=rows[:, first + 1],
            speed_rad_s=rows[:, first + 2],
            square_a2=rows[:, first + 3],
            duty=rows[:, first + 4],
            winding_c=rows[:, first + 5],
        )
    return Play(
        verdict=outcome.verdict,
        sentence=outcome.sentence,
        place="" if outcome.place is None else str(outcome.place),
        tripped="" if outcome.verdict in (Verdict.PASSED, Verdict.FAILED) else outcome.sentence,
        elapsed_s=outcome.elapsed_s,
        row_s=EVERY_TICKS * tick_s,
        tick_s=tick_s,
        bus_high_v=rows[:, 0],
        bus_low_v=rows[:, 1],
        energy_j=rows[:, 2],
        motors=motors,
        passes={place: tuple(tick - start for tick in ticks) for place, ticks in notes.passes.items()},
        turns=tuple(replace(turn, begin=turn.begin - start, end=turn.end - start) for turn in notes.turns),
        step_ticks=tuple(tick - start for tick, _ in notes.steps),
        step_names=tuple(name for _, name in notes.steps),
    )
