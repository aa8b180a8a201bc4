"""The emulated board in real time on a pseudo-terminal, with its commands on standard input."""

from __future__ import annotations

import os
import re
import select
import subprocess
import time
from collections.abc import Iterator

import pytest

from avr_builds import WHY_NOT, emulator, program
from ramprig.port.base import Port
from ramprig.port.open import open_port
from ramprig_link.check import seal

pytestmark = [pytest.mark.skipif(bool(WHY_NOT), reason=WHY_NOT), pytest.mark.process]

PATIENCE_S = 20.0
REPEAT_S = 0.5
ALL_CHANNELS = 1 << 18 | 1 << 16 | 3 << 12 | 7
"""State, supply, two servos and one axis."""


class PacedBoard:
    """The emulator in real time; `port` is what a host opens."""

    def __init__(self) -> None:
        command = [str(emulator()), str(program())]
        self.process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, bufsize=0)
        self._said = b""
        self.port = self.line()

    def line(self) -> str:
        """The next line that it prints; fails where none comes."""
        assert self.process.stdout is not None
        while b"\n" not in self._said:
            ready, _, _ = select.select([self.process.stdout], [], [], PATIENCE_S)
            assert ready, f"no line in {PATIENCE_S} s; before: {self._said!r}"
            self._said += os.read(self.process.stdout.fileno(), 4096)
        line, _, self._said = self._said.partition(b"\n")
        return line.decode("ascii")

    def tell(self, commands: str) -> None:
        """Write commands at once."""
        assert self.process.stdin is not None
        self.process.stdin.write(commands.encode("ascii"))

    def ticks(self) -> int:
        """How many ticks the firmware has begun."""
        self.tell("probe\n")
        found = re.search(r" ticks=(\d+) ", self.line())
        assert found is not None
        return int(found[1])


@pytest.fixture
def board() -> Iterator[PacedBoard]:
    made = PacedBoard()
    yield made
    made.process.kill()
    made.process.communicate()


def test_commands_that_come_together_are_each_answered(board: PacedBoard) -> None:
    board.tell("lost_encoder 1\nfault no_such_fault 1\nlost_encoder 0\n")
    assert [board.line() for _ in range(3)] == ["ok", "? the plant has no fault no_such_fault", "ok"]


def test_a_host_that_does_not_read_does_not_hold_the_board(board: PacedBoard) -> None:
    with open_port(board.port) as port:
        heard, bound_s = b"", time.monotonic() + PATIENCE_S
        while b"01 ok " not in heard:  # as long as the board boots it hears nothing
            assert time.monotonic() < bound_s, f"no log: {heard!r}"
            port.write(seal(b"01 log 1 %d plain" % ALL_CHANNELS))
            heard += port.read(0.2)
        begun, bound_s = board.ticks(), time.monotonic() + PATIENCE_S
        while board.ticks() < begun + 2200:  # 25 kB at 115200 baud, of which a terminal and its pair hold some 16
            assert time.monotonic() < bound_s, "the board's time stands still"
        assert answered(port, b"02 log 0 0 packed"), "the board answers no more"


def answered(port: Port, request: bytes) -> bool:
    """Whether a request is answered: repeated, as a host must (TAG-6), while the answer fell off a full terminal.

    The host empties the terminal while the board answers already, and nothing says which of them is first.
    """
    heard, bound_s, again_s = b"", time.monotonic() + PATIENCE_S, 0.0
    while b"\n%s ok " % request[:2] not in heard:
        if time.monotonic() > bound_s:
            return False
        if time.monotonic() >= again_s:
            port.write(seal(request))
            again_s = time.monotonic() + REPEAT_S
        heard = heard[-400:] + port.read(0.2)
    return True
