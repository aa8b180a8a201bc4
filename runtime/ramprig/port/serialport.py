"""Ports to real devices: serial devices, raw TCP (`socket://host:port`) and remote serial servers
(`rfc2217://host:port`).
"""

from __future__ import annotations

import os
import socket
import sys
from collections.abc import Callable, Sequence
from typing import Any, Literal
from urllib.parse import urlsplit

from ramprig.errors import UsageError
from ramprig.port import causes
from ramprig.port.base import URGENT_BOUND_S, WRITE_TIMEOUT_S, ClosesItself
from ramprig.port.clock import Clock, SystemClock
from ramprig.port.polled import POLL_SLICE_S, PolledWire, hold_break
from ramprig.port.portlock import PortHeld, PortLock
from ramprig.port.wires import Wire, device_wire, socket_wire

CONNECT_TIMEOUT_S = 5.0

Dtr = Literal["leave", "assert", "clear"]
"""What happens to the DTR line, and to RTS with it, when a serial device is opened.

Many boards reset when DTR changes. The operating system itself raises DTR in `open()`, before any program can say
no, so none of these can promise that a board does not reset on the first open after it was plugged in.

`leave`   nothing more is done to it; on POSIX it also stays up at close, so that the next open does not reset again.
`assert`  raised now, and lowered by the system at close.
`clear`   lowered right after the open: a pulse of well under a millisecond up to some milliseconds is still seen.

On Windows `leave` is the same as `assert`: the driver knows no third way.
"""


class WirePort(ClosesItself):
    """A `Port` over a wire: every foreign exception comes out as `LinkLost`, and `urgent` raises nothing at
    all.
    """

    def __init__(
        self, wire: Wire, *, name: str, clock: Clock | None = None, on_close: Callable[[], None] | None = None
    ) -> None:
        self.name = name
        self.clock: Clock = SystemClock() if clock is None else clock
        self._wire = wire
        self._on_close = on_close
        self._closed = False

    def read(self, timeout_s: float) -> bytes:
        """As `Port.read`."""
        try:
            return self._wire.read(timeout_s)
        except causes.FOREIGN as error:
            raise causes.lost(self.name, error, closed=self._closed) from error

    def write(self, data: bytes) -> None:
        """As `Port.write`."""
        try:
            self._wire.write(data, WRITE_TIMEOUT_S)
        except causes.FOREIGN as error:
            raise causes.lost(self.name, error, closed=self._closed) from error

    def urgent(self, data: bytes) -> bool:
        """As `Port.urgent`."""
        if self._closed:
            return False
        try:
            return self._wire.urgent(data, URGENT_BOUND_S)
        except Exception:  # a stop path answers yes or no; what went wrong the next read says
            return False

    def send_break(self) -> bool:
        """As `Port.send_break`."""
        if self._closed:
            return False
        try:
            return self._wire.send_break()
        except causes.FOREIGN:
            return False

    def close(self) -> None:
        """As `Port.close`; what the system says about a port that is already gone is of no use to anybody."""
        if self._closed:
            return
        self._closed = True
        try:
            self._wire.close()
        except causes.FOREIGN:
            pass
        finally:
            if self._on_close is not None:
                self._on_close()


def open_device(
    device: str,
    *,
    baud: int = 115200,
    dtr: Dtr = "leave",
    clock: Clock | None = None,
    present: Callable[[], Sequence[str]] | None = None,
) -> WirePort:
    """Open the serial device `device` (`/dev/...`, a link to one, `COM3`) for this process alone, 8N1, no
    flow control.

    Raises PortNotFound with a list of what is there, or PortUnavailable with cause and remedy. `present`
    lists the devices that are there; the system's own list where it is None.
    """
    try:
        lock = PortLock(device)
    except PortHeld as held:
        raise causes.busy(device, str(held.holder or "")) from held
    try:
        serial = _opened_serial(device, baud=baud, dtr=dtr)
        try:
            wire = _wire_of(serial, device, dtr=dtr)
        except BaseException:
            serial.close()
            raise
    except causes.FOREIGN as error:
        lock.release()
        raise causes.not_opened(device, error, present=(present or _present)()) from error
    except BaseException:
        lock.release()
        raise
    return WirePort(wire, name=device, clock=clock, on_close=lock.release)


def _present() -> list[str]:
    from ramprig.port.find import system_ports

    return [str(port) for port in system_ports()]


def _opened_serial(device: str, *, baud: int, dtr: Dtr) -> Any:  # a pyserial class chosen by the system at run time
    import serial

    port = serial.Serial()
    port.port = device
    port.baudrate = baud
    port.timeout = POLL_SLICE_S
    port.write_timeout = WRITE_TIMEOUT_S
    if os.name == "posix":
        port.exclusive = True
        # Keeps pyserial from touching DTR. On Windows the same attribute would make the driver drive it by itself.
        port.dsrdtr = dtr == "leave"
    port.dtr = port.rts = dtr != "clear"
    port.open()
    return port


def _wire_of(serial: Any, device: str, *, dtr: Dtr) -> Wire:  # serial: see _opened_serial
    if os.name != "posix":
        return PolledWire(serial)
    if dtr == "leave":
        _keep_dtr_at_close(serial.fileno())
    if sys.platform == "linux":
        _ask_for_low_latency(serial)
    is_terminal_pair = os.path.realpath(device).startswith("/dev/pts/")  # knows no BREAK, though the call succeeds
    return device_wire(
        serial.fileno(),
        send_break=(lambda: False) if is_terminal_pair else (lambda: hold_break(serial)),
        finish=serial.close,
    )


def _keep_dtr_at_close(descriptor: int) -> None:
    import termios

    attributes = termios.tcgetattr(descriptor)
    attributes[2] &= ~termios.HUPCL
    termios.tcsetattr(descriptor, termios.TCSANOW, attributes)


def _ask_for_low_latency(serial: Any) -> None:  # serial: see _opened_serial
    """Have a USB adapter hand over bytes at once and not on a 16 ms grid, where its driver knows how."""
    try:
        serial.set_low_latency_mode(True)
    except causes.FOREIGN:
        return  # most adapters have no such timer


def _host_and_port(url: str) -> tuple[str, int]:
    try:
        parts = urlsplit(url)
        host, port = parts.hostname, parts.port
    except ValueError as error:
        raise UsageError(f"{url}: {error}; write {url.partition(':')[0]}://HOST:PORT") from error
    if not host or not port:
        raise UsageError(f"{url} lacks a host or a port number; write {url.partition(':')[0]}://HOST:PORT")
    return host, port


def open_socket(url: str, *, clock: Clock | None = None) -> WirePort:
    """Open `socket://host:port`: the bytes as they are, over TCP, unencrypted; baud rate and DTR mean
    nothing there.

    Raises UsageError for a malformed URL, PortUnavailable where nobody answers within `CONNECT_TIMEOUT_S`.
    """
    address = _host_and_port(url)
    try:
        connection = socket.create_connection(address, timeout=CONNECT_TIMEOUT_S)
    except OSError as error:
        raise causes.unreachable(url, error) from error
    return WirePort(socket_wire(connection), name=url, clock=clock)


def open_rfc2217(url: str, *, baud: int = 115200, dtr: Dtr = "leave", clock: Clock | None = None) -> WirePort:
    """Open `rfc2217://host:port`: a serial port on another machine, set up over TCP, unencrypted.

    A write has no bound of its own there but the network's; `urgent` keeps its bound, and takes nothing back that is
    already under way. Raises as
    `open_socket`.
    """
    _host_and_port(url)
    import serial

    port = serial.serial_for_url(url, do_not_open=True)
    port.baudrate = baud
    port.timeout = POLL_SLICE_S
    port.dsrdtr = dtr == "leave"
    port.dtr = port.rts = dtr != "clear"
    try:
        port.open()
    except causes.FOREIGN as error:
        raise causes.unreachable(url, error) from error
    return WirePort(PolledWire(port, purges=False), name=url, clock=clock)
