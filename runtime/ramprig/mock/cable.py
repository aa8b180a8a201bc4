"""The cable between a mock and its host: time in nanoseconds, spoilt bytes, late delivery, and a plug that comes out.

A `Cable` drives its device: `run` lets time pass. Who calls it decides whether that time is the system's or nobody's.
"""

from __future__ import annotations

import random
from typing import Protocol

from ramprig.port.faulty import Corruptor, Rates

from .board import Board
from .faults import FaultSwitches

HELD_MAX_BYTES = 65536
"""Most bytes held back by the delivery grid, or by a host that does not read; older ones are lost."""

NS_PER_MS = 1_000_000
NS_PER_US = 1000


class Device(Protocol):
    """What hangs on a cable: a `MockDevice`, or another device with its face."""

    faults: FaultSwitches

    @property
    def board(self) -> Board:
        """The board that answers now."""
        ...

    def receive(self, data: bytes) -> None:
        """Put bytes from the host on the receive line."""
        ...

    def urgent(self, data: bytes) -> None:
        """Take back what of the host's bytes is still unsent, and put these on the line."""
        ...

    def send_break(self) -> None:
        """Hold the receive line in the BREAK condition."""
        ...

    def opened(self) -> None:
        """A host has opened the port."""
        ...

    def tick(self) -> None:
        """Let one tick pass."""
        ...

    def advance(self, ticks: int) -> int:
        """Let up to `ticks` ticks pass, fewer where the board sends something; returns how many have passed."""
        ...

    def transmit(self) -> bytes:
        """What the board has sent since the last call."""
        ...


class Cable:
    """One cable with its device. `now_ns` is the time run to; it begins at 0 and never runs backwards.

    `is_out` is True while the fault `unplug` is on: what is sent then is lost either way, and the device runs on.
    """

    def __init__(self, device: Device, *, seed: int = 0) -> None:
        self.device = device
        self.now_ns = 0
        self._device_ns = 0
        self._garbage = random.Random(f"{seed}/garbage")
        self._to_device = Corruptor(Rates(), seed=f"{seed}/to device")
        self._to_host = Corruptor(Rates(), seed=f"{seed}/to host")
        self._rates = Rates()
        self._held: list[tuple[int, bytes]] = []

    @property
    def is_out(self) -> bool:
        """Whether the cable is pulled out."""
        return bool(self.device.faults.get("unplug"))

    @property
    def tick_ns(self) -> int:
        """The true length of the board's tick."""
        drift_ppm = self.device.faults.get("clock_drift")
        return round(self.device.board.tick_us * NS_PER_US * (1.0 + drift_ppm * 1e-6))

    def opened(self) -> None:
        """A host has opened the port: what it meets there by the faults that are on."""
        self._held.clear()
        self.device.opened()
        count = int(self.device.faults.get("garbage_after_open"))
        if count:
            self._held.append((self.now_ns, self._garbage.randbytes(count)))

    def send(self, data: bytes) -> None:
        """Put bytes from the host on the wire now."""
        if not self.is_out:
            self._renew_rates()
            self.device.receive(self._to_device.apply(data))

    def urgent(self, data: bytes) -> None:
        """Take back what has not left the host and send this now."""
        if not self.is_out:
            self._renew_rates()
            self.device.urgent(self._to_device.apply(data))

    def send_break(self) -> None:
        """Hold the line to the device in the BREAK condition."""
        if not self.is_out:
            self.device.send_break()

    def run(self, until_ns: int) -> bytes:
        """Let time pass up to `until_ns`, or up to the moment at which bytes reach the host, and return these.

        `now_ns` is then that moment; it does not move where `until_ns` has passed.
        """
        while True:
            due = self._take_due()
            if due:
                return due
            release_ns = self._held[0][0] if self._held else until_ns
            target_ns = max(self.now_ns, min(until_ns, release_ns))
            tick_ns = self.tick_ns
            ticks = (target_ns - self._device_ns) // tick_ns
            if ticks > 0:
                self._device_ns += self.device.advance(ticks) * tick_ns
                output = self.device.transmit()
                if output:
                    self.now_ns = max(self.now_ns, self._device_ns)
                    self._hold(output)
                    continue
                if (target_ns - self._device_ns) // tick_ns > 0:
                    continue
            self.now_ns = target_ns
            if target_ns >= until_ns:
                return self._take_due()

    def hurry(self) -> None:
        """Begin the device's next tick now, though it is not due yet; the one after comes at its time.

        For a host in real time: it gets its answer without waiting for the grid of ticks.
        """
        if self._device_ns <= self.now_ns:
            self._device_ns += self.tick_ns
            self.device.tick()
            output = self.device.transmit()
            if output:
                self._hold(output)

    def _renew_rates(self) -> None:
        faults = self.device.faults
        rates = Rates(flip=faults.get("bit_errors"), drop=faults.get("dropped_bytes"))
        if rates != self._rates:
            self._rates = rates
            self._to_device.set_rates(rates)
            self._to_host.set_rates(rates)

    def _hold(self, output: bytes) -> None:
        """Take what the device has sent, to be handed over now or at the next point of the delivery grid."""
        if self.is_out:
            self._held.clear()
            return
        self._renew_rates()
        data = self._to_host.apply(output)
        grid_ns = round(self.device.faults.get("delivery_grid") * NS_PER_MS)
        release_ns = -(-self.now_ns // grid_ns) * grid_ns if grid_ns else self.now_ns
        self._held.append((release_ns, data))
        while sum(len(piece) for _, piece in self._held) > HELD_MAX_BYTES:
            del self._held[0]

    def _take_due(self) -> bytes:
        if not self._held:
            return b""
        count = 0
        while count < len(self._held) and self._held[count][0] <= self.now_ns:
            count += 1
        due = b"".join(piece for _, piece in self._held[:count])
        del self._held[:count]
        return due
