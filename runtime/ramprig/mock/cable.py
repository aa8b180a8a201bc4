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

    def advance(self, ticks: int, *, patient: bool = False) -> int:
        """Let up to `ticks` ticks pass, fewer where the board sends something; returns how many have passed.

        With `patient` it need not end for data lines alone.
        """
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
        self._looked_at = -1
        self._look()
        self._held: list[tuple[int, bytes]] = []
        self._held_bytes = 0

    @property
    def is_out(self) -> bool:
        """Whether the cable is pulled out."""
        if self.device.faults.changes != self._looked_at:
            self._look()
        return self._is_out

    @property
    def is_sound(self) -> bool:
        """Whether no fault of the cable is on."""
        if self.device.faults.changes != self._looked_at:
            self._look()
        return self._is_sound

    @property
    def tick_ns(self) -> int:
        """The true length of the board's tick."""
        if self.device.faults.changes != self._looked_at:
            self._look()
        return self._tick_ns

    def _look(self) -> None:
        """Take over the faults of the cable; done again only when a fault was switched."""
        faults = self.device.faults
        self._looked_at = faults.changes
        self._is_out = bool(faults.get("unplug"))
        self._tick_ns = round(self.device.board.tick_us * NS_PER_US * (1.0 + faults.get("clock_drift") * 1e-6))
        self._grid_ns = round(faults.get("delivery_grid") * NS_PER_MS)
        rates = Rates(flip=faults.get("bit_errors"), drop=faults.get("dropped_bytes"))
        if rates != self._rates:
            self._rates = rates
            self._to_device.set_rates(rates)
            self._to_host.set_rates(rates)
        self._is_sound = not (self._is_out or self._grid_ns or rates.flip or rates.drop)

    def opened(self) -> None:
        """A host has opened the port: what it meets there by the faults that are on."""
        self._drop_held()
        self.device.opened()
        count = int(self.device.faults.get("garbage_after_open"))
        if count:
            self._held.append((self.now_ns, self._garbage.randbytes(count)))
            self._held_bytes += count

    def send(self, data: bytes) -> None:
        """Put bytes from the host on the wire now."""
        if not self.is_out:
            self.device.receive(self._to_device.apply(data))

    def urgent(self, data: bytes) -> None:
        """Take back what has not left the host and send this now."""
        if not self.is_out:
            self.device.urgent(self._to_device.apply(data))

    def send_break(self) -> None:
        """Hold the line to the device in the BREAK condition."""
        if not self.is_out:
            self.device.send_break()

    def run(self, until_ns: int, *, patient: bool = False) -> bytes:
        """Let time pass up to `until_ns`, or up to the moment at which bytes reach the host, and return these.

        `now_ns` is then that moment; it does not move where `until_ns` has passed. With `patient`, on a sound cable,
        data lines wait for the next other line, or for `until_ns`.
        """
        device = self.device
        while True:
            target_ns = until_ns
            if self._held:
                due = self._take_due()
                if due:
                    return due
                target_ns = min(until_ns, self._held[0][0])
            if target_ns < self.now_ns:
                target_ns = self.now_ns
            if device.faults.changes != self._looked_at:
                self._look()
            tick_ns = self._tick_ns
            ticks = (target_ns - self._device_ns) // tick_ns
            if ticks > 0:
                self._device_ns += device.advance(ticks, patient=patient and self._is_sound) * tick_ns
                output = device.transmit()
                if output:
                    if self._device_ns > self.now_ns:
                        self.now_ns = self._device_ns
                    if self._is_sound and not self._held and device.faults.changes == self._looked_at:
                        return output
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

    def _hold(self, output: bytes) -> None:
        """Take what the device has sent, to be handed over now or at the next point of the delivery grid."""
        if self.is_out:
            self._drop_held()
            return
        data = self._to_host.apply(output)
        grid_ns = self._grid_ns  # as `is_out` has just seen
        release_ns = -(-self.now_ns // grid_ns) * grid_ns if grid_ns else self.now_ns
        self._held.append((release_ns, data))
        self._held_bytes += len(data)
        while self._held_bytes > HELD_MAX_BYTES:
            self._held_bytes -= len(self._held.pop(0)[1])

    def _drop_held(self) -> None:
        self._held.clear()
        self._held_bytes = 0

    def _take_due(self) -> bytes:
        if not self._held:
            return b""
        count = 0
        while count < len(self._held) and self._held[count][0] <= self.now_ns:
            count += 1
        due = b"".join([piece for _, piece in self._held[:count]])
        del self._held[:count]
        self._held_bytes -= len(due)
        return due
