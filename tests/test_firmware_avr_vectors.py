"""The exchange vectors on the emulated ATmega328P board, in its own time: all but those of `LEFT_OUT`."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path

import pytest

from avr_builds import WHY_NOT
from avr_scripted import AFTER_TICKS, MOST_BYTES, PAYLOAD, Inputs, Script, by_kind, can_read, changes, inputs_of, play
from ramprig_link.check import seal
from scripted_device import TICKS, ScriptedDevice, matches
from test_vectors_exchanges import VECTORS, Step, Vector, device_of

pytestmark = [pytest.mark.skipif(bool(WHY_NOT), reason=WHY_NOT), pytest.mark.process]


ONE_MOTOR = "the board has one motor"
ONE_REQUEST = "the board carries out one request a tick"
ONE_FAULT = "the board's self-test knows one fault, number 1"
NARROW = "the board's sensors tell 16 bits"
FLOOD = "the board's line carries no such flood within a tick"
LEFT_OUT = {
    "who of a board with other figures": ONE_MOTOR,
    "state tells what the last tick ended with": ONE_MOTOR,
    "the digest of two axes and two servos, negative limits among them": ONE_MOTOR,
    "orders to different axes and servos do not replace one another": ONE_MOTOR,
    "overcurrent is judged after the offset, on each axis": ONE_MOTOR,
    "of two axes with the same trip the lower index is told": ONE_MOTOR,
    "trail: a ring that has turned, the second axis, as many records as fit an answer": ONE_MOTOR,
    "a line in pieces and two lines in one piece": ONE_REQUEST,
    "one notice in GARBLED_REST_TICKS, and none where nothing was refused since": ONE_REQUEST,
    "garbled comes after the notices of its tick's requests, and before those of orders": ONE_REQUEST,
    "the tick in which a stop is cut short counts for the dwell": ONE_REQUEST,
    "clear judges by the limits in force": ONE_REQUEST,
    "a failed self-test cannot be cleared": ONE_FAULT,
    "a line of 80 bytes is judged, one of 81 is overlong": FLOOD,
    "overload: a current beyond 65535 counts as that, and the heat runs in off": NARROW,
}
"""The vectors that ask of a board what this one cannot have."""
CHOSEN = [vector for vector in VECTORS["vectors"] if vector["name"] not in LEFT_OUT]


def why_not(vector: Vector) -> str:
    """What the vector asks of a board that this one cannot have; "" where there is nothing."""
    device = device_of(vector)
    if device["axes"] != 1:
        return ONE_MOTOR
    if device["self_test"] not in (0, 1):
        return ONE_FAULT
    played = play_mock(vector)
    script = played.script
    if any(len(data.replace(b"\r", b"").strip(b"\n").split(b"\n")) > 1 for data in script.data.values()):
        return ONE_REQUEST
    if any(len(data) > MOST_BYTES and tick not in script.breaks for tick, data in script.data.items()):
        return FLOOD  # before a BREAK it is all one how many of the bytes come
    return "" if can_read(played.read) else NARROW


@dataclass(frozen=True, slots=True)
class Played:
    """A vector as the mock has it: what is done, what the sensors read in each tick, and the lines that come after."""

    script: Script
    read: list[Inputs]
    later: list[str]


def play_mock(vector: Vector) -> Played:
    device = device_of(vector)
    limits = VECTORS["limits"] | vector.get("limits", {})
    mock = ScriptedDevice(device, limits, vector.get("inputs", {}))
    ticks = (vector["until"] - device["start_tick"]) % TICKS + 1
    data = dict.fromkeys(range(ticks), b"")
    breaks = set()
    read = []
    later = []
    steps = list(vector["steps"])
    for tick in range(ticks + AFTER_TICKS):
        while steps and steps[0]["tick"] == mock.tick:
            step = steps.pop(0)
            data[tick] += bytes_of(step)
            mock.send_raw(bytes_of(step).decode("latin-1"))
            mock.change(step.get("inputs", {}))
            if "event" in step:
                breaks.add(tick)
                mock.send_break()
        made = mock.step()
        read.append(inputs_of(mock))
        later += made if tick >= ticks else []
    longest = max((len(line.split(" ")[-1]) for line in told(vector) if line.startswith("D")), default=0)
    if longest > PAYLOAD:  # the memory has room for such lines where none are kept; nothing here asks for one
        device["keep"] = 0
    sent = {tick: some for tick, some in data.items() if some}
    return Played(Script(device, limits, ticks, sent, frozenset(breaks), changes(read)), read, later)


def bytes_of(step: Step) -> bytes:
    if "send" in step:
        return seal(step["send"].encode("latin-1"))
    return step.get("raw", "").encode("latin-1")


def told(vector: Vector) -> list[str]:
    return [line for step in vector["steps"] for line in step.get("expect", [])]


def differences(vector: Vector, script: Script, later: list[str], folder: Path) -> list[str]:
    """What the board says otherwise than the vector, and after it than the mock."""
    made = by_kind(play(script, folder))
    expected = by_kind([*told(vector), *later])
    return [
        f"{kind}: expected {lines}, made {made[kind]}"
        for kind, lines in expected.items()
        if not matches(lines, made[kind])
    ]


@pytest.mark.parametrize("vector", CHOSEN, ids=lambda vector: vector["name"])
def test_the_board_answers_as_the_exchange_says(vector: Vector, tmp_path: Path) -> None:
    played = play_mock(vector)
    assert differences(vector, played.script, played.later, tmp_path) == []


def test_what_is_left_out_is_what_the_board_cannot_have() -> None:
    found = {vector["name"]: why_not(vector) for vector in VECTORS["vectors"]}
    assert {name: reason for name, reason in found.items() if reason} == LEFT_OUT


def test_a_board_that_reads_otherwise_is_noticed(tmp_path: Path) -> None:
    vector = next(vector for vector in CHOSEN if vector["name"].startswith("overcurrent: trip_ticks in a row"))
    played = play_mock(vector)
    assert differences(vector, replace(played.script, inputs={}), played.later, tmp_path) != []
