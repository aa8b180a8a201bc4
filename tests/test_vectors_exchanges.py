"""The mock's controller answers `protocol/vectors/exchanges.json` line for line, tick for tick."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TypedDict

import pytest

from core_device import COMPILER, CoreDevice
from ramprig_link.words import NOTICES, WORDS, Cause, Reason, Source, State, Trip
from scripted_device import TICKS, Device, InputsScript, ScriptedDevice, matches

FILE = Path(__file__).resolve().parent.parent / "protocol" / "vectors" / "exchanges.json"


class Step(TypedDict, total=False):
    tick: int
    send: str
    raw: str
    event: str
    inputs: InputsScript
    expect: list[str]


class Vector(TypedDict, total=False):
    name: str
    clause: list[str]
    device: dict[str, str | int]
    limits: dict[str, int]
    inputs: InputsScript
    steps: list[Step]
    until: int


class Vectors(TypedDict):
    about: list[str]
    device: Device
    limits: dict[str, int]
    vectors: list[Vector]


VECTORS: Vectors = json.loads(FILE.read_text("utf-8"))


def device_of(vector: Vector) -> Device:
    device = VECTORS["device"].copy()
    device.update(vector.get("device", {}))  # type: ignore[typeddict-item]  # the file's own keys, checked in a test
    return device


def differences(vector: Vector, kind: type[ScriptedDevice] | type[CoreDevice] = ScriptedDevice) -> list[str]:
    """What a kind of device did otherwise than the vector says, tick by tick."""
    device = kind(device_of(vector), VECTORS["limits"] | vector.get("limits", {}), vector.get("inputs", {}))
    steps = list(vector["steps"])
    found = []
    while True:
        tick = device.tick
        expected: list[str] = []
        while steps and steps[0]["tick"] == tick:
            step = steps.pop(0)
            if "send" in step:
                device.send(step["send"])
            if "raw" in step:
                device.send_raw(step["raw"])
            if "event" in step:
                device.send_break()
            if "inputs" in step:
                device.change(step["inputs"])
            expected += step.get("expect", [])
        made = device.step()
        if not matches(expected, made):
            found.append(f"tick {tick}: expected {expected}, made {made}")
        if tick == vector["until"]:
            return found + [f"never reached: {step}" for step in steps]


@pytest.mark.parametrize("vector", VECTORS["vectors"], ids=lambda vector: vector["name"])
def test_the_controller_answers_as_the_exchange_says(vector: Vector) -> None:
    assert differences(vector) == []


class QuicklyBuilt(CoreDevice):
    """The core without optimisation: nearly every board of the vectors is a build of its own, run for an instant.

    `test_firmware_agreement.py` has it optimised.
    """

    build_options = ("-O0",)


@pytest.mark.skipif(COMPILER is None, reason="no C compiler: install gcc (Debian: apt-get install gcc)")
@pytest.mark.parametrize("vector", VECTORS["vectors"], ids=lambda vector: vector["name"])
def test_the_firmware_core_answers_as_the_exchange_says(vector: Vector) -> None:
    assert differences(vector, QuicklyBuilt) == []


def test_a_wrong_line_is_noticed() -> None:
    vector: Vector = {"name": "", "clause": [], "steps": [{"tick": 0, "expect": ["N00 boot 0 8 power"]}], "until": 1}
    assert len(differences(vector)) == 1


def test_vectors_are_well_formed() -> None:
    names = [vector["name"] for vector in VECTORS["vectors"]]
    assert len(set(names)) == len(names)
    for vector in VECTORS["vectors"]:
        assert vector["clause"], vector["name"]
        assert set(vector.get("device", {})) <= set(VECTORS["device"]), vector["name"]
        start = device_of(vector)["start_tick"]
        passed = [(step["tick"] - start) % TICKS for step in vector["steps"]]
        assert passed == sorted(passed), vector["name"]
        assert passed[-1] <= (vector["until"] - start) % TICKS < 20_000, vector["name"]
        for step in vector["steps"]:
            assert step.get("event", "break") == "break", vector["name"]
            assert len(set(step) - {"tick"}) == 1, vector["name"]


def told(first_field: str, at: int) -> set[str]:
    """The fields at a place of all expected lines of a kind."""
    lines = (line for vector in VECTORS["vectors"] for step in vector["steps"] for line in step.get("expect", []))
    split = [line.split(" ") for line in lines]
    return {fields[at] for fields in split if fields[0].startswith("N") == (first_field == "N") and len(fields) > at}


def test_vectors_show_every_word_reason_notice_trip_and_state() -> None:
    sent = [step["send"] for vector in VECTORS["vectors"] for step in vector["steps"] if "send" in step]
    assert set(WORDS) <= {word for line in sent for word in line.split(" ")[1:2]}
    assert {str(reason) for reason in Reason} <= told("answer", 3)
    assert told("N", 1) == set(NOTICES)
    assert {trip.word for trip in Trip} - {"none"} <= told("N", 3)
    assert set(State.all_words()) <= told("N", 3) | told("answer", 3)
    assert set(Source.all_words()) <= told("N", 4)
    assert set(Cause.all_words()) == told("N", 4) & set(Cause.all_words())
