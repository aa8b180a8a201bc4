"""A mock for other processes: it runs on whether or not a host is there, paced by the clock or by the host's grants."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import TextIO

from ramprig.errors import LinkLost, UsageError
from ramprig.port.clock import NS_PER_S
from ramprig.port.lockstep import LockstepPeer, encode_reply
from ramprig_link.words import Cause

from .cable import NS_PER_US, Cable
from .controller import Controller
from .device import MockDevice
from .endpoint import Endpoint
from .faults import known, parse_fault, parse_value
from .port import Pace

TICK_WAIT_S = 0.001
"""Longest sleep while a host is there: about a tick."""

LAG_MAX_NS = NS_PER_S
"""A server that was held up longer than this lets the lost time go, instead of racing after it."""


class TraceFile:
    """Writes `host_s,elapsed_ticks,tick,state,duty_0,...` to a CSV file, a row when state or duties change.

    `host_s` is the system's monotonic clock, so that a test in another process can tell how late the bridge went off.
    A row is on disk, as far as the program can see to it, when it has been written.
    """

    def __init__(self, file: TextIO, *, axes: int) -> None:
        self._file = file
        self._axes = axes
        self._last: tuple[object, ...] = ()
        file.write(",".join(("host_s", "elapsed_ticks", "tick", "state", *(f"duty_{i}" for i in range(axes)))) + "\n")
        file.flush()

    def __call__(self, elapsed: int, board: Controller | None) -> None:
        """Take the end of a tick."""
        if board is None:
            now: tuple[object, ...] = ("booting", *(0,) * self._axes)
        else:
            now = (board.state.word, *(drive.duty for drive in board.drives))
        if now != self._last:
            self._last = now
            tick = 0 if board is None else board.age & 0xFFFFFFFF
            self._file.write(",".join(map(str, (f"{time.monotonic():.6f}", elapsed, tick, *now))) + "\n")
            self._file.flush()


class Server:
    """One device at one endpoint. `step` does a little work and returns; `run` goes on until `stop` says so.

    `say` is told what a person should know, such as the port's new name after a replug.
    """

    def __init__(
        self,
        device: MockDevice,
        endpoint: Endpoint,
        *,
        pace: Pace = "real",
        seed: int = 0,
        say: Callable[[str], None] = print,
        now_ns: Callable[[], int] = time.monotonic_ns,
    ) -> None:
        self.device = device
        self.endpoint = endpoint
        self._cable = Cable(device, seed=seed)
        self._paced = pace == "real"
        self._peer = LockstepPeer()
        self._say = say
        self._now_ns = now_ns
        self._start_ns = now_ns()
        self._is_out = False

    def run(self, stop: Callable[[], bool], *, commands: Callable[[], str | None] = lambda: None) -> None:
        """Serve until `stop()`; lines from `commands()`, None where there is none, are obeyed in between."""
        while not stop():
            while (line := commands()) is not None:
                self._say(self.obey(line))
            self.step()

    def step(self, wait_s: float = TICK_WAIT_S) -> None:
        """Let the device catch up, and wait up to `wait_s` for the host."""
        self._watch_cable()
        if self._paced:
            self._catch_up()
        data, came = self.endpoint.poll(wait_s)
        if came:
            self._peer = LockstepPeer()
            if self._paced:
                self._catch_up()
            self._cable.opened()
        if not data:
            return
        if self._paced:
            self._catch_up()
            self._cable.send(data)
            self._cable.hurry()
            self._catch_up()
        else:
            self._grant(data)

    def _watch_cable(self) -> None:
        if self._cable.is_out == self._is_out:
            return
        self._is_out = self._cable.is_out
        if self._is_out:
            self.endpoint.unplug()
        else:
            self.endpoint.plug()
            self._say(self.endpoint.name)

    def _catch_up(self) -> None:
        """Run the device to the present and send on what it sends."""
        now_ns = self._now_ns() - self._start_ns
        lag_ns = now_ns - self._cable.now_ns
        if lag_ns > LAG_MAX_NS:
            self._start_ns += lag_ns - LAG_MAX_NS
            now_ns -= lag_ns - LAG_MAX_NS
        while data := self._cable.run(now_ns):
            self.endpoint.send(data)

    def _grant(self, data: bytes) -> None:
        """Serve the host's grants of time; a host that is out of step is dropped."""
        try:
            grants = self._peer.feed(data)
        except LinkLost as error:
            self._say(str(error))
            self._peer = LockstepPeer()
            return
        for grant in grants:
            if grant.data:
                self._cable.send(grant.data)
            start_us = self._cable.now_ns // NS_PER_US
            sent = self._cable.run((start_us + grant.advance_us) * NS_PER_US)
            self.endpoint.send(encode_reply(self._cable.now_ns // NS_PER_US, sent))

    def obey(self, line: str) -> str:
        """Carry out a line of control and return what came of it; never raises for what was typed."""
        words = line.split()
        try:
            match words:
                case ["fault", text]:
                    name, axis, amount = parse_fault(text)
                    self.device.faults.set(name, amount, axis=axis)
                case ["fault", text, value]:
                    name, axis, _ = parse_fault(text)
                    self.device.faults.set(name, parse_value(known(name), value), axis=axis)
                case ["faults"]:
                    on = [f"{name}:{axis}={amount:g}" for (name, axis), amount in self.device.faults.on().items()]
                    return "faults " + " ".join(on or ["none"])
                case ["reset"]:
                    self.device.restart(Cause.EXTERNAL)
                case ["break"]:
                    self._cable.send_break()
                case _:
                    return f"error: '{line.strip()}' is not 'fault NAME on|off|VALUE', 'faults', 'reset' or 'break'"
        except UsageError as error:
            return f"error: {error}"
        return "ok " + " ".join(words)
