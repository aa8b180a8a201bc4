"""The plant in C is the plant in Python: same drive, same readings; and both follow a reference integrator."""

from __future__ import annotations

import dataclasses
import math
import random

import numpy as np
import pytest
from dev import generate_plant
from scipy.integrate import solve_ivp
from scipy.signal import lsim

from c_plant import CPlant, Refused
from plant_bench import CTMS_POSITION, CTMS_SPEED, MODELICA, bench, matrices
from ramprig.mock.core import why_not
from ramprig.mock.core.parameters import plant_text, plant_values
from ramprig.mock.plant import (
    VENT_BENCH,
    Ageing,
    MotorParameters,
    Plant,
    PlantFault,
    PlantParameters,
    set_fault,
    set_play,
    set_wear,
)

pytestmark = pytest.mark.skipif(why_not() is not None, reason=why_not() or "")

TOLERANCE = 1e-11
"""Relative: the two forms round alike on machines with IEEE doubles; what is left is the C library's last digit."""

FAULTS = {
    PlantFault.PHASES_SWAPPED: "phases_swapped",
    PlantFault.LEADS_SWAPPED: "leads_swapped",
    PlantFault.ENCODER_DEAD: "encoder_dead",
    PlantFault.ONE_CHANNEL: "one_channel",
    PlantFault.NOISY_COUNTS: "noisy_counts",
    PlantFault.JAMMED: "jammed_shaft",
    PlantFault.OUTPUT_CLAMPED: "output_clamped",
    PlantFault.LEAD_OPEN: "lead_open",
}

TWO_MOTORS = dataclasses.replace(
    VENT_BENCH,
    supply=dataclasses.replace(VENT_BENCH.supply, resistance_ohm=1.5, capacitance_f=4e-4, ovp_v=13.5),
    axes=(
        VENT_BENCH.axes[0],
        dataclasses.replace(
            VENT_BENCH.axes[0], motor=dataclasses.replace(VENT_BENCH.axes[0].motor, inertia_kgm2=2e-5, gear_ratio=20.0)
        ),
    ),
    servos=(VENT_BENCH.servos[0], dataclasses.replace(VENT_BENCH.servos[0], us_per_deg=-9.0)),
)

GEARED = dataclasses.replace(
    TWO_MOTORS,
    axes=(
        dataclasses.replace(
            TWO_MOTORS.axes[0],
            motor=dataclasses.replace(TWO_MOTORS.axes[0].motor, play_rad=0.03, output_friction_nm=0.12),
        ),
        dataclasses.replace(
            TWO_MOTORS.axes[1], encoder=dataclasses.replace(TWO_MOTORS.axes[1].encoder, lines=500, on_output=True)
        ),
    ),
)


class Pair:
    """Both forms of one bench, driven alike and compared in every tick."""

    def __init__(self, parameters: PlantParameters, *, seed: int, tick_us: int = 1000) -> None:
        self.python = Plant(parameters, tick_us=tick_us, seed=seed)
        self.c = CPlant(parameters, tick_us=tick_us, seed=seed)

    def drive(self, axis: int, duty: int, brake: bool) -> None:
        self.python.axes[axis].duty, self.python.axes[axis].brake = duty, brake
        self.c.drive(axis, duty, brake)

    def pulse(self, servo: int, pulse_us: float | None) -> None:
        self.python.servos[servo].pulse_us = pulse_us
        self.c.pulse(servo, pulse_us)

    def load(self, axis: int, load_nm: float) -> None:
        self.python.axes[axis].load_nm = load_nm
        self.c.load(axis, load_nm)

    def fault(self, fault: PlantFault, axis: int, on: bool) -> None:
        set_fault(self.python, fault, axis=axis, on=on)
        self.c.fault(FAULTS[fault], axis, float(on))

    def play(self, degrees: float, axis: int) -> None:
        set_play(self.python, degrees, axis=axis)
        self.c.fault("gear_play", axis, degrees)

    def wear(self, ageing: Ageing, amount: float, axis: int) -> None:
        set_wear(self.python, ageing, amount, axis=axis)
        self.c.fault(ageing, axis, amount)

    def stops(self, stops_rad: tuple[float, float] | None, axis: int) -> None:
        self.python.axes[axis].stops_rad = stops_rad
        self.c.stops(axis, stops_rad)

    def turn_by_hand(self, radians: float, axis: int) -> None:
        self.python.axes[axis].turn_by_hand(radians)
        self.c.turn_by_hand(axis, radians)

    def step(self) -> None:
        self.python.step()
        self.c.step()
        for index, axis in enumerate(self.python.axes):
            assert self.c.read(index) == (self.python.read_counts(index), self.python.read_current_ma(index))
            state = [axis.current_a, axis.mean_a, axis.speed_rad_s, axis.angle_rad, axis.winding_c]
            assert self.c.axis(index) == pytest.approx(state, rel=TOLERANCE, abs=1e-15)
            assert self.c.output_rad(index) == pytest.approx(axis.output_rad, rel=TOLERANCE, abs=1e-15)
            worn = [axis.worn.friction, axis.worn.resistance, axis.worn.play_rad]
            assert self.c.worn(index) == pytest.approx(worn, rel=TOLERANCE, abs=1e-15)
            assert self.c.temperature_dc(index) == self.python.read_temperature_dc(index)
        for index, servo in enumerate(self.python.servos):
            bus = [self.python.supply.bus_v, self.python.supply.current_a, servo.angle_deg, servo.current_a]
            assert self.c.bench(index) == pytest.approx(bus, rel=TOLERANCE, abs=1e-15)
        assert self.c.supply_mv() == self.python.read_supply_mv()


def stir(pair: Pair, drawn: random.Random) -> None:
    """Change one thing at random."""
    axis = drawn.randrange(len(pair.python.axes))
    match drawn.randrange(6):
        case 0:
            pair.drive(axis, 0, drawn.random() < 0.5)
        case 1:
            pair.pulse(drawn.randrange(len(pair.python.servos)), drawn.choice([None, 900.0, 1500.0, 1503.5, 2100.0]))
        case 2:
            pair.load(axis, drawn.choice([0.0, 0.1, -0.4, 1.0]))
        case 3:
            pair.fault(drawn.choice(sorted(FAULTS)), axis, drawn.random() < 0.3)
        case _:
            pair.drive(axis, drawn.randrange(-10_000, 10_001), False)


def stir_gear(pair: Pair, drawn: random.Random) -> None:
    """Change one thing behind a motor at random, or another as `stir` does."""
    axis = drawn.randrange(len(pair.python.axes))
    angle_rad = pair.python.axes[axis].angle_rad
    match drawn.randrange(10):
        case 0:
            pair.play(drawn.choice([0.0, 0.3, 2.0, 20.0]), axis)
        case 1:
            pair.fault(PlantFault.OUTPUT_CLAMPED, axis, drawn.random() < 0.5)
        case 2:
            pair.stops(drawn.choice([None, None, (angle_rad - 3.0, angle_rad + 1.0), (-math.inf, angle_rad)]), axis)
        case 3:
            pair.turn_by_hand(drawn.choice([-4.0, 0.7, 30.0]), axis)
        case 4:
            pair.wear(drawn.choice(list(Ageing)), drawn.choice([0.0, 100.0, 20_000.0]), axis)
        case _:
            stir(pair, drawn)


@pytest.mark.parametrize("seed", range(6))
def test_both_forms_agree_on_play_stops_wear_and_hands(seed: int) -> None:
    drawn = random.Random(seed)
    pair = Pair(GEARED if seed % 2 else TWO_MOTORS, seed=seed, tick_us=1000 if seed % 4 else 2000)
    flanks = set()
    for tick in range(1000):
        if tick % 20 == 0:
            stir_gear(pair, drawn)
        pair.step()
        flanks |= {(axis.gear.flank, axis.gear.through, axis.gear.pressed) for axis in pair.python.axes}
    assert len(flanks) > 3


@pytest.mark.parametrize("duty", [-7000, 7000])
def test_both_forms_hold_a_shaft_fast_that_stops_and_a_clamp_leave_no_room(duty: int) -> None:
    pair = Pair(GEARED, seed=1, tick_us=1000)
    pair.stops((-3.0, -2.0), 0)
    pair.play(0.01, 0)
    pair.fault(PlantFault.OUTPUT_CLAMPED, 0, True)
    pair.drive(0, duty, False)
    for _ in range(200):
        pair.step()
    axis = pair.python.axes[0]
    assert (axis.angle_rad, axis.speed_rad_s, axis.gear.pressed) == (-2.0, 0.0, True)
    assert axis.current_a == pytest.approx(duty / 10_000 * pair.python.supply.bus_v / axis._resistance_ohm, rel=1e-3)


@pytest.mark.parametrize("seed", range(8))
def test_both_forms_give_the_same_readings_whatever_is_done(seed: int) -> None:
    drawn = random.Random(seed)
    pair = Pair(VENT_BENCH if seed % 2 else TWO_MOTORS, seed=seed)
    for tick in range(1500):
        if tick % 25 == 0:
            stir(pair, drawn)
        pair.step()
    assert any(abs(axis.angle_rad) > 1.0 for axis in pair.python.axes)


@pytest.mark.parametrize("tick_us", [100, 1000, 10_000])
def test_both_forms_agree_at_ticks_of_any_length(tick_us: int) -> None:
    pair = Pair(VENT_BENCH, seed=5, tick_us=tick_us)
    for duty in (4000, -4000, 0, 9000):
        pair.drive(0, duty, False)
        for _ in range(100):
            pair.step()


def test_a_minute_of_driving_ends_at_the_same_count() -> None:
    pair = Pair(VENT_BENCH, seed=1)
    for cycle in range(12):
        pair.drive(0, 5000 if cycle % 2 else -4800, False)
        for _ in range(5000):
            pair.python.step()
        pair.c.step(5000)
    pair.step()
    assert abs(pair.python.axes[0].angle_rad) > 100.0


def test_a_seed_of_any_size_gives_the_same_noise() -> None:
    for seed in (0, 1, 0xFFFF_FFFF, 0x1_0000_0000, (1 << 64) - 1):
        pair = Pair(VENT_BENCH, seed=seed)
        assert [pair.c.read(0) for _ in range(1300)] == [
            (pair.python.read_counts(0), pair.python.read_current_ma(0)) for _ in range(1300)
        ]


# ---- against references, as the Python form -------------------------------------------------------------------------


def c_bench(motor: MotorParameters, volts: float = 12.0, *, tick_us: int = 1000) -> CPlant:
    return CPlant(bench(motor, volts, tick_us=tick_us).parameters, tick_us=tick_us)


def run(plant: CPlant, duty: int, ticks: int) -> np.ndarray:
    """Current, its mean, speed and angle after each tick at this duty, one row a tick."""
    plant.drive(0, duty)
    rows = []
    for _ in range(ticks):
        plant.step()
        rows.append(plant.axis(0)[:4])
    return np.array(rows)


def test_ctms_speed_example_gives_the_figures_of_its_page() -> None:
    speed = run(c_bench(CTMS_SPEED, volts=1.0), 10_000, 5000)[:, 2]
    assert speed[-1] == pytest.approx(0.1, rel=0.005)  # page: final speed 0.1 rad/s
    outside = np.nonzero(np.abs(speed / 0.0999000999 - 1.0) > 0.02)[0]
    assert (outside[-1] + 2) * 1e-3 == pytest.approx(2.07, rel=0.005)  # page: settling time 2.07 s


@pytest.mark.parametrize("tick_us", [100, 1000, 10_000])
def test_stiff_motor_follows_a_reference_integrator(tick_us: int) -> None:
    system, inputs = matrices(CTMS_POSITION)
    ticks = 40_000 // tick_us
    times = np.arange(1, ticks + 1) * tick_us * 1e-6
    solved = solve_ivp(
        lambda _t, x: system @ x + inputs[:, 0] * 12.0,
        (0.0, times[-1]),
        [0.0, 0.0],
        method="Radau",
        jac=system,
        t_eval=times,
        rtol=1e-10,
        atol=1e-12,
    )
    plant = c_bench(CTMS_POSITION, tick_us=tick_us)
    plant.set_speed(0, 1e-12)  # already turning: from standstill a 4096th of a tick goes by first
    found = run(plant, 10_000, ticks)
    assert found[:, 2] == pytest.approx(solved.y[1], rel=1e-7)
    assert found[:, 0] == pytest.approx(solved.y[0], rel=1e-6)


def test_oscillating_motor_follows_scipy_lsim() -> None:
    system, inputs = matrices(MODELICA)
    load_nm = -63.66
    drive = np.column_stack([np.full(301, 100.0), np.full(301, load_nm)])
    _, states, _ = lsim((system, inputs, np.eye(2), np.zeros((2, 2))), drive, np.arange(0, 301) * 1e-3)
    plant = c_bench(MODELICA, volts=100.0)
    plant.load(0, load_nm)
    plant.set_speed(0, 1e-12)
    found = run(plant, 10_000, 300)
    assert found[:, 0] == pytest.approx(states[1:, 0], abs=1e-6)
    assert found[:, 2] == pytest.approx(states[1:, 1], abs=1e-7)


# ---- parameters -----------------------------------------------------------------------------------------------------


def test_the_header_has_the_figures_of_the_python_bench() -> None:
    assert generate_plant.main(["--check"]) == 0


def test_a_wrong_parameter_is_refused() -> None:
    plant = CPlant(VENT_BENCH)
    for name, value in (
        ("supply.volt", 1.0), ("supply.volts", -1.0), ("supply.volts", math.nan), ("axis.4.motor.inductance_h", 1e-3),
        ("axis.0.motor.inductance_h", 0.0), ("axis.0", 1.0), ("servo.9.idle_ma", 1.0), ("axes", 5.0),
    ):  # fmt: skip
        with pytest.raises(Refused):
            plant.set(name, value)
    for fault in ("jammed", "weak-supply"):
        with pytest.raises(Refused):
            plant.fault(fault, 0, 1.0)


def test_a_motor_beyond_simulation_is_refused() -> None:
    motor = dataclasses.replace(VENT_BENCH.axes[0].motor, resistance_20_ohm=1e9, inductance_h=1e-12)
    axis = dataclasses.replace(VENT_BENCH.axes[0], motor=motor)
    with pytest.raises(Refused, match="start"):
        CPlant(dataclasses.replace(VENT_BENCH, axes=(axis,)))


def test_the_text_form_names_every_parameter_with_its_exact_value() -> None:
    rows = [line.split(" ") for line in plant_text(TWO_MOTORS).splitlines()]
    assert {name: float(value) for name, value in rows} == plant_values(TWO_MOTORS)
    assert len(rows) == 7 + 2 * 21 + 2 * 9 + 2
