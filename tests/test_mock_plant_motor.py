"""The simulated motor against published examples and reference integrators."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.signal import cont2discrete, lsim

from plant_bench import CTMS_POSITION, CTMS_SPEED, MODELICA, bench, matrices, run
from ramprig.errors import FileError
from ramprig.mock.plant import MotorParameters
from ramprig.mock.plant.flow import HALVINGS, transitions

# ---- published step responses ----------------------------------------------------------------------------------------


def test_ctms_speed_example_gives_the_figures_of_its_page() -> None:
    _, speed = run(bench(CTMS_SPEED, volts=1.0), 10_000, 5000)
    assert speed[-1] == pytest.approx(0.1, rel=0.005)  # page: final speed 0.1 rad/s
    outside = np.nonzero(np.abs(speed / 0.0999000999 - 1.0) > 0.02)[0]
    assert (outside[-1] + 2) * 1e-3 == pytest.approx(2.07, rel=0.005)  # page: settling time 2.07 s
    assert speed.max() <= 0.0999000999001  # page: no overshoot


def test_ctms_speed_example_follows_the_computed_response() -> None:
    # Samples of the same example computed with the `control` and `scipy` packages.
    samples = {
        0.1: 0.0068555372,
        0.2: 0.0195922923,
        0.5: 0.0541700999,
        1.0: 0.0830371112,
        1.5: 0.0937038943,
        2.0: 0.0976234889,
        3.0: 0.0995927636,
        4.0: 0.0998586103,
    }
    _, speed = run(bench(CTMS_SPEED, volts=1.0), 10_000, 4000)
    for time_s, expected in samples.items():
        assert speed[round(time_s * 1000) - 1] == pytest.approx(expected, abs=1e-10)


def test_stiff_motor_reaches_its_published_operating_point() -> None:
    plant = bench(CTMS_POSITION)
    current, speed = run(plant, 10_000, 1000)
    assert speed[-1] == pytest.approx(429.9215, abs=1e-4)
    assert current[-1] == pytest.approx(0.0550378, abs=1e-7)
    plant = bench(CTMS_POSITION)
    plant.axes[0].jammed = True
    current, speed = run(plant, 10_000, 5)
    assert current[0] == pytest.approx(3.0, abs=1e-9)  # stall 3 A, reached well inside the first tick
    assert not speed.any()


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
    plant = bench(CTMS_POSITION, tick_us=tick_us)
    plant.axes[0].speed_rad_s = 1e-12  # already turning: from standstill a 4096th of a tick goes by first
    current, speed = run(plant, 10_000, ticks)
    assert speed == pytest.approx(solved.y[1], rel=1e-7)
    assert current == pytest.approx(solved.y[0], rel=1e-6)


def test_oscillating_motor_follows_scipy_lsim() -> None:
    system, inputs = matrices(MODELICA)
    times = np.arange(0, 301) * 1e-3
    load_nm = -63.66  # helps, so that the shaft never pauses and the motion is linear from the first tick
    drive = np.column_stack([np.full(301, 100.0), np.full(301, load_nm)])
    _, states, _ = lsim((system, inputs, np.eye(2), np.zeros((2, 2))), drive, times)
    plant = bench(MODELICA, volts=100.0)
    plant.axes[0].load_nm = load_nm
    plant.axes[0].speed_rad_s = 1e-12
    current, speed = run(plant, 10_000, 300)
    assert current == pytest.approx(states[1:, 0], abs=1e-6)
    assert speed == pytest.approx(states[1:, 1], abs=1e-7)
    assert speed.max() > 1.1 * speed[-1]  # it does oscillate (damping ratio 0.555)


def test_modelica_motor_reaches_its_documented_nominal_point() -> None:
    plant = bench(MODELICA, volts=100.0)
    plant.axes[0].load_nm = 63.66
    current, speed = run(plant, 10_000, 2000)
    assert current[-1] == pytest.approx(99.9969, abs=1e-4)
    assert speed[-1] * 60.0 / math.tau == pytest.approx(1425.0023, abs=1e-4)


# ---- the exact step --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("motor", [CTMS_SPEED, CTMS_POSITION, MODELICA], ids=["speed", "stiff", "oscillating"])
@pytest.mark.parametrize("level", [0, 1, 5, HALVINGS])
def test_rows_equal_scipy_zero_order_hold(motor: MotorParameters, level: int) -> None:
    system, inputs = matrices(motor)
    step_s = 1e-3 / 2**level
    rows = transitions(tuple(system.ravel().tolist()), inputs[0, 0], inputs[1, 1], 1e-3)[level]
    # Angle and charge as two more states give the integrals' rows.
    whole = np.zeros((4, 4))
    whole[:2, :2] = system
    whole[2, 0] = whole[3, 1] = 1.0
    stepped, driven, *_ = cont2discrete(
        (whole, np.vstack([inputs, np.zeros((2, 2))]), np.eye(4), np.zeros((4, 2))), step_s, "zoh"
    )
    expected = np.hstack([stepped[:, :2], driven])
    expected[2] /= step_s  # the third row is the current's mean
    found = np.array(rows).reshape(4, 4)
    assert found == pytest.approx(expected, rel=1e-8, abs=1e-14)


def test_ticks_of_any_length_give_the_same_motion() -> None:
    coarse = bench(CTMS_POSITION, tick_us=1000)
    fine = bench(CTMS_POSITION, tick_us=50)
    coarse.axes[0].speed_rad_s = fine.axes[0].speed_rad_s = 1e-12
    run(coarse, 6000, 30)
    run(fine, 6000, 600)
    assert fine.axes[0].angle_rad == pytest.approx(coarse.axes[0].angle_rad, rel=1e-10)
    assert fine.axes[0].speed_rad_s == pytest.approx(coarse.axes[0].speed_rad_s, rel=1e-10)


def test_a_motor_beyond_simulation_is_refused() -> None:
    with pytest.raises(FileError, match="within a tick"):
        bench(MotorParameters(resistance_20_ohm=1e9, inductance_h=1e-12, constant_vs=1.0, inertia_kgm2=1.0))
