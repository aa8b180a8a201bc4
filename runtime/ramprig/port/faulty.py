"""A port with faults put in on purpose: flipped bits, lost and doubled bytes, late delivery, a pulled cable.

Seeded, so that the same seed makes the same faults at the same bytes, however the bytes are cut into reads
and writes. Each direction has its own stream of chance, so that traffic one way never changes what happens
the other way. Works in the time of the port inside, virtual or real, and can be switched while running.
"""

from __future__ import annotations

import math
import random
from collections import deque
from dataclasses import dataclass

from ramprig.errors import LinkLost
from ramprig.port.base import ClosesItself, Port, at_port
from ramprig.port.clock import Clock

HELD_MAX_BYTES = 65536
"""Most bytes the delivery grid holds back; more are handed over early, and counted."""

TIME_GRAIN_S = 1e-6
"""A wait shorter than this counts as over, so that rounding never makes a read spin."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Rates:
    """Probabilities for each byte, 0 to 1: `flip` one bit of it, `drop` it, `duplicate` it."""

    flip: float = 0.0
    drop: float = 0.0
    duplicate: float = 0.0

    def __post_init__(self) -> None:
        for name in ("flip", "drop", "duplicate"):
            if not 0.0 <= getattr(self, name) <= 1.0:
                raise ValueError(f"{name} is a probability and lies between 0 and 1, not {getattr(self, name)}")


@dataclass(slots=True)
class Count:
    """What was done to the bytes of one direction so far."""

    passed: int = 0
    flipped: int = 0
    dropped: int = 0
    duplicated: int = 0


class Corruptor:
    """Applies `Rates` to one direction's bytes. The distance to each next fault is drawn, so clean bytes
    cost nothing.
    """

    def __init__(self, rates: Rates, *, seed: str) -> None:
        self._random = random.Random(seed)
        self.count = Count()
        self.set_rates(rates)

    def set_rates(self, rates: Rates) -> None:
        """Use other rates from the next byte on."""
        self._rates = rates
        self._to_flip = self._gap(rates.flip)
        self._to_drop = self._gap(rates.drop)
        self._to_duplicate = self._gap(rates.duplicate)

    def _gap(self, probability: float) -> float:
        """Good bytes before the next fault: geometric, drawn by inversion of its distribution."""
        if probability <= 0.0:
            return math.inf
        if probability >= 1.0:
            return 0
        return math.floor(math.log(1.0 - self._random.random()) / math.log1p(-probability))

    def apply(self, data: bytes) -> bytes:
        """The bytes that come out where `data` goes in."""
        length = len(data)
        self.count.passed += length
        if min(self._to_flip, self._to_drop, self._to_duplicate) >= length:
            self._to_flip -= length
            self._to_drop -= length
            self._to_duplicate -= length
            return data
        result = bytearray()
        for byte in data:
            result += self._one(byte)
        return bytes(result)

    def _one(self, byte: int) -> bytes:
        flip, drop, duplicate = self._to_flip < 1, self._to_drop < 1, self._to_duplicate < 1
        self._to_flip = self._gap(self._rates.flip) if flip else self._to_flip - 1
        self._to_drop = self._gap(self._rates.drop) if drop else self._to_drop - 1
        self._to_duplicate = self._gap(self._rates.duplicate) if duplicate else self._to_duplicate - 1
        if drop:
            self.count.dropped += 1
            return b""
        if flip:
            self.count.flipped += 1
            byte ^= 1 << self._random.randrange(8)
        if duplicate:
            self.count.duplicated += 1
            return bytes((byte, byte))
        return bytes((byte,))


class FaultyPort(ClosesItself):
    """A port around `port` that spoils what passes, both ways.

    `count_in` and `count_out` tell what was done to the bytes read and written. What is sent by `urgent` is
    spoilt at the same rates, from a stream of chance of its own.
    """

    def __init__(
        self,
        port: Port,
        *,
        seed: int = 0,
        flip: float = 0.0,
        drop: float = 0.0,
        duplicate: float = 0.0,
        delay_grid_s: float | None = None,
    ) -> None:
        """`delay_grid_s` holds what arrives back to the next multiple of it on the port's clock (0.016: a
        common USB adapter's latency timer); None hands it over at once.
        """
        rates = Rates(flip=flip, drop=drop, duplicate=duplicate)
        self.name = f"{port.name} with faults"
        self._port = port
        self._in = Corruptor(rates, seed=f"{seed}/in")
        self._out = Corruptor(rates, seed=f"{seed}/out")
        self._out_urgent = Corruptor(rates, seed=f"{seed}/urgent")
        self._is_cut = False
        self._held: deque[tuple[float, bytes]] = deque()
        self._held_bytes = 0
        self.early_bytes = 0
        self.set_delay_grid(delay_grid_s)

    @property
    def clock(self) -> Clock:
        """The inner port's clock."""
        return self._port.clock

    @property
    def count_in(self) -> Count:
        """What was done to the bytes read."""
        return self._in.count

    @property
    def count_out(self) -> Count:
        """What was done to the bytes written, those of `urgent` left out."""
        return self._out.count

    def set_rates(self, *, flip: float = 0.0, drop: float = 0.0, duplicate: float = 0.0) -> None:
        """Use these rates from now on, both ways; without arguments: spoil nothing."""
        rates = Rates(flip=flip, drop=drop, duplicate=duplicate)
        for corruptor in (self._in, self._out, self._out_urgent):
            corruptor.set_rates(rates)

    def set_delay_grid(self, delay_grid_s: float | None) -> None:
        """Hold what arrives from now on back to multiples of `delay_grid_s`; None: no longer."""
        if delay_grid_s is not None and not 0.0 < delay_grid_s <= 60.0:
            raise ValueError(f"a delivery grid lies above 0 and up to 60 s, not at {delay_grid_s} s")
        self._grid_s = delay_grid_s

    def cut(self) -> None:
        """Pull the cable: every use raises `LinkLost`, `urgent` reaches nothing, and what was held is lost."""
        self._is_cut = True
        self._held.clear()
        self._held_bytes = 0

    def mend(self) -> None:
        """Put the cable back in."""
        self._is_cut = False

    def _check_cable(self) -> None:
        if self._is_cut:
            raise LinkLost(f"{at_port(self.name)}the cable was pulled out (a fault put in on purpose)")

    def read(self, timeout_s: float) -> bytes:
        """As `Port.read`, spoilt and delayed."""
        self._check_cable()
        deadline_s = self.clock.now() + timeout_s
        while True:
            due = self._take_due()
            if due:
                return due
            now_s = self.clock.now()
            release_s = self._held[0][0] if self._held else math.inf
            wait_s = min(deadline_s, release_s) - now_s
            arrived = self._port.read(max(0.0, wait_s))
            self._check_cable()
            if arrived:
                self._hold(self._in.apply(arrived))
            elif deadline_s - self.clock.now() <= TIME_GRAIN_S:
                return self._take_due()

    def _hold(self, data: bytes) -> None:
        if not data:
            return
        now_s = self.clock.now()
        release_s = now_s
        if self._grid_s is not None:
            release_s = math.ceil((now_s - TIME_GRAIN_S) / self._grid_s) * self._grid_s
        if self._held_bytes + len(data) > HELD_MAX_BYTES:
            self.early_bytes += self._held_bytes + len(data)
            self._held = deque((0.0, chunk) for _, chunk in self._held)
            release_s = 0.0
        self._held.append((release_s, data))
        self._held_bytes += len(data)

    def _take_due(self) -> bytes:
        now_s = self.clock.now() + TIME_GRAIN_S
        due = bytearray()
        while self._held and self._held[0][0] <= now_s:
            due += self._held.popleft()[1]
        self._held_bytes -= len(due)
        return bytes(due)

    def write(self, data: bytes) -> None:
        """As `Port.write`, spoilt."""
        self._check_cable()
        spoilt = self._out.apply(data)
        if spoilt:
            self._port.write(spoilt)

    def urgent(self, data: bytes) -> bool:
        """As `Port.urgent`, spoilt; False where the cable is out."""
        if self._is_cut:
            return False
        return self._port.urgent(self._out_urgent.apply(data))

    def send_break(self) -> bool:
        """As `Port.send_break`; False where the cable is out."""
        return not self._is_cut and self._port.send_break()

    def close(self) -> None:
        """Close the port inside."""
        self._port.close()
