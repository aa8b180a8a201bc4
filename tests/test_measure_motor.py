"""The motor's equations: published examples, data sheets, and the exact motion against an independent integrator."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import linalg, signal

from ramprig.measure.numbers import motor
from ramprig.measure.numbers.motor import Motion, MotorConstants

# CTMS (University of Michigan, Carnegie Mellon), "DC Motor Speed" and "DC Motor Position", ctms.engin.umich.edu.
SPEED = MotorConstants(resistance_ohm=1.0, inductance_h=0.5, constant_vs=0.01, inertia_kgm2=0.01, viscous_nms=0.1)
POSITION = MotorConstants(
    resistance_ohm=4.0, inductance_h=2.75e-6, constant_vs=0.0274, inertia_kgm2=3.2284e-6, viscous_nms=3.5077e-6
)
# Modelica Standard Library, DC_PermanentMagnet with the load of DCPM_Start: it oscillates.
MODELICA = MotorConstants(
    resistance_ohm=0.05, inductance_h=1.5e-3, constant_vs=95.0 / (1425.0 * math.tau / 60.0), inertia_kgm2=0.30
)


def test_poles_of_the_published_examples() -> None:
    assert SPEED.poles_per_s() == pytest.approx((-2.00250078, -9.99749922), rel=1e-8)
    assert POSITION.poles_per_s() == pytest.approx((-59.2260385, -1.45448732e6), rel=1e-8)
    slow, _ = MODELICA.poles_per_s()
    assert (slow.real, abs(slow.imag)) == pytest.approx((-16.667, 24.957), abs=2e-3)


def test_steady_points_of_the_published_examples() -> None:
    assert SPEED.steady(1.0)[0] == pytest.approx(0.1, rel=5e-3)  # the page's rounded figure
    assert SPEED.steady(1.0)[0] == pytest.approx(0.0999000999, rel=1e-9)
    assert POSITION.steady(12.0) == pytest.approx((429.9215, 0.0550378), rel=1e-6)
    speed, current = MODELICA.steady(100.0, load_nm=63.66)
    assert (speed * 60.0 / math.tau, current) == pytest.approx((1425.0023, 99.9969), rel=1e-6)
    assert POSITION.mechanical_time_s == pytest.approx(16.88514e-3, rel=1e-6)
    assert POSITION.electrical_time_s == pytest.approx(0.6875e-6)


def test_a_motor_too_weak_for_its_friction_stands_and_draws_the_stall_current() -> None:
    stuck = MotorConstants(resistance_ohm=2.0, inductance_h=1e-3, constant_vs=0.02, inertia_kgm2=1e-6, coulomb_nm=0.02)
    assert stuck.steady(1.0) == (0.0, 0.5)


def test_the_step_response_of_the_speed_example() -> None:
    # Computed with two independent libraries (control and scipy agree to 3e-15) for the page's 1 V step.
    states = motor.simulate(SPEED, np.ones(400), period_s=0.01)
    times = {0.1: 0.0068555372, 0.2: 0.0195922923, 0.5: 0.0541700999, 1.0: 0.0830371112, 2.0: 0.0976234889}
    for time_s, speed in times.items():
        assert states[1, round(time_s / 0.01)] == pytest.approx(speed, rel=1e-8)


@pytest.mark.parametrize("constants", [SPEED, POSITION, MODELICA])
def test_motion_under_any_voltages_agrees_with_scipys_simulation(constants: MotorConstants) -> None:
    r, el, k = constants.resistance_ohm, constants.inductance_h, constants.constant_vs
    j, b = constants.inertia_kgm2, constants.viscous_nms
    period_s = 1e-3
    volts = np.sin(np.arange(300) ** 1.5)
    system = np.array([[-r / el, -k / el, 0.0], [k / j, -b / j, 0.0], [0.0, 1.0, 0.0]])
    drive = np.array([[1.0 / el], [0.0], [0.0]])
    discrete = signal.cont2discrete((system, drive, np.eye(3), np.zeros((3, 1))), period_s)
    _, wanted, _ = signal.dlsim(discrete, np.append(volts, 0.0))
    states = motor.simulate(constants, volts, period_s=period_s)
    for row, reference in zip(states, wanted.T, strict=True):
        assert row == pytest.approx(reference, rel=1e-8, abs=1e-9 * np.abs(reference).max())


@pytest.mark.parametrize("constants", [SPEED, POSITION, MODELICA])
@pytest.mark.parametrize("motion", [Motion.TURNING, Motion.COASTING, Motion.STILL])
def test_the_exact_step_and_its_derivatives(constants: MotorConstants, motion: Motion) -> None:
    dynamic = np.array(
        [
            constants.resistance_ohm,
            constants.constant_vs,
            constants.viscous_nms,
            constants.inertia_kgm2,
            constants.inductance_h,
        ]
    )
    advance, drive, by_advance, by_drive = (part[0] for part in motor.transitions(dynamic[None], motion, 1e-3))
    for index, value in enumerate(dynamic):
        step = 1e-5 * value if value else 1e-9
        sides = []
        for side in (step, -step):
            moved = dynamic.copy()
            moved[index] += side
            sides.append(motor.transitions(moved[None], motion, 1e-3)[:2])
        for exact, high, low in zip((by_advance, by_drive), *sides, strict=True):
            slope = (high[0] - low[0]) / (2.0 * step)
            rounding = 1e-15 * np.abs(high[0]).max() / step  # of the differences, not of the derivatives
            assert exact[index] == pytest.approx(slope, rel=1e-5, abs=1e-6 * np.abs(slope).max() + rounding)
    assert advance.shape == (3, 3)
    assert drive.shape == (3, 2)


def test_the_exponential_agrees_with_scipys() -> None:
    source = np.random.default_rng(3)
    matrices = source.normal(size=(20, 5, 5)) * 3.0
    found = motor._exponential(matrices.astype(complex))
    for matrix, one in zip(matrices, found, strict=True):
        wanted = linalg.expm(matrix)
        assert one.real == pytest.approx(wanted, abs=1e-10 * np.abs(wanted).max())


def test_a_pulse_at_rest_rises_with_the_electrical_time_constant() -> None:
    constants = MotorConstants(resistance_ohm=2.0, inductance_h=1e-3, constant_vs=0.02, inertia_kgm2=1e-6)
    states = motor.simulate(constants, np.full(10, 4.0), period_s=1e-4, motion=Motion.STILL)
    assert states[0] == pytest.approx(constants.pulse_current_a(4.0, 1e-4 * np.arange(11.0)), rel=1e-10)
    assert np.all(states[1:] == 0.0)


RPM = math.tau / 60.0


@pytest.mark.parametrize(
    ("inputs", "sheet", "tau_tolerance"),
    [
        # maxon RE 25 118743, 12 V, as transcribed: R 2.18, kM 23.4, J 10.3 gcm2, I0 26.3 mA.
        (
            {
                "volts": 12.0,
                "no_load_a": 0.0263,
                "resistance_ohm": 2.18,
                "constant_vs": 23.4e-3,
                "inertia_kgm2": 10.3e-7,
            },
            (5.5, 0.129, 4860.0, 37.7, 4.25e-3, 0.87),
            0.04,
        ),
        # A 48 V motor of the same maker: R 2.45, kM 53.8, J 34.7 gcm2, I0 78.6 mA.
        (
            {
                "volts": 48.0,
                "no_load_a": 0.0786,
                "resistance_ohm": 2.45,
                "constant_vs": 53.8e-3,
                "inertia_kgm2": 34.7e-7,
            },
            (19.6, 1.05, 8490.0, 8.09, 2.94e-3, 0.88),
            0.01,
        ),
    ],
)
def test_data_sheets_are_consistent(inputs: dict[str, float], sheet: tuple[float, ...], tau_tolerance: float) -> None:
    found = motor.data_sheet(**inputs)
    assert found.stall_current_a == pytest.approx(sheet[0], rel=0.01)
    assert found.stall_torque_nm == pytest.approx(sheet[1], rel=0.01)
    assert found.no_load_rad_s / RPM == pytest.approx(sheet[2], rel=0.01)
    assert found.gradient_rad_s_per_nm / RPM / 1000.0 == pytest.approx(sheet[3], rel=0.01)
    assert found.mechanical_time_s == pytest.approx(sheet[4], rel=tau_tolerance)
    assert found.highest_efficiency == pytest.approx(sheet[5], rel=0.01)
