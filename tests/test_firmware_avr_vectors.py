"""The exchange vectors on the emulated ATmega328P board, in its own time: those that need no scripted sensors.

The build's ticks are stretched sixteenfold, so that each line comes and is answered within the tick before the next;
it is sent so that it is whole shortly before its tick. The board makes its lines between the ticks, so answers, notices
and data lines are each compared in their own order; every line bears its tick.
"""

from __future__ import annotations

from pathlib import Path

import pytest
from dev.emulated_board import EmulatedBoard, eeprom_image

from avr_builds import WHY_NOT, emulator, program
from ramprig_link.check import seal
from ramprig_link.words import LIMITS, Per
from scripted_device import Device, matches
from test_vectors_exchanges import VECTORS, Step, Vector, device_of

pytestmark = [pytest.mark.skipif(bool(WHY_NOT), reason=WHY_NOT), pytest.mark.process]

STRETCH = 16
TICK_US = 1000 * STRETCH
BYTE_US = 87
AHEAD_US = 9000
"""How long before its tick a line is whole: the board reads lines in the first half of the tick before only."""
FLOOD_BYTES = 150
"""More than this does not come within a tick."""
FIRST_TICK = 1
"""The first tick for which a line can be sent in time."""
KEPT_DEVICE: dict[str, str | int] = {**VECTORS["device"], "cause": "power"}  # type: ignore[dict-item]  # a TypedDict
OPTIONAL = {"boot", "cause", "keep"}
"""What a vector may have otherwise than the build: given at the start, or nothing the exchange depends on."""


def fits(vector: Vector) -> bool:
    """Whether the build is the vector's board, and no line depends on a sensor."""
    device = device_of(vector)
    if any(value != KEPT_DEVICE[name] for name, value in device.items() if name not in OPTIONAL):
        return False
    if "inputs" in vector or any("inputs" in step for step in vector["steps"]):
        return False
    sent = [step for step in vector["steps"] if "send" in step or "raw" in step or "event" in step]
    if any(step["tick"] < FIRST_TICK for step in sent) or device["self_test"] != 0:
        return False
    words = {step["send"].split(" ")[1] for step in sent if "send" in step and " " in step["send"]}
    told = [line for step in vector["steps"] for line in step.get("expect", [])]
    several = any(step.get("raw", "").count("\n") > 1 for step in sent)  # the board carries out one a tick
    several = several or len({step["tick"] for step in sent}) < len(sent)
    several = several or any(len(step.get("raw", "")) > FLOOD_BYTES for step in sent)
    measured = any(line.startswith("D") or "voltage" in line for line in told)
    return not words & {"state", "trail"} and not measured and not several


CHOSEN = [vector for vector in VECTORS["vectors"] if fits(vector)]


def places(vector: Vector) -> dict[int, int]:
    """The vector's limits by place in the digest's order, for one axis and one servo."""
    rows = sorted(LIMITS.values(), key=lambda row: row.number)
    names = [row.name for row in rows if row.per in (Per.DEVICE, Per.AXIS, Per.SERVO)]
    given = VECTORS["limits"] | vector.get("limits", {})
    return {names.index(key.split(" ")[0]): value for key, value in given.items()}


def vector_program() -> Path:
    return program(
        "'-DTICK_CLOCK=(1u<<CS02|1u<<CS00)'",
        "-DRR_SERVOS=1",
        "-DRR_MAX_DUTY=9500",
        "-DRR_KEEP=4",
        "-DRR_CAPS=63",
        "'-DFIRMWARE_NAME=\"fw-1\"'",
        "'-DBOARD_NAME=\"vector\"'",
        serial="V1",
    )


def send(board: EmulatedBoard, step: Step, first_tick_us: int) -> None:
    data = seal(step["send"].encode("latin-1")) if "send" in step else step.get("raw", "").encode("latin-1")
    whole_us = first_tick_us + TICK_US * step["tick"] - AHEAD_US
    length_us = BYTE_US * max(len(data), 1)
    board.run_us(max(0, whole_us - length_us - board.now_us))
    if "event" in step:
        board.command("break")
    else:
        board.run_us(0, data)


def exchange(vector: Vector, image: Path) -> list[str]:
    """All lines that the board makes."""
    device: Device = device_of(vector)
    image.write_bytes(eeprom_image(device["boot"] - 1, places(vector)))
    with EmulatedBoard(emulator(), vector_program(), cause=device["cause"], eeprom=image, servos=1) as board:
        board.command("script 0 0 12000")
        while board.probe()["ticks"] == 0:
            board.run_us(100)
        found = board.probe()
        first_tick_us = found["tick_cycle"] // 16 - TICK_US * (found["ticks"] - 1)
        for step in vector["steps"]:
            if "expect" not in step:
                send(board, step, first_tick_us)
        board.run_us(first_tick_us + TICK_US * (vector["until"] + 8) - board.now_us)
        assert board.garbled == 0
        return board.lines


def by_kind(lines: list[str]) -> dict[str, list[str]]:
    kinds: dict[str, list[str]] = {"N": [], "D": [], "answer": []}
    for line in lines:
        kinds[line[0] if line[0] in "ND" else "answer"].append(line)
    return kinds


@pytest.mark.parametrize("vector", CHOSEN, ids=lambda vector: vector["name"])
def test_the_board_answers_as_the_exchange_says(vector: Vector, tmp_path: Path) -> None:
    expected = by_kind([line for step in vector["steps"] for line in step.get("expect", [])])
    made = by_kind(exchange(vector, tmp_path / "eeprom"))
    for kind, lines in expected.items():
        assert matches(lines, made[kind][: len(lines)]), (kind, lines, made[kind])


def test_most_kinds_of_exchange_are_among_the_chosen() -> None:
    assert len(CHOSEN) >= 55
    clauses = {clause.split("-")[0] for vector in CHOSEN for clause in vector["clause"]}
    assert {"TAG", "BAD", "ORDER", "STOP", "LIMIT", "ARM", "CHAIN"} <= clauses
