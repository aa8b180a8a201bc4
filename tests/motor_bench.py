"""Random motors on the simulated plant, driven through a measuring run, recorded as the board logs it."""

from __future__ import annotations

import random
from collections.abc import Iterable, Iterator

import numpy as np

from ramprig.measure.numbers.windows import Recording
from ramprig.mock.plant import (
    AxisParameters,
    BridgeParameters,
    EncoderParameters,
    MotorParameters,
    Plant,
    PlantParameters,
    SensorParameters,
    SupplyParameters,
)


def random_bench(seed: int) -> PlantParameters:
    """A bench with one small motor: 6 to 24 V, a stall current of 2 to 10 A, INVENTED ranges throughout."""
    source = random.Random(seed)
    volts = source.choice([6.0, 9.0, 12.0, 18.0, 24.0])
    stall_a = source.uniform(2.0, 10.0)
    resistance = volts / stall_a
    no_load_rad_s = source.uniform(250.0, 800.0)
    constant = volts / no_load_rad_s
    no_load_a = stall_a * source.uniform(0.01, 0.06)
    friction = constant * no_load_a
    viscous_share = source.uniform(0.1, 0.6)
    coulomb = friction * (1.0 - viscous_share)
    motor = MotorParameters(
        resistance_20_ohm=resistance,
        inductance_h=resistance * source.uniform(0.2e-3, 1.5e-3),
        constant_vs=constant,
        inertia_kgm2=constant**2 / resistance * source.uniform(0.015, 0.15),
        viscous_nms=friction * viscous_share / no_load_rad_s,
        coulomb_nm=coulomb,
        static_nm=coulomb * source.uniform(1.0, 1.6),
        thermal_resistance_k_w=source.uniform(6.0, 20.0),
        thermal_time_s=source.uniform(40.0, 150.0),
        ambient_c=source.uniform(15.0, 30.0),
    )
    axis = AxisParameters(
        name="m",
        motor=motor,
        encoder=EncoderParameters(lines=source.choice([12, 16, 48, 100, 256, 500])),
        bridge=BridgeParameters(resistance_ohm=source.uniform(0.02, 0.15)),
        sensor=SensorParameters(
            offset_ma=source.uniform(-20.0, 20.0),
            noise_ma=1000.0 * stall_a * source.uniform(0.0005, 0.004),
            range_ma=20_000,
            step_ma=source.choice([1, 2, 5]),
        ),
    )
    supply = SupplyParameters(
        volts=volts, resistance_ohm=source.uniform(0.02, 0.15), capacitance_f=1000e-6, ovp_v=None, can_sink=False
    )
    return PlantParameters(supply=supply, axes=(axis,))


def measuring_run(sign: int) -> Iterator[tuple[int, int]]:
    """Pairs (duty in 1/10000, ticks) of one pass in one direction: pulses at rest, steps up, a run-up, coast-downs."""
    yield 0, 300
    for pulse in (200, 300, 400):
        yield sign * pulse, 8
        yield 0, 150
    for duty in (3000, 5500, 8000):
        yield sign * duty, 500
    yield sign * 4000, 400
    yield 0, 1500
    yield sign * 7000, 700
    yield 0, 1500


def record(
    parameters: PlantParameters,
    drive: Iterable[tuple[int, int]],
    *,
    seed: int = 0,
    tick_us: int = 1000,
    brake: bool = False,
    jammed: bool = False,
    winding: bool = False,
) -> Recording:
    """Run a plant through the drive and log every tick: the sensors first, then the duty set (RUN-2 of SPEC.md).

    At zero duty it coasts, or brakes. `winding` records the winding's temperature, too.
    """
    plant = Plant(parameters, tick_us=tick_us, seed=seed)
    axis = plant.axes[0]
    axis.brake, axis.jammed = brake, jammed
    rows = []
    for duty, ticks in drive:
        for _ in range(ticks):
            counts, current_ma = plant.read_counts(0), plant.read_current_ma(0)
            rows.append((counts, current_ma, plant.read_supply_mv(), duty, plant.read_temperature_dc(0)))
            axis.duty = duty
            plant.step()
    table = np.array(rows)
    return Recording(
        period_s=tick_us * 1e-6,
        duty=table[:, 3] / 10_000.0,
        supply_v=table[:, 2] / 1000.0,
        current_a=table[:, 1] / 1000.0,
        counts=table[:, 0],
        coasting=(table[:, 3] == 0) & (not brake),
        counts_per_turn=parameters.axes[0].encoder.counts_per_turn,
        held=jammed,
        winding_c=table[:, 4] / 10.0 if winding else None,
    )


def both_ways(passes: int = 1) -> Iterator[tuple[int, int]]:
    """The measuring run, each direction in turn."""
    for _ in range(passes):
        yield from measuring_run(1)
        yield from measuring_run(-1)
