"""The mock as a port in the same process: in virtual time, where reading lets time pass, or paced by a real clock."""

from __future__ import annotations

import threading
from collections import deque
from typing import Generic, Literal, TypeVar

from ramprig.errors import LinkLost
from ramprig.port.base import ClosesItself, at_port
from ramprig.port.clock import NS_PER_S, Clock, SystemClock, VirtualClock

from .cable import Cable, Device
from .device import MockDevice

Pace = Literal["virtual", "real"]

D = TypeVar("D", bound=Device)

WAIT_S = 0.001
"""How long a paced port sleeps between two looks at its device: one tick of most boards."""
URGENTS_MAX = 32
"""So many urgent lines wait for the port's thread; of more the newest, each of which takes back what is before it."""


class DevicePort(ClosesItself, Generic[D]):
    """A `Port` whose far end is `device`.

    With pace `virtual` the clock stands still but for `read`, which moves device and clock on until bytes come or its
    time is over; nobody sleeps. With pace `real` the device catches up with the clock in each call. Either way the
    device runs in the caller's thread; `urgent` and `close` may come from any.
    """

    def __init__(
        self,
        device: D,
        *,
        pace: Pace = "virtual",
        seed: int = 0,
        name: str = "mock:",
        clock: Clock | None = None,
    ) -> None:
        """`clock`, where given, must be a VirtualClock for pace `virtual` and is then moved by this port alone."""
        self.name = name
        self.device = device
        self._cable = Cable(device, seed=seed)
        self._virtual: VirtualClock | None = None
        if pace == "virtual":
            if clock is None:
                clock = VirtualClock(wall_s=SystemClock().wall())
            if not isinstance(clock, VirtualClock):
                raise ValueError("a mock in virtual time needs a VirtualClock")
            self._virtual = clock
        self.clock: Clock = SystemClock() if clock is None else clock
        self._start_s = self.clock.now()
        self._start_ns = round(self._start_s * NS_PER_S)
        self._urgent: deque[bytes] = deque(maxlen=URGENTS_MAX)
        self._early = b""  # what came while the device caught up for a write
        self._closed = threading.Event()
        self._is_closed = False  # the same, looked at several times a turn
        self._cable.opened()

    def _now_ns(self) -> int:
        return round((self.clock.now() - self._start_s) * NS_PER_S)

    def _check(self) -> None:
        if self._is_closed:
            raise LinkLost(f"{self.name} was closed while it was in use")
        if self._cable.is_out:
            raise LinkLost(f"{at_port(self.name)}the cable was pulled out (fault unplug)")
        if self._urgent:
            self._send_urgent()

    def _send_urgent(self) -> None:
        while self._urgent:
            self._cable.urgent(self._urgent.popleft())

    def read(self, timeout_s: float) -> bytes:
        """As `Port.read`, on the port's own clock."""
        self._check()
        if self._virtual is not None:
            return self._run_to(self._virtual, self._virtual.now_ns + max(0, round(timeout_s * NS_PER_S)), False)
        until_ns = self._now_ns() + max(0, round(timeout_s * NS_PER_S))
        while True:
            data = self._catch_up()
            if data or self._now_ns() >= until_ns:
                return data
            self._closed.wait(min(WAIT_S, max(0.0, (until_ns - self._now_ns()) / NS_PER_S)))
            self._check()

    def read_until(self, until_s: float) -> bytes:
        """As `PatientPort.read_until`."""
        clock = self._virtual
        if clock is None:
            return self.read(until_s - self.clock.now())
        self._check()
        return self._run_to(clock, clock.end_of_wait_ns(until_s), True)

    @property
    def is_sound(self) -> bool:
        """As `PatientPort.is_sound`."""
        return self._cable.is_sound

    def _run_to(self, clock: VirtualClock, until_ns: int, patient: bool) -> bytes:
        cable = self._cable
        data = cable.run(until_ns - self._start_ns, patient=patient)
        now_ns = cable.now_ns + self._start_ns
        if now_ns > clock.now_ns:
            clock.now_ns = now_ns
        return data

    def _catch_up(self) -> bytes:
        """Run the device to the clock's present time, and return all it has sent."""
        now_ns = self._now_ns()
        data, self._early = bytearray(self._early), b""
        while True:
            piece = self._cable.run(now_ns)
            data += piece
            if not piece:
                return bytes(data)

    def write(self, data: bytes) -> None:
        """As `Port.write`: the bytes leave now."""
        self._check()
        if self._virtual is None:
            self._early = self._catch_up()
        self._cable.send(data)

    def urgent(self, data: bytes) -> bool:
        """As `Port.urgent`: taken up by the port's thread in its next call, before all else."""
        if self._closed.is_set() or self._cable.is_out:
            return False
        self._urgent.append(data)
        return True

    def send_break(self) -> bool:
        """As `Port.send_break`."""
        self._check()
        self._cable.send_break()
        return True

    def close(self) -> None:
        """Give the port up. The device stands still from here on."""
        self._is_closed = True
        self._closed.set()


class MockPort(DevicePort[MockDevice]):
    """A `Port` to a mock in this process."""
