"""Random benches from what is known: each figure drawn within its uncertainty, seeded, one source for each draw."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from ramprig.bench import Bench, Motor, MotorModel
from ramprig.measure.known import ASSUMED, Known, figures_of
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.plant import AxisParameters, MotorParameters, SupplyParameters
from ramprig.mock.setup import MockSetup

LEAST_SHARE = 0.05
"""A positive figure is never drawn below this share of its value."""
LEAST_ELECTRICAL_S = 20e-6
"""Nor an inductance so small that the current would settle sooner: the plant could not follow it."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Belief:
    """What is believed of a bench: `motors` by name, the supply's figures, and the setup they are put into.

    The setup is the bench's mock without its faults.
    """

    motors: Mapping[str, Known]
    supply: Mapping[str, Measured]
    setup: MockSetup
    axis_of: Mapping[str, int]


def belief_of(bench: Bench) -> Belief:
    """What the bench file says. Raises NotMeasurable where a motor has neither model nor measured constants."""
    motors = {motor.name: figures_of(bench, motor) for motor in bench.motors}
    modelled = tuple(_modelled(motor, motors[motor.name]) for motor in bench.motors)
    setup = setup_of_bench(replace(bench, motors=modelled, mock=replace(bench.mock, faults=())))
    supply = setup.plant.supply
    figures = {
        "volts": Measured(supply.volts, "V", ASSUMED["volts"] * supply.volts),
        "supply_resistance": Measured(
            supply.resistance_ohm, "ohm", ASSUMED["supply_resistance"] * supply.resistance_ohm
        ),
        "capacitance": Measured(supply.capacitance_f, "F", ASSUMED["capacitance"] * supply.capacitance_f),
    }
    axis_of = {motor.name: motor.axis for motor in bench.motors}
    return Belief(motors=motors, supply=figures, setup=setup, axis_of=axis_of)


def _modelled(motor: Motor, known: Known) -> Motor:
    """The motor with a model, made of what is known where the file has none."""
    if motor.model is not None:
        return motor
    value = {name: one.value for name, one in known.figures.items()}
    model = MotorModel(
        resistance_ohm=value["resistance_20"],
        inductance_h=value["inductance"],
        constant_vs=value["constant"],
        inertia_kgm2=value["inertia"],
        viscous_nms=value["viscous"],
        running_nm=value["coulomb"],
        breakaway_nm=value["coulomb"] * (1.0 + value["stiction"]),
        thermal_resistance_k_w=None,
        thermal_s=None,
        ambient_c=None,
        bridge_ohm=value["bridge"],
        freewheel_v=1.4,
        sensor_offset_ma=0.0,
        sensor_noise_ma=0.0,
        sensor_range_ma=None,
        sensor_step_ma=1,
    )
    return replace(motor, model=model)


def drawn_setup(belief: Belief, random: np.random.Generator | None) -> MockSetup:
    """A setup with each figure drawn, independently of the others; with None each at its value."""
    plant = belief.setup.plant
    axes = list(plant.axes)
    for name in sorted(belief.motors):
        index = belief.axis_of[name]
        axes[index] = _axis(axes[index], belief.motors[name], random)
    figures = {name: _drawn(one, random) for name, one in sorted(belief.supply.items())}
    supply: SupplyParameters = replace(
        plant.supply,
        volts=figures["volts"],
        resistance_ohm=figures["supply_resistance"],
        capacitance_f=figures["capacitance"],
    )
    return replace(belief.setup, plant=replace(plant, supply=supply, axes=tuple(axes)))


def _axis(axis: AxisParameters, known: Known, random: np.random.Generator | None) -> AxisParameters:
    value = {name: _drawn(one, random, free=name == "ambient") for name, one in sorted(known.figures.items())}
    motor: MotorParameters = replace(
        axis.motor,
        resistance_20_ohm=value["resistance_20"],
        inductance_h=max(value["inductance"], LEAST_ELECTRICAL_S * value["resistance_20"]),
        constant_vs=value["constant"],
        inertia_kgm2=value["inertia"],
        viscous_nms=value["viscous"],
        coulomb_nm=value["coulomb"],
        static_nm=value["coulomb"] * (1.0 + value["stiction"]),
        thermal_resistance_k_w=value["thermal_resistance"],
        thermal_time_s=value["thermal_time"],
        ambient_c=value["ambient"],
    )
    return replace(axis, motor=motor, bridge=replace(axis.bridge, resistance_ohm=value["bridge"]))


def _drawn(figure: Measured, random: np.random.Generator | None, *, free: bool = False) -> float:
    """One value from the figure's t distribution; positive unless `free`."""
    if random is None or not figure.standard_uncertainty:
        return figure.value
    deviate = random.standard_normal() if math.isinf(figure.dof) else random.standard_t(max(figure.dof, 2.1))
    value = figure.value + figure.standard_uncertainty * float(deviate)
    return value if free else max(value, LEAST_SHARE * abs(figure.value))
