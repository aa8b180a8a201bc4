"""Friction, drive, warmth and ageing of the simulated motor."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from plant_bench import bench, run
from ramprig.errors import FileError
from ramprig.mock.plant import (
    VENT_BENCH,
    Axis,
    AxisParameters,
    EncoderParameters,
    MotorParameters,
    Plant,
    PlantParameters,
    SupplyParameters,
)
from ramprig.mock.plant.parameters import copper_factor

# ---- friction --------------------------------------------------------------------------------------------------------


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


def test_a_stall_under_current_keeps_the_current() -> None:
    plant = Plant()
    axis = plant.axes[0]
    run(plant, 5000, 300)
    current, speed = run(plant, 100, 300)  # too little to go on, or to break away
    assert speed[-1] == 0.0
    stop = int(np.argmin(np.abs(speed) > 0.0))
    assert not speed[stop:].any()
    assert np.abs(np.diff(current[stop - 1 :])).max() < 0.005
    assert axis.current_a == pytest.approx(0.01 * plant.supply.bus_v / 2.519, rel=1e-3)


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


# ---- drive -----------------------------------------------------------------------------------------------------------


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


# ---- temperature -----------------------------------------------------------------------------------------------------


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
    axis_parameters = AxisParameters(name="m", motor=motor, encoder=EncoderParameters(lines=1))
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


# ---- ageing ----------------------------------------------------------------------------------------------------------


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
