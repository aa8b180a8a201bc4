"""What a port is: the one interface through which bytes reach a device and come back."""

from __future__ import annotations

from types import TracebackType
from typing import Protocol, Self, runtime_checkable

from ramprig.port.clock import Clock

WRITE_TIMEOUT_S = 0.2
"""Longest a `write` may take; a line of 80 bytes needs 7 ms at 115200 baud and 83 ms at 9600."""

URGENT_BOUND_S = 0.05
"""Longest an `urgent` may take."""

READ_CHUNK_BYTES = 4096
"""Most bytes one `read` hands over at a time."""


def at_port(name: str) -> str:
    """The begin of a message about the port of this name, up to a colon and a blank; `mock:` has its own colon."""
    return f"{name.removesuffix(':')}: "


class Port(Protocol):
    """Bytes to and from one device, in the time of one clock.

    One thread owns the port and calls everything but `urgent`, which may be called from any thread and from
    a signal handler at any moment. The one failure a working port has is `LinkLost`; after it the port is
    closed and a new one opened. A context manager: leaving it closes the port.
    """

    @property
    def name(self) -> str:
        """The name the user knows the port by."""
        ...

    @property
    def clock(self) -> Clock:
        """The clock all timeouts of this port are measured on."""
        ...

    def read(self, timeout_s: float) -> bytes:
        """Return what has arrived: at least 1 byte if any comes within `timeout_s`, else `b""`.

        Never waits for more once there is something. Raises `LinkLost`.
        """
        ...

    def write(self, data: bytes) -> None:
        """Send `data`, within `WRITE_TIMEOUT_S`, or raise `LinkLost`.

        A write overtaken by `urgent` returns early, the rest of its bytes thrown away.
        """
        ...

    def urgent(self, data: bytes) -> bool:
        """Throw away what is queued to send and send `data` at once; never raises, never takes over
        `URGENT_BOUND_S`.

        Returns whether the operating system took all the bytes, which does not say that the device got
        them. What is thrown away may be the end of a line whose beginning is on the wire: begin `data` with
        a line end.
        """
        ...

    def send_break(self) -> bool:
        """Hold the line in the BREAK condition for longer than one character; returns whether the port can
        do so.
        """
        ...

    def close(self) -> None:
        """Give the port back; may be called again and from any thread. A `read` in progress ends with
        `LinkLost`.
        """
        ...

    def __enter__(self) -> Self: ...

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None: ...


@runtime_checkable
class PatientPort(Protocol):
    """A port in virtual time that need not wake its reader for what can wait: nothing is late for it there."""

    @property
    def is_sound(self) -> bool:
        """Whether nothing is lost, spoilt or delayed on the way, so that what is wrong with a line may be seen late."""
        ...

    def read_until(self, until_s: float) -> bytes:
        """As `Port.read`, up to this time of the port's clock, which is then not before it; the far end's samples are
        handed over with what it says next, or at the end.
        """
        ...


class ClosesItself:
    """The context manager part of a port: leaving the block closes it."""

    def close(self) -> None:
        """Give the port back."""
        raise NotImplementedError

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()
