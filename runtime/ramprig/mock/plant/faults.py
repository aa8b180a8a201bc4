"""Faults of the plant by name, to be switched on and off while it runs."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from enum import StrEnum

from .plant import Plant

WEAK_SUPPLY_TIMES = 20.0
"""How many times its resistance a supply that browns out has; with the vent drive, a start halves the bus."""

CURRENT_OFFSET_MA = 350.0
"""What an offset fault adds to the current reading."""


OPEN_OHM = 10_000.0
"""What a winding with an open lead has: a milliampere flows, far below what a sensor tells from nothing."""


class PlantFault(StrEnum):
    """What can be broken; the values are the names that users type."""

    PHASES_SWAPPED = "phases-swapped"
    LEADS_SWAPPED = "leads-swapped"
    ENCODER_DEAD = "encoder-dead"
    ONE_CHANNEL = "one-channel"
    NOISY_COUNTS = "noisy-counts"
    JAMMED = "jammed"
    CURRENT_OFFSET = "current-offset"
    WEAK_SUPPLY = "brown-out"
    LEAD_OPEN = "lead-open"
    ENCODERS_EXCHANGED = "encoders-exchanged"
    OUTPUT_CLAMPED = "output-clamped"


def _phases(plant: Plant, axis: int, on: bool) -> None:
    plant.encoders[axis].phases_swapped = on


def _leads(plant: Plant, axis: int, on: bool) -> None:
    plant.axes[axis].leads_swapped = on


def _dead(plant: Plant, axis: int, on: bool) -> None:
    plant.encoders[axis].dead = on


def _one_channel(plant: Plant, axis: int, on: bool) -> None:
    plant.encoders[axis].one_channel = on


def _noisy(plant: Plant, axis: int, on: bool) -> None:
    plant.encoders[axis].noisy = on


def _jam(plant: Plant, axis: int, on: bool) -> None:
    plant.axes[axis].jammed = on


def _offset(plant: Plant, axis: int, on: bool) -> None:
    usual_ma = plant.parameters.axes[axis].sensor.offset_ma
    plant.sensors[axis].offset_ma = usual_ma + (CURRENT_OFFSET_MA if on else 0.0)


def _weak_supply(plant: Plant, axis: int, on: bool) -> None:
    del axis  # one supply feeds all axes
    plant.supply.resistance_ohm = plant.parameters.supply.resistance_ohm * (WEAK_SUPPLY_TIMES if on else 1.0)


def _open(plant: Plant, axis: int, on: bool) -> None:
    new_ohm = plant.parameters.axes[axis].motor.resistance_20_ohm
    usual_ohm = new_ohm * (1.0 + plant.axes[axis].worn.resistance)
    plant.axes[axis].resistance_20_ohm = OPEN_OHM if on else usual_ohm


def _exchange(plant: Plant, axis: int, on: bool) -> None:
    del axis  # each encoder is plugged in where the next one belongs
    axes = len(plant.axes)
    plant.wired_to[:] = [(place + on) % axes for place in range(axes)]


def _clamp(plant: Plant, axis: int, on: bool) -> None:
    plant.axes[axis].clamped = on


_SWITCHES: dict[PlantFault, Callable[[Plant, int, bool], None]] = {
    PlantFault.PHASES_SWAPPED: _phases,
    PlantFault.LEADS_SWAPPED: _leads,
    PlantFault.ENCODER_DEAD: _dead,
    PlantFault.ONE_CHANNEL: _one_channel,
    PlantFault.NOISY_COUNTS: _noisy,
    PlantFault.JAMMED: _jam,
    PlantFault.CURRENT_OFFSET: _offset,
    PlantFault.WEAK_SUPPLY: _weak_supply,
    PlantFault.LEAD_OPEN: _open,
    PlantFault.ENCODERS_EXCHANGED: _exchange,
    PlantFault.OUTPUT_CLAMPED: _clamp,
}


def set_fault(plant: Plant, fault: PlantFault, *, axis: int = 0, on: bool = True) -> None:
    """Switch a fault of the plant on or off; it acts from the next tick or reading on."""
    _SWITCHES[fault](plant, axis, on)


class Ageing(StrEnum):
    """What can be made to wear; the values are the names that users type."""

    FRICTION = "friction_wear"
    RESISTANCE = "resistance_wear"
    PLAY = "play_wear"


WEAR_TURNS = 1000.0
"""The wear faults are told for so many turns of the output."""


def set_wear(plant: Plant, ageing: Ageing, amount: float, *, axis: int = 0) -> None:
    """Have an axis age from now on: % of the new motor's, or degrees of play, in WEAR_TURNS; 0 ends the ageing."""
    turned = plant.axes[axis]
    match ageing:
        case Ageing.FRICTION:
            turned.wear = replace(turned.wear, friction=amount / 100.0 / WEAR_TURNS)
        case Ageing.RESISTANCE:
            turned.wear = replace(turned.wear, resistance=amount / 100.0 / WEAR_TURNS)
        case Ageing.PLAY:
            turned.wear = replace(turned.wear, play_rad=amount * (math.pi / 180.0) / WEAR_TURNS)


def set_play(plant: Plant, degrees: float, *, axis: int = 0) -> None:
    """Give a gear so much play, beside what has worn; 0 for what the bench says."""
    usual_rad = plant.parameters.axes[axis].motor.play_rad
    worn_rad = plant.axes[axis].worn.play_rad
    plant.axes[axis].play_rad = (degrees * (math.pi / 180.0) if degrees else usual_rad) + worn_rad
