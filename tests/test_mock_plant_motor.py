"""The simulated motor against published examples and reference integrators."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp
from scipy.signal import cont2discrete, lsim

from ramprig.errors import FileError
from ramprig.mock.plant import (
    VENT_BENCH,
    Axis,
    AxisParameters,
    BridgeParameters,
    EncoderParameters,
    MotorParameters,
    Plant,
    PlantParameters,
    SupplyParameters,
)
from ramprig.mock.plant.flow import HALVINGS, transitions
from ramprig.mock.plant.parameters import copper_factor

# CTMS (University of Michigan, Carnegie Mellon), "DC Motor Speed: System Modeling", ctms.engin.umich.edu.
CTMS_SPEED = MotorParameters(
    resistance_20_ohm=1.0, inductance_h=0.5, constant_vs=0.01, inertia_kgm2=0.01, viscous_nms=0.1
)
# CTMS, "DC Motor Position: System Modeling": a stiff motor, electrical pole 2.5e4 times the mechanical one.
CTMS_POSITION = MotorParameters(
    resistance_20_ohm=4.0, inductance_h=2.75e-6, constant_vs=0.0274, inertia_kgm2=3.2284e-6, viscous_nms=3.5077e-6
)
# Modelica Standard Library, DC_PermanentMagnet's default data; rotor and load of example DCPM_Start together.
MODELICA_K = (100.0 - 100.0 * 0.05) / (1425.0 * math.tau / 60.0)
MODELICA = MotorParameters(
    resistance_20_ohm=0.05, inductance_h=1.5e-3, constant_vs=MODELICA_K, inertia_kgm2=0.15 + 0.15, gear_ratio=1.0
)


def bench(motor: MotorParameters, volts: float = 12.0, *, tick_us: int = 1000) -> Plant:
    """A motor on a supply as good as ideal, at 20 degC throughout (thermal resistance 0)."""
    cold = MotorParameters(
        resistance_20_ohm=motor.resistance_20_ohm,
        inductance_h=motor.inductance_h,
        constant_vs=motor.constant_vs,
        inertia_kgm2=motor.inertia_kgm2,
        viscous_nms=motor.viscous_nms,
        coulomb_nm=motor.coulomb_nm,
        static_nm=motor.static_nm,
        gear_ratio=motor.gear_ratio,
        thermal_resistance_k_w=0.0,
    )
    axis = AxisParameters(name="m", motor=cold, encoder=EncoderParameters(lines=500))
    supply = SupplyParameters(volts=volts, resistance_ohm=1e-12, capacitance_f=1.0, can_sink=True)
    return Plant(PlantParameters(supply=supply, axes=(axis,)), tick_us=tick_us)


def run(plant: Plant, duty: int, ticks: int) -> tuple[np.ndarray, np.ndarray]:
    """Currents in A and speeds in rad/s after each tick at this duty."""
    axis = plant.axes[0]
    axis.duty = duty
    rows = []
    for _ in range(ticks):
        plant.step()
        rows.append((axis.current_a, axis.speed_rad_s))
    found = np.array(rows)
    return found[:, 0], found[:, 1]


def matrices(motor: MotorParameters) -> tuple[np.ndarray, np.ndarray]:
    resistance, inductance = motor.resistance_20_ohm, motor.inductance_h
    constant, inertia = motor.constant_vs, motor.inertia_kgm2
    system = np.array(
        [[-resistance / inductance, -constant / inductance], [constant / inertia, -motor.viscous_nms / inertia]]
    )
    return system, np.array([[1.0 / inductance, 0.0], [0.0, -1.0 / inertia]])


# ---- published step responses -------------------------------------------------------------------------------------


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


# ---- the exact step -----------------------------------------------------------------------------------------------


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


# ---- friction -----------------------------------------------------------------------------------------------------


def coasting(inertia: float, viscous: float, coulomb: float, speed: float) -> Plant:
    motor = MotorParameters(
        resistance_20_ohm=2.0,
        inductance_h=1e-3,
        constant_vs=0.01,
        inertia_kgm2=inertia,
        viscous_nms=viscous,
        coulomb_nm=coulomb,
        static_nm=coulomb,
    )
    plant = bench(motor)
    plant.axes[0].speed_rad_s = speed
    return plant


def ticks_to_standstill(plant: Plant, most: int = 10_000) -> int:
    for tick in range(1, most + 1):
        plant.step()
        if not plant.axes[0].speed_rad_s:
            return tick
    raise AssertionError(f"still turning after {most} ticks")


def test_coast_down_ends_at_the_closed_form_time_and_angle() -> None:
    # w(t) = (w0 + Tc/b) e^(-bt/J) - Tc/b: stops at (J/b) ln(1 + b w0/Tc) = 2.0881453068 s after 486.854693 rad.
    plant = coasting(1.03e-6, 2e-7, 2e-4, 500.0)
    axis = plant.axes[0]
    for _ in range(1000):
        plant.step()
    assert axis.speed_rad_s == pytest.approx(1500.0 * math.exp(-2e-7 * 1.0 / 1.03e-6) - 1000.0, rel=1e-12)
    assert 1000 + ticks_to_standstill(plant) == math.ceil(2088.1453068)
    assert axis.angle_rad == pytest.approx(486.854693, abs=1e-6)


def test_coast_down_without_viscous_friction_is_a_parabola() -> None:
    plant = coasting(1e-6, 0.0, 1e-4, 100.0)  # t = J w0 / Tc = 1 s, angle = J w0^2 / (2 Tc) = 50 rad
    assert ticks_to_standstill(plant) in (1000, 1001)
    assert plant.axes[0].angle_rad == pytest.approx(50.0, abs=1e-9)


def test_retardation_tests_agree_with_the_textbook() -> None:
    # Theraja, Electrical Technology vol. II ch. 31 (from memory): 1525 to 1475 rpm in 25 s on its own losses, in 20 s
    # with 1 kW more; hence losses of 4 kW and J = 121.6 kg m^2.
    middle = 1500.0 * math.tau / 60.0
    times = {}
    for losses_w in (4000.0, 5000.0):
        plant = coasting(121.585, 0.0, losses_w / middle, 1525.0 * math.tau / 60.0)
        ticks = 0
        while plant.axes[0].speed_rad_s > 1475.0 * math.tau / 60.0:
            plant.step()
            ticks += 1
        times[losses_w] = ticks * 1e-3
    assert times[4000.0] == pytest.approx(25.0, rel=1e-3)
    assert times[5000.0] == pytest.approx(20.0, rel=1e-3)


def test_standstill_is_true_and_never_chatters() -> None:
    plant = Plant()
    axis = plant.axes[0]
    run(plant, 5000, 300)
    axis.duty, axis.brake = 0, True
    ticks_to_standstill(plant)
    stopped_rad = axis.angle_rad
    for _ in range(200):
        plant.step()
        assert axis.speed_rad_s == 0.0
    assert axis.angle_rad == stopped_rad
    assert axis.current_a == 0.0


def test_shaft_sticks_until_the_break_away_torque_and_then_runs() -> None:
    # Vent drive: break-away at Ts/K = 0.1128 A, so at 0.0282 of 12 V with 2.519 ohm; running takes only Tc/K.
    motor = VENT_BENCH.axes[0].motor
    ohm = motor.resistance_20_ohm * copper_factor(motor.ambient_c) + VENT_BENCH.axes[0].bridge.resistance_ohm
    threshold = motor.static_nm / motor.constant_vs * ohm / 12.0
    plant = Plant()
    _, speed = run(plant, int(threshold * 10_000 * 0.97), 300)
    assert not speed.any()
    _, speed = run(plant, int(threshold * 10_000 * 1.03) + 1, 300)
    assert speed[-1] > 5.0
    _, speed = run(plant, int(threshold * 10_000 * 0.97), 300)
    assert speed[-1] > 1.0  # once it turns, the smaller running friction holds


def test_break_away_inside_a_tick_matches_fine_ticks() -> None:
    motor = MotorParameters(
        resistance_20_ohm=2.0,
        inductance_h=20e-3,
        constant_vs=0.02,
        inertia_kgm2=1e-5,
        coulomb_nm=0.01,
        static_nm=0.02,
    )
    coarse, fine = bench(motor, tick_us=5000), bench(motor, tick_us=5)
    for duty in (10_000, -10_000, 3000):
        run(coarse, duty, 20)
        run(fine, duty, 20_000)
        assert coarse.axes[0].speed_rad_s == pytest.approx(fine.axes[0].speed_rad_s, rel=1e-4)
        assert coarse.axes[0].angle_rad == pytest.approx(fine.axes[0].angle_rad, rel=1e-4)


def test_reversal_under_friction_follows_a_reference_integrator() -> None:
    motor = MotorParameters(
        resistance_20_ohm=2.0,
        inductance_h=2e-3,
        constant_vs=0.02,
        inertia_kgm2=8e-6,
        viscous_nms=1e-6,
        coulomb_nm=0.004,
        static_nm=0.004,
    )
    plant = bench(motor)
    run(plant, 10_000, 400)
    axis = plant.axes[0]
    start = [axis.current_a, axis.speed_rad_s]
    current, speed = run(plant, -10_000, 100)

    def slope(sign: float) -> object:
        def rate(_t: float, x: np.ndarray) -> list[float]:
            return [
                (-12.0 - 2.0 * x[0] - 0.02 * x[1]) / 2e-3,
                (0.02 * x[0] - 1e-6 * x[1] - sign * 0.004) / 8e-6,
            ]

        return rate

    def crossing(_t: float, x: np.ndarray) -> float:
        return float(x[1])

    crossing.terminal = True  # type: ignore[attr-defined]  # scipy's way to mark an event
    exact = {"rtol": 1e-10, "atol": 1e-12}
    down = solve_ivp(slope(1.0), (0.0, 0.1), start, events=crossing, **exact)
    back = solve_ivp(slope(-1.0), (down.t[-1], 0.1), down.y[:, -1], t_eval=[0.1], **exact)
    assert 0.0 < down.t[-1] < 0.1
    # The shaft turns round within a 4096th of a tick of the true instant.
    assert current[-1] == pytest.approx(back.y[0, -1], rel=1e-5)
    assert speed[-1] == pytest.approx(back.y[1, -1], rel=1e-5)


# ---- drive --------------------------------------------------------------------------------------------------------


def test_half_duty_gives_half_the_voltage_and_half_the_no_load_speed() -> None:
    # Common practice of the trade: at 50 % duty a motor sees half the average voltage and idles at half the speed.
    frictionless = MotorParameters(
        resistance_20_ohm=2.4, inductance_h=1.2e-3, constant_vs=0.0195, inertia_kgm2=6e-6, viscous_nms=1e-9
    )
    _, full = run(bench(frictionless), 10_000, 2000)
    _, half = run(bench(frictionless), 5000, 2000)
    assert half[-1] == pytest.approx(full[-1] / 2.0, rel=1e-9)
    assert full[-1] == pytest.approx(12.0 / 0.0195, rel=1e-3)
    stalled = bench(frictionless)
    stalled.axes[0].jammed = True
    current, _ = run(stalled, 5000, 100)
    assert current[-1] * 2.4 == pytest.approx(6.0, rel=1e-9)


def test_plugging_draws_about_twice_the_stall_current() -> None:
    # Common practice of the trade: reversing at full speed, back EMF and supply add up.
    motor = MotorParameters(
        resistance_20_ohm=2.0, inductance_h=1e-4, constant_vs=0.02, inertia_kgm2=1e-4, viscous_nms=1e-8
    )
    plant = bench(motor)
    run(plant, 10_000, 5000)
    current, _ = run(plant, -10_000, 5)
    stall_a = 12.0 / 2.0
    assert np.abs(current).max() == pytest.approx(2.0 * stall_a, rel=0.05)


def test_swapped_leads_turn_the_other_way_and_look_the_same_to_the_current_sensor() -> None:
    right, wrong = Plant(seed=3), Plant(seed=3)
    wrong.axes[0].leads_swapped = True
    _, forward = run(right, 4000, 200)
    _, backward = run(wrong, 4000, 200)
    assert backward == pytest.approx(-forward, rel=1e-12)
    assert wrong.read_current_ma(0) == right.read_current_ma(0) > 0
    assert wrong.axes[0].leads_swapped
    wrong.axes[0].leads_swapped = False
    assert not wrong.axes[0].leads_swapped


def test_jam_stops_the_shaft_and_release_lets_it_run_again() -> None:
    plant = Plant()
    run(plant, 5000, 200)
    plant.axes[0].jammed = True
    current, speed = run(plant, 5000, 50)
    assert not speed.any()
    assert current[-1] == pytest.approx(0.5 * plant.supply.bus_v / 2.519, rel=0.01)
    plant.axes[0].jammed = False
    _, speed = run(plant, 5000, 200)
    assert speed[-1] > 200.0


def test_brake_stops_sooner_than_coast() -> None:
    coast, brake = Plant(), Plant()
    for plant in (coast, brake):
        run(plant, 8000, 400)
        plant.axes[0].duty = 0
    brake.axes[0].brake = True
    assert ticks_to_standstill(brake) * 4 < ticks_to_standstill(coast)


def test_off_current_runs_out_in_the_diodes_at_the_closed_form_time() -> None:
    # Stalled: L di/dt = -(bus + drop) - R i, so it is over after (L/R) ln(1 + i R / (bus + drop)).
    motor = MotorParameters(resistance_20_ohm=2.0, inductance_h=40e-3, constant_vs=0.02, inertia_kgm2=1e-4)
    plant = bench(motor)
    axis = plant.axes[0]
    axis.jammed = True
    run(plant, 10_000, 400)
    axis.duty = 0
    ticks = 0
    while axis.current_a:
        plant.step()
        ticks += 1
    assert ticks == math.ceil(1000 * 20e-3 * math.log(1.0 + axis_stall_v(motor, 12.0) / (12.0 + 1.4)))
    plant.step()
    assert axis.current_a == 0.0


def axis_stall_v(motor: MotorParameters, volts: float) -> float:
    """R times the current that flows after 400 ms at stall."""
    return volts * (1.0 - math.exp(-0.4 * motor.resistance_20_ohm / motor.inductance_h))


def test_weight_on_the_output_turns_a_slack_motor_back_through_the_gear() -> None:
    plant = Plant()
    axis = plant.axes[0]
    axis.load_nm = 0.9 * 90.0 * VENT_BENCH.axes[0].motor.static_nm
    run(plant, 0, 50)
    assert axis.speed_rad_s == 0.0
    axis.load_nm = 1.1 * 90.0 * VENT_BENCH.axes[0].motor.static_nm
    run(plant, 0, 50)
    assert axis.speed_rad_s < 0.0
    assert axis.load_nm == pytest.approx(1.1 * 90.0 * 2.2e-3)


# ---- temperature --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("celsius", "factor"),
    [
        # R(t) / R(20 degC) with copper's 0.00393 /K (IEC 60028, from memory).
        (-40, 0.76420),
        (0, 0.92140),
        (25, 1.01965),
        (40, 1.07860),
        (60, 1.15720),
        (75, 1.21615),
        (80, 1.23580),
        (100, 1.31440),
        (125, 1.41265),
        (155, 1.53055),
    ],
)
def test_copper_resistance_follows_the_table(celsius: float, factor: float) -> None:
    assert copper_factor(celsius) == pytest.approx(factor, abs=5e-6)


def test_copper_resistance_agrees_with_the_published_multipliers() -> None:
    # R(t) / R(25 degC), a published table on the web, rounded to three places; its own rule is (234.5+t)/259.5.
    table = {40: 1.058, 60: 1.135, 80: 1.212, 100: 1.289, 125: 1.385, 150: 1.482, 200: 1.674}
    for celsius, factor in table.items():
        assert copper_factor(celsius) / copper_factor(25.0) == pytest.approx(factor, abs=1.1e-3)


def test_stalled_winding_warms_to_its_final_temperature_with_its_time_constant() -> None:
    # With a current source in place of a voltage the node would be linear; here R rises with T and the current falls:
    # at the end Rth V^2 / R(T) = T - Ta, solved by iteration.
    motor = MotorParameters(
        resistance_20_ohm=4.0,
        inductance_h=1e-4,
        constant_vs=0.02,
        inertia_kgm2=1e-4,
        thermal_resistance_k_w=10.0,
        thermal_time_s=2.0,
        ambient_c=25.0,
    )
    axis_parameters = AxisParameters(
        name="m", motor=motor, encoder=EncoderParameters(lines=1), bridge=BridgeParameters()
    )
    supply = SupplyParameters(volts=6.0, resistance_ohm=1e-9, capacitance_f=1.0, can_sink=True)
    plant = Plant(PlantParameters(supply=supply, axes=(axis_parameters,)))
    axis = plant.axes[0]
    axis.jammed = True
    final_c = 25.0
    for _ in range(200):
        final_c = 25.0 + 10.0 * 36.0 / (4.0 * copper_factor(final_c))

    def warming(_t: float, celsius: np.ndarray) -> np.ndarray:
        return np.asarray(25.0 + 90.0 / (1.0 + 0.00393 * (celsius - 20.0)) - celsius) / 2.0

    run(plant, 10_000, 3000)
    reference = solve_ivp(warming, (0.0, 3.0), [25.0], rtol=1e-9)
    assert axis.winding_c == pytest.approx(reference.y[0, -1], rel=2e-3)
    run(plant, 10_000, 30_000)
    assert axis.winding_c == pytest.approx(final_c, rel=2e-3)
    assert axis.current_a == pytest.approx(6.0 / (4.0 * copper_factor(final_c)), rel=2e-3)
    assert plant.read_temperature_dc(0) == round(axis.winding_c * 10.0)
    hot_c = axis.winding_c
    run(plant, 0, 2000)
    assert axis.winding_c - 25.0 == pytest.approx((hot_c - 25.0) * math.exp(-1.0), rel=0.03)


# ---- ageing -------------------------------------------------------------------------------------------------------


def test_friction_and_resistance_may_change_while_running() -> None:
    plant = Plant()
    axis = plant.axes[0]
    current, speed = run(plant, 6000, 500)
    axis.coulomb_nm = 3e-3
    assert axis.static_nm == 3e-3
    worn_current, worn_speed = run(plant, 6000, 500)
    assert worn_current[-1] - current[-1] == pytest.approx(1.5e-3 / 0.0195, rel=0.05)
    assert worn_speed[-1] < speed[-1]
    axis.viscous_nms = 8e-6
    stiff_current, _ = run(plant, 6000, 500)
    assert stiff_current[-1] > worn_current[-1]
    axis.resistance_20_ohm = 4.8
    axis.jammed = True
    stalled, _ = run(plant, 6000, 100)
    ohm = 4.8 * copper_factor(axis.winding_c) + 0.1
    assert stalled[-1] == pytest.approx(0.6 * plant.supply.bus_v / ohm, rel=5e-3)
    axis.static_nm = 1e-6
    assert axis.static_nm == axis.coulomb_nm == 3e-3
    assert (axis.viscous_nms, axis.resistance_20_ohm) == (8e-6, 4.8)


def test_an_axis_alone_starts_at_rest() -> None:
    axis = Axis(VENT_BENCH.axes[0])
    assert axis.prepare(12.0) == 0.0
    axis.advance(12.0)
    assert (axis.current_a, axis.speed_rad_s, axis.angle_rad, axis.mean_a) == (0.0, 0.0, 0.0, 0.0)


@pytest.mark.parametrize(
    ("change", "complaint"),
    [
        ({"resistance_20_ohm": 0.0}, "resistance_20_ohm is 0.0; it must be greater than 0"),
        ({"inductance_h": -1.0}, "inductance_h"),
        ({"inertia_kgm2": math.nan}, "finite"),
        ({"viscous_nms": -1e-9}, "at least 0"),
        ({"coulomb_nm": 2.0, "static_nm": 1.0}, "static_nm is 1.0; it must be at least 2"),
    ],
)
def test_impossible_motors_are_refused(change: dict[str, float], complaint: str) -> None:
    usual = {"resistance_20_ohm": 1.0, "inductance_h": 1e-3, "constant_vs": 0.01, "inertia_kgm2": 1e-5}
    with pytest.raises(FileError, match=complaint):
        MotorParameters(**(usual | change))
