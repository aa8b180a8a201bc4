"""A desk at the mock of the example bench, in virtual time and without threads: for the shell's tests."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from ramprig.bench import load_bench
from ramprig.mock import MockPort, open_mock
from ramprig.shell.commands import Command
from ramprig.shell.desk import Desk
from ramprig.shell.outbox import Outbox
from ramprig.shell.words import read_line

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
BENCH_FILE = SCRIPTS / "vent_bench.yaml"
BENCH = load_bench(BENCH_FILE)


def mock_port(*faults: str, pace: str = "virtual") -> MockPort:
    """The mock of the example bench with these faults from the start."""
    options = "".join(f"&fault={fault}" for fault in faults)
    return open_mock(f"mock:?pace={pace}&seed=7&bench={BENCH_FILE}{options}")


class DeskBench:
    """An open desk; `said` is everything it has said so far."""

    def __init__(self, runs: Path, *faults: str, aside: Callable[[], None] = lambda: None) -> None:
        self.port = mock_port(*faults)
        self.outbox = Outbox(lines_max=10_000)
        self.desk = Desk(BENCH, self.port, self.outbox, runs=runs, seed=3, aside=aside, open_again=self._again)
        self.said: list[str] = []
        self.runs = runs
        self.again_faults: tuple[str, ...] = ()
        self.desk.open()
        self.hear()

    def _again(self) -> MockPort:
        self.port = mock_port(*self.again_faults)
        return self.port

    def hear(self) -> list[str]:
        """What was said since the last call."""
        lines = self.outbox.take()
        self.said += lines
        return lines

    def type(self, line: str) -> list[str]:
        """Carry a line out; what was said. Raises what the desk raises."""
        command = read_line(line, BENCH)
        assert command is not None
        return self.perform(command)

    def perform(self, command: Command) -> list[str]:
        """Carry a command out; what was said."""
        self.desk.perform(command)
        return self.hear()

    def let_pass(self, seconds: float) -> list[str]:
        """Idle for so long in virtual time; what was said."""
        until_s = self.port.clock.now() + seconds
        while self.port.clock.now() < until_s and not self.desk.dead:
            self.desk.idle()
        return self.hear()

    @property
    def duty(self) -> int:
        """The duty at the mock's bridge."""
        controller = self.port.device.controller
        return 0 if controller is None else controller.drives[0].duty

    def fault(self, name: str, strength: float = 1.0) -> None:
        """Switch a fault of the mock on, or off with 0."""
        self.port.device.faults.set(name, strength)
