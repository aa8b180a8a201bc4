"""The simulated supply: sag, regeneration, shut-down, current limit, and the charge that goes through it."""

from __future__ import annotations

import dataclasses
import math

import pytest

from ramprig.errors import FileError
from ramprig.mock.plant import (
    VENT_BENCH,
    AxisParameters,
    BridgeParameters,
    EncoderParameters,
    MotorParameters,
    Plant,
    PlantFault,
    PlantParameters,
    Supply,
    SupplyParameters,
    set_fault,
)

HEAVY = MotorParameters(
    resistance_20_ohm=1.0,
    inductance_h=0.5e-3,
    constant_vs=0.02,
    inertia_kgm2=2e-4,
    viscous_nms=1e-7,
    thermal_resistance_k_w=0.0,
)


def bench(*, axes: int = 1, can_sink: bool = False, ovp_v: float | None = None, **supply: float) -> Plant:
    values = {"volts": 12.0, "resistance_ohm": 0.1, "capacitance_f": 2e-3} | supply
    axis = AxisParameters(name="m", motor=HEAVY, encoder=EncoderParameters(lines=100))
    parameters = SupplyParameters(can_sink=can_sink, ovp_v=ovp_v, **values)
    return Plant(PlantParameters(supply=parameters, axes=(axis,) * axes))


def run(plant: Plant, duty: int, ticks: int) -> list[float]:
    """Bus voltages after each tick, with every axis at this duty."""
    seen = []
    for axis in plant.axes:
        axis.duty = duty
    for _ in range(ticks):
        plant.step()
        seen.append(plant.supply.bus_v)
    return seen


def test_bus_sags_by_the_internal_resistance() -> None:
    plant = bench()
    plant.axes[0].jammed = True
    run(plant, 5000, 200)
    # Stall at half duty: the motor takes i = D V / R, the bus carries D i.
    motor_a = 0.5 * plant.supply.bus_v / 1.0
    assert plant.axes[0].current_a == pytest.approx(motor_a, rel=1e-9)
    assert plant.supply.current_a == pytest.approx(0.5 * motor_a, rel=1e-6)
    assert plant.supply.bus_v == pytest.approx(12.0 - 0.1 * 0.5 * motor_a, rel=1e-9)
    assert plant.read_supply_mv() == round(plant.supply.bus_v * 1000.0)


def test_bus_rises_when_a_motor_regenerates_into_a_supply_that_cannot_sink() -> None:
    plant = bench()
    run(plant, 10_000, 3000)
    seen = run(plant, 7000, 300)
    assert max(seen) > 14.0


def test_bus_hardly_rises_when_the_supply_can_sink() -> None:
    plant = bench(can_sink=True)
    run(plant, 10_000, 3000)
    seen = run(plant, 7000, 300)
    assert max(seen) < 12.5
    assert plant.axes[0].current_a < 0.0 or max(seen) > 12.0


def test_regenerated_energy_is_in_the_capacitor() -> None:
    # Coulomb for coulomb: what the bridge returned is what the capacitor holds more, C * rise.
    plant = bench()
    run(plant, 10_000, 3000)
    axis, supply = plant.axes[0], plant.supply
    axis.duty = 7000
    returned_c = given_c = 0.0
    before_v = supply.bus_v
    for _ in range(300):
        plant.step()
        returned_c -= 0.7 * axis.mean_a * 1e-3
        given_c += supply.current_a * 1e-3
    assert returned_c > 1e-3
    assert 2e-3 * (supply.bus_v - before_v) == pytest.approx(returned_c + given_c, rel=1e-9)


def test_over_voltage_shuts_the_supply_down_until_it_is_restored() -> None:
    plant = bench(ovp_v=13.0)
    run(plant, 10_000, 3000)
    seen = run(plant, 7000, 300)
    assert max(seen) > 13.0
    assert plant.supply.shut_down
    assert run(plant, 10_000, 500)[-1] > 10.0  # the turning motor holds the bus at its back EMF
    plant.axes[0].jammed = True
    assert run(plant, 10_000, 50)[-1] < 0.1
    assert plant.supply.current_a == 0.0
    plant.axes[0].jammed = False
    plant.supply.restore()
    assert run(plant, 10_000, 2000)[-1] > 11.0


def test_current_limit_holds_the_current_and_lets_the_bus_fall() -> None:
    plant = bench(current_limit_a=2.0)
    plant.axes[0].jammed = True
    seen = run(plant, 10_000, 300)
    assert plant.supply.current_a == pytest.approx(2.0)
    assert seen[-1] == pytest.approx(2.0, rel=1e-3)  # 2 A through the 1 ohm winding


def test_a_supply_weaker_than_the_motor_settles() -> None:
    plant = bench(resistance_ohm=20.0, capacitance_f=1e-6)
    plant.axes[0].jammed = True
    seen = run(plant, 10_000, 50)
    assert seen[-1] == pytest.approx(12.0 / 21.0, rel=1e-6)
    assert all(0.0 < bus_v < 12.0 for bus_v in seen)


def test_axes_share_the_bus() -> None:
    alone, together = bench(), bench(axes=3)
    for plant in (alone, together):
        for axis in plant.axes:
            axis.jammed = True
        run(plant, 8000, 200)
    assert together.supply.current_a == pytest.approx(3 * 0.64 * together.supply.bus_v, rel=1e-6)
    assert together.supply.bus_v < alone.supply.bus_v


def test_current_that_runs_out_in_the_diodes_lands_on_the_bus() -> None:
    plant = bench()
    axis, supply = plant.axes[0], plant.supply
    axis.jammed = True
    run(plant, 10_000, 200)
    before_v, current_a = supply.bus_v, axis.current_a
    given_c = 0.0
    axis.duty = 0
    for _ in range(3):
        plant.step()
        given_c += supply.current_a * 1e-3
    # Charge under the decay: with v = bus + drop, (L i - v t)/R at the end t = (L/R) ln(1 + i R / v), here R = 1 ohm.
    facing_v = 12.0 + 1.4
    seconds = 0.5e-3 * math.log(1.0 + current_a / facing_v)
    charge_c = 0.5e-3 * current_a - facing_v * seconds
    assert 2e-3 * (supply.bus_v - before_v) - given_c == pytest.approx(charge_c, rel=0.03)
    assert supply.bus_v > 12.0


def test_a_spinning_motor_feeds_a_dead_bus_through_the_diodes() -> None:
    plant = bench()
    run(plant, 10_000, 3000)
    back_emf_v = plant.axes[0].speed_rad_s * 0.02
    plant.supply.volts = 0.0
    plant.supply.bus_v = 0.0
    seen = run(plant, 0, 100)
    assert plant.axes[0].current_a <= 0.0
    assert max(seen) == pytest.approx(back_emf_v - 1.4, rel=0.1)


def test_brown_out_fault_lets_a_start_pull_the_bus_down_to_half() -> None:
    plant = Plant(VENT_BENCH)
    set_fault(plant, PlantFault.WEAK_SUPPLY)
    assert min(run(plant, 10_000, 50)) < 6.5
    healthy = Plant(VENT_BENCH)
    assert min(run(healthy, 10_000, 50)) > 11.0
    set_fault(plant, PlantFault.WEAK_SUPPLY, on=False)
    assert run(plant, 10_000, 500)[-1] > 11.9


def test_resting_bench_settles_and_notices_a_dip() -> None:
    plant = Plant(VENT_BENCH)
    assert run(plant, 0, 50)[-1] == pytest.approx(12.0 - 0.15 * 0.035)
    assert plant.supply.settled
    plant.supply.volts = 5.0
    assert run(plant, 0, 500)[-1] == pytest.approx(5.0 - 0.15 * 0.035)  # falls with the standby current, then holds
    assert (plant.supply.volts, plant.supply.resistance_ohm) == (5.0, 0.15)


def test_bus_never_goes_below_zero() -> None:
    supply = Supply(SupplyParameters(volts=12.0, resistance_ohm=1.0, capacitance_f=1e-3))
    assert supply.step(1000.0, 0.0) == 0.0


@pytest.mark.parametrize(
    ("change", "complaint"),
    [
        ({"resistance_ohm": 0.0}, "resistance_ohm is 0.0; it must be greater than 0"),
        ({"capacitance_f": -1.0}, "capacitance_f"),
        ({"ovp_v": 11.0}, "ovp_v is 11.0; it must be greater than 12"),
        ({"current_limit_a": 0.0}, "current_limit_a"),
    ],
)
def test_impossible_supplies_are_refused(change: dict[str, float], complaint: str) -> None:
    usual = SupplyParameters(volts=12.0, resistance_ohm=0.1, capacitance_f=1e-3)
    with pytest.raises(FileError, match=complaint):
        dataclasses.replace(usual, **change)  # type: ignore[arg-type]  # a dict of names to try


def test_impossible_bridges_and_encoders_are_refused() -> None:
    with pytest.raises(FileError, match="freewheel_drop_v"):
        BridgeParameters(freewheel_drop_v=-0.1)
    with pytest.raises(FileError, match="lines"):
        EncoderParameters(lines=0)
