"""The mock's controller behind scripted inputs, driven tick by tick: for the exchange vectors and SPEC.md's examples.

It has no plant: counts follow a rule, and everything else stays as it was last set. See the text at the head of
`protocol/vectors/exchanges.json` for what the rules mean.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TypedDict

from ramprig.mock.board import Board
from ramprig.mock.controller import Controller
from ramprig.mock.inputs import ScriptedInputs
from ramprig.mock.limits import LimitStore
from ramprig.mock.transmit import Transmitter
from ramprig_link.check import seal
from ramprig_link.words import Cap, Cause

TICKS = 1 << 32


class Rule(TypedDict, total=False):
    """How the counts of an axis move: see `CountsRule`."""

    rule: str
    at: int
    counts_per_tick: int
    counts: int
    per_duty: int


class InputsScript(TypedDict, total=False):
    """Inputs to change; what is not named stays."""

    counts: list[Rule | int]
    current_ma: list[int]
    supply_mv: int
    temperature_dc: int


class Device(TypedDict):
    """A board and how it starts."""

    firmware: str
    board: str
    serial: str
    boot: int
    cause: str
    self_test: int
    start_tick: int
    tick_us: int
    axes: int
    servos: int
    max_duty: int
    queue: int
    trail: int
    keep: int
    caps: int


class CountsRule:
    """One axis's counts by a rule: `still`, `turns` or `follows`."""

    def __init__(self, rule: Rule, counts: int) -> None:
        self.base = rule.get("at", counts)
        self.rate = rule.get("counts_per_tick", 0)
        self.counts = rule.get("counts", 0)
        self.per_duty = rule.get("per_duty", 1)
        self.turned = 0
        self.driven = 0

    def next(self, duty: int) -> int:
        """The counts of the next tick, after one that ended with `duty`, as 32 bits signed."""
        self.turned += self.rate
        self.driven += duty
        value = self.base + self.turned + self.driven * self.counts // self.per_duty
        return (value + TICKS // 2) % TICKS - TICKS // 2


class ScriptedDevice:
    """One board from its start; `step` carries out the next tick and returns the bodies of the lines it made."""

    def __init__(self, device: Device, limits: Mapping[str, int], inputs: InputsScript) -> None:
        board = Board(
            firmware=device["firmware"],
            board=device["board"],
            serial=device["serial"],
            tick_us=device["tick_us"],
            axes=device["axes"],
            servos=device["servos"],
            max_duty=device["max_duty"],
            queue=device["queue"],
            trail=device["trail"],
            keep=device["keep"],
            caps=Cap(device["caps"]),
        )
        presets: dict[tuple[str, int], int] = {}
        fitted = {(name, index) for name, index in LimitStore(board)}
        for key, value in limits.items():
            name, _, index = key.partition(" ")
            indexes = [int(index)] if index else [i for known, i in fitted if known == name]
            presets.update({(name, i): value for i in indexes})
        self.inputs = ScriptedInputs(axes=board.axes)
        cause = Cause.named(device["cause"])
        assert cause is not None
        self.controller = Controller(
            board,
            self.inputs,
            LimitStore(board, values=presets),
            boot=device["boot"],
            cause=cause,
            self_test=device["self_test"],
            start_tick=device["start_tick"],
            transmitter=Transmitter(data_bytes_max=1 << 20, tick_us=board.tick_us),
        )
        self.tick = device["start_tick"]
        self._rules = [CountsRule({"rule": "still"}, 0) for _ in range(board.axes)]
        self.change(inputs)

    def change(self, inputs: InputsScript) -> None:
        """Have other inputs from the coming tick on."""
        for axis, rule in enumerate(inputs.get("counts", [])):
            given: Rule = {"rule": "still", "at": rule} if isinstance(rule, int) else rule
            self._rules[axis] = CountsRule(given, self.inputs.counts[axis])
        self.inputs.set(
            current_ma=inputs.get("current_ma"),
            supply_mv=inputs.get("supply_mv"),
            temperature_dc=inputs.get("temperature_dc"),
        )

    def send(self, body: str) -> None:
        """Have a line arrive with its right check."""
        self.controller.receive(seal(body.encode("latin-1")))

    def send_raw(self, text: str) -> None:
        """Have these bytes arrive, one a character."""
        self.controller.receive(text.encode("latin-1"))

    def send_break(self) -> None:
        """Have a BREAK arrive."""
        self.controller.line_break()

    def step(self) -> list[str]:
        """Carry out one tick; the lines it made, checks verified and taken off."""
        driven = [drive.duty for drive in self.controller.drives]
        self.inputs.set(counts=[rule.next(duty) for rule, duty in zip(self._rules, driven, strict=True)])
        self.controller.tick()
        self.tick = (self.tick + 1) % TICKS
        return bodies(self.controller.take_output())


def bodies(output: bytes) -> list[str]:
    """The bodies of whole lines, each of which must be sealed rightly."""
    *lines, rest = output.split(b"\n")
    assert rest == b""
    for line in lines:
        assert seal(line[:-5]) == line + b"\n"
    return [line[:-5].decode("ascii") for line in lines]


def matches(expected: Sequence[str], made: Sequence[str]) -> bool:
    """Whether the lines are the expected ones, where a field `*` stands for any."""
    if len(expected) != len(made):
        return False
    for want, got in zip(expected, made, strict=True):
        wants, gots = want.split(" "), got.split(" ")
        if len(wants) != len(gots) or any(a not in ("*", b) for a, b in zip(wants, gots, strict=True)):
            return False
    return True
