"""Faults put in on purpose: seeded, at the rates asked for, in the port's own time."""

from __future__ import annotations

import math
from collections import deque
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.errors import LinkLost
from ramprig.port.base import ClosesItself, Port
from ramprig.port.clock import VirtualClock
from ramprig.port.faulty import HELD_MAX_BYTES, Corruptor, FaultyPort, Rates

ZEROS = bytes(1_000_000)


class Scripted(ClosesItself):
    """A port in virtual time whose bytes arrive at set moments, and which remembers what it was given."""

    def __init__(self, *arrivals: tuple[float, bytes]) -> None:
        self.name = "scripted"
        self.clock = VirtualClock()
        self.arrivals = deque(arrivals)
        self.sent = bytearray()
        self.is_closed = False

    def read(self, timeout_s: float) -> bytes:
        deadline_s = self.clock.now() + timeout_s
        if self.arrivals and self.arrivals[0][0] <= deadline_s:
            at_s, data = self.arrivals.popleft()
            self.clock.advance(max(0.0, at_s - self.clock.now()))
            return data
        self.clock.advance(timeout_s)
        return b""

    def write(self, data: bytes) -> None:
        self.sent += data

    def urgent(self, data: bytes) -> bool:
        self.sent += data
        return True

    def send_break(self) -> bool:
        return True

    def close(self) -> None:
        self.is_closed = True


def test_without_faults_everything_passes_as_it_is() -> None:
    inner = Scripted((0.5, b"D00"), (0.7, b"D01"))
    port: Port = FaultyPort(inner)
    port.write(b"who\n")
    assert port.read(1.0) == b"D00"
    assert inner.clock.now() == 0.5
    assert port.read(0.1) == b""
    assert port.read(1.0) == b"D01"
    assert port.urgent(b"\nstop\n")
    assert port.send_break()
    assert bytes(inner.sent) == b"who\n\nstop\n"
    port.close()
    assert inner.is_closed


@pytest.mark.parametrize("kind", ["flip", "drop", "duplicate"])
def test_faults_come_at_the_rate_asked_for(kind: str) -> None:
    """Binomial with n = 1e6, p = 1e-3: mean 1000, standard deviation 31.6; five of them either way."""
    corruptor = Corruptor(Rates(**{kind: 1e-3}), seed="7")
    out = corruptor.apply(ZEROS)
    counts = corruptor.count
    assert counts.passed == len(ZEROS)
    found = {"flip": counts.flipped, "drop": counts.dropped, "duplicate": counts.duplicated}
    assert abs(found.pop(kind) - 1000) < 5 * math.sqrt(1000 * 0.999)
    assert list(found.values()) == [0, 0]
    assert len(out) == len(ZEROS) - counts.dropped + counts.duplicated
    assert sum(byte.bit_count() for byte in out) == counts.flipped


def test_every_bit_of_a_byte_is_flipped_now_and_then() -> None:
    out = Corruptor(Rates(flip=1.0), seed="7").apply(bytes(1000))
    assert set(out) == {1 << bit for bit in range(8)}


def test_certain_faults_hit_every_byte() -> None:
    assert Corruptor(Rates(drop=1.0), seed="7").apply(b"abc") == b""
    assert Corruptor(Rates(duplicate=1.0), seed="7").apply(b"abc") == b"aabbcc"


@given(seed=st.integers(0, 1000), data=st.binary(max_size=300), cuts=st.lists(st.integers(0, 300), max_size=8))
def test_the_same_seed_spoils_the_same_bytes_however_they_are_cut(seed: int, data: bytes, cuts: list[int]) -> None:
    rates = Rates(flip=0.05, drop=0.05, duplicate=0.05)
    whole = Corruptor(rates, seed=str(seed)).apply(data)
    edges = [0, *sorted(min(cut, len(data)) for cut in cuts), len(data)]
    piecewise = Corruptor(rates, seed=str(seed))
    assert b"".join(piecewise.apply(data[a:b]) for a, b in pairwise(edges)) == whole


def test_one_direction_does_not_change_what_happens_to_the_other() -> None:
    quiet, busy = Scripted((0.0, ZEROS[:9000])), Scripted((0.0, ZEROS[:9000]))
    port, busy_port = FaultyPort(quiet, seed=3, flip=0.01), FaultyPort(busy, seed=3, flip=0.01)
    busy_port.write(ZEROS[:5000])
    busy_port.urgent(b"\nstop\n")
    assert port.read(0.0) == busy_port.read(0.0)


def test_both_directions_are_spoilt_and_counted() -> None:
    inner = Scripted((0.0, ZEROS[:10_000]))
    port = FaultyPort(inner, seed=1, flip=0.01)
    port.write(ZEROS[:10_000])
    got = port.read(1.0)
    assert sum(byte.bit_count() for byte in got) == port.count_in.flipped > 50
    assert sum(byte.bit_count() for byte in inner.sent) == port.count_out.flipped > 50
    assert got != bytes(inner.sent)


def test_rates_can_be_switched_while_running() -> None:
    inner = Scripted()
    port = FaultyPort(inner, seed=1)
    port.write(b"clean ")
    port.set_rates(drop=1.0)
    port.write(b"lost ")
    port.set_rates()
    port.write(b"clean")
    assert bytes(inner.sent) == b"clean clean"


def test_bytes_are_held_back_to_the_next_point_of_the_grid() -> None:
    inner = Scripted((0.001, b"a"), (0.015, b"b"), (0.016, b"c"), (0.017, b"d"))
    port = FaultyPort(inner, delay_grid_s=0.016)
    deliveries = []
    for _ in range(2):
        data = port.read(1.0)
        deliveries.append((round(inner.clock.now(), 6), data))
    assert b"".join(data for _, data in deliveries) == b"abcd"
    assert deliveries[0] == (0.016, b"abc")
    assert deliveries[1] == (0.032, b"d")


def test_a_read_shorter_than_the_grid_ends_in_time_and_loses_nothing() -> None:
    inner = Scripted((0.001, b"a"))
    port = FaultyPort(inner, delay_grid_s=0.016)
    assert port.read(0.010) == b""
    assert inner.clock.now() == pytest.approx(0.010, abs=1e-9)
    assert port.read(0.010) == b"a"
    assert inner.clock.now() == pytest.approx(0.016, abs=1e-9)


@given(st.lists(st.tuples(st.floats(0.0, 1.0), st.binary(min_size=1, max_size=20)), max_size=20))
def test_the_grid_keeps_all_bytes_in_order_and_is_never_late(arrivals: list[tuple[float, bytes]]) -> None:
    arrivals = sorted(arrivals, key=lambda arrival: arrival[0])
    inner = Scripted(*arrivals)
    port = FaultyPort(inner, delay_grid_s=0.016)
    got = b""
    while inner.clock.now() < 1.1:
        got += port.read(0.05)
        due = b"".join(data for at_s, data in arrivals if at_s + 0.016 <= inner.clock.now())
        assert len(got) >= len(due)
    assert got == b"".join(data for _, data in arrivals)


def test_what_is_held_back_is_bounded() -> None:
    inner = Scripted(*[(0.001, ZEROS[: HELD_MAX_BYTES // 2])] * 3)
    port = FaultyPort(inner, delay_grid_s=60.0)
    got = port.read(1.0)
    assert len(got) == port.early_bytes == HELD_MAX_BYTES // 2 * 3
    assert inner.clock.now() < 1.0


def test_a_cut_cable_loses_the_link_until_it_is_mended() -> None:
    inner = Scripted((0.001, b"held"), (0.5, b"later"))
    port = FaultyPort(inner, delay_grid_s=0.1)
    assert port.read(0.01) == b""
    port.cut()
    with pytest.raises(LinkLost, match="the cable was pulled out"):
        port.read(0.1)
    with pytest.raises(LinkLost, match="the cable was pulled out"):
        port.write(b"x")
    assert port.urgent(b"\nstop\n") is False
    assert port.send_break() is False
    assert bytes(inner.sent) == b""
    port.mend()
    assert port.read(1.0) == b"later"


@pytest.mark.parametrize("rates", [{"flip": -0.1}, {"drop": 1.1}, {"duplicate": float("nan")}])
def test_a_rate_that_is_no_probability_is_refused(rates: dict[str, float]) -> None:
    with pytest.raises(ValueError, match="is a probability"):
        Rates(**rates)


@pytest.mark.parametrize("grid_s", [0.0, -0.016, 61.0, float("nan")])
def test_a_grid_that_is_none_is_refused(grid_s: float) -> None:
    with pytest.raises(ValueError, match="delivery grid"):
        FaultyPort(Scripted(), delay_grid_s=grid_s)
