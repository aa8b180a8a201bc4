"""The emulated ATmega328P board whose sensors read what a test writes, played tick for tick like the mock's controller.

The build's ticks are stretched sixteenfold, so that each line comes and is answered within the tick before the next;
it is sent so that it is whole shortly before its tick. What the sensors read at each tick is what the mock read in the
script. The board makes its lines between ticks, so answers, notices and data lines are each in their own order.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from pathlib import Path

from dev.emulated_board import EmulatedBoard, eeprom_image

from avr_builds import emulator, program
from ramprig_link.words import LIMITS, Per
from scripted_device import TICKS, Device, ScriptedDevice

STRETCH = 16
TICK_US = 1000 * STRETCH
BAUD = 500_000
BYTE_US = 20
AHEAD_US = 9000
"""How long before its tick a line is whole: the board reads lines in the first half of the tick before only."""
LAST_US = 2000
"""How long before its tick the inputs are written: the tick before has long read its own."""
START_US = 8000
"""When the inputs of the first tick are written: the board has begun, its first tick comes later."""
MOST_BYTES = 90
"""What comes in one go and is heard whole, longer than any line; of 120 some are lost at this rate, and counted."""
CURRENT_MA = 27_000
"""The board's currents have 16 bits, `offset_ma` of up to 5000 taken off them; its own sensor tells 13.5 A."""
SUPPLY_MV = 65_535
AFTER_TICKS = 8
PAYLOAD = 64
"""Characters of a data line: what the memory has room for beside four kept lines."""
LONG_PAYLOAD = 190
"""The same with none kept."""

Inputs = tuple[int, int, int, int]
"""Counts, current in mA, supply in mV, temperature in 1/10 degC."""


@dataclass(frozen=True, slots=True)
class Script:
    """What is done to a board before each of its ticks, counted from 0: bytes, a BREAK after them, other inputs."""

    device: Device
    limits: Mapping[str, int]
    ticks: int
    data: Mapping[int, bytes] = field(default_factory=dict)
    breaks: frozenset[int] = frozenset()
    inputs: Mapping[int, Inputs] = field(default_factory=dict)


def inputs_of(mock: ScriptedDevice) -> Inputs:
    """What the mock read in the tick it has just carried out."""
    inputs = mock.inputs
    return inputs.counts[0], inputs.current_ma[0], inputs.supply_mv, inputs.temperature_dc


def changes(read: Iterable[Inputs]) -> dict[int, Inputs]:
    """The inputs by tick, those alone that differ from the tick before."""
    before: Inputs = (0, 0, 12_000, 250)
    found = {}
    for tick, now in enumerate(read):
        if now != before:
            found[tick] = now
        before = now
    return found


def can_read(inputs: Iterable[Inputs]) -> bool:
    """Whether the board's sensors can tell such values."""
    return all(abs(current) <= CURRENT_MA and 0 <= supply <= SUPPLY_MV for _, current, supply, _ in inputs)


def build(device: Device) -> Path:
    """The firmware with the device's sizes."""
    sizes = {
        "RR_SERVOS": device["servos"],
        "RR_MAX_DUTY": device["max_duty"],
        "RR_KEEP": device["keep"],
        "RR_CAPS": device["caps"],
        "RR_TICK_US": device["tick_us"],
        "RR_START_TICK": f"{device['start_tick']}ul",
        "SCRIPTED_QUEUE": device["queue"],
        "SCRIPTED_PAYLOAD": PAYLOAD if device["keep"] else LONG_PAYLOAD,
    }
    return program(
        "-URR_CONFIG_HEADER",
        "'-DRR_CONFIG_HEADER=\"../emu/scripted/sizes.h\"'",
        "'-DTICK_CLOCK=(1u<<CS02|1u<<CS00)'",
        *(f"-D{name}={value}" for name, value in sizes.items()),
        f"'-DFIRMWARE_NAME=\"{device['firmware']}\"'",
        f"'-DBOARD_NAME=\"{device['board']}\"'",
        serial=device["serial"],
        baud=BAUD,
        scripted=True,
    )


def places(limits: Mapping[str, int]) -> dict[int, int]:
    """Limits by place in the digest's order, for one axis and at most one servo."""
    rows = sorted(LIMITS.values(), key=lambda row: row.number)
    names = [row.name for row in rows if row.per in (Per.DEVICE, Per.AXIS, Per.SERVO)]
    return {names.index(key.split(" ")[0]): value for key, value in limits.items()}


def write_inputs(board: EmulatedBoard, inputs: Inputs) -> None:
    counts, current_ma, supply_mv, temperature_dc = inputs
    board.command(f"set counts 4 {counts}")
    board.command(f"set scripted_current_ma 2 {current_ma}")
    board.command(f"set scripted_supply_mv 2 {supply_mv}")
    board.command(f"set scripted_temperature_dc 2 {temperature_dc}")


def play(script: Script, folder: Path) -> list[str]:
    """All lines that the board makes, in the order in which it says them."""
    first_us = None if 0 not in script.data and 0 not in script.breaks else first_tick_us(script, folder)
    with start(script, folder) as board:
        board.run_us(START_US)
        if 0 in script.inputs:
            write_inputs(board, script.inputs[0])
        if first_us is not None:
            carry_out(board, script, 0, first_us)
        first_us = until_first_tick(board)
        for tick in range(1, script.ticks + AFTER_TICKS):
            carry_out(board, script, tick, first_us)
        board.run_us(first_us + TICK_US * (script.ticks + AFTER_TICKS) - board.now_us)
        assert board.garbled == 0
        return board.lines


def start(script: Script, folder: Path) -> EmulatedBoard:
    image = folder / "eeprom"
    image.write_bytes(eeprom_image((script.device["boot"] - 1) % TICKS, places(script.limits)))
    cause = script.device["cause"]
    return EmulatedBoard(emulator(), build(script.device), cause=cause, eeprom=image, servos=script.device["servos"])


def until_first_tick(board: EmulatedBoard) -> int:
    """Let the first tick come; when it did."""
    while board.probe()["ticks"] == 0:
        board.run_us(100)
    found = board.probe()
    return found["tick_cycle"] // 16 - TICK_US * (found["ticks"] - 1)


def first_tick_us(script: Script, folder: Path) -> int:
    """When the first tick of a board so started comes: found out on another one."""
    with start(script, folder) as board:
        return until_first_tick(board)


def carry_out(board: EmulatedBoard, script: Script, tick: int, first_us: int) -> None:
    """Do what is to be done before a tick."""
    tick_us = first_us + TICK_US * tick
    data = script.data.get(tick, b"")
    if data or tick in script.breaks:
        board.run_us(max(0, tick_us - AHEAD_US - BYTE_US * len(data) - board.now_us))
        board.run_us(0, data)
        if tick in script.breaks:
            board.command("break")
    if tick != 0 and tick in script.inputs:
        board.run_us(max(0, tick_us - LAST_US - board.now_us))
        write_inputs(board, script.inputs[tick])


def by_kind(lines: Iterable[str]) -> dict[str, list[str]]:
    """Notices, data lines and answers, each in their order."""
    kinds: dict[str, list[str]] = {"N": [], "D": [], "answer": []}
    for line in lines:
        kinds[line[0] if line[0] in "ND" else "answer"].append(line)
    return kinds
