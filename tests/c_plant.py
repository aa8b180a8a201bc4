"""The plant in C with as much of the face of `ramprig.mock.plant.Plant` as the tests that compare the two ask for."""

from __future__ import annotations

import ctypes
import math
from functools import cache

from ramprig.mock.core.build import build, firmware
from ramprig.mock.core.parameters import plant_values
from ramprig.mock.plant import PlantParameters

WARNINGS = ("-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Werror")


@cache
def library() -> ctypes.CDLL:
    root = firmware()
    assert root is not None
    loaded = ctypes.CDLL(str(build("plant", sorted((root / "plant").glob("*.c")), WARNINGS, shared=True)))
    handle, byte, whole, real = ctypes.c_void_p, ctypes.c_uint8, ctypes.c_int32, ctypes.c_double
    loaded.probe_new.restype = handle
    loaded.probe_output_rad.restype = real
    signatures: dict[str, list[object]] = {
        "probe_free": [handle],
        "probe_parameter": [handle, ctypes.c_char_p, real],
        "probe_start": [handle, ctypes.c_uint32, ctypes.c_uint64],
        "probe_fault": [handle, ctypes.c_char_p, byte, real],
        "probe_load": [handle, byte, real],
        "probe_speed": [handle, byte, real],
        "probe_stops": [handle, byte, real, real],
        "probe_hand": [handle, byte, real],
        "probe_output_rad": [handle, byte],
        "probe_worn": [handle, byte, ctypes.POINTER(real)],
        "probe_drive": [handle, byte, whole, ctypes.c_int],
        "probe_pulse": [handle, byte, real],
        "probe_step": [handle, ctypes.c_uint32],
        "probe_read": [handle, byte, ctypes.POINTER(whole)],
        "probe_axis": [handle, byte, ctypes.POINTER(real)],
        "probe_bench": [handle, byte, ctypes.POINTER(real)],
        "probe_supply_mv": [handle],
        "probe_temperature_dc": [handle, byte],
    }
    for name, arguments in signatures.items():
        getattr(loaded, name).argtypes = arguments
    return loaded


class Refused(Exception):
    """The C plant did not take a parameter, or could not be made of them."""


class CPlant:
    """One bench in C; `axis` and `bench` give what the Python form has as attributes."""

    def __init__(self, parameters: PlantParameters, *, tick_us: int = 1000, seed: int = 0) -> None:
        self._c = library()
        self._probe = self._c.probe_new()
        for name, value in plant_values(parameters).items():
            self.set(name, value)
        if not self._c.probe_start(self._probe, tick_us, seed):
            raise Refused("start")

    def __del__(self) -> None:
        self._c.probe_free(self._probe)

    def set(self, name: str, value: float) -> None:
        if not self._c.probe_parameter(self._probe, name.encode(), value):
            raise Refused(name)

    def fault(self, name: str, axis: int, amount: float) -> None:
        if not self._c.probe_fault(self._probe, name.encode(), axis, amount):
            raise Refused(name)

    def load(self, axis: int, load_nm: float) -> None:
        self._c.probe_load(self._probe, axis, load_nm)

    def set_speed(self, axis: int, speed_rad_s: float) -> None:
        self._c.probe_speed(self._probe, axis, speed_rad_s)

    def stops(self, axis: int, stops_rad: tuple[float, float] | None) -> None:
        low_rad, high_rad = (-math.inf, math.inf) if stops_rad is None else stops_rad
        self._c.probe_stops(self._probe, axis, low_rad, high_rad)

    def turn_by_hand(self, axis: int, radians: float) -> None:
        self._c.probe_hand(self._probe, axis, radians)

    def output_rad(self, axis: int) -> float:
        return float(self._c.probe_output_rad(self._probe, axis))

    def worn(self, axis: int) -> list[float]:
        """Shares of friction and resistance, and play, that have worn."""
        values = (ctypes.c_double * 3)()
        self._c.probe_worn(self._probe, axis, values)
        return list(values)

    def drive(self, axis: int, duty: int, brake: bool = False) -> None:
        self._c.probe_drive(self._probe, axis, duty, brake)

    def pulse(self, servo: int, pulse_us: float | None) -> None:
        self._c.probe_pulse(self._probe, servo, pulse_us or 0.0)

    def step(self, ticks: int = 1) -> None:
        self._c.probe_step(self._probe, ticks)

    def read(self, axis: int) -> tuple[int, int]:
        """Counts and current as the board reads them."""
        readings = (ctypes.c_int32 * 2)()
        self._c.probe_read(self._probe, axis, readings)
        return readings[0], readings[1]

    def axis(self, axis: int) -> list[float]:
        """Current, its mean, speed, angle and winding temperature."""
        values = (ctypes.c_double * 5)()
        self._c.probe_axis(self._probe, axis, values)
        return list(values)

    def bench(self, servo: int) -> list[float]:
        """Bus voltage, the supply's current, a servo's angle and current."""
        values = (ctypes.c_double * 4)()
        self._c.probe_bench(self._probe, servo, values)
        return list(values)

    def supply_mv(self) -> int:
        return int(self._c.probe_supply_mv(self._probe))

    def temperature_dc(self, axis: int) -> int:
        return int(self._c.probe_temperature_dc(self._probe, axis))
