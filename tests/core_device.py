"""The firmware core behind scripted inputs, with the face of `ScriptedDevice`: built by the machine's C compiler.

Each board (axes, servos, queue, ...) is a build of its own, kept for the length of the test run.
"""

from __future__ import annotations

import ctypes
import shutil
import subprocess
import tempfile
from collections.abc import Mapping
from functools import cache
from pathlib import Path

from ramprig_link.check import seal
from ramprig_link.words import LIMITS, Cap, Cause
from scripted_device import TICKS, CountsRule, Device, InputsScript, Rule, bodies

FIRMWARE = Path(__file__).resolve().parent.parent / "firmware_ref"
WARNINGS = ("-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Werror")
COMPILER = shutil.which("cc") or shutil.which("gcc") or shutil.which("clang")
_BUILDS = tempfile.TemporaryDirectory(prefix="ramprig-core-")


def defines(device: Device) -> tuple[str, ...]:
    """The build's sizes for a board."""
    sizes = {
        "RR_AXES": device["axes"],
        "RR_SERVOS": device["servos"],
        "RR_MAX_DUTY": device["max_duty"],
        "RR_QUEUE": device["queue"],
        "RR_TRAIL": device["trail"],
        "RR_KEEP": device["keep"],
        "RR_TICK_US": device["tick_us"],
        "RR_CAPS": device["caps"],
        "RR_START_TICK": f"{device['start_tick']}u",
    }
    return tuple(f"-D{name}={value}" for name, value in sizes.items())


@cache
def library(options: tuple[str, ...]) -> ctypes.CDLL:
    """The core built with these options, as a shared library."""
    assert COMPILER is not None
    out = Path(_BUILDS.name) / f"core-{len(list(Path(_BUILDS.name).iterdir()))}.so"
    sources = [*sorted((FIRMWARE / "core").glob("*.c")), FIRMWARE / "ports" / "scripted" / "scripted.c"]
    flags = ["-std=c11", "-O1", "-shared", "-fPIC", *WARNINGS, *options]
    subprocess.run([COMPILER, *flags, "-o", out, *sources], check=True)
    loaded = ctypes.CDLL(str(out))
    loaded.scripted_new.restype = ctypes.c_void_p
    loaded.scripted_new.argtypes = [ctypes.c_char_p] * 3
    loaded.scripted_free.argtypes = [ctypes.c_void_p]
    loaded.scripted_preset.argtypes = [ctypes.c_void_p, ctypes.c_uint8, ctypes.c_uint8, ctypes.c_int32]
    loaded.scripted_cut_store_after.argtypes = [ctypes.c_void_p, ctypes.c_uint32]
    loaded.scripted_start.argtypes = [ctypes.c_void_p, ctypes.c_uint8, ctypes.c_int32]
    loaded.scripted_feed.argtypes = [ctypes.c_void_p, ctypes.c_char_p, ctypes.c_uint32]
    loaded.scripted_break.argtypes = [ctypes.c_void_p]
    loaded.scripted_inputs.argtypes = [ctypes.c_void_p]
    loaded.scripted_inputs.restype = ctypes.c_void_p
    loaded.scripted_tick.argtypes = [ctypes.c_void_p]
    loaded.scripted_tick.restype = ctypes.c_uint32
    loaded.scripted_take.argtypes = [ctypes.c_void_p, ctypes.POINTER(ctypes.c_uint32)]
    loaded.scripted_take.restype = ctypes.c_void_p
    loaded.scripted_duty.argtypes = [ctypes.c_void_p, ctypes.c_uint8]
    return loaded


def inputs_type(axes: int) -> type[ctypes.Structure]:
    """`struct rr_inputs` of port.h for a number of axes."""
    fields = [
        ("counts", ctypes.c_int32 * axes),
        ("current_ma", ctypes.c_int32 * axes),
        ("supply_mv", ctypes.c_int32),
        ("temperature_dc", ctypes.c_int16),
        ("illegal_edges", ctypes.c_uint32),
    ]
    return type("Inputs", (ctypes.Structure,), {"_fields_": fields})


class CoreDevice:
    """One board from its start; `step` carries out the next tick and returns the bodies of the lines it made."""

    build_options: tuple[str, ...] = ()
    """Options besides the board's sizes: a subclass has another build, such as one with a seeded bug."""

    def __init__(self, device: Device, limits: Mapping[str, int], inputs: InputsScript) -> None:
        self._core = library((*defines(device), *self.build_options))
        names = [device[name].encode("ascii") for name in ("firmware", "board", "serial")]
        self._self = self._core.scripted_new(*names)
        self._axes = device["axes"]
        self._preset(device, limits)
        cause = Cause.named(device["cause"])
        assert cause is not None
        self._core.scripted_start(self._self, int(cause), device["self_test"])
        self._inputs = inputs_type(self._axes).from_address(self._core.scripted_inputs(self._self))
        self._caps = Cap(device["caps"])
        self._measured({"supply_mv": 12_000, "temperature_dc": 250})
        self.tick = device["start_tick"]
        self._rules = [CountsRule({"rule": "still"}, 0) for _ in range(self._axes)]
        self.change(inputs)

    def __del__(self) -> None:
        self._core.scripted_free(self._self)

    def _preset(self, device: Device, limits: Mapping[str, int]) -> None:
        self._core.scripted_preset(self._self, 0, 0, ctypes.c_int32(device["boot"] - 1).value)
        fitted = {"device": 1, "axis": device["axes"], "servo": device["servos"]}
        for key, value in limits.items():
            name, _, index = key.partition(" ")
            row = LIMITS[name]
            for at in [int(index)] if index else range(fitted[row.per.value]):
                self._core.scripted_preset(self._self, row.number, at, value)

    def change(self, inputs: InputsScript) -> None:
        """Have other inputs from the coming tick on."""
        for axis, rule in enumerate(inputs.get("counts", [])):
            given: Rule = {"rule": "still", "at": rule} if isinstance(rule, int) else rule
            self._rules[axis] = CountsRule(given, self._inputs.counts[axis])
        self._measured(inputs)

    def _measured(self, inputs: InputsScript) -> None:
        """Set what the board can measure; a port gives 0 for the rest."""
        if Cap.CURRENT in self._caps:
            for axis, current_ma in enumerate(inputs.get("current_ma", [])):
                self._inputs.current_ma[axis] = current_ma
        if Cap.SUPPLY in self._caps:
            self._inputs.supply_mv = inputs.get("supply_mv", self._inputs.supply_mv)
        if Cap.TEMPERATURE in self._caps:
            self._inputs.temperature_dc = inputs.get("temperature_dc", self._inputs.temperature_dc)

    def send(self, body: str) -> None:
        """Have a line arrive with its right check."""
        self._feed(seal(body.encode("latin-1")))

    def send_raw(self, text: str) -> None:
        """Have these bytes arrive, one a character."""
        self._feed(text.encode("latin-1"))

    def _feed(self, data: bytes) -> None:
        self._core.scripted_feed(self._self, data, len(data))

    def send_break(self) -> None:
        """Have a BREAK arrive."""
        self._core.scripted_break(self._self)

    def step(self) -> list[str]:
        """Carry out one tick; the lines it made, checks verified and taken off."""
        for axis, rule in enumerate(self._rules):
            counts = rule.next(self._core.scripted_duty(self._self, axis))
            self._inputs.counts[axis] = counts if Cap.ENCODER in self._caps else 0
        self.tick = self._core.scripted_tick(self._self) % TICKS
        length = ctypes.c_uint32()
        start = self._core.scripted_take(self._self, ctypes.byref(length))
        return bodies(ctypes.string_at(start, length.value))
