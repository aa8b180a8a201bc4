"""A bystander for the mock: turns the simulated shaft by hand and sees which way it goes."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import TYPE_CHECKING

from ramprig.bench import Motor

if TYPE_CHECKING:
    from ramprig.mock.device import MockDevice

TURN_S = 1.0
"""A turn by hand takes so long."""
STEP_S = 0.01


class SimulatedBystander:
    """Stands beside a `MockDevice`."""

    def __init__(self, device: MockDevice) -> None:
        self._device = device

    def turn(self, motor: Motor, turns: int, pump: Callable[[float], None]) -> bool:
        """Turn the output shaft forwards, which is the way a motor with its leads right turns at positive duty."""
        axis = self._device.plant.axes[motor.axis]
        steps = round(turns * TURN_S / STEP_S)
        for _ in range(steps):
            axis.turn_by_hand(math.tau * turns * float(motor.gear_ratio) / steps)
            pump(STEP_S)
        return True

    def turned_forwards(self, motor: Motor, duty: int, pump: Callable[[float], None]) -> bool | None:
        """What an eye saw: with the leads exchanged it turned backwards."""
        return not self._device.plant.axes[motor.axis].leads_swapped
