"""Random benches, healthy or with one fault, and procedures run on their mock in virtual time, for the tests."""

from __future__ import annotations

import math
import random
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path

from ramprig.bench import Bench, bench_of_text
from ramprig.measure.findings import Findings
from ramprig.measure.lab import Bystander
from ramprig.measure.rehearsing import SimulatedBystander
from ramprig.measure.running import MeasureWish, Procedure, measure
from ramprig.mock.controller import Controller
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.mock.setup import MockSetup

MOTOR = """
  {name}:
    axis: {axis}
    gear: {gear}
    encoder: {encoder}
    rated: {{current: {rated_ma} mA, speed: {rated_rpm:.4g} rpm, time constant: 60 s}}
    limits:
      duty: 80 %
      slew: 100 %/s
      fall: {fall} %/s
      dwell: 300 ms
      standstill: {{within: 2 counts, for: 50 ms}}
      current: {{at most: {trip_ma} mA, for: 5 ms}}
      stall: {{duty: 15 %, motion: 4 counts, within: 300 ms}}
    current zero: {zero_ma} mA
    model:
      resistance: {ohm:.6g} ohm
      inductance: {henry:.6g} H
      constant: {constant:.6g} V s/rad
      inertia: {inertia:.6g} kg m2
      viscous friction: {viscous:.6g} N m s/rad
      running friction: {running:.6g} N m
      breakaway friction: {breakaway:.6g} N m
      thermal resistance: 10 K/W
      thermal time: 90 s
      ambient: 22 degC
      bridge resistance: 50 mohm
      freewheel drop: 1.4 V
      sensor offset: {offset_ma:.4g} mA
      sensor noise: {noise_ma:.4g} mA
      sensor range: 30 A
      sensor step: {step_ma} mA
"""
BENCH = """
bench: random bench {seed}
port: {{url: "mock:"}}
board: {{name: ramprig-mock, serial: any}}
supply:
  voltage: 12 V
  allowed: 7 V to 18 V
  model: {{resistance: {supply_ohm:.6g} ohm, capacitance: 1000 uF, can sink: no}}
motors:{motors}
servos:
  latch:
    servo: 0
    neutral: 1500 us
    scale: 10 us/deg
    limits: {{angle: -40 deg to 40 deg, slew: 60 deg/s}}
    model: {{slew: 300 deg/s, dead band: 5 us, end stops: -55 deg to 55 deg, idle: 8 mA, moving: 160 mA, stalled: 1 A}}
link: {{lease: 500 ms, stop within: 2 s}}
"""


@dataclass(frozen=True)
class Drawn:
    """A random bench with what the test must know of it: everything here is invented."""

    bench: Bench
    ohm: float
    constant_vs: float
    inertia_kgm2: float
    viscous_nms: float
    running_nm: float
    breakaway_nm: float
    gear: float
    stall_a: float
    rated_a: float
    supply_ohm: float


def drawn_bench(seed: int, *, motors: int = 1, encoder: bool = True, direction: str = "same") -> Drawn:
    """A bench with a motor `vent` of plausible random figures (and `fan`, its twin, with two motors)."""
    chance = random.Random(seed)
    ohm = math.exp(chance.uniform(math.log(1.0), math.log(8.0)))
    constant = math.exp(chance.uniform(math.log(0.01), math.log(0.04)))
    stall_a = 12.0 / ohm
    running = chance.uniform(0.015, 0.08) * constant * stall_a
    breakaway = running * chance.uniform(1.05, 1.7)
    inertia = chance.uniform(0.015, 0.09) * constant**2 / ohm
    viscous = chance.uniform(0.0, 0.02) * constant**2 / ohm
    rated_a = min(2.5, max(chance.uniform(0.15, 0.3) * stall_a, 2.5 * breakaway / constant))
    gear = chance.choice([1.0, 9.0, 34.014, 90.0])
    supply_ohm = chance.uniform(0.005, 0.04) * 12.0 / rated_a
    lines = chance.choice([12, 16, 32, 64])
    zero_ma = chance.choice([0, 4, -7])
    figures = {
        "gear": gear,
        "encoder": f"{{lines: {lines}, decoding: x4, on: motor shaft, direction: {direction}}}" if encoder else "none",
        "rated_ma": round(rated_a * 1000),
        "rated_rpm": 12.0 / constant * 60 / math.tau / gear,
        "fall": chance.choice([100, 150]),
        "trip_ma": round(rated_a * 2500),
        "zero_ma": zero_ma,
        "ohm": ohm - 0.05,
        "henry": ohm * chance.uniform(0.2e-3, 1.0e-3),
        "constant": constant,
        "inertia": inertia,
        "viscous": viscous,
        "running": running,
        "breakaway": breakaway,
        "offset_ma": zero_ma + chance.uniform(-12.0, 12.0),
        "noise_ma": chance.uniform(1.0, 8.0),
        "step_ma": chance.choice([1, 2, 4]),
    }
    names = ["vent", "fan"][:motors]
    parts = "".join(MOTOR.format(name=name, axis=axis, **figures) for axis, name in enumerate(names))
    if not encoder:
        parts = parts.replace("      stall: {duty: 15 %, motion: 4 counts, within: 300 ms}\n", "      stall: off\n")
    text = BENCH.format(seed=seed, motors=parts, supply_ohm=supply_ohm)
    return Drawn(
        bench=bench_of_text(text, f"random {seed}"),
        ohm=ohm,
        constant_vs=constant,
        inertia_kgm2=inertia,
        viscous_nms=viscous,
        running_nm=running,
        breakaway_nm=breakaway,
        gear=gear,
        stall_a=stall_a,
        rated_a=rated_a,
        supply_ohm=supply_ohm,
    )


@dataclass
class Measured:
    """A procedure that is over: findings, device, and the most that the plant did."""

    findings: Findings
    device: MockDevice
    folder: Path | None
    told: list[str] = field(default_factory=list)
    fastest_rad_s: float = 0.0
    most_a: float = 0.0


def measured(
    procedure: Procedure,
    bench: Bench,
    *,
    faults: tuple[str, ...] = (),
    seed: int = 1,
    runs: Path | None = None,
    bystander: Callable[[MockDevice], Bystander] | None = None,
    change: Callable[[MockSetup], MockSetup] = lambda setup: setup,
    prepare: Callable[[MockDevice], None] = lambda device: None,
    pictures: bool = False,
) -> Measured:
    """Carry a procedure out on the mock of a bench; raises what it raises."""
    device = MockDevice(change(setup_of_bench(bench, faults=faults)), seed=seed)
    prepare(device)
    own_trace = device.trace
    port = MockPort(device, pace="virtual", seed=seed)
    peaks = [0.0, 0.0]

    def watch(tick: int, controller: Controller | None) -> None:
        for axis in device.plant.axes:
            peaks[0] = max(peaks[0], abs(axis.speed_rad_s))
            peaks[1] = max(peaks[1], abs(axis.mean_a))
        if own_trace is not None:
            own_trace(tick, controller)

    device.trace = watch
    told: list[str] = []
    wish = MeasureWish(runs=runs, seed=seed, virtual=True, short_id="test", pictures=pictures)
    done = measure(
        procedure,
        bench,
        port,
        wish,
        bystander=None if bystander is None else bystander(device),
        tell=told.append,
    )
    return Measured(done.findings, device, done.folder, told, *peaks)


def simulated(device: MockDevice) -> Bystander:
    """Somebody beside the mock."""
    return SimulatedBystander(device)
