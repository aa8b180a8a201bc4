"""Other processes for the tests of the command line: a mock served on a pty, and `ramprig run` on it."""

from __future__ import annotations

import os
import select
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Self

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
BENCH = SCRIPTS / "vent_bench.yaml"
LOOK_EVERY_S = 0.02
PATIENCE_S = 60.0
"""What must happen happens within this on a machine with much else to do; then the test fails."""

ENDLESS = """
sequence: endless
bench: {bench}
steps:
  - move: {{servo: latch, to: 10 deg, in: 300 ms}}
  - repeat:
      for: 10 min
      steps:
        - ramp: {{motor: vent, to: 60 %, in: 600 ms}}
        - hold: 300 ms
        - coast: {{motor: vent, in: 600 ms}}
        - hold: 200 ms
"""
"""Drives the motor up and down until it is stopped."""


def until(found: Callable[[], bool], what: str, *, run: RunProcess | None = None) -> None:
    """Wait until it is so; AssertionError after PATIENCE_S, or where `run`, which must go on meanwhile, has ended."""
    bound_s = time.monotonic() + PATIENCE_S
    while not found():
        over = run is not None and run.process.poll() is not None
        said = run.said() if run is not None else ""
        assert not over, f"the run ended while waiting for {what}:\n{said}"
        assert time.monotonic() < bound_s, f"waited {PATIENCE_S} s in vain for {what}\n{said}"
        time.sleep(LOOK_EVERY_S)


@dataclass(frozen=True, slots=True)
class TraceRow:
    """A change at the board's bridge: host time, and whether it may move anything from then on."""

    host_s: float
    state: str
    duty: int

    @property
    def is_off(self) -> bool:
        """Bridge at zero, and not armed."""
        return self.duty == 0 and self.state in ("off", "tripped", "booting")


class MockProcess:
    """`ramprig mock` with a trace; `port` is what a host opens."""

    def __init__(self, folder: Path, *options: str) -> None:
        self.trace_file = folder / "trace.csv"
        command = [sys.executable, "-m", "ramprig", "mock", "--bench", str(BENCH), "--trace", str(self.trace_file)]
        self._process = subprocess.Popen(
            [*command, *options], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, cwd=folder
        )
        self.port = self._line()

    def _line(self) -> str:
        assert self._process.stdout is not None
        return self._process.stdout.readline().strip()

    def obey(self, line: str) -> str:
        """The mock's answer to a line of control."""
        assert self._process.stdin is not None
        self._process.stdin.write(line + "\n")
        self._process.stdin.flush()
        return self._line()

    def trace(self) -> list[TraceRow]:
        """The whole rows written so far."""
        lines = self.trace_file.read_text("ascii").split("\n")[1:-1]
        fields = [line.split(",") for line in lines]
        return [TraceRow(float(row[0]), row[3], int(row[4])) for row in fields]

    def driven_since(self, after_s: float) -> bool:
        """Whether the bridge has been driven after this host time."""
        return any(row.duty and row.host_s > after_s for row in self.trace())

    def off_at(self, after_s: float) -> float | None:
        """Host time from which on the bridge has been off to the end of the trace; None while it is not."""
        rows = self.trace()
        if not rows or not rows[-1].is_off:
            return None
        last_on = max((number for number, row in enumerate(rows) if not row.is_off), default=-1)
        return rows[last_on + 1].host_s

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._process.terminate()
        self._process.communicate(timeout=PATIENCE_S)


class RunProcess:
    """`ramprig run` of the endless sequence; ended at the end of the block, whatever it does."""

    def __init__(self, folder: Path, port: str, *, sequence: str | None = None) -> None:
        self.runs = folder / "runs"
        path = folder / "endless.yaml"
        path.write_text(sequence or ENDLESS.format(bench=BENCH), "utf-8")
        self._said = (folder / "said.txt").open("w+", encoding="utf-8")
        self._command = [sys.executable, "-m", "ramprig", "run", str(path), "--port", port, "--runs", str(self.runs)]
        self._command.append("--yes")
        self.process = self._begin()

    def _begin(self) -> subprocess.Popen[bytes]:
        return subprocess.Popen(self._command, stdin=subprocess.DEVNULL, stdout=self._said, stderr=self._said)

    def send(self, name: str) -> float:
        """Send a signal by name; returns the host time right before."""
        now_s = time.monotonic()
        os.kill(self.process.pid, getattr(signal, name))
        return now_s

    def code(self) -> int:
        """Wait for the end; the exit code."""
        return self.process.wait(PATIENCE_S)

    @property
    def folder(self) -> Path:
        """The run folder."""
        (only,) = self.runs.iterdir()
        return only

    def said(self) -> str:
        """All that it has said."""
        self._said.flush()
        return Path(self._said.name).read_text("utf-8")

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self.process.poll() is None:
            self.process.kill()
            self.process.wait(PATIENCE_S)
        self._said.close()


class RunOnTerminal(RunProcess):
    """The same, or another command, on a terminal of its own, which `hang_up` closes as a closed window would."""

    def __init__(self, folder: Path, port: str, *, words: tuple[str, ...] | None = None) -> None:
        self._words = words
        self._shown = b""
        super().__init__(folder, port)

    def type(self, keys: bytes) -> float:
        """Type on it; returns the host time right before."""
        now_s = time.monotonic()
        os.write(self._master, keys)
        return now_s

    def shown(self) -> str:
        """All that it has shown so far."""
        while select.select([self._master], [], [], 0.0)[0]:
            self._shown += os.read(self._master, 65536)
        return self._shown.decode("utf-8", "replace")

    def _begin(self) -> subprocess.Popen[bytes]:
        import fcntl
        import pty
        import termios

        self._master, slave = pty.openpty()

        def take_terminal() -> None:
            fcntl.ioctl(0, termios.TIOCSCTTY, 0)

        try:
            return subprocess.Popen(
                [*self._command, "--yes"] if self._words is None else [sys.executable, "-m", "ramprig", *self._words],
                stdin=slave,
                stdout=slave,
                stderr=slave,
                start_new_session=True,
                preexec_fn=take_terminal,
            )
        finally:
            os.close(slave)

    def hang_up(self) -> float:
        """Close the terminal; returns the host time right before."""
        now_s = time.monotonic()
        os.close(self._master)
        return now_s
