"""The ATmega328P firmware and its emulated board, built once a test run, or the reason why they cannot be."""

from __future__ import annotations

import tempfile
from functools import cache
from pathlib import Path

import toolchain
from dev.build_firmware import build_emulator, build_program

WHY_NOT = toolchain.why_not(toolchain.BOARD, toolchain.EMULATOR)
_OUT = tempfile.TemporaryDirectory(prefix="ramprig-avr-")


@cache
def emulator() -> Path:
    return build_emulator(Path(_OUT.name))


@cache
def program(*defines: str, serial: str = "T1", baud: int = 115200, scripted: bool = False) -> Path:
    """The firmware with these options; `scripted` with what its sensors measure written by the test."""
    folder = Path(_OUT.name) / f"program-{len(list(Path(_OUT.name).iterdir()))}"
    return build_program(folder, serial=serial, baud=baud, defines=defines, scripted=scripted)
