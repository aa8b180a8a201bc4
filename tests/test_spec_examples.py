"""The example exchanges in SPEC.md section 8 are what the mock's controller does, line for line with their checks."""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path

from ramprig_link.check import seal
from ramprig_link.words import WORDS
from scripted_device import Device, ScriptedDevice

SPEC = Path(__file__).resolve().parent.parent / "protocol" / "SPEC.md"
EXAMPLE = re.compile(r"^<!-- example (\w+) -->\n```\n(.*?)^```$", re.DOTALL | re.MULTILINE)
LAST_TICK = 5000
BARE = ("who", "stop")

# As the text at the head of section 8 says; what it does not say shows in the answer to `who`.
DEVICE: Device = {
    "firmware": "1.0.0",
    "board": "vent-rig",
    "serial": "A0042",
    "boot": 7,
    "cause": "power",
    "self_test": 0,
    "start_tick": 0,
    "tick_us": 1000,
    "axes": 1,
    "servos": 1,
    "max_duty": 10_000,
    "queue": 16,
    "trail": 32,
    "keep": 4,
    "caps": 63,
}


def examples() -> dict[str, list[str]]:
    return {name: text.splitlines() for name, text in EXAMPLE.findall(SPEC.read_text("utf-8"))}


def sendings(lines: list[str]) -> Iterator[tuple[int, str]]:
    """Each line of the host with the tick that the next answer or notice tells."""
    for at, line in enumerate(lines):
        if line.startswith("> "):
            told = next(after for after in lines[at + 1 :] if re.match(r"< ([0-9a-f]{2}|N..) ", after))
            yield int(told.split(" ")[3]), line[2:]


def test_every_word_has_an_example() -> None:
    shown = {line.split(" ")[2] for lines in examples().values() for line in lines if re.match(r"> ..? ", line)}
    assert shown == set(WORDS)
    marks = re.findall(r"<!-- example (\w+) -->", SPEC.read_text("utf-8"))
    assert list(examples()) == marks


def test_the_lines_of_the_host_bear_their_checks() -> None:
    for lines in examples().values():
        for line in lines:
            assert line[:2] in ("> ", "< ")
            body = line[2:-5].encode("ascii")
            assert line[2:] in BARE or seal(body) == line[2:].encode("ascii") + b"\n"


def test_the_examples_run_in_order_are_what_the_device_does() -> None:
    lines = [line for example in examples().values() for line in example]
    device = ScriptedDevice(
        DEVICE,
        {},
        {
            "counts": [{"rule": "follows", "counts": 1, "per_duty": 1000}],
            "current_ma": [240],
            "supply_mv": 12_000,
            "temperature_dc": 250,
        },
    )
    heard: list[str] = []

    def run_to(tick: int) -> None:
        while device.tick < tick:
            made = device.step()
            heard.extend("< " + seal(body.encode("ascii")).decode("ascii").rstrip("\n") for body in made)

    for tick, line in sendings(lines):
        run_to(tick)
        heard.append("> " + line)
        device.send_raw(line + "\n")
    run_to(LAST_TICK)
    assert heard == lines
