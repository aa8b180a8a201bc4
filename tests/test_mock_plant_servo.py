"""The simulated hobby servo: where a pulse sends it, how fast, and where it stops."""

from __future__ import annotations

import dataclasses

import pytest

from ramprig.errors import FileError
from ramprig.mock.plant import VENT_BENCH, Plant, Servo, ServoParameters

LATCH = ServoParameters(
    name="latch",
    slew_deg_s=300.0,
    dead_band_us=5.0,
    stop_low_deg=-55.0,
    stop_high_deg=55.0,
    idle_ma=8.0,
    moving_ma=160.0,
    stall_ma=700.0,
)


def settle(servo: Servo, pulse_us: float | None, ticks: int = 2000) -> float:
    servo.pulse_us = pulse_us
    for _ in range(ticks):
        servo.step()
    return servo.angle_deg


@pytest.mark.parametrize(("pulse_us", "angle_deg"), [(1500, 0.0), (1100, -45.0), (1900, 45.0)])
def test_pulse_gives_the_angle_of_common_practice(pulse_us: int, angle_deg: float) -> None:
    # Common practice of the trade, no standard: 1.5 ms neutral, 1.1 and 1.9 ms about 45 deg to either side.
    servo = Servo(LATCH, angle_deg=20.0)
    assert settle(servo, pulse_us) == pytest.approx(angle_deg)


def test_mounted_the_other_way_round_it_turns_the_other_way() -> None:
    servo = Servo(dataclasses.replace(LATCH, us_per_deg=-400.0 / 45.0))
    assert settle(servo, 1900) == pytest.approx(-45.0)


def test_it_turns_at_its_slew_rate_and_draws_its_moving_current() -> None:
    servo = Servo(LATCH)
    servo.pulse_us = 1900
    for tick in range(1, 150):
        servo.step()
        assert servo.angle_deg == pytest.approx(0.3 * tick)
        assert servo.current_a == pytest.approx(0.160)
    servo.step()
    servo.step()
    assert servo.angle_deg == pytest.approx(45.0)
    assert servo.current_a == pytest.approx(0.008)
    assert not servo.busy


def test_slew_is_per_second_whatever_the_tick() -> None:
    servo = Servo(LATCH, tick_us=500)
    servo.pulse_us = 1900
    for _ in range(100):
        servo.step()
    assert servo.angle_deg == pytest.approx(300.0 * 0.050)


def test_a_change_below_the_dead_band_does_not_move_it() -> None:
    servo = Servo(LATCH)
    settle(servo, 1500)
    assert settle(servo, 1504) == 0.0
    assert settle(servo, 1496) == 0.0
    assert settle(servo, 1506) == pytest.approx(6 * 45 / 400)


def test_small_changes_that_add_up_do_move_it() -> None:
    servo = Servo(LATCH)
    settle(servo, 1500)
    for pulse_us in range(1501, 1521):
        settle(servo, pulse_us, 100)
    assert servo.angle_deg == pytest.approx(20 * 45 / 400, abs=5 * 45 / 400)


@pytest.mark.parametrize(("pulse_us", "stop_deg"), [(2100, 55.0), (900, -55.0)])
def test_it_pushes_against_its_end_stops(pulse_us: int, stop_deg: float) -> None:
    servo = Servo(LATCH)
    assert settle(servo, pulse_us) == stop_deg
    assert servo.current_a == pytest.approx(0.700)
    assert settle(servo, 1500) == pytest.approx(0.0)
    assert servo.current_a == pytest.approx(0.008)


def test_without_a_pulse_it_stays_where_it_is_and_draws_nothing() -> None:
    servo = Servo(LATCH)
    half_way_deg = settle(servo, 1900, 60)
    assert half_way_deg == pytest.approx(18.0)
    assert settle(servo, None) == half_way_deg
    assert servo.current_a == 0.0
    assert servo.pulse_us is None
    assert settle(servo, 1900) == pytest.approx(45.0)


def test_its_current_loads_the_supply() -> None:
    plant = Plant(VENT_BENCH)
    plant.servos[0].pulse_us = 2200
    for _ in range(500):
        plant.step()
    assert plant.servos[0].angle_deg == 55.0
    assert plant.supply.current_a == pytest.approx(0.035 + 0.700)
    assert plant.supply.bus_v == pytest.approx(12.0 - 0.15 * 0.735)
    plant.servos[0].pulse_us = None
    for _ in range(50):
        plant.step()
    assert plant.supply.current_a == pytest.approx(0.035)


@pytest.mark.parametrize("change", [{"us_per_deg": 0.0}, {"slew_deg_s": 0.0}, {"stop_high_deg": -60.0}])
def test_impossible_servos_are_refused(change: dict[str, float]) -> None:
    with pytest.raises(FileError, match=next(iter(change))):
        dataclasses.replace(LATCH, **change)  # type: ignore[arg-type]  # a dict of names to try
