"""Boards that note what the plant truly does beside what its sensors tell: rows of extremes, in C or in Python.

A row sums up `EVERY_TICKS` ticks: highest and lowest bus voltage in V and the energy given by the supply in J, then for
each axis the greatest current and the greatest lasting one in A, the greatest speed in rad/s, the mean square of the
current in A^2, the mean duty (1 is full), and the winding in degC at the end.
"""

from __future__ import annotations

import ctypes
from collections import deque
from collections.abc import Sequence
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from ramprig.mock.cable import Device
from ramprig.mock.controller import Controller
from ramprig.mock.device import MockDevice
from ramprig.mock.plant.parameters import DUTY_FULL
from ramprig.mock.setup import MockSetup

from .device import U32, SimulatedDevice

EVERY_TICKS = 10
ROOM_ROWS = 4096
"""Rows that the C side keeps until they are fetched, which is after each call."""
HOLD_MAX = 64
"""Longest time, in ticks, over which a current counts as lasting."""
BUS_COLUMNS = 3
AXIS_COLUMNS = 6


class Watched(Device, Protocol):
    """A device with rows."""

    @property
    def rows(self) -> NDArray[np.float64]:
        """The rows so far, (n, columns) float64, oldest first, from the device's first tick on."""
        ...

    def set_winding(self, axis: int, celsius: float) -> None:
        """The winding of an axis at a temperature, as after hours of running."""
        ...


class WatchedCore(SimulatedDevice):
    """The firmware core and the plant in C, watched. `hold_ticks` by axis: how long a current must last."""

    def __init__(self, setup: MockSetup, *, seed: int, hold_ticks: Sequence[int]) -> None:
        """As `SimulatedDevice`."""
        super().__init__(setup, seed=seed)
        library = self._core.library
        self._columns = BUS_COLUMNS + AXIS_COLUMNS * setup.board.axes
        self._gathered = bytearray()
        self._rows = ctypes.c_uint32()
        self._watch = library.library_watch_new(EVERY_TICKS, ROOM_ROWS)
        if not self._watch:
            raise MemoryError
        for axis, ticks in enumerate(hold_ticks):
            library.library_watch_hold(self._watch, axis, ticks)

    def __del__(self) -> None:
        watch = getattr(self, "_watch", None)
        if watch:
            self._watch = None
            self._core.library.library_watch_free(watch)

    def _pass(self, ticks: int, patient: bool = False) -> tuple[int, bytes]:
        library, board = self._core.library, self._core.board
        most = min(ticks, EVERY_TICKS * ROOM_ROWS)
        result = int(library.library_run_watched(board, most, patient, self._watch))
        table = library.library_watch_take(self._watch, ctypes.byref(self._rows))
        if self._rows.value:
            self._gathered += ctypes.string_at(table, 8 * self._columns * self._rows.value)
        self._keep_store()
        return result & U32, self._sent[: result >> 32].tobytes()

    @property
    def rows(self) -> NDArray[np.float64]:
        """As `Watched`."""
        return np.frombuffer(self._gathered, np.float64).reshape(-1, self._columns).copy()

    def set_winding(self, axis: int, celsius: float) -> None:
        """As `Watched`."""
        self._core.call("set_winding", axis, celsius)


class WatchedMock(MockDevice):
    """The mock in Python, watched; much slower."""

    def __init__(self, setup: MockSetup, *, seed: int, hold_ticks: Sequence[int]) -> None:
        """As `MockDevice`."""
        super().__init__(setup, seed=seed)
        self._tick_s = setup.board.tick_us * 1e-6
        self._table: list[list[float]] = []
        self._filled = 0
        self._recent: list[deque[float]] = [
            deque([0.0] * min(n, HOLD_MAX), maxlen=min(n, HOLD_MAX)) for n in hold_ticks
        ]
        self._row: list[float] = []
        self.trace = self._note

    def _note(self, tick: int, controller: Controller | None) -> None:
        supply = self.plant.supply
        fresh = [supply.bus_v, supply.bus_v, supply.bus_v * supply.current_a * self._tick_s]
        for axis, recent in zip(self.plant.axes, self._recent, strict=True):
            size_a = abs(axis.current_a)
            recent.append(size_a)
            square, duty = size_a * size_a / EVERY_TICKS, axis.duty / DUTY_FULL / EVERY_TICKS
            fresh += [size_a, min(recent), abs(axis.speed_rad_s), square, duty, axis.winding_c]
        row = self._row
        if self._filled:
            for place, value in enumerate(fresh):
                row[place] = _joined(place, row[place], value)
        else:
            self._row = fresh
        self._filled += 1
        if self._filled == EVERY_TICKS:
            self._table.append(self._row)
            self._filled = 0

    @property
    def rows(self) -> NDArray[np.float64]:
        """As `Watched`."""
        return np.array(self._table, float).reshape(-1, BUS_COLUMNS + AXIS_COLUMNS * len(self.plant.axes))

    def set_winding(self, axis: int, celsius: float) -> None:
        """As `Watched`."""
        self.plant.axes[axis].winding_c = celsius


def _joined(place: int, before: float, value: float) -> float:
    """A column of a row with one more tick."""
    if place < BUS_COLUMNS:
        return (max(before, value), min(before, value), before + value)[place]
    column = (place - BUS_COLUMNS) % AXIS_COLUMNS
    if column == AXIS_COLUMNS - 1:
        return value
    return before + value if column in (3, 4) else max(before, value)
