"""What must hold of the simulated motor whatever its parameters: energy, finiteness, standstill."""

from __future__ import annotations

import math

from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.mock.plant import (
    AxisParameters,
    BridgeParameters,
    EncoderParameters,
    MotorParameters,
    Plant,
    PlantParameters,
    ServoParameters,
    SupplyParameters,
)


def decades(low: float, high: float) -> st.SearchStrategy[float]:
    """Numbers spread evenly over powers of ten, 10**low to 10**high."""
    return st.floats(low, high).map(lambda power: 10.0**power)


@st.composite
def believable_motors(draw: st.DrawFn) -> MotorParameters:
    """Small brushed motors: electrical time constants of 0.2 to 20 ms, mechanical ones of 5 to 500 ms."""
    resistance = draw(decades(-1, 1.5))
    constant = draw(decades(-2.5, -0.5))
    stall_nm = constant * 12.0 / resistance
    coulomb = stall_nm * draw(st.floats(0.0, 0.1))
    return MotorParameters(
        resistance_20_ohm=resistance,
        inductance_h=resistance * draw(decades(-3.7, -1.7)),
        constant_vs=constant,
        inertia_kgm2=constant**2 / resistance * draw(decades(-2.3, -0.3)),
        viscous_nms=stall_nm / (12.0 / constant) * draw(st.floats(0.0, 0.1)),
        coulomb_nm=coulomb,
        static_nm=coulomb * draw(st.floats(1.0, 1.5)),
        thermal_resistance_k_w=0.0,
    )


def bench(motor: MotorParameters, supply: SupplyParameters, *, tick_us: int, drop_v: float = 1.4) -> Plant:
    axis = AxisParameters(
        name="m", motor=motor, encoder=EncoderParameters(lines=100), bridge=BridgeParameters(freewheel_drop_v=drop_v)
    )
    return Plant(PlantParameters(supply=supply, axes=(axis,)), tick_us=tick_us)


IDEAL = SupplyParameters(volts=12.0, resistance_ohm=1e-9, capacitance_f=1.0, can_sink=True)


@settings(max_examples=40, deadline=None)
@given(motor=believable_motors(), duties=st.lists(st.integers(-10_000, 10_000), min_size=1, max_size=6))
def test_energy_balances(motor: MotorParameters, duties: list[int]) -> None:
    # Electrical energy in = copper loss + friction loss + kinetic and magnetic energy gained. The input is exact (mean
    # current times a constant voltage); the losses are summed by Simpson's rule from ticks short beside L/R.
    tick_us = 20
    tick_s = tick_us * 1e-6
    plant = bench(motor, IDEAL, tick_us=tick_us)
    axis = plant.axes[0]
    resistance = motor.resistance_20_ohm
    supplied = lost = flow = 0.0
    for duty in duties:
        axis.duty, axis.brake = duty, True
        for _ in range(500):
            current, speed, angle = axis.current_a, axis.speed_rad_s, axis.angle_rad
            plant.step()
            turned = axis.angle_rad - angle
            mean_speed = turned / tick_s
            inflow = duty / 10_000 * plant.supply.bus_v * axis.mean_a * tick_s
            supplied += inflow
            flow += abs(inflow)
            copper = resistance * (current**2 + 4 * axis.mean_a**2 + axis.current_a**2) / 6
            viscous = motor.viscous_nms * (speed**2 + 4 * mean_speed**2 + axis.speed_rad_s**2) / 6
            lost += (copper + viscous) * tick_s + motor.coulomb_nm * abs(turned)
    stored = motor.inertia_kgm2 * axis.speed_rad_s**2 / 2 + motor.inductance_h * axis.current_a**2 / 2
    assert abs(supplied - lost - stored) <= 2e-3 * flow + 1e-12


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_nothing_extreme_gives_a_number_that_is_none(data: st.DataObject) -> None:
    def draw(low: float, high: float) -> float:
        return data.draw(decades(low, high))

    coulomb = draw(-12, 3)
    motor = MotorParameters(
        resistance_20_ohm=draw(-6, 6),
        inductance_h=draw(-9, 3),
        constant_vs=draw(-6, 3),
        inertia_kgm2=draw(-12, 3),
        viscous_nms=draw(-12, 2),
        coulomb_nm=coulomb,
        static_nm=coulomb * draw(0, 3),
        thermal_resistance_k_w=draw(-3, 3),
        thermal_time_s=draw(-3, 5),
        gear_ratio=draw(-2, 3),
        play_rad=data.draw(st.sampled_from([0.0, 1.0])) * draw(-6, 1),
        output_friction_nm=data.draw(st.sampled_from([0.0, 1.0])) * draw(-9, 2),
    )
    size = motor.inertia_kgm2 * motor.inductance_h
    if motor.constant_vs**2 / size > 1e16 or motor.resistance_20_ohm / motor.inductance_h > 1e14:
        return  # refused as too stiff: tested elsewhere
    if motor.constant_vs / motor.inertia_kgm2 > 1e14 or motor.viscous_nms / motor.inertia_kgm2 > 1e14:
        return
    supply = SupplyParameters(
        volts=draw(-2, 3),
        resistance_ohm=draw(-6, 6),
        capacitance_f=draw(-9, 1),
        can_sink=data.draw(st.booleans()),
        standby_ma=draw(-3, 4),
    )
    plant = bench(motor, supply, tick_us=data.draw(st.sampled_from([50, 1000, 20_000])), drop_v=draw(-3, 1))
    axis = plant.axes[0]
    load_nm = data.draw(st.sampled_from([0.0, 1.0, -1.0])) * draw(-9, 2)
    for duty, brake, jam in data.draw(
        st.lists(st.tuples(st.integers(-10_000, 10_000) | st.just(0), st.booleans(), st.booleans()), max_size=6)
    ):
        axis.duty, axis.brake, axis.jammed, axis.load_nm = duty, brake, jam, load_nm
        for _ in range(60):
            plant.step()
        state = (axis.current_a, axis.speed_rad_s, axis.angle_rad, axis.output_rad, axis.mean_a, axis.winding_c)
        assert all(map(math.isfinite, (*state, plant.supply.bus_v))), state


@settings(max_examples=40, deadline=None)
@given(motor=believable_motors(), duty=st.integers(-10_000, 10_000), brake=st.booleans())
def test_every_shaft_with_friction_comes_to_a_true_standstill(motor: MotorParameters, duty: int, brake: bool) -> None:
    if motor.coulomb_nm < 1e-3 * motor.constant_vs * 12.0 / motor.resistance_20_ohm:
        return
    plant = bench(motor, IDEAL, tick_us=1000)
    axis = plant.axes[0]
    axis.duty = duty
    for _ in range(500):
        plant.step()
    axis.duty, axis.brake = 0, brake
    limit_s = motor.inertia_kgm2 * abs(axis.speed_rad_s) / motor.coulomb_nm + 20 * motor.inductance_h
    swings = 0
    for _ in range(int(limit_s * 1000) + 200):
        before = axis.speed_rad_s
        plant.step()
        swings += before * axis.speed_rad_s < 0.0
    assert axis.speed_rad_s == 0.0
    assert swings <= 4
    angle = axis.angle_rad
    for _ in range(100):
        plant.step()
    assert (axis.speed_rad_s, axis.angle_rad) == (0.0, angle)


@settings(max_examples=30, deadline=None)
@given(
    motor=believable_motors(),
    resistance=decades(-3, 2),
    capacitance=decades(-7, -1),
    duties=st.lists(st.integers(-10_000, 10_000), min_size=1, max_size=5),
)
def test_bus_stays_within_what_supply_and_motor_can_give(
    motor: MotorParameters, resistance: float, capacitance: float, duties: list[int]
) -> None:
    # Stored energy bounds it: the bus capacitor can hold no more than came from the supply, the shaft and the winding.
    supply = SupplyParameters(volts=12.0, resistance_ohm=resistance, capacitance_f=capacitance)
    plant = bench(motor, supply, tick_us=1000)
    axis = plant.axes[0]
    for duty in duties:
        axis.duty = duty
        for _ in range(100):
            before = axis.speed_rad_s, axis.current_a, plant.supply.bus_v
            plant.step()
            shaft_and_winding = motor.inertia_kgm2 * before[0] ** 2 / 2 + motor.inductance_h * before[1] ** 2 / 2
            most = capacitance * max(before[2], 12.0) ** 2 / 2 + shaft_and_winding
            if duty:
                assert capacitance * plant.supply.bus_v**2 / 2 <= most * (1 + 1e-9)


@settings(max_examples=30, deadline=None)
@given(pulses=st.lists(st.none() | st.floats(0.0, 5000.0), max_size=30), slew=decades(0, 4))
def test_servo_stays_between_its_stops_and_within_its_slew(pulses: list[float | None], slew: float) -> None:
    servo = ServoParameters(name="s", slew_deg_s=slew)
    plant = Plant(PlantParameters(supply=IDEAL, axes=(), servos=(servo,)))
    for pulse in pulses:
        plant.servos[0].pulse_us = pulse
        for _ in range(20):
            before = plant.servos[0].angle_deg
            plant.step()
            assert abs(plant.servos[0].angle_deg - before) <= slew * 1e-3 * (1 + 1e-9)
            assert -60.0 <= plant.servos[0].angle_deg <= 60.0
