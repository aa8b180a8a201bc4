"""Virtual time over a byte pipe: the host grants it, the peer uses it, and both agree on every microsecond."""

from __future__ import annotations

import os
import threading
from collections import deque
from contextlib import suppress

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.errors import LinkLost
from ramprig.port.base import ClosesItself, Port
from ramprig.port.clock import VirtualClock
from ramprig.port.lockstep import (
    FRAME_MAX_BYTES,
    REPLY_TIMEOUT_S,
    Grant,
    LockstepPeer,
    LockstepPort,
    encode_grant,
    encode_reply,
)
from ramprig.port.open import open_port


class Device:
    """A device in virtual time: says something at set moments, and remembers what came when."""

    def __init__(self, *says: tuple[int, bytes], start_us: int = 0) -> None:
        self.now_us = start_us
        self.says = deque((start_us + at_us, data) for at_us, data in says)
        self.heard: list[tuple[int, bytes]] = []
        self.grants: list[int] = []

    def run(self, grant: Grant) -> bytes:
        """Carry out one grant, ending early when there is something to say; returns the reply's frame."""
        self.grants.append(grant.advance_us)
        if grant.data:
            self.heard.append((self.now_us, grant.data))
        end_us = self.now_us + grant.advance_us
        if self.says and self.says[0][0] <= end_us:
            at_us, data = self.says.popleft()
            self.now_us = max(self.now_us, at_us)
            return encode_reply(self.now_us, data)
        self.now_us = end_us
        return encode_reply(self.now_us, b"")


class Pipe(ClosesItself):
    """A pipe in one process: what the host writes is answered at once by `answer`, and read in pieces of `piece`."""

    def __init__(self, device: Device | None = None, *, piece: int = 5) -> None:
        self.name = "pipe"
        self.clock = VirtualClock()
        self.device = device
        self.peer = LockstepPeer()
        self.waiting = bytearray()
        self.piece = piece
        self.is_closed = False

    def read(self, timeout_s: float) -> bytes:
        if not self.waiting:
            self.clock.advance(timeout_s)
        data = bytes(self.waiting[: self.piece])
        del self.waiting[: self.piece]
        return data

    def write(self, data: bytes) -> None:
        for grant in self.peer.feed(data):
            if self.device is not None:
                self.waiting += self.device.run(grant)

    def urgent(self, data: bytes) -> bool:
        return False

    def send_break(self) -> bool:
        return False

    def close(self) -> None:
        self.is_closed = True


def linked(device: Device, *, slice_s: float = 0.01) -> tuple[LockstepPort, Pipe]:
    pipe = Pipe(device)
    return LockstepPort(pipe, slice_s=slice_s, clock=VirtualClock()), pipe


def test_a_read_ends_at_the_moment_the_device_speaks() -> None:
    device = Device((25_500, b"N00 boot"))
    port, _ = linked(device)
    made: Port = port
    assert made.read(1.0) == b"N00 boot"
    assert made.clock.now() == 0.0255
    assert device.grants == [0, 10_000, 10_000, 10_000]


def test_a_read_with_nothing_to_read_takes_exactly_its_timeout() -> None:
    port, _ = linked(Device())
    assert port.read(0.0256) == b""
    assert port.clock.now() == 0.0256
    assert port.read(0.0) == b""
    assert port.clock.now() == 0.0256


def test_the_ports_clock_begins_at_its_own_start_whatever_the_peers_is() -> None:
    port, _ = linked(Device((100, b"x"), start_us=3_600_000_000))
    assert port.read(1.0) == b"x"
    assert port.clock.now() == 0.0001


def test_what_is_written_arrives_at_the_time_it_was_written() -> None:
    device = Device()
    port, _ = linked(device)
    port.read(0.005)
    port.write(b"who\n")
    port.write(b"state\n")
    port.read(0.02)
    assert device.heard == [(5000, b"who\nstate\n")]


def test_more_than_a_frame_holds_is_sent_in_several_without_time_passing() -> None:
    device = Device()
    port, _ = linked(device)
    port.write(bytes(3 * FRAME_MAX_BYTES))
    port.read(0.0)
    assert b"".join(data for _, data in device.heard) == bytes(3 * FRAME_MAX_BYTES)
    assert {at_us for at_us, _ in device.heard} == {0}


def test_urgent_takes_the_place_of_what_is_queued() -> None:
    device = Device()
    port, _ = linked(device)
    port.write(b"beat\n")
    assert port.urgent(b"\nstop\n")
    port.write(b"state\n")
    port.read(0.0)
    assert device.heard == [(0, b"\nstop\nstate\n")]
    assert port.send_break() is False


def test_an_urgent_that_could_not_be_carried_is_refused() -> None:
    port, pipe = linked(Device())
    assert port.urgent(bytes(FRAME_MAX_BYTES)) is False
    port.close()
    assert pipe.is_closed
    assert port.urgent(b"\nstop\n") is False
    with pytest.raises(LinkLost, match="was closed"):
        port.read(0.1)
    with pytest.raises(LinkLost, match="was closed"):
        port.write(b"x")


@given(st.lists(st.tuples(st.integers(0, 50_000), st.binary(min_size=1, max_size=9)), max_size=12), st.integers(1, 9))
def test_nothing_is_lost_or_reordered_and_the_clocks_agree(says: list[tuple[int, bytes]], piece: int) -> None:
    says = sorted(says, key=lambda said: said[0])
    device = Device(*says)
    port = LockstepPort(Pipe(device, piece=piece), clock=VirtualClock())
    got = b""
    while port.clock.now() < 0.06:
        got += port.read(0.004)
        assert round(port.clock.now() * 1_000_000) == device.now_us
    assert got == b"".join(data for _, data in says)


def read_twice(port: Port) -> None:
    port.read(0.01)
    port.read(0.01)


@pytest.mark.parametrize(
    ("frame", "words"),
    [
        (b"C" + bytes(10), "begins with byte 0x43"),
        (encode_reply(10_001, b""), "moved by 10001 us on a grant of 10000 us"),
        (encode_reply(9_999, b""), "had nothing to say"),
        (encode_reply(10_000, b"") + b"B", "spoke without a grant"),
        (b"", "did not answer a grant within"),
        (encode_reply(10_000, b"ab")[:-1], "did not answer a grant within"),
    ],
)
def test_a_peer_out_of_step_ends_the_link_for_good(frame: bytes, words: str) -> None:
    port, pipe = linked(Device())
    port.read(0.0)
    pipe.device = None
    pipe.waiting += frame
    with pytest.raises(LinkLost, match=words):
        read_twice(port)  # what came too much shows at the next grant
    with pytest.raises(LinkLost, match=words):
        port.read(0.01)
    assert pipe.clock.now() <= REPLY_TIMEOUT_S


def test_a_peer_whose_time_runs_backwards_ends_the_link() -> None:
    device = Device(start_us=500)
    port, _ = linked(device)
    port.read(0.0)
    device.now_us = 0
    with pytest.raises(LinkLost, match="moved by -500 us"):
        port.read(0.0)


@given(st.lists(st.tuples(st.integers(0, 2**32 - 1), st.binary(max_size=40)), max_size=6), st.integers(1, 30))
def test_the_peer_reads_grants_however_they_are_cut(grants: list[tuple[int, bytes]], piece: int) -> None:
    stream = b"".join(encode_grant(advance_us, data) for advance_us, data in grants)
    peer = LockstepPeer()
    got = [grant for start in range(0, len(stream), piece) for grant in peer.feed(stream[start : start + piece])]
    assert got == [Grant(advance_us, data) for advance_us, data in grants]


@given(st.binary(max_size=200))
def test_any_bytes_give_the_peer_grants_or_a_lost_link(data: bytes) -> None:
    grants: list[Grant] = []
    with suppress(LinkLost):
        grants = LockstepPeer().feed(data)
    stream = b"".join(encode_grant(grant.advance_us, grant.data) for grant in grants)
    assert data.startswith(stream)


@pytest.mark.process
def test_lockstep_runs_over_a_pseudo_terminal() -> None:
    pytest.importorskip("pty", reason="pseudo-terminals are a POSIX thing")
    import tty

    far, near = os.openpty()
    tty.setraw(far)
    device = Device((30_000_000 - 1, b"D00 half a minute later"))
    peer = LockstepPeer()

    def serve() -> None:
        with suppress(OSError):  # the host has closed
            while data := os.read(far, 4096):
                for grant in peer.feed(data):
                    os.write(far, device.run(grant))

    with open_port(f"lockstep:{os.ttyname(near)}") as port:
        os.close(near)
        server = threading.Thread(target=serve)
        server.start()
        start_s = port.clock.now()
        port.write(b"who\n")
        assert port.read(60.0) == b"D00 half a minute later"
        assert port.clock.now() - start_s == 29.999999
    server.join(10.0)
    os.close(far)
    assert device.heard == [(0, b"who\n")]
