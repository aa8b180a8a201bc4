"""Moving bytes over one open descriptor (a serial device or a socket) with bounded waits, and a way past
every queue.

pyserial opens and sets up a serial device; its reading and writing are not used on POSIX, because a write
that meets a full buffer may spin or hang there, and each change of its timeout sets up the port again.
"""

from __future__ import annotations

import contextlib
import math
import os
import select
import socket
import threading
import time
from collections.abc import Callable
from typing import Protocol

from ramprig.port.base import READ_CHUNK_BYTES
from ramprig.port.causes import FOREIGN, FarEndStuck, TwoReaders

PIECE_BYTES = 512
"""Most that a `write` hands to the system at a time, so that `urgent` finds room after its purge."""

CLOSE_WAIT_S = 0.2
"""Longest that `close` waits for a read or write in another thread to let go of the descriptor."""


class Wire(Protocol):
    """The moving part of a port; raises the system's own exceptions, which `WirePort` turns into ours."""

    def read(self, timeout_s: float) -> bytes:
        """As `Port.read`; raises EOFError where the far end closed."""
        ...

    def write(self, data: bytes, timeout_s: float) -> None:
        """As `Port.write`; raises `FarEndStuck` where it takes longer than `timeout_s`."""
        ...

    def urgent(self, data: bytes, bound_s: float) -> bool:
        """As `Port.urgent`; may raise."""
        ...

    def send_break(self) -> bool:
        """As `Port.send_break`; may raise."""
        ...

    def close(self) -> None:
        """Give the descriptor back; called once."""
        ...


class Waiter:
    """Waits for one descriptor to be readable (or writable), and ends early when the waker is written to."""

    def __init__(self, descriptor: int, *, writing: bool = False, waker: int | None = None) -> None:
        self._descriptor = descriptor
        self._writing = writing
        self._waker = waker
        self._poll: select.poll | None = None
        if hasattr(select, "poll"):  # select itself cannot watch a descriptor above 1023
            self._poll = select.poll()
            self._poll.register(descriptor, select.POLLOUT if writing else select.POLLIN)
            if waker is not None:
                self._poll.register(waker, select.POLLIN)

    def ready(self, timeout_s: float) -> bool:
        """Whether the descriptor is ready, or broken, within `timeout_s`."""
        if self._poll is not None:
            # Rounded up: a wait cut to 0 ms would spin.
            events = self._poll.poll(max(0, math.ceil(timeout_s * 1000)))
            return any(descriptor == self._descriptor for descriptor, _ in events)
        watched = [self._descriptor] if self._waker is None else [self._descriptor, self._waker]
        reading = [item for item in watched if not (self._writing and item == self._descriptor)]
        writing = [self._descriptor] if self._writing else []
        readable, writable, _ = select.select(reading, writing, [], max(0.0, timeout_s))
        return self._descriptor in readable or self._descriptor in writable


class DescriptorWire:
    """A wire over a non-blocking descriptor, for one reading and writing thread, and `urgent` from anywhere.

    `receive(n)` returns at most n bytes, `send(view)` the count it took; both raise BlockingIOError where
    they would wait. `purge` drops what the system holds unsent. `finish` closes the descriptor. `urgent`
    takes no lock, so that it can run while `write` waits, and from a signal handler in the middle of
    either.
    """

    def __init__(
        self,
        descriptor: int,
        *,
        receive: Callable[[int], bytes],
        send: Callable[[memoryview], int],
        purge: Callable[[], None],
        send_break: Callable[[], bool],
        finish: Callable[[], None],
        end_is_close: bool = False,
        now: Callable[[], float] = time.monotonic,
    ) -> None:
        self._descriptor = descriptor
        self._receive = receive
        self._send = send
        self._purge = purge
        self._send_break = send_break
        self._finish = finish
        self._end_is_close = end_is_close
        self._now = now
        self._overtakings = 0
        self._closing = False
        self._in_use = threading.Lock()  # so that `close` never pulls the descriptor away between a wait and a read
        self._wake_from, self._wake_to = socket.socketpair()
        self._reading = Waiter(descriptor, waker=self._wake_from.fileno())
        self._writing = Waiter(descriptor, writing=True, waker=self._wake_from.fileno())

    def read(self, timeout_s: float) -> bytes:
        """At least 1 byte, or `b""` after `timeout_s`; EOFError or TwoReaders where an announced byte is
        not there.
        """
        deadline_s = self._now() + timeout_s
        with self._in_use:
            while True:
                ready = self._reading.ready(deadline_s - self._now())
                if self._closing:
                    raise EOFError("closed")
                if ready:
                    try:
                        return self._arrived()
                    except (BlockingIOError, InterruptedError):
                        pass
                if self._now() >= deadline_s:
                    return b""

    def _arrived(self) -> bytes:
        data = self._receive(READ_CHUNK_BYTES)
        if data:
            return data
        if self._end_is_close:
            raise EOFError("closed by the far end")
        raise TwoReaders("ready to read, and nothing there")

    def write(self, data: bytes, timeout_s: float) -> None:
        """Send all of `data`, or the part before an `urgent` overtook it; FarEndStuck after `timeout_s`."""
        overtakings = self._overtakings
        deadline_s = self._now() + timeout_s
        rest = memoryview(data)
        with self._in_use:
            while rest and self._overtakings == overtakings:
                taken = self._offer(rest[:PIECE_BYTES])
                rest = rest[taken:]
                if taken == 0:
                    self._writing.ready(deadline_s - self._now())
                    if self._closing:
                        raise EOFError("closed")
                    if self._now() >= deadline_s:
                        raise FarEndStuck(f"{len(rest)} of {len(data)} bytes unsent after {timeout_s} s")

    def urgent(self, data: bytes, bound_s: float) -> bool:
        """Purge and send; whether all bytes were taken within `bound_s`."""
        deadline_s = self._now() + bound_s
        if self._closing:
            return False
        self._overtakings += 1
        with contextlib.suppress(*FOREIGN):  # what is queued then goes out first; the stop is sent all the same
            self._purge()
        self._overtakings += 1  # for a write that began between the two
        waiter = Waiter(self._descriptor, writing=True)  # one of its own: a poll object serves one thread at a time
        rest = memoryview(data)
        while rest:
            taken = self._offer(rest)
            rest = rest[taken:]
            if taken == 0:
                left_s = deadline_s - self._now()
                if left_s <= 0:
                    return False
                waiter.ready(left_s)
        return True

    def _offer(self, data: memoryview) -> int:
        try:
            return self._send(data)
        except (BlockingIOError, InterruptedError):
            return 0

    def send_break(self) -> bool:
        """As the port's kind can."""
        return self._send_break()

    def close(self) -> None:
        """End a `read` or `write` in progress and close the descriptor."""
        self._closing = True
        self._wake_to.send(b"x")
        free = self._in_use.acquire(
            timeout=CLOSE_WAIT_S
        )  # not free: we are inside a signal handler of that very thread
        try:
            self._finish()
        finally:
            self._wake_to.close()
            self._wake_from.close()
            if free:
                self._in_use.release()


def socket_wire(connection: socket.socket) -> DescriptorWire:
    """A wire over a connected TCP socket, which it then owns: small lines leave at once, and there is no
    BREAK.
    """
    connection.setblocking(False)
    connection.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    return DescriptorWire(
        connection.fileno(),
        receive=connection.recv,
        send=connection.send,
        purge=lambda: None,  # what TCP holds cannot be taken back
        send_break=lambda: False,
        finish=connection.close,
        end_is_close=True,
    )


def device_wire(descriptor: int, *, send_break: Callable[[], bool], finish: Callable[[], None]) -> DescriptorWire:
    """A wire over a POSIX serial device that is open, set up and non-blocking."""
    import termios

    return DescriptorWire(
        descriptor,
        receive=lambda count: os.read(descriptor, count),
        send=lambda view: os.write(descriptor, view),
        purge=lambda: termios.tcflush(descriptor, termios.TCOFLUSH),
        send_break=send_break,
        finish=finish,
    )
