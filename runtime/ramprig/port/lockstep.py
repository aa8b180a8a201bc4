"""A device in another process driven in virtual time over any byte pipe: nobody sleeps, both see the same
clock.

The host grants time, the peer answers when it has used it up or has something to say:

    grant  host to peer   "A"  advance_us u32  n u16  n bytes
    reply  peer to host   "B"  now_us u64      n u16  n bytes        (numbers little-endian)

The peer takes the bytes as arrived at once, runs for at most `advance_us` of its time, and tells its time
reached and what it sent meanwhile. It may stop early, at the moment it has bytes. One grant is outstanding
at a time, so the pipe is never out of step; a frame that is malformed, or a time that runs backwards or
past the grant, ends the link.
"""

from __future__ import annotations

import struct
from collections import deque
from dataclasses import dataclass

from ramprig.errors import LinkLost
from ramprig.port.base import ClosesItself, Port
from ramprig.port.clock import SystemClock, VirtualClock

GRANT = struct.Struct("<BIH")
REPLY = struct.Struct("<BQH")
GRANT_MARK = ord("A")
REPLY_MARK = ord("B")
FRAME_MAX_BYTES = 0xFFFF

SLICE_S = 0.01
"""Longest grant: also how late an `urgent` from another thread can come, in virtual time."""

URGENT_MAX_BYTES = 4096
URGENT_MAX_COUNT = 8
"""Most that `urgent` keeps for the next grant; older ones give way."""

REPLY_TIMEOUT_S = 5.0
"""Longest real time a peer may think about one grant."""

US_PER_S = 1_000_000


def encode_grant(advance_us: int, data: bytes) -> bytes:
    """The grant's frame; `advance_us` below 2**32, at most `FRAME_MAX_BYTES` of data, else struct.error."""
    return GRANT.pack(GRANT_MARK, advance_us, len(data)) + data


def encode_reply(now_us: int, data: bytes) -> bytes:
    """The reply's frame; `now_us` below 2**64, at most `FRAME_MAX_BYTES` of data, else struct.error."""
    return REPLY.pack(REPLY_MARK, now_us, len(data)) + data


@dataclass(frozen=True, slots=True)
class Grant:
    """What the peer may do next: take `data` as arrived now, then run for at most `advance_us`."""

    advance_us: int
    data: bytes


class LockstepPeer:
    """The device's end, without any I/O: fed with bytes from the pipe, gives the grants they hold.

    The caller runs its device for each grant and writes `encode_reply(now_us, sent)` to the pipe.
    """

    def __init__(self) -> None:
        self._buffer = bytearray()

    def feed(self, data: bytes) -> list[Grant]:
        """The grants completed by `data`, in order; raises LinkLost at a byte where no grant can begin.

        Keeps at most one incomplete frame.
        """
        self._buffer += data
        grants = []
        while self._buffer:
            if self._buffer[0] != GRANT_MARK:
                raise LinkLost(
                    f"lockstep: the host's grant begins with byte {self._buffer[0]:#04x}, not {GRANT_MARK:#04x}"
                )
            if len(self._buffer) < GRANT.size:
                break
            _, advance_us, length = GRANT.unpack_from(self._buffer)
            end = GRANT.size + length
            if len(self._buffer) < end:
                break
            grants.append(Grant(advance_us, bytes(self._buffer[GRANT.size : end])))
            del self._buffer[:end]
        return grants


class LockstepPort(ClosesItself):
    """The host's end: a `Port` whose clock is the peer's, moved by reading.

    `pipe` is an open port in real time. What is written goes with the next grant, which makes it no later
    at the device, since time stands still between grants. `urgent` only takes the queue's place, for the
    same reason. There is no BREAK.
    """

    def __init__(
        self, pipe: Port, *, name: str = "", slice_s: float = SLICE_S, clock: VirtualClock | None = None
    ) -> None:
        """`clock` is moved by the port and by nobody else; None makes one that starts at today's date."""
        if not 0.0 < slice_s <= 60.0:
            raise ValueError(f"a slice lies above 0 and up to 60 s, not at {slice_s} s")
        self.name = name or f"lockstep:{pipe.name}"
        self.clock = VirtualClock(wall_s=SystemClock().wall()) if clock is None else clock
        self._pipe = pipe
        self._slice_us = max(1, round(slice_s * US_PER_S))
        self._outgoing = bytearray()
        self._urgent: deque[bytes] = deque(maxlen=URGENT_MAX_COUNT)  # the only part other threads touch
        self._arrived = b""
        self._raw = bytearray()
        self._peer_us: int | None = None
        self._lost: LinkLost | None = None

    def read(self, timeout_s: float) -> bytes:
        """As `Port.read`, `timeout_s` being virtual: grants time in slices until bytes come or it is used
        up.
        """
        left_us = max(0, round(timeout_s * US_PER_S))
        while not self._arrived:
            left_us -= self._exchange(min(left_us, self._slice_us))
            if left_us <= 0:
                break
        data, self._arrived = self._arrived, b""
        return data

    def write(self, data: bytes) -> None:
        """As `Port.write`; what does not fit one grant is sent at once, without granting time."""
        if self._lost is not None:
            raise self._lost
        for start in range(0, len(data), FRAME_MAX_BYTES):
            piece = data[start : start + FRAME_MAX_BYTES]
            self._settle_urgent()
            if len(self._outgoing) + len(piece) > FRAME_MAX_BYTES:
                self._exchange(0)
            self._outgoing += piece

    def urgent(self, data: bytes) -> bool:
        """As `Port.urgent`; True says that the bytes go with the very next grant."""
        if self._lost is not None or len(data) > URGENT_MAX_BYTES:
            return False
        self._urgent.append(bytes(data))
        return True

    def send_break(self) -> bool:
        """Never: the frames have no BREAK."""
        return False

    def close(self) -> None:
        """Close the pipe."""
        if self._lost is None:
            self._lost = LinkLost(f"{self.name} was closed while it was in use")
        self._pipe.close()

    def _settle_urgent(self) -> None:
        """Let what `urgent` brought take the place of what was queued."""
        while self._urgent:
            self._outgoing[:] = self._urgent.popleft()

    def _exchange(self, advance_us: int) -> int:
        """Grant `advance_us`, take the reply, move the clock; returns the microseconds the peer used.

        After a failure every further use fails in the same way: the two ends may no longer agree on the time.
        """
        if self._lost is not None:
            raise self._lost
        try:
            if self._peer_us is None:
                self._peer_us, self._arrived = self._ask(0, b"")
            self._settle_urgent()
            data = bytes(self._outgoing)
            self._outgoing.clear()
            now_us, arrived = self._ask(advance_us, data)
            used_us = now_us - self._peer_us
            if not 0 <= used_us <= advance_us:
                raise LinkLost(f"{self.name}: the peer's clock moved by {used_us} us on a grant of {advance_us} us")
            if used_us < advance_us and not arrived:
                raise LinkLost(f"{self.name}: the peer used {used_us} of {advance_us} us and had nothing to say")
        except LinkLost as error:
            self._lost = error
            raise
        self._peer_us = now_us
        self.clock.advance(used_us / US_PER_S)
        self._arrived += arrived
        return used_us

    def _ask(self, advance_us: int, data: bytes) -> tuple[int, bytes]:
        """One grant and its reply: the peer's time and what it sent."""
        if self._raw:
            raise LinkLost(f"{self.name}: the peer spoke without a grant")
        self._pipe.write(encode_grant(advance_us, data))
        deadline_s = self._pipe.clock.now() + REPLY_TIMEOUT_S
        mark, now_us, length = REPLY.unpack(self._receive(REPLY.size, deadline_s))
        if mark != REPLY_MARK:
            raise LinkLost(f"{self.name}: the peer's reply begins with byte {mark:#04x}, not {REPLY_MARK:#04x}")
        return now_us, self._receive(length, deadline_s)

    def _receive(self, count: int, deadline_s: float) -> bytes:
        while len(self._raw) < count:
            left_s = deadline_s - self._pipe.clock.now()
            if left_s <= 0:
                raise LinkLost(f"{self.name}: the peer did not answer a grant within {REPLY_TIMEOUT_S} s")
            self._raw += self._pipe.read(left_s)
        data = bytes(self._raw[:count])
        del self._raw[:count]
        return data
