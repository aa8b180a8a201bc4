"""Break-away, lost motion and servo timing of a cycle: right for motions whose figures are known."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import numpy.typing as npt
import pytest

from ramprig.endure import takeup
from ramprig.endure.features import (
    NEEDS,
    CycleFeatures,
    FeatureWalk,
    Span,
    absent,
    is_judged,
    named,
    on_output_of,
    unit_of,
)
from ramprig.endure.motorfeatures import CHANNELS, MotorFeatures, motor_features
from ramprig.endure.servotiming import ServoFeatures, servo_features
from ramprig.mock.plant import VENT_BENCH, Plant, PlantFault, Servo, set_fault
from ramprig.record.scan import Piece
from ramprig.sequence.wear_words import FEATURE_WORDS, word_of

Floats = npt.NDArray[np.float64]
GEAR = 90.0
SAMPLE_MS = 10
COUNTS_PER_REV = 5760
Duties = list[tuple[float, float]]


def driven(plant: Plant, duties: Duties, *, on_output: bool) -> tuple[Floats, dict[str, Floats], Floats]:
    """Drive the plant's first axis: (duty in %, seconds to get there and stay at 0 s for a step), sampled as logged."""
    axis = plant.axes[0]
    rows, last, tick = [], plant.read_counts(0), 0
    for duty_pct, seconds in duties:
        begun, ticks = axis.duty, max(1, round(seconds * 1000))
        for step in range(ticks):
            axis.duty = round(begun + (duty_pct * 100.0 - begun) * (step + 1) / ticks)
            plant.step()
            tick += 1
            if tick % SAMPLE_MS == 0:
                counts = plant.read_counts(0)
                speed = (counts - last) / COUNTS_PER_REV * 60_000 / SAMPLE_MS
                rows.append((tick / 1000, axis.duty / 100, counts, counts / COUNTS_PER_REV, speed,
                             plant.read_current_ma(0) / 1000, plant.read_supply_mv() / 1000))  # fmt: skip
                last = counts
    table = np.array(rows)
    assert on_output == plant.encoders[0].on_output
    return table[:, 0], dict(zip(CHANNELS, table[:, 1:6].T, strict=True)), table[:, 6]


def features_of(plant: Plant, duties: Duties) -> MotorFeatures:
    on_output = plant.encoders[0].on_output
    return motor_features(*driven(plant, duties, on_output=on_output), on_output=on_output)


def vent(*, play_deg: float = 0.0, on_output: bool = False, output_nm: float = 0.0, seed: int = 1) -> Plant:
    motor = dataclasses.replace(
        VENT_BENCH.axes[0].motor,
        play_rad=math.radians(play_deg),
        output_friction_nm=output_nm,
        thermal_resistance_k_w=0.0,
    )
    encoder = dataclasses.replace(VENT_BENCH.axes[0].encoder, on_output=on_output, lines=1440 if on_output else 16)
    axis = dataclasses.replace(VENT_BENCH.axes[0], motor=motor, encoder=encoder)
    return Plant(dataclasses.replace(VENT_BENCH, axes=(axis,)), seed=seed)


TO_AND_FRO: Duties = [(0, 0.3), (30, 0.5), (30, 1.0), (0, 0.2), (0, 1.0), (-40, 4.0), (-40, 0.5), (0, 0.4), (0, 1.0)]
THE_SAME_WAY: Duties = [(0, 0.3), (20, 0.5), (0, 0.2), (0, 1.0), (20, 2.0), (0, 0.2), (0, 1.0)]


# ---- break-away ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("friction", [1.0, 1.5])
@pytest.mark.parametrize("resistance", [1.0, 1.3])
def test_break_away_current_is_that_of_the_friction_and_the_duty_that_of_both(
    friction: float, resistance: float
) -> None:
    # Ts / K = 0.1128 A breaks the vent drive away; the duty is that times R over the supply.
    plant, usual_ohm = vent(), VENT_BENCH.axes[0].motor.resistance_20_ohm
    axis = plant.axes[0]
    axis.static_nm *= friction
    axis.resistance_20_ohm = usual_ohm * resistance
    found = features_of(plant, THE_SAME_WAY).forward
    expected_a = friction * 2.2e-3 / 0.0195
    # The shaft has moved for some 50 ms before three counts show it: the ramp of 10 %/s has gone on by half a percent.
    assert expected_a < found.breakaway_current_a < expected_a + 0.045
    ohm = usual_ohm * resistance * 1.0079 + 0.1
    assert 100.0 * expected_a * ohm / 12.0 < found.breakaway_duty_pct < 100.0 * expected_a * ohm / 12.0 + 0.9


def test_a_steep_ramp_has_a_delay_and_no_break_away() -> None:
    found = features_of(vent(), [(0, 0.3), (50, 0.5), (50, 1.0), (0, 0.3)]).forward
    assert math.isnan(found.breakaway_duty_pct)
    assert math.isnan(found.breakaway_current_a)
    assert 0.02 < found.start_delay_s < 0.1


def test_an_encoder_on_the_output_shows_break_away_only_where_the_play_is_taken_up() -> None:
    reversed_first = features_of(vent(play_deg=2.0, on_output=True), TO_AND_FRO)
    assert math.isnan(reversed_first.backward.breakaway_duty_pct)
    assert math.isnan(reversed_first.forward.breakaway_duty_pct)
    same = features_of(vent(play_deg=2.0, on_output=True), THE_SAME_WAY).forward
    at_motor = features_of(vent(), THE_SAME_WAY).forward
    assert same.breakaway_current_a == pytest.approx(at_motor.breakaway_current_a, abs=0.02)


# ---- lost motion -----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("output_nm", [0.0, 0.02, 0.08])
@pytest.mark.parametrize("play_deg", [0.3, 0.6, 1.2, 3.0])
def test_a_slow_reversal_shows_the_play_whatever_the_friction_behind_it(play_deg: float, output_nm: float) -> None:
    plant = vent(play_deg=play_deg, on_output=True, output_nm=output_nm)
    assert features_of(plant, TO_AND_FRO).lost_motion_deg == pytest.approx(play_deg, abs=0.2)


@pytest.mark.parametrize(("friction", "resistance"), [(1.25, 1.0), (1.0, 1.25), (1.25, 1.25)])
def test_lost_motion_does_not_follow_friction_or_resistance(friction: float, resistance: float) -> None:
    found = []
    for seed in range(4):
        plant = vent(play_deg=1.0, on_output=True, seed=seed)
        plant.axes[0].coulomb_nm *= friction
        plant.axes[0].static_nm *= friction
        plant.axes[0].resistance_20_ohm *= resistance
        found.append(features_of(plant, TO_AND_FRO).lost_motion_deg)
    assert np.mean(found) == pytest.approx(1.0, abs=0.1)


@pytest.mark.parametrize("on_output", [False, True])
@pytest.mark.parametrize("friction", [1.0, 1.5])
@pytest.mark.parametrize("resistance", [1.0, 1.1, 1.5])
def test_a_slow_ramp_shows_the_resistance_whatever_the_friction(
    on_output: bool, friction: float, resistance: float
) -> None:
    # The current sensor's offset of 4 mA, which a bench file has the board subtract, is in it here: some 4 %.
    plant = vent(play_deg=0.5 if on_output else 0.0, on_output=on_output)
    plant.axes[0].coulomb_nm *= friction
    plant.axes[0].static_nm *= friction
    plant.axes[0].resistance_20_ohm *= resistance
    plant.sensors[0].offset_ma = 0.0
    true_ohm = 2.4 * resistance * (1.0 + 0.00393 * 2.0) + 0.1
    assert features_of(plant, TO_AND_FRO).resistance_ohm == pytest.approx(true_ohm, rel=0.03)


PRESSED: Duties = [(0, 0.2), (10, 0.2), (10, 0.7), (0, 0.1), (0, 0.5), (-10, 0.2), (-10, 0.7), (0, 0.1), (0, 0.3)]


@pytest.mark.parametrize("play_deg", [0.4, 1.5])
def test_a_clamped_output_shows_the_play_to_an_encoder_on_the_motor(play_deg: float) -> None:
    plant = vent(play_deg=play_deg)
    set_fault(plant, PlantFault.OUTPUT_CLAMPED)
    assert features_of(plant, PRESSED).lost_motion_deg == pytest.approx(play_deg, abs=0.0625)


def test_lost_motion_is_not_told_where_nothing_shows_it() -> None:
    # The output is free and the encoder on the motor's shaft; the motor never presses.
    assert math.isnan(features_of(vent(play_deg=1.0), TO_AND_FRO).lost_motion_deg)
    assert math.isnan(features_of(vent(play_deg=1.0), PRESSED).lost_motion_deg)
    # A ramp too steep, or one after a drive the same way.
    steep: Duties = [(30, 0.5), (30, 1.0), (0, 0.2), (0, 1.0), (-40, 0.8), (-40, 1.0), (0, 0.4)]
    assert math.isnan(features_of(vent(play_deg=1.0, on_output=True), steep).lost_motion_deg)
    assert math.isnan(features_of(vent(play_deg=1.0, on_output=True), THE_SAME_WAY).lost_motion_deg)
    # Pressed between two stops of the output, which are further apart than any play.
    plant = vent()
    plant.axes[0].stops_rad = (-GEAR * math.radians(6.0), GEAR * math.radians(6.0))
    assert math.isnan(
        features_of(plant, [(10, 0.2), (10, 1.5), (0, 0.5), (-10, 0.2), (-10, 2.5), (0, 0.3)]).lost_motion_deg
    )


def test_a_ramp_with_samples_missing_gives_no_balance() -> None:
    times, channels, supply = driven(vent(play_deg=1.0, on_output=True), TO_AND_FRO, on_output=True)
    starts = takeup.starts_of(channels["duty_pct"], channels["counts"])
    assert [start.after for start in starts] == [0.0, 1.0]
    (found,) = takeup.balances(times, channels, supply, starts)
    assert found.after_other_way
    supply[starts[1].moved + 20] = math.nan
    assert list(takeup.balances(times, channels, supply, starts)) == []


# ---- servos ----------------------------------------------------------------------------------------------------------


def moved(*, slew_deg_s: float = 60.0, servo_deg_s: float = 60.0, to_deg: float = 30.0, stop_deg: float = 55.0,
          sag_ohm: float = 0.15, driven_from_s: float = math.inf) -> ServoFeatures:  # fmt: skip
    """The latch's move, commanded at `slew_deg_s` from 1 s on, by its current on a supply with this resistance."""
    parameters = dataclasses.replace(VENT_BENCH.servos[0], slew_deg_s=servo_deg_s, stop_high_deg=stop_deg)
    servo, pulse_us = Servo(parameters), 1500.0
    rows = []
    for tick in range(5000):
        goal_us = 1500.0 + (to_deg * parameters.us_per_deg if tick >= 1000 else 0.0)
        pulse_us = min(goal_us, pulse_us + slew_deg_s * parameters.us_per_deg / 1000.0)
        servo.pulse_us = pulse_us
        servo.step()
        if tick % SAMPLE_MS == 0:
            supply_v = round((12.0 - sag_ohm * servo.current_a) * 1000.0) / 1000.0
            rows.append((tick / 1000, round(pulse_us), supply_v, tick >= driven_from_s * 1000.0))
    table = np.array(rows)
    return servo_features(table[:, 0], table[:, 1], table[:, 2], table[:, 3] > 0.0)


def test_a_servo_that_keeps_up_takes_as_long_as_it_was_told() -> None:
    found = moved()
    assert found.commanded_move_time_s == pytest.approx(0.5, abs=0.011)
    assert found.move_time_s == pytest.approx(0.5, abs=0.021)
    assert found.supply_sag_v == pytest.approx(0.15 * 0.152, abs=0.001)


def test_a_servo_that_has_become_slow_is_seen_by_the_supply() -> None:
    found = moved(servo_deg_s=30.0)
    assert found.commanded_move_time_s == pytest.approx(0.5, abs=0.011)
    assert found.move_time_s == pytest.approx(1.0, abs=0.021)


def test_a_servo_at_a_stop_has_no_time() -> None:
    found = moved(stop_deg=20.0)
    assert math.isnan(found.move_time_s)
    assert found.supply_sag_v > 0.02


@pytest.mark.parametrize("hidden", [{"sag_ohm": 0.03}, {"driven_from_s": 0.9}, {"driven_from_s": 1.2}])
def test_what_the_supply_does_not_show_is_not_told(hidden: dict[str, float]) -> None:
    found = moved(**hidden)
    assert found.commanded_move_time_s == pytest.approx(0.5, abs=0.011)
    assert math.isnan(found.move_time_s)


def test_a_servo_that_does_not_move_has_no_features() -> None:
    assert all(math.isnan(each) for each in dataclasses.astuple(moved(to_deg=0.0)))


# ---- names, and what is absent ---------------------------------------------------------------------------------------


def walked() -> CycleFeatures:
    times, channels, supply = driven(vent(play_deg=1.0, on_output=True), TO_AND_FRO, on_output=True)
    ticks = np.round(times * 1000).astype(np.int64)
    names = [*(f"vent.{name}" for name in CHANNELS), "latch.pulse_us", "supply_v"]
    numbers = {f"vent.{name}": column for name, column in channels.items()}
    numbers |= {"supply_v": supply, "latch.pulse_us": np.full(len(times), 1500.0)}
    walk = FeatureWalk(
        names, [Span(number=1, part=1, begin_tick=0, end_tick=int(ticks[-1]))], tick_us=1000, on_output=["vent"]
    )
    (found,) = walk.take(1, Piece(ticks, numbers))
    return found


def test_a_cycle_tells_its_features_by_name_and_which_are_absent_and_why() -> None:
    found = walked()
    values = found.values()
    assert values["vent: lost motion"] == found.motors["vent"].lost_motion_deg == pytest.approx(1.0, abs=0.1)
    assert "latch: move time" in values
    known = [name for name, value in values.items() if not math.isnan(value)]
    missing = absent(known, motors=["vent", "fan"], servos=["latch"])
    assert missing["vent: break-away duty"] == NEEDS["break-away duty"]
    assert "vent: lost motion" not in missing
    assert not any(name.startswith(("fan", "latch")) for name in missing)  # they did not move
    moved = absent([*known, "latch: commanded move time"], motors=["vent"], servos=["latch"])
    assert set(moved) - set(missing) == {"latch: move time", "latch: supply sag"}
    assert moved["latch: move time"] == NEEDS["move time"]
    assert absent(values, motors=["vent"], servos=["latch"]) == {}


def test_every_feature_of_a_motor_or_servo_says_what_it_asks_for() -> None:
    words = {name.rpartition(": ")[2] for name in walked().values()}
    assert words - set(NEEDS) == {"duration", "lowest supply", "peak current", "energy"}
    assert set(NEEDS) <= words
    assert named("lost_motion_deg") == "lost motion"


def test_every_judged_feature_of_a_motor_has_its_word_for_limits() -> None:
    judged = {name for name in walked().values() if is_judged(name) and not name.startswith("latch")}
    assert {word_of(name) for name in judged} <= set(FEATURE_WORDS)
    assert all(unit_of(name) == FEATURE_WORDS[word_of(name)].unit for name in judged)


def test_the_manifest_tells_which_encoders_sit_on_the_output() -> None:
    columns = [
        {"column": "vent.speed_rpm", "encoder_on_output": True},
        {"column": "fan.speed_rpm", "encoder_on_output": False},
        {"column": "old.speed_rpm"},
    ]
    assert on_output_of({"speed": {"columns": columns}}) == {"vent"}
    assert on_output_of({}) == frozenset()
