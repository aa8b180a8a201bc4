"""Faults of the plant by name, to be switched on and off while it runs."""

from __future__ import annotations

from collections.abc import Callable
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
    usual_ohm = plant.parameters.axes[axis].motor.resistance_20_ohm
    plant.axes[axis].resistance_20_ohm = OPEN_OHM if on else usual_ohm


def _exchange(plant: Plant, axis: int, on: bool) -> None:
    del axis  # each encoder is plugged in where the next one belongs
    axes = len(plant.axes)
    plant.wired_to[:] = [(place + on) % axes for place in range(axes)]


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
}


def set_fault(plant: Plant, fault: PlantFault, *, axis: int = 0, on: bool = True) -> None:
    """Switch a fault of the plant on or off; it acts from the next tick or reading on."""
    _SWITCHES[fault](plant, axis, on)
