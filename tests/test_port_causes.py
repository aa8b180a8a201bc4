"""Whatever pyserial and the system raise comes out of a port as ours, with its cause; and the wires keep
their bounds.
"""

from __future__ import annotations

import errno
import socket
from collections.abc import Callable

import pytest
from serial import PortNotOpenError, SerialException, SerialTimeoutException

from ramprig.errors import LinkLost, PortNotFound, PortUnavailable
from ramprig.port import causes
from ramprig.port.clock import VirtualClock
from ramprig.port.polled import BREAK_S, PolledWire
from ramprig.port.serialport import WirePort
from ramprig.port.wires import DescriptorWire

ZOO: list[Exception] = [
    SerialException("device reports readiness to read but returned no data (device disconnected?)"),
    SerialException(None, "write failed: [Errno 5] Input/output error"),
    SerialTimeoutException("Write timeout"),
    PortNotOpenError(),
    OSError(errno.EIO, "Input/output error"),
    OSError(errno.ENXIO, "Device not configured"),
    TypeError("'NoneType' object cannot be interpreted as an integer"),
    ValueError("filedescriptor out of range in select()"),
    AttributeError("'NoneType' object has no attribute 'send'"),
    EOFError("closed"),
    *([causes.FOREIGN[-1](5, "Input/output error")] if len(causes.FOREIGN) == 6 else []),  # termios.error
]


class FakeSerial:
    """A pyserial-like object that does what it is told."""

    def __init__(self, *, arrived: bytes = b"", error: Exception | None = None) -> None:
        self.arrived = bytearray(arrived)
        self.error = error
        self.sent = bytearray()
        self.breaks: list[bool] = []
        self.closed = 0
        self.purged = 0
        self.clock = VirtualClock()

    def _fail(self) -> None:
        if self.error is not None:
            raise self.error

    @property
    def break_condition(self) -> bool:
        return bool(self.breaks and self.breaks[-1])

    @break_condition.setter
    def break_condition(self, value: bool) -> None:
        self._fail()
        self.breaks.append(value)

    @property
    def in_waiting(self) -> int:
        self._fail()
        return len(self.arrived)

    def read(self, size: int = 1, /) -> bytes:
        self._fail()
        if not self.arrived:
            self.clock.advance(0.01)
        data = bytes(self.arrived[:size])
        del self.arrived[:size]
        return data

    def write(self, data: bytes, /) -> int | None:
        self._fail()
        self.sent += data
        return len(data)

    def reset_output_buffer(self) -> None:
        self._fail()
        self.purged += 1

    def close(self) -> None:
        self.closed += 1
        self._fail()


def port_over(serial: FakeSerial) -> WirePort:
    return WirePort(PolledWire(serial, now=serial.clock.now, sleep=serial.clock.advance), name="COM7")


@pytest.mark.parametrize("error", ZOO, ids=lambda error: type(error).__name__)
@pytest.mark.parametrize("use", [lambda port: port.read(0.1), lambda port: port.write(b"x")], ids=["read", "write"])
def test_any_foreign_exception_in_use_is_a_lost_link(error: Exception, use: Callable[[WirePort], object]) -> None:
    port = port_over(FakeSerial(error=error))
    with pytest.raises(LinkLost, match="COM7") as caught:
        use(port)
    assert caught.value.__cause__ is error


@pytest.mark.parametrize("error", ZOO, ids=lambda error: type(error).__name__)
def test_the_stop_path_and_close_raise_nothing(error: Exception) -> None:
    serial = FakeSerial(error=error)
    port = port_over(serial)
    assert port.urgent(b"\nstop\n") is False
    assert port.send_break() is False
    port.close()
    assert serial.closed == 1


def test_a_bug_of_ours_is_not_taken_for_a_lost_link() -> None:
    port = port_over(FakeSerial(error=ZeroDivisionError("a bug")))
    with pytest.raises(ZeroDivisionError):
        port.read(0.1)


def test_a_polled_read_takes_all_that_waits() -> None:
    serial = FakeSerial(arrived=b"N00 boot")
    port = port_over(serial)
    assert port.read(0.0) == b"N00 boot"
    assert port.read(0.05) == b""
    assert serial.clock.now() == pytest.approx(0.05)


def test_a_polled_urgent_purges_and_sends() -> None:
    serial = FakeSerial()
    assert port_over(serial).urgent(b"\nstop\n") is True
    assert (serial.purged, bytes(serial.sent)) == (1, b"\nstop\n")


def test_a_break_is_held_and_let_go() -> None:
    serial = FakeSerial()
    assert port_over(serial).send_break() is True
    assert serial.breaks == [True, False]
    assert serial.clock.now() == BREAK_S


@pytest.mark.parametrize(
    ("error", "kind", "words"),
    [
        (SerialException(errno.ENOENT, "could not open port"), PortNotFound, "there are: COM3"),
        (SerialException("could not open port 'COM7': FileNotFoundError(2, ...)"), PortNotFound, "there are: COM3"),
        (SerialException(errno.EACCES, "Permission denied"), PortUnavailable, "usermod -aG dialout"),
        (SerialException(errno.EBUSY, "busy"), PortUnavailable, "in use by another program"),
        (
            SerialException(errno.EAGAIN, "Could not exclusively lock port"),
            PortUnavailable,
            "in use by another program",
        ),
        (SerialException("could not open port 'COM7': PermissionError(13, ...)"), PortUnavailable, "in use"),
        (SerialException("Could not configure port: (5, 'Input/output error')"), PortUnavailable, "replug it"),
        (SerialException(errno.EMFILE, "Too many open files"), PortUnavailable, "Too many open files"),
    ],
)
def test_a_port_that_does_not_open_says_why_and_what_to_do(error: Exception, kind: type, words: str) -> None:
    mapped = causes.not_opened("COM7", error, present=["COM3"])
    assert type(mapped) is kind
    assert "COM7" in str(mapped)
    assert words in str(mapped)


def test_the_holder_of_a_busy_port_is_named() -> None:
    assert "process 12 (ramprig shell" in str(causes.busy("COM7", "process 12 (ramprig shell, since 2026-03-01)"))


def test_no_ports_at_all_point_to_the_cable() -> None:
    assert "is the cable in" in causes.listed([])


class StuckWire:
    """A descriptor wire whose far end takes `room` bytes and then none, in virtual time, until it is
    purged.
    """

    def __init__(self, room: int, *, room_after_purge: int = 0) -> None:
        self.clock = VirtualClock()
        self.room = room
        self.room_after_purge = room_after_purge
        self.sent = bytearray()
        self.near, self.far = socket.socketpair()
        self.wire = DescriptorWire(
            self.near.fileno(),
            receive=self.near.recv,
            send=self.send,
            purge=self.purge,
            send_break=lambda: False,
            finish=self.near.close,
            now=self.clock.now,
        )

    def send(self, view: memoryview) -> int:
        self.clock.advance(0.001)
        if self.room == 0:
            raise BlockingIOError
        taken = min(self.room, len(view))
        self.sent += view[:taken]
        self.room -= taken
        return taken

    def purge(self) -> None:
        self.room = self.room_after_purge

    def close(self) -> None:
        self.wire.close()
        self.far.close()


def test_a_write_to_a_full_wire_ends_after_its_timeout() -> None:
    stuck = StuckWire(room=3)
    with pytest.raises(causes.FarEndStuck, match="5 of 8 bytes unsent"):
        stuck.wire.write(b"12345678", 0.2)
    assert bytes(stuck.sent) == b"123"
    assert 0.2 <= stuck.clock.now() < 0.21
    stuck.close()


def test_urgent_gives_up_at_its_bound() -> None:
    stuck = StuckWire(room=0)
    assert stuck.wire.urgent(b"\nstop\n", 0.05) is False
    assert stuck.clock.now() <= 0.052
    stuck.close()


def test_urgent_from_a_signal_handler_throws_away_the_rest_of_the_write_it_interrupts() -> None:
    stuck = StuckWire(room=4, room_after_purge=100)
    accepted: list[bool] = []
    plain_send = stuck.send

    def send_and_be_interrupted(view: memoryview) -> int:
        if stuck.room == 0 and not accepted:
            accepted.append(False)  # before the call: `urgent` sends by this very function
            accepted[0] = stuck.wire.urgent(b"\nstop\n", 0.05)
            raise BlockingIOError
        return plain_send(view)

    stuck.wire._send = send_and_be_interrupted
    stuck.wire.write(b"12345678", 0.2)
    assert accepted == [True]
    assert bytes(stuck.sent) == b"1234\nstop\n"
    stuck.close()


@pytest.mark.parametrize("ending", [3, SerialTimeoutException("Write timeout")], ids=["count", "timeout"])
def test_a_polled_write_that_an_urgent_overtakes_is_no_lost_link(ending: int | Exception) -> None:
    ports: list[WirePort] = []

    class Overtaken(FakeSerial):
        """As on Windows: a purge ends the write that waits, which then tells how much it had sent."""

        def write(self, data: bytes, /) -> int | None:
            if not data.startswith(b"01 beat"):
                return super().write(data)
            assert ports[0].urgent(b"\nstop\n")
            if isinstance(ending, Exception):
                raise ending
            return ending

    serial = Overtaken()
    ports.append(port_over(serial))
    ports[0].write(b"01 beat 1234\n")
    assert bytes(serial.sent) == b"\nstop\n"


@pytest.mark.parametrize("ending", [3, SerialTimeoutException("Write timeout")], ids=["count", "timeout"])
def test_a_polled_write_that_is_cut_short_by_itself_is_a_lost_link(ending: int | Exception) -> None:
    class Short(FakeSerial):
        def write(self, data: bytes, /) -> int | None:
            if isinstance(ending, Exception):
                raise ending
            return ending

    with pytest.raises(LinkLost, match="COM7"):
        port_over(Short()).write(b"01 beat 1234\n")


def test_a_stop_is_sent_though_what_is_queued_cannot_be_thrown_away() -> None:
    class Kept(FakeSerial):
        def reset_output_buffer(self) -> None:
            raise OSError(errno.ENOTTY, "Inappropriate ioctl for device")

    serial = Kept()
    assert port_over(serial).urgent(b"\nstop\n")
    assert bytes(serial.sent) == b"\nstop\n"


def test_a_stop_goes_down_a_wire_whose_queue_cannot_be_thrown_away() -> None:
    stuck = StuckWire(room=100)

    def purge() -> None:
        raise OSError(errno.EINVAL, "Invalid argument")

    stuck.wire._purge = purge
    assert stuck.wire.urgent(b"\nstop\n", 0.05)
    assert bytes(stuck.sent) == b"\nstop\n"
    stuck.close()
