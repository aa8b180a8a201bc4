"""Motors from published examples, and a bench that runs them on a supply as good as ideal."""

from __future__ import annotations

import dataclasses
import math

import numpy as np

from ramprig.mock.plant import (
    AxisParameters,
    EncoderParameters,
    MotorParameters,
    Plant,
    PlantParameters,
    SupplyParameters,
)

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
    cold = dataclasses.replace(motor, thermal_resistance_k_w=0.0)
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
