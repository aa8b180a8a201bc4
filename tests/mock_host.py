"""A host for tests of the mock's controller: sends lines by tag, runs ticks, and parses what comes."""

from __future__ import annotations

from collections.abc import Mapping

from ramprig.mock import Board, Controller, LimitStore, ScriptedInputs
from ramprig_link.check import seal
from ramprig_link.messages import Answer, Data, Notice, parse_device_line

Key = tuple[str, int]

QUICK: dict[Key, int] = {
    ("lease_ms", 0): 200, ("stop_ticks", 0): 60, ("ceiling_duty", 0): 6000, ("slew_up_duty", 0): 100,
    ("slew_down_duty", 0): 200, ("dwell_ticks", 0): 20, ("still_ticks", 0): 8, ("pulse_slew_ns", 0): 4000,
}  # fmt: skip
"""Limits with which things happen within few ticks."""


class Bench:
    """A controller with scripted inputs and its host. `answers`, `notices` and `data` hold all that has come."""

    def __init__(
        self, limits: Mapping[Key, int] | None = None, *, board: Board | None = None, start_tick: int = 0
    ) -> None:
        self.board = board or Board()
        self.inputs = ScriptedInputs(axes=self.board.axes)
        self.store = LimitStore(self.board, values=QUICK if limits is None else {**QUICK, **limits})
        self.controller = Controller(self.board, self.inputs, self.store, start_tick=start_tick)
        self.answers: list[Answer] = []
        self.notices: list[Notice] = []
        self.data: list[Data] = []
        self.lines: list[str] = []
        self._tag = 0x10
        self.run(1)

    @property
    def tick(self) -> int:
        return self.controller.age & 0xFFFFFFFF

    def run(self, ticks: int) -> Bench:
        """Let ticks pass and take in what comes."""
        for _ in range(ticks):
            self.controller.tick()
        self.take()
        return self

    def take(self) -> None:
        output = self.controller.take_output()
        for line in output.split(b"\n")[:-1]:
            self.lines.append(line.decode("ascii")[:-5])
            message = parse_device_line(line)
            if isinstance(message, Answer):
                self.answers.append(message)
            elif isinstance(message, Notice):
                self.notices.append(message)
            elif isinstance(message, Data):
                self.data.append(message)

    def send(self, body: str) -> int:
        """Put a request on the line under the next tag; returns the tag."""
        self._tag = 0x10 + (self._tag - 0x0F) % 0xE0
        self.controller.receive(seal(f"{self._tag:02x} {body}".encode("ascii")))
        return self._tag

    def ask(self, body: str) -> Answer:
        """Send a request and let one tick pass; returns its answer."""
        tag = self.send(body)
        self.run(1)
        answer = next(answer for answer in reversed(self.answers) if answer.tag == tag)
        assert answer.tick == self.tick
        return answer

    def ok(self, body: str) -> tuple[str, ...]:
        """As `ask`; the fields of an answer that must be `ok`."""
        answer = self.ask(body)
        assert answer.ok, f"{body}: {answer.fields}"
        return answer.fields

    def refusal(self, body: str) -> str:
        """As `ask`; the reason of an answer that must be `no`."""
        answer = self.ask(body)
        assert not answer.ok, f"{body}: ok {answer.fields}"
        return answer.reason

    def arm(self, lease_ms: int = 200) -> Bench:
        self.ok(f"arm {lease_ms} {self.store.digest()}")
        return self

    def ramp(self, duty: int, *, ticks: int = 0, ahead: int = 1, axis: int = 0) -> int:
        """Order a ramp that starts `ahead` ticks after the tick it is carried out in; returns its tag."""
        answer = self.ask(f"ramp {axis} {duty} {ticks} {(self.tick + 1 + ahead) & 0xFFFFFFFF}")
        assert answer.ok, answer.fields
        return answer.tag

    def keep_alive(self, ticks: int) -> Bench:
        """Let ticks pass with a beat every 50."""
        while ticks > 0:
            self.ok("beat")
            self.run(min(49, ticks - 1))
            ticks -= 50
        return self

    @property
    def duty(self) -> int:
        return self.controller.drives[0].duty

    @property
    def state(self) -> str:
        return self.controller.state.word

    def told(self, word: str) -> list[Notice]:
        """The notices of that word so far."""
        return [notice for notice in self.notices if notice.word == word]

    def words_since(self, count: int) -> list[str]:
        """The notices after the first `count`, as written, without number and tick."""
        return [" ".join((notice.word, *notice.fields)) for notice in self.notices[count:]]
