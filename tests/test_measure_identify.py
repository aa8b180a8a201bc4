"""A motor's constants found again from simulated runs, with the stated uncertainty, or refused with the reason."""

from __future__ import annotations

import dataclasses
import itertools
import json
import math
import random
import time

import numpy as np
import pytest

import motor_bench as bench
import plant_bench
from ramprig.measure.identify import Identification, Instruments, identify
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.numbers.windows import Recording, unwrapped
from ramprig.measure.refusal import NotMeasurable
from ramprig.mock.plant import (
    AxisParameters,
    EncoderParameters,
    MotorParameters,
    PlantParameters,
    SensorParameters,
    SupplyParameters,
)

CONSTANTS = ("resistance_20", "constant", "viscous", "inertia", "coulomb")
FIELDS = ("resistance_20_ohm", "constant_vs", "viscous_nms", "inertia_kgm2", "coulomb_nm")


def truth(parameters: PlantParameters) -> dict[str, float]:
    motor = parameters.axes[0].motor
    return {name: getattr(motor, field) for name, field in zip(CONSTANTS, FIELDS, strict=True)}


def found_for(seed: int) -> tuple[Identification, dict[str, float]]:
    """One random bench measured, its temperature known as a thermometer of 1 K standard uncertainty tells it."""
    parameters = bench.random_bench(seed)
    motor = parameters.axes[0].motor
    told_c = motor.ambient_c + random.Random(seed + 1000).gauss(0.0, 1.0)
    known = Instruments(start_c=told_c, start_u_k=1.0, bridge_ohm=parameters.axes[0].bridge.resistance_ohm)
    return identify([bench.record(parameters, bench.both_ways(), seed=seed)], known), truth(parameters)


def covered(measured: Measured, true: float) -> bool:
    low, high = measured.interval()
    return low <= true <= high


def check_random_motors(seeds: range, least: float, most: float) -> None:
    inside: list[bool] = []
    errors: dict[str, list[float]] = {name: [] for name in CONSTANTS}
    for seed in seeds:
        found, true = found_for(seed)
        for name in CONSTANTS:
            measured = getattr(found, name)
            inside.append(covered(measured, true[name]))
            errors[name].append(abs(measured.value / true[name] - 1.0))
    median = {name: float(np.median(errors[name])) for name in CONSTANTS}
    print(f"inside {np.mean(inside):.3f} of {len(inside)}, median errors {median}")
    assert least <= np.mean(inside) <= most
    assert median["resistance_20"] < 0.02
    assert median["constant"] < 0.02
    assert max(median["viscous"], median["coulomb"], median["inertia"]) < 0.05


def test_random_motors_lie_in_the_stated_intervals() -> None:
    # 60 intervals at 95 %: 57 expected; fewer than 51 has a probability below 1 %.
    check_random_motors(range(12), 0.85, 1.0)


@pytest.mark.soak
def test_a_hundred_random_motors_lie_in_the_stated_intervals_in_90_to_99_of_100_cases() -> None:
    check_random_motors(range(100), 0.90, 0.99)


@pytest.mark.soak
def test_ten_minutes_at_1_khz_are_fitted_in_3_s() -> None:
    parameters = bench.random_bench(5)
    passes = bench.both_ways(passes=48)
    recording = bench.record(parameters, passes)
    recording = dataclasses.replace(
        recording,
        **{
            name: getattr(recording, name)[:600_000] for name in ("duty", "supply_v", "current_a", "counts", "coasting")
        },
    )
    assert len(recording.duty) == 600_000
    begin = time.process_time()
    identify([recording])
    assert time.process_time() - begin < 3.0


# ---- the published examples ----------------------------------------------------------------------------------------


def ideal(motor: MotorParameters, volts: float, lines: int) -> PlantParameters:
    """A motor at 20 degC throughout, on a supply as good as ideal, with a sensor that does not saturate."""
    cold = dataclasses.replace(motor, thermal_resistance_k_w=0.0)
    axis = AxisParameters(
        name="m",
        motor=cold,
        encoder=EncoderParameters(lines=lines),
        sensor=SensorParameters(noise_ma=2.0, range_ma=500_000),
    )
    supply = SupplyParameters(volts=volts, resistance_ohm=1e-12, capacitance_f=1.0, can_sink=True)
    return PlantParameters(supply=supply, axes=(axis,))


def test_the_michigan_position_example_is_identified_again_and_its_inductance_is_said_to_be_out_of_reach() -> None:
    recording = bench.record(ideal(plant_bench.CTMS_POSITION, 12.0, 500), bench.measuring_run(1))
    found = identify([recording], Instruments(start_u_k=0.0))
    true = plant_bench.CTMS_POSITION
    assert found.resistance_20.value == pytest.approx(true.resistance_20_ohm, rel=0.01)
    assert found.constant.value == pytest.approx(true.constant_vs, rel=0.002)
    assert found.inertia.value == pytest.approx(true.inertia_kgm2, rel=0.01)
    assert found.viscous.value == pytest.approx(true.viscous_nms, rel=0.02)
    assert found.mechanical_time.value == pytest.approx(16.88514e-3, rel=0.01)
    assert found.inductance is None
    assert any("inductance cannot be found" in sentence for sentence in found.warnings)
    assert any("coulomb is not determined" in sentence for sentence in found.warnings)  # it has none


def test_the_michigan_speed_example_is_identified_again_with_its_inductance() -> None:
    drive = [(0, 200), (6000, 3000), (9000, 2000), (3000, 2000), (0, 600), (9000, 2500), (0, 600)]
    # It brakes at zero duty: its winding is slow (L/R = 0.5 s), and an open bridge has nothing to show of that.
    recording = bench.record(ideal(plant_bench.CTMS_SPEED, 100.0, 25_000), drive, brake=True)
    found = identify([recording], Instruments(start_u_k=0.0))
    true = plant_bench.CTMS_SPEED
    assert found.resistance_20.value == pytest.approx(true.resistance_20_ohm, rel=0.01)
    assert found.inductance is not None
    assert found.inductance.value == pytest.approx(true.inductance_h, rel=0.01)
    # The back EMF is a thousandth of the voltage, so K, b and J are known to several per cent only, and say so ...
    for name, field in (("constant", "constant_vs"), ("viscous", "viscous_nms"), ("inertia", "inertia_kgm2")):
        assert covered(getattr(found, name), getattr(true, field))
        assert 0.01 < getattr(found, name).relative < 0.1
    # ... but their ratios are known well.
    assert found.inertia.value / found.viscous.value == pytest.approx(true.inertia_kgm2 / true.viscous_nms, rel=1e-3)
    assert found.constant.value / found.viscous.value == pytest.approx(true.constant_vs / true.viscous_nms, rel=1e-3)


# ---- what is known of the bench --------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def vent() -> tuple[PlantParameters, Recording]:
    parameters = bench.random_bench(4)
    return parameters, bench.record(parameters, bench.both_ways(), seed=4)


def known_of(parameters: PlantParameters, **more: float) -> Instruments:
    axis = parameters.axes[0]
    return Instruments(start_c=axis.motor.ambient_c, start_u_k=0.2, bridge_ohm=axis.bridge.resistance_ohm, **more)


def test_errors_of_scale_shift_the_constants_as_stated(vent: tuple[PlantParameters, Recording]) -> None:
    parameters, recording = vent
    plain = identify([recording], known_of(parameters))
    scaled = dataclasses.replace(recording, current_a=recording.current_a * 1.02, supply_v=recording.supply_v * 1.01)
    shifted = identify([scaled], known_of(parameters, current_gain_u=0.02, supply_gain_u=0.01))
    for name, change in (("constant", 1.01), ("inertia", 1.02 * 1.01), ("coulomb", 1.02 * 1.01)):
        assert getattr(shifted, name).value == pytest.approx(getattr(plain, name).value * change, rel=2e-3)
        assert covered(getattr(shifted, name), truth(parameters)[name])
    assert shifted.inertia.relative == pytest.approx(math.hypot(0.02, 0.01), rel=0.02)
    assert shifted.constant.relative == pytest.approx(0.01, rel=0.02)


def test_the_current_offset_comes_out_beside_the_constants(vent: tuple[PlantParameters, Recording]) -> None:
    parameters, recording = vent
    found = identify([recording], known_of(parameters))
    assert found.current_offset.value == pytest.approx(parameters.axes[0].sensor.offset_ma / 1000.0, abs=1e-3)


def test_a_measured_winding_temperature_takes_the_place_of_the_assumed_one() -> None:
    parameters = bench.random_bench(7)
    recording = bench.record(parameters, bench.both_ways(), seed=7, winding=True)
    found = identify([recording], Instruments(bridge_ohm=parameters.axes[0].bridge.resistance_ohm))
    assert covered(found.resistance_20, parameters.axes[0].motor.resistance_20_ohm)
    assert found.resistance_20.relative < 0.01


def test_pulses_at_a_held_shaft_add_to_the_resistance_and_the_inductance() -> None:
    parameters = bench.random_bench(6)
    free = bench.record(parameters, bench.both_ways(), seed=6)
    pulses = itertools.chain.from_iterable([(duty, 12), (0, 100)] for duty in (3000, -3000, 5000, -5000) * 3)
    held = bench.record(parameters, pulses, seed=7, jammed=True)
    known = known_of(parameters)
    alone, both = identify([free], known), identify([free, held], known)
    motor = parameters.axes[0].motor
    assert alone.inductance is not None
    assert both.inductance is not None
    assert both.inductance.value == pytest.approx(motor.inductance_h, rel=0.02)
    assert both.inductance.standard_uncertainty < alone.inductance.standard_uncertainty


def test_the_counter_may_wrap(vent: tuple[PlantParameters, Recording]) -> None:
    parameters, recording = vent
    wrapped = np.mod(recording.counts + 2**32 - 500, 2**32) - 2**31
    assert np.array_equal(unwrapped(wrapped), recording.counts - recording.counts[0])
    moved = dataclasses.replace(recording, counts=wrapped)
    assert identify([moved], known_of(parameters)).constant == identify([recording], known_of(parameters)).constant


def test_a_stretch_that_does_not_fit_is_left_out_and_named(vent: tuple[PlantParameters, Recording]) -> None:
    parameters, recording = vent
    slipping = recording.counts.copy()
    slipping[1500:] += 40  # counts jump while it turns
    found = identify([dataclasses.replace(recording, counts=slipping)], known_of(parameters))
    assert any("left out turning from 0.783 s for 0.945 s" in sentence for sentence in found.warnings)
    assert found.constant.value == pytest.approx(truth(parameters)["constant"], rel=1e-3)


def test_residuals_are_as_large_as_the_noise(vent: tuple[PlantParameters, Recording]) -> None:
    parameters, recording = vent
    found = identify([recording], known_of(parameters))
    left = np.concatenate([part.current_a for part in found.residuals()])
    sensor = parameters.axes[0].sensor
    expected = math.hypot(sensor.noise_ma, sensor.step_ma / math.sqrt(12.0)) / 1000.0
    assert np.std(left) == pytest.approx(expected, rel=0.05)
    assert found.noise.current_a == pytest.approx(expected, rel=0.05)


def test_the_result_as_json(vent: tuple[PlantParameters, Recording]) -> None:
    parameters, recording = vent
    told = json.loads(json.dumps(identify([recording], known_of(parameters)).to_json(), allow_nan=False))
    assert told["resistance_20"]["unit"] == "ohm"
    assert len(told["correlations"]["matrix"]) == len(told["correlations"]["order"]) == 6


# ---- refusals --------------------------------------------------------------------------------------------------------


def test_a_jammed_shaft_gives_no_numbers() -> None:
    recording = bench.record(bench.random_bench(1), bench.measuring_run(1), jammed=True)
    with pytest.raises(NotMeasurable, match="did not turn long enough"):
        identify([dataclasses.replace(recording, held=False)])


def test_a_dead_encoder_gives_no_numbers(vent: tuple[PlantParameters, Recording]) -> None:
    _, recording = vent
    with pytest.raises(NotMeasurable, match="did not turn"):
        identify([dataclasses.replace(recording, counts=np.zeros_like(recording.counts))])


def test_a_missing_current_sensor_gives_no_numbers(vent: tuple[PlantParameters, Recording]) -> None:
    _, recording = vent
    with pytest.raises(NotMeasurable, match="no current was measured"):
        identify([dataclasses.replace(recording, current_a=np.zeros_like(recording.current_a))])


def test_swapped_phases_give_no_numbers(vent: tuple[PlantParameters, Recording]) -> None:
    _, recording = vent
    with pytest.raises(NotMeasurable, match="run against the duty"):
        identify([dataclasses.replace(recording, counts=-recording.counts)])


def test_a_saturated_current_sensor_gives_no_numbers(vent: tuple[PlantParameters, Recording]) -> None:
    _, recording = vent
    most_a = 0.5 * float(np.abs(recording.current_a).max())
    clipped = dataclasses.replace(recording, current_a=np.clip(recording.current_a, -most_a, most_a))
    with pytest.raises(NotMeasurable, match="end of its range"):
        identify([clipped], Instruments(range_a=most_a))


def test_steady_running_alone_says_what_it_cannot_tell() -> None:
    recording = bench.record(bench.random_bench(3), [(5000, 4000)])
    tail = {name: getattr(recording, name)[2000:] for name in ("duty", "supply_v", "current_a", "counts", "coasting")}
    found = identify([dataclasses.replace(recording, **tail)])
    assert found.warnings
    assert not found.inertia.relative < 0.5 or any("inertia" in sentence for sentence in found.warnings)
