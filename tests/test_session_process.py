"""A host process ended in every way a system knows, against a mock in another process over a pseudo-terminal."""

from __future__ import annotations

import csv
import itertools
import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from session_victim import LEASE_MS

pytestmark = [
    pytest.mark.process,
    pytest.mark.skipif(sys.platform == "win32", reason="needs pseudo-terminals and POSIX signals"),
]

STOP_S = 0.4
SLACK_S = 0.5
"""For a busy machine: the mock is paced by the same clock and may itself be late."""
VICTIM = Path(__file__).with_name("session_victim.py")


class Bench:
    """A mock and a host that drives its motor."""

    def __init__(self, trace: Path) -> None:
        self.trace = trace
        command = [sys.executable, "-m", "ramprig", "mock", "--trace", str(trace)]
        self.mock = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
        assert self.mock.stdout is not None
        self.url = self.mock.stdout.readline().strip()
        self.host = subprocess.Popen([sys.executable, str(VICTIM), self.url], stdout=subprocess.PIPE, text=True)
        assert self.host.stdout is not None
        assert self.host.stdout.readline() == "running\n"

    def duty(self) -> tuple[float, int]:
        """When the duty at the bridge changed last, on the system's monotonic clock, and to what."""
        row = self._rows()[-1]
        return float(row["host_s"]), int(row["duty_0"])

    def states(self) -> list[str]:
        """The states that the device has gone through, in order."""
        return [state for state, _ in itertools.groupby(row["state"] for row in self._rows())]

    def _rows(self) -> list[dict[str, str]]:
        return list(csv.DictReader(self.trace.read_text().splitlines()))

    def off_after(self, since_s: float) -> float:
        """How long after `since_s` the bridge was off; waits for it."""
        while time.monotonic() < since_s + 5.0:
            at_s, duty = self.duty()
            if duty == 0 and at_s > since_s:
                return at_s - since_s
            time.sleep(0.02)
        raise AssertionError(f"the bridge is still on: {self.duty()}")

    def fault(self, line: str) -> None:
        assert self.mock.stdin is not None
        self.mock.stdin.write(f"fault {line}\n")
        self.mock.stdin.flush()

    def close(self) -> None:
        for process in (self.host, self.mock):
            process.kill()
            process.communicate()


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[Bench]:
    made = Bench(tmp_path / "trace.csv")
    yield made
    made.close()


@pytest.mark.parametrize("name", ["SIGTERM", "SIGHUP", "SIGINT", "SIGQUIT"])
def test_a_signal_that_can_be_caught_ends_in_a_confirmed_stop(bench: Bench, name: str) -> None:
    assert bench.duty()[1] == 2500
    sent_s = time.monotonic()
    os.kill(bench.host.pid, getattr(signal, name))
    out, _ = bench.host.communicate(timeout=20.0)
    assert out == "StoppedByUser: confirmed\n"
    assert bench.host.returncode == 5
    assert bench.off_after(sent_s) < STOP_S + SLACK_S
    assert bench.states()[-3:] == ["armed", "stopping", "off"]  # the lease, which ends tripped, has no part in it


@pytest.mark.parametrize("name", ["SIGKILL", "SIGSTOP"])
def test_a_host_that_is_gone_or_frozen_is_stopped_by_the_device(bench: Bench, name: str) -> None:
    assert bench.duty()[1] == 2500
    sent_s = time.monotonic()
    os.kill(bench.host.pid, getattr(signal, name))
    assert bench.off_after(sent_s) < LEASE_MS / 1000 + STOP_S + SLACK_S
    assert bench.states()[-3:] == ["armed", "stopping", "tripped"]


def test_an_unplugged_cable_is_stopped_by_the_device_and_told_by_the_host(bench: Bench) -> None:
    assert bench.duty()[1] == 2500
    sent_s = time.monotonic()
    bench.fault("unplug on")
    assert bench.off_after(sent_s) < LEASE_MS / 1000 + STOP_S + SLACK_S
    out, _ = bench.host.communicate(timeout=20.0)
    assert out.startswith("LinkLost: NOT CONFIRMED: cut the power")
    assert bench.host.returncode == 4
