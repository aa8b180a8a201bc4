"""Measures a request's round trip on a pseudo-terminal: ours, to a served mock, against pyserial to a bare echo.

Ours is everything: the session, the codec with its checks, the port, and a whole device that runs in another process.
The echo is a process that does nothing but answer every line with as many bytes as the mock's answer has. A third
figure parts the two ends: pyserial sends ready-made lines to the mock, so that only the mock's end is ours. All take
turns, each request PAUSE_S after the one before: a device with ticks of 1 ms answers at once only if it is not asked
twice in a tick, and a session in earnest asks some ten times a second. POSIX only.

    python scripts/dev/bench_roundtrip.py

The mock is served with a wire that takes no time (`--baud 0`), since the echo's takes none either.
"""

from __future__ import annotations

import os
import statistics
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from functools import partial
from itertools import cycle

import serial

from ramprig.port.open import open_port
from ramprig.session import Session
from ramprig_link.check import seal

AIM = 1.5
BAUD = 115_200
PAUSE_S = 0.0025
WARM_UP_REQUESTS = 50
TICK_DIGITS = 5

ECHO = """
import os, pty, sys, tty
master, slave = pty.openpty()
tty.setraw(slave)
print(os.ttyname(slave), flush=True)
answer = b"x" * int(sys.argv[1])
pending = b""
while True:
    pending += os.read(master, 4096)
    while b"\\n" in pending:
        pending = pending.partition(b"\\n")[2]
        os.write(master, answer)
"""


@dataclass(frozen=True, slots=True)
class RoundTrips:
    """Medians in s, all with as many bytes: our session to a mock, pyserial to a mock, pyserial to a bare echo."""

    ours_s: float
    mock_s: float
    echo_s: float
    request_bytes: int
    answer_bytes: int

    @property
    def ratio(self) -> float:
        """Ours against the echo's."""
        return self.ours_s / self.echo_s

    @property
    def wire_s(self) -> float:
        """What the same bytes take on a wire of 115200 baud, ten bits a character."""
        return (self.request_bytes + self.answer_bytes) * 10 / BAUD

    @property
    def ratio_on_a_wire(self) -> float:
        """As `ratio`, with the wire's time added to both: computed, not measured."""
        return (self.ours_s + self.wire_s) / (self.echo_s + self.wire_s)


class Peer:
    """A process that prints the name of its port first; ended at the end."""

    def __init__(self, *command: str) -> None:
        self._process = subprocess.Popen(
            [sys.executable, *command], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
        )
        assert self._process.stdout is not None
        self.name = self._process.stdout.readline().strip()

    def end(self) -> None:
        """End the process."""
        self._process.terminate()
        self._process.communicate(timeout=10)


class Asker:
    """pyserial with lines made beforehand: `ask` is one round trip, in s."""

    def __init__(self, port: serial.Serial, requests: Iterator[bytes], answer_bytes: int) -> None:
        self._port = port
        self._requests = requests
        self._answer_bytes = answer_bytes

    def ask(self) -> float:
        """One round trip."""
        request = next(self._requests)
        began_s = time.perf_counter()
        self._port.write(request)
        left = self._answer_bytes
        while left:
            piece = self._port.read(left)
            if not piece:
                raise SystemExit(f"no answer came to {request!r}")
            left -= len(piece)
        return time.perf_counter() - began_s


def beats() -> Iterator[bytes]:
    """`beat` lines with running tags."""
    return cycle([seal(b"%02x beat" % tag) for tag in range(255)])


def round_trips(*, requests: int = 600, tick_digits: int = TICK_DIGITS) -> RoundTrips:
    """Measure all three, in turns, from when the mock's tick has so many digits: its answers then stay as long."""
    command = ("-m", "ramprig", "mock", "--baud", "0")
    with ExitStack() as ends:
        first, second = Peer(*command), Peer(*command)
        ends.callback(first.end)
        ends.callback(second.end)
        session = ends.enter_context(Session.open(open_port(first.name)))
        port = ends.enter_context(serial.Serial(second.name, 115200, timeout=1.0))
        request_bytes = len(next(beats()))
        answer_bytes = _answer_bytes(port, tick_digits)
        echo = Peer("-c", ECHO, str(answer_bytes))
        ends.callback(echo.end)
        echo_port = ends.enter_context(serial.Serial(echo.name, 115200, timeout=1.0))
        ways: list[Callable[[], float]] = [
            partial(_ours, session),
            Asker(port, beats(), answer_bytes).ask,
            Asker(echo_port, cycle([b"x" * (request_bytes - 1) + b"\n"]), answer_bytes).ask,
        ]
        times_s = [[_after_a_pause(way) for way in ways] for _ in range(WARM_UP_REQUESTS + requests)]
    ours_s, mock_s, echo_s = (statistics.median(column) for column in zip(*times_s[WARM_UP_REQUESTS:], strict=True))
    return RoundTrips(ours_s, mock_s, echo_s, request_bytes, answer_bytes)


def _answer_bytes(port: serial.Serial, tick_digits: int) -> int:
    """Length of an answer to `beat` once the mock's tick has so many digits; five last for a minute and a half."""
    while True:
        port.write(seal(b"ff beat"))
        answer = port.read_until(b"\n")
        if len(answer.split(b" ")[2]) >= tick_digits:
            return len(answer)
        time.sleep(0.1)


def _after_a_pause(way: Callable[[], float]) -> float:
    time.sleep(PAUSE_S)
    return way()


def _ours(session: Session) -> float:
    began_s = time.perf_counter()
    session.ask("beat")
    return time.perf_counter() - began_s


def lines() -> list[str]:
    """The figure as sentences."""
    if os.name != "posix":
        return ["round trip:          not measured: no pseudo-terminals here"]
    found = round_trips()
    ours_us, mock_us, echo_us = (round(time_s * 1e6) for time_s in (found.ours_s, found.mock_s, found.echo_s))
    return [
        f"round trip:          {found.ratio:.2f} times a bare pyserial echo at the median (aim {AIM} or less)",
        f"                     session to a mock {ours_us} us, pyserial to a mock {mock_us} us, pyserial to the echo "
        f"{echo_us} us;",
        f"                     {found.request_bytes} bytes there and {found.answer_bytes} back; with their "
        f"{found.wire_s * 1e3:.2f} ms on a {BAUD}-baud wire added to both "
        f"{found.ratio_on_a_wire:.2f} times (computed)",
    ]


def main() -> None:
    """Print the figure."""
    print("\n".join(lines()))


if __name__ == "__main__":
    main()
