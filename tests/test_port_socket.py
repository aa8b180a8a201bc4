"""Ports over TCP on the loopback: raw sockets, and what is told where nobody answers."""

from __future__ import annotations

import socket
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack

import pytest
import serial
from serial.rfc2217 import PortManager

from held_up import held_up_s
from ramprig.errors import LinkLost, PortUnavailable, UsageError
from ramprig.port.base import Port
from ramprig.port.open import open_port

pytestmark = pytest.mark.process


@pytest.fixture
def far() -> Iterator[tuple[Port, socket.socket]]:
    """A port and the far end it is connected to."""
    with socket.create_server(("127.0.0.1", 0)) as server, ExitStack() as opened:
        port = opened.enter_context(open_port(f"socket://127.0.0.1:{server.getsockname()[1]}"))
        connection = opened.enter_context(server.accept()[0])
        yield port, connection


def test_bytes_go_both_ways(far: tuple[Port, socket.socket]) -> None:
    port, connection = far
    port.write(b"who\n")
    assert connection.recv(100) == b"who\n"
    connection.sendall(b"00 ok")
    assert port.read(5.0) == b"00 ok"
    assert port.read(0.0) == b""
    assert port.send_break() is False


def test_a_far_end_that_closes_is_a_lost_link(far: tuple[Port, socket.socket]) -> None:
    port, connection = far
    connection.close()
    with pytest.raises(LinkLost, match="closed by the far end"):
        port.read(5.0)


def test_urgent_to_a_far_end_that_stopped_reading_says_no_within_100_ms(far: tuple[Port, socket.socket]) -> None:
    port, _ = far
    with pytest.raises(LinkLost, match="takes no more bytes"):
        port.write(b"x" * 50_000_000)
    held_s, start_s = held_up_s(), time.monotonic()
    accepted = port.urgent(b"\nstop\n" * 100_000)
    assert time.monotonic() - start_s - (held_up_s() - held_s) < 0.1
    assert accepted is False


def test_nobody_listening_is_told() -> None:
    with socket.create_server(("127.0.0.1", 0)) as server:
        number = server.getsockname()[1]
    for scheme in ("socket", "rfc2217"):
        with pytest.raises(PortUnavailable, match="refused the connection"):
            open_port(f"{scheme}://127.0.0.1:{number}")


@pytest.mark.parametrize("url", ["socket://", "socket://host", "socket://:5000", "socket://host:port", "rfc2217://h"])
def test_a_malformed_address_is_told_with_the_right_form(url: str) -> None:
    with pytest.raises(UsageError, match="://HOST:PORT"):
        open_port(url)


class Rfc2217Server:
    """A serial server on the loopback that echoes what the port at its end is sent: pyserial's own server side."""

    def __init__(self) -> None:
        self.listener = socket.create_server(("127.0.0.1", 0))
        self.url = f"rfc2217://127.0.0.1:{self.listener.getsockname()[1]}"
        self.baud = 0
        self.thread = threading.Thread(target=self.serve)
        self.thread.start()

    def serve(self) -> None:
        device = serial.serial_for_url("loop://", timeout=0)
        connection, _ = self.listener.accept()
        manager = PortManager(device, Sender(connection))  # type: ignore[arg-type] # the stubs ask for the client's class
        with connection, self.listener, device:
            while data := connection.recv(4096):
                device.write(b"".join(manager.filter(data)))
                self.baud = device.baudrate
                echo = device.read(device.in_waiting)
                if echo:
                    connection.sendall(b"".join(manager.escape(echo)))


class Sender:
    """What the server side writes its answers to."""

    def __init__(self, connection: socket.socket) -> None:
        self.write = connection.sendall


@pytest.mark.filterwarnings("ignore:set(Daemon|Name):DeprecationWarning")  # pyserial 3.5 calls both
def test_a_remote_serial_port_is_set_up_and_echoes_every_byte() -> None:
    server = Rfc2217Server()
    every_byte = bytes(range(256))
    with open_port(server.url, baud=57600) as port:
        port.write(every_byte)
        got = b""
        while len(got) < 256:
            got += port.read(5.0)
        assert got == every_byte
        assert port.read(0.0) == b""
        assert port.urgent(b"\nstop\n") is True
        assert port.read(5.0)[:1] == b"\n"
    server.thread.join(10.0)
    assert not server.thread.is_alive()
    assert server.baud == 57600
