"""Whatever the line says, a session raises nothing but our own exceptions, ends in time, and keeps its books."""

from __future__ import annotations

import random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.errors import Bug, RamprigError
from ramprig.mock import MockPort
from ramprig.port.base import ClosesItself
from ramprig.port.clock import Clock
from ramprig_link.check import seal
from ramprig_link.samples import encode_plain
from ramprig_link.words import NOTICES, Reason, State, Trip
from session_rig import MASK, Rig

WORDS = [*NOTICES, *Reason, *(state.word for state in State), *(trip.word for trip in Trip), "", "x", "-0"]


class LyingPort(ClosesItself):
    """Puts lines with a right check and made-up content between what the device says."""

    def __init__(self, port: MockPort, seed: int, rate: float) -> None:
        self.name = port.name
        self.clock: Clock = port.clock
        self.port = port
        self.random = random.Random(seed)
        self.rate = rate
        self.last_tag = "00"
        self.early = b""

    def read(self, timeout_s: float) -> bytes:
        if self.early:
            data, self.early = self.early, b""
            return data
        data = self.port.read(timeout_s)
        if data.endswith(b"\n") and self.random.random() < self.rate:
            data += self.lie()
        return data

    def lie(self) -> bytes:
        chance = self.random
        number = chance.choice([0, 1, 255, 2**31, 2**32 - 1, chance.randrange(2**32)])
        device = self.port.device.controller
        tick = chance.choice([number, device.age if device is not None else 0])
        fields = " ".join(
            str(chance.choice([chance.randrange(-(2**31), 2**32), *WORDS])) for _ in range(chance.randrange(14))
        )
        tag = chance.choice([f"{chance.randrange(256):02x}", self.last_tag])
        body = chance.choice(
            [
                f"{tag} ok {tick} {fields}",
                f"{tag} no {tick} {chance.choice(WORDS)}",
                f"N{tag} {chance.choice(WORDS)} {tick} {fields}",
                f"D{tag} {encode_plain(tick % 2**32, 1 + number % 65535, MASK, (0, 0, 0, 0, 0))}",
                f"D{tag} {encode_plain(tick % 2**32, 2, MASK, (1, 2, 3, 4, 5))}",
                fields,
            ]
        )
        if chance.random() < 0.2:
            return chance.randbytes(chance.randrange(300)) + b"\n"
        return seal(body.encode("ascii"))

    def write(self, data: bytes) -> None:
        self.last_tag = data[:2].decode("ascii")
        if self.random.random() < self.rate:
            self.early = self.lie()
        self.port.write(data)

    def urgent(self, data: bytes) -> bool:
        return self.port.urgent(data)

    def send_break(self) -> bool:
        return self.port.send_break()

    def close(self) -> None:
        self.port.close()


def live(seed: int, rate: float) -> None:
    """A short life on a lying line; whatever it comes to, it is one of ours, and soon."""
    rig: Rig | None = None
    try:
        rig = Rig(wrap=lambda port: LyingPort(port, seed, rate))
        rig.session.log(2, MASK)
        rig.session.arm(1000)
        rig.drive(2000)
        rig.pump(2.0)
        rig.session.stop(1)
        rig.session.stop_log()
        rig.session.why()
    except Bug:
        raise
    except RamprigError:
        pass
    if rig is not None:
        assert rig.now < 60.0
        for account in rig.session._core.sampling.ended:
            assert account.expected == account.received + account.lost
            assert account.lost == sum(gap.count for gap in account.gaps)


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 2**32), rate=st.sampled_from([0.02, 0.2, 1.0]))
def test_a_lying_line_brings_nothing_but_our_exceptions(seed: int, rate: float) -> None:
    live(seed, rate)


@pytest.mark.soak
def test_thousands_of_lying_lines_bring_nothing_but_our_exceptions() -> None:
    for seed in range(3000):
        live(seed, (0.02, 0.2, 1.0)[seed % 3])
