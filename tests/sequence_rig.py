"""A small bench and short ways to compile and to run sequences on the mock in virtual time, for the tests."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from ramprig.bench import Bench, bench_of_text
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.mock.setup import MockSetup
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.ending import run_plan
from ramprig.sequence.executive import Progress
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.outcome import Outcome
from ramprig.sequence.plan import Plan
from ramprig.sequence.reading import Sequence, read_sequence
from ramprig.sequence.rig import Rig
from ramprig.sequence.running import wanted_of
from ramprig.session.blocks import Block
from ramprig.session.session import Session

MOTOR = """
    axis: {axis}
    gear: 90
    encoder: {{lines: 16, decoding: x4, on: motor shaft, direction: same}}
    rated: {{current: 900 mA, speed: 62 rpm, time constant: 60 s}}
    limits:
      duty: 80 %
      slew: 100 %/s
      fall: 200 %/s
      dwell: 300 ms
      standstill: {{within: 2 counts, for: 50 ms}}
      current: {{at most: 2.5 A, for: 5 ms}}
      stall: {{duty: 15 %, motion: 4 counts, within: 300 ms}}
    current zero: 4 mA
    model:
      resistance: 2.4 ohm
      inductance: 1.2 mH
      constant: 0.0195 V s/rad
      inertia: 60 g cm2
      running friction: 1.5 mN m
      breakaway friction: 2.2 mN m
      sensor noise: 6 mA
"""
SERVO = """
    servo: {servo}
    neutral: 1500 us
    scale: 10 us/deg
    limits: {{angle: -40 deg to 40 deg, slew: 60 deg/s}}
"""
BENCH = f"""
bench: test bench
port: {{url: "mock:"}}
board: {{name: ramprig-mock, serial: any}}
supply:
  voltage: 12 V
  allowed: 9 V to 16 V
  model: {{resistance: 150 mohm, capacitance: 1000 uF, can sink: yes}}
motors:
  vent:{MOTOR.format(axis=0)}
  fan:{MOTOR.format(axis=1)}
servos:
  latch:{SERVO.format(servo=0)}
  flap:{SERVO.format(servo=1)}
link: {{lease: 500 ms, stop within: 500 ms}}
"""
"""Two motors and two servos; every figure is invented."""


def small_bench() -> Bench:
    """The bench of these tests."""
    return bench_of_text(BENCH, "bench.yaml")


def sequence_of(folder: Path, steps: str, *, head: str = "", **settings: str) -> Sequence:
    """The sequence with these steps (YAML list items) and further keys."""
    path = folder / "s.yaml"
    indented = "\n".join(f"  {line}" for line in steps.strip("\n").splitlines())
    path.write_text(f"sequence: t\n{head}steps:\n{indented}\n", encoding="utf-8")
    return read_sequence(path, settings=settings)


def plan_of(folder: Path, steps: str, *, head: str = "", **settings: str) -> Plan:
    """The plan of these steps on the test bench."""
    return compile_plan(sequence_of(folder, steps, head=head, **settings), small_bench())


@dataclass
class Rehearsal:
    """A run on the mock that is over: outcome, plan, device, and everything that was heard."""

    outcome: Outcome
    plan: Plan
    device: MockDevice
    events: list[object]
    blocks: list[Block]
    progress: list[Progress] = field(default_factory=list)

    def column(self, kind: str, index: int = 0) -> NDArray[np.int64]:
        """All logged values of a channel."""
        return np.concatenate([block.column(kind, index) for block in self.blocks]).astype(np.int64)

    @property
    def ticks(self) -> NDArray[np.int64]:
        """The ticks of all samples."""
        return np.concatenate([block.ticks for block in self.blocks])

    def of(self, kind: type) -> list[object]:
        """The events of a class."""
        return [event for event in self.events if isinstance(event, kind)]


class EventKeeper:
    """A keeper of a run that keeps everything in lists."""

    def __init__(self, events: list[object]) -> None:
        self.events = events
        self.trails: list[Block] = []

    def on_event(self, event: object) -> None:
        """Keep it."""
        self.events.append(event)

    def on_trail(self, blocks: object) -> None:
        """Keep them."""
        assert isinstance(blocks, list)
        self.trails += blocks


def rehearse(
    folder: Path,
    steps: str,
    *,
    head: str = "log: {period: 5 ms}\n",
    faults: tuple[str, ...] = (),
    seed: int = 1,
    meddle: Callable[[Progress, MockDevice, Session, MockPort], None] | None = None,
    settings: Mapping[str, str] | None = None,
    change: Callable[[MockSetup], MockSetup] = lambda setup: setup,
) -> Rehearsal:
    """Run the steps on a new mock in virtual time.

    `meddle` is called each time the executive comes round; `change` makes the mock's setup another one.
    """
    bench = small_bench()
    device = MockDevice(change(setup_of_bench(bench, faults=faults)), seed=seed)
    port = MockPort(device, pace="virtual", seed=seed)
    listeners = Listeners()
    sequence = sequence_of(folder, steps, head=head, **(settings or {}))
    plan = compile_plan(sequence, bench)
    events: list[object] = []
    blocks: list[Block] = []
    seen: list[Progress] = []
    listeners.add(on_block=blocks.append, on_event=events.append)
    with Session.open(
        port, wanted=wanted_of(bench), seed=seed, on_block=listeners.on_block, on_event=listeners.on_event
    ) as session:

        def progress(now: Progress) -> None:
            seen.append(now)
            if meddle is not None:
                meddle(now, device, session, port)

        keeper = EventKeeper(events)
        outcome = run_plan(
            session, plan, Rig.of(bench), clock=port.clock, listeners=listeners, keeper=keeper, progress=progress
        )
        events += keeper.trails
    return Rehearsal(outcome, plan, device, events, blocks, seen)
