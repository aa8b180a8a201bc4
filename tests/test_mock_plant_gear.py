"""The gear's play: a dead zone between motor and output, seen by encoders on either shaft, and growing with wear."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from plant_bench import bench
from ramprig.mock.plant import (
    VENT_BENCH,
    Ageing,
    AxisParameters,
    MotorParameters,
    Plant,
    PlantFault,
    PlantParameters,
    set_fault,
    set_play,
    set_wear,
)
from ramprig.mock.plant.parameters import copper_factor

PLAY = math.radians(1.5)
GEAR = 90.0
PLAYFUL = dataclasses.replace(VENT_BENCH.axes[0].motor, play_rad=PLAY)


def plant_of(motor: MotorParameters, *, on_output: bool = False, lines: int = 16, seed: int = 0) -> Plant:
    encoder = dataclasses.replace(VENT_BENCH.axes[0].encoder, on_output=on_output, lines=lines)
    axis: AxisParameters = dataclasses.replace(VENT_BENCH.axes[0], motor=motor, encoder=encoder)
    return Plant(dataclasses.replace(VENT_BENCH, axes=(axis,)), seed=seed)


def turn(plant: Plant, duty: int, ticks: int) -> None:
    plant.axes[0].duty = duty
    for _ in range(ticks):
        plant.step()


# ---- the play itself -------------------------------------------------------------------------------------------------


def test_the_output_follows_the_motor_as_the_play_operator_says() -> None:
    # The play operator y(t) = min(max(y(t-), x - a), x + a): the dead-zone model's limit for a light output.
    plant = plant_of(PLAYFUL)
    axis, follows = plant.axes[0], 0.0
    for step in range(4000):
        axis.duty = round(6000 * math.sin(step / 300.0))
        plant.step()
        geared = axis.angle_rad / GEAR
        follows = min(max(follows, geared - PLAY / 2), geared + PLAY / 2)
        assert axis.output_rad == pytest.approx(follows, abs=1e-12)
        assert abs(geared - axis.output_rad) <= PLAY / 2 + 1e-12


def test_a_reversal_moves_the_motor_by_the_whole_play_before_the_output() -> None:
    plant = plant_of(PLAYFUL)
    axis = plant.axes[0]
    turn(plant, 3000, 1000)
    turn(plant, 0, 1000)
    assert axis.speed_rad_s == 0.0
    from_rad, stood_rad = axis.angle_rad, axis.output_rad
    axis.duty = -1000
    before_rad = from_rad
    while axis.output_rad == stood_rad:
        before_rad = axis.angle_rad
        plant.step()
    assert (from_rad - before_rad) / GEAR <= PLAY <= (from_rad - axis.angle_rad) / GEAR


def test_a_light_output_with_friction_behind_a_stiff_dead_zone_moves_like_this() -> None:
    # The dead-zone model in full: T = k D(theta_m/N - theta_o), an output with a little inertia and with friction.
    # Reversed from the flank; the output must begin to move at the same time, and both end at the same place.
    drag_nm, stiff, light = 0.09, 4000.0, 2e-4
    motor = dataclasses.replace(PLAYFUL, output_friction_nm=drag_nm, thermal_resistance_k_w=0.0, coulomb_nm=2e-4)
    motor = dataclasses.replace(motor, static_nm=2e-4, ambient_c=20.0)
    plant = bench(motor, volts=1.2)
    axis = plant.axes[0]
    axis.duty = 10_000
    for _ in range(600):
        plant.step()
    start = [axis.current_a, axis.speed_rad_s, axis.angle_rad, axis.output_rad, axis.speed_rad_s / GEAR]
    ohm = motor.resistance_20_ohm * copper_factor(20.0)

    def slopes(_t: float, x: np.ndarray) -> list[float]:
        current, speed, angle, output, output_speed = x
        ahead = angle / GEAR - output
        gear_nm = stiff * (ahead - PLAY / 2 if ahead > PLAY / 2 else ahead + PLAY / 2 if ahead < -PLAY / 2 else 0.0)
        friction_nm = motor.coulomb_nm * math.tanh(speed / 1e-2)
        push_nm = motor.constant_vs * current - motor.viscous_nms * speed - friction_nm - gear_nm / GEAR
        held_nm = drag_nm * math.tanh(output_speed / 1e-4)
        return [
            (-1.2 - ohm * current - motor.constant_vs * speed) / motor.inductance_h,
            push_nm / motor.inertia_kgm2,
            speed,
            output_speed,
            # Damped in the contact, as a gear is, or it would ring for ever.
            (gear_nm - held_nm - (0.5 if gear_nm else 0.0) * (output_speed - speed / GEAR)) / light,
        ]

    start[3] = start[2] / GEAR - PLAY / 2 - drag_nm / stiff
    times = np.arange(1, 401) * 1e-3
    solved = solve_ivp(slopes, (0.0, 0.4), start, method="LSODA", t_eval=times, rtol=1e-7, atol=1e-10, max_step=1e-3)
    axis.duty = -10_000
    angles, outputs = [], []
    for _ in times:
        plant.step()
        angles.append(axis.angle_rad)
        outputs.append(axis.output_rad)
    turned, moved = solved.y[2] / GEAR, solved.y[3]
    begins, expected = (
        int(np.argmax(each) + np.argmax(each[np.argmax(each) :] < each.max() - math.radians(0.1)))
        for each in (np.array(outputs), moved)
    )
    assert turned[expected] < turned.max() - PLAY  # the play has been crossed by then
    assert abs(begins - expected) <= 2
    assert angles[-1] == pytest.approx(solved.y[2][-1], abs=0.02 * abs(angles[-1] - start[2]))


def test_the_friction_of_the_output_is_felt_only_while_it_moves() -> None:
    drag_nm = 0.27  # at the motor's shaft twice its own friction
    motor = dataclasses.replace(PLAYFUL, play_rad=math.radians(40.0), output_friction_nm=drag_nm)
    plant = plant_of(motor)
    axis = plant.axes[0]
    own_a = (motor.coulomb_nm + motor.viscous_nms * 200.0) / motor.constant_vs
    currents = {}
    for place, ticks in (("in the play", 100), ("at the flank", 900)):
        turn(plant, 4000, ticks)
        currents[place] = axis.current_a - motor.viscous_nms * (axis.speed_rad_s - 200.0) / motor.constant_vs
        assert (axis.output_rad == 0.0) == (place == "in the play")
    assert currents["at the flank"] == pytest.approx(own_a + drag_nm / GEAR / motor.constant_vs, rel=0.02)
    assert currents["in the play"] < currents["at the flank"]


def test_a_weight_keeps_the_output_at_the_flank_that_it_presses() -> None:
    plant = plant_of(PLAYFUL)
    axis = plant.axes[0]
    axis.load_nm = 0.05
    for duty in (4000, 0, -4000, 0, 2000):
        turn(plant, duty, 500)
        assert axis.output_rad == pytest.approx(axis.angle_rad / GEAR - PLAY / 2, abs=1e-12)


def test_what_the_output_friction_can_hold_is_not_a_weight() -> None:
    plant = plant_of(dataclasses.replace(PLAYFUL, output_friction_nm=0.06))
    axis = plant.axes[0]
    axis.load_nm = 0.05
    turn(plant, 4000, 500)
    turn(plant, 0, 800)
    stood_rad = axis.output_rad
    turn(plant, -400, 60)
    assert axis.angle_rad / GEAR - stood_rad < PLAY / 2
    assert axis.output_rad == stood_rad


def test_without_play_the_output_is_simply_geared_and_nothing_is_followed() -> None:
    plant = Plant()
    turn(plant, 4000, 300)
    assert not plant.axes[0].gear.linked
    assert plant.axes[0].output_rad == plant.axes[0].angle_rad / GEAR


# ---- seen by encoders, and by a clamped output -----------------------------------------------------------------------


def test_an_encoder_counts_the_shaft_that_it_sits_on() -> None:
    # 1000 lines on the output are 4000 counts a turn of it.
    plants = [plant_of(PLAYFUL, on_output=on_output, lines=1000) for on_output in (False, True)]
    for plant in plants:
        turn(plant, 5000, 1500)
    turned, followed = plants[0].axes[0], plants[1].axes[0]
    assert turned.angle_rad == followed.angle_rad
    assert plants[0].read_counts(0) == math.floor(4000 * turned.angle_rad / math.tau)
    assert plants[1].read_counts(0) == math.floor(4000 * (turned.angle_rad / GEAR - PLAY / 2) / math.tau)


def test_a_clamped_output_leaves_the_motor_the_play() -> None:
    plant = plant_of(PLAYFUL)
    axis = plant.axes[0]
    turn(plant, 3000, 500)
    turn(plant, 0, 1000)
    set_fault(plant, PlantFault.OUTPUT_CLAMPED)
    stood_rad = axis.output_rad
    ends = []
    for duty in (1500, -1500, 1500):
        turn(plant, duty, 400)
        ends.append(axis.angle_rad)
        assert axis.speed_rad_s == 0.0
        # Pressed, it draws the current of a motor that stands.
        assert abs(axis.current_a) == pytest.approx(0.15 * plant.supply.bus_v / axis._resistance_ohm, rel=1e-6)
    assert [abs(a - b) / GEAR for a, b in ((ends[0], ends[1]), (ends[1], ends[2]))] == pytest.approx([PLAY, PLAY])
    assert axis.output_rad == stood_rad
    set_fault(plant, PlantFault.OUTPUT_CLAMPED, on=False)
    turn(plant, 3000, 400)
    assert axis.output_rad > stood_rad


def test_a_clamped_output_without_play_holds_the_motor() -> None:
    plant = Plant()
    axis = plant.axes[0]
    turn(plant, 3000, 500)
    set_fault(plant, PlantFault.OUTPUT_CLAMPED)
    stood_rad = axis.angle_rad
    for duty in (3000, -3000):
        turn(plant, duty, 200)
        assert axis.angle_rad == pytest.approx(stood_rad, rel=1e-14)
        assert axis.speed_rad_s == 0.0


def test_stops_are_left_as_soon_as_the_motor_pulls_away() -> None:
    plant = Plant()
    axis = plant.axes[0]
    axis.stops_rad = (-2.0, 5.0)
    turn(plant, 2000, 300)
    assert (axis.angle_rad, axis.speed_rad_s) == (5.0, 0.0)
    turn(plant, -2000, 300)
    assert (axis.angle_rad, axis.speed_rad_s) == (-2.0, 0.0)
    axis.turn_by_hand(3.0)
    assert axis.angle_rad == 1.0
    turn(plant, -2000, 300)
    assert axis.angle_rad == -2.0
    axis.turn_by_hand(100.0)
    assert axis.angle_rad == 5.0


# ---- wear ------------------------------------------------------------------------------------------------------------


def to_and_fro(plant: Plant, times: int) -> float:
    """Turn to and fro; return the turns of the output, both ways added."""
    turns = 0.0
    for duty in (6000, -6000) * times:
        for ticks, now in ((1500, duty), (500, 0)):
            begun = plant.axes[0].angle_rad
            turn(plant, now, ticks)
            turns += abs(plant.axes[0].angle_rad - begun) / (math.tau * GEAR)
    return turns


@pytest.mark.parametrize("ageing", list(Ageing))
def test_wear_grows_with_the_way_turned_and_stays(ageing: Ageing) -> None:
    plant = Plant()
    axis, motor = plant.axes[0], VENT_BENCH.axes[0].motor
    set_wear(plant, ageing, 5000.0)
    turns = to_and_fro(plant, 2)
    share = 50.0 * turns / 1000.0
    expected = {
        Ageing.FRICTION: (motor.coulomb_nm * (1 + share), motor.static_nm * (1 + share), 2.4, 0.0),
        Ageing.RESISTANCE: (motor.coulomb_nm, motor.static_nm, 2.4 * (1 + share), 0.0),
        Ageing.PLAY: (motor.coulomb_nm, motor.static_nm, 2.4, math.radians(5.0) * turns),
    }[ageing]

    def now() -> tuple[float, ...]:
        return axis.coulomb_nm, axis.static_nm, axis.resistance_20_ohm, axis.play_rad

    assert now() == pytest.approx(expected, rel=0.01)  # ways shorter than 50 ms at a reversal are not counted
    assert share > 0.1
    worn = now()
    set_wear(plant, ageing, 0.0)
    to_and_fro(plant, 1)
    assert now() == worn


def test_a_new_motor_that_does_not_turn_does_not_wear() -> None:
    plant = Plant()
    for ageing in Ageing:
        set_wear(plant, ageing, 1000.0)
    plant.axes[0].jammed = True
    turn(plant, 3000, 1000)
    assert plant.axes[0].worn == Plant().axes[0].worn


def test_play_by_a_fault_adds_to_what_has_worn_and_goes_with_it() -> None:
    plant = plant_of(PLAYFUL)
    axis = plant.axes[0]
    set_wear(plant, Ageing.PLAY, 1000.0)
    to_and_fro(plant, 1)
    worn = axis.worn.play_rad
    set_play(plant, 3.0)
    assert axis.play_rad == pytest.approx(math.radians(3.0) + worn)
    set_play(plant, 0.0)
    assert axis.play_rad == pytest.approx(PLAY + worn)
    set_fault(plant, PlantFault.LEAD_OPEN)
    set_fault(plant, PlantFault.LEAD_OPEN, on=False)
    assert axis.resistance_20_ohm == 2.4


def test_a_bench_of_two_motors_wears_one_by_one() -> None:
    parameters: PlantParameters = dataclasses.replace(VENT_BENCH, axes=(VENT_BENCH.axes[0],) * 2)
    plant = Plant(parameters)
    set_wear(plant, Ageing.FRICTION, 1000.0, axis=1)
    for axis in plant.axes:
        axis.duty = 5000
    for _ in range(500):
        plant.step()
    assert plant.axes[0].worn.friction == 0.0
    assert plant.axes[1].worn.friction > 0.0
