"""Real serial port objects over pseudo-terminals: reading, unplugging, replugging, and the stop that gets
through.
"""

from __future__ import annotations

import os
import select
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from held_up import held_up_s
from ramprig.errors import LinkLost, PortNotFound, PortUnavailable
from ramprig.port.base import Port
from ramprig.port.open import open_port
from ramprig.port.serialport import Dtr, open_device

pty = pytest.importorskip("pty", reason="pseudo-terminals are a POSIX thing")
import termios  # noqa: E402 - only there where pty is
import tty  # noqa: E402 - as termios

pytestmark = pytest.mark.process


class Terminal:
    """A pseudo-terminal: `name` is the device, `far` the descriptor of its other end."""

    def __init__(self) -> None:
        self.far, near = os.openpty()
        tty.setraw(self.far)
        self.name = os.ttyname(near)
        attributes = termios.tcgetattr(near)
        attributes[2] |= termios.HUPCL  # as a real serial device has it, and a pseudo-terminal has not
        termios.tcsetattr(near, termios.TCSANOW, attributes)
        os.close(near)

    def take_until(self, end: bytes) -> bytes:
        """What arrives at the far end, up to the moment that `end` is in it; waits 5 s at most for each piece."""
        taken = bytearray()
        while end not in taken and select.select([self.far], [], [], 5.0)[0]:
            taken += os.read(self.far, 65536)
        return bytes(taken)

    def unplug(self) -> None:
        if self.far >= 0:
            os.close(self.far)
            self.far = -1


@pytest.fixture
def terminal() -> Iterator[Terminal]:
    made = Terminal()
    yield made
    made.unplug()


@pytest.fixture
def port(terminal: Terminal) -> Iterator[Port]:
    with open_device(terminal.name) as opened:
        yield opened


def fill(port: Port) -> None:
    """Write until the far end, which does not read, takes no more."""
    with pytest.raises(LinkLost, match="takes no more bytes"):
        port.write(b"x" * 1_000_000)


def test_bytes_go_both_ways_unchanged(terminal: Terminal, port: Port) -> None:
    every_byte = bytes(range(256))
    port.write(every_byte)
    assert terminal.take_until(every_byte) == every_byte
    os.write(terminal.far, every_byte)
    got = b""
    while len(got) < 256:
        got += port.read(1.0)
    assert got == every_byte


def test_a_read_returns_what_is_there_without_waiting_for_more(terminal: Terminal, port: Port) -> None:
    os.write(terminal.far, b"ab")
    start_s = time.monotonic()
    assert port.read(10.0) == b"ab"
    assert time.monotonic() - start_s < 5.0


def test_a_read_with_nothing_to_read_returns_nothing(port: Port) -> None:
    assert port.read(0.0) == b""
    assert port.read(0.001) == b""


def test_an_unplug_is_a_lost_link_for_read_and_write(terminal: Terminal, port: Port) -> None:
    terminal.unplug()
    with pytest.raises(LinkLost, match=r"is gone|announced bytes"):
        port.read(1.0)
    with pytest.raises(LinkLost, match="is gone"):
        port.write(b"who\n")
    assert port.urgent(b"\nstop\n") is False
    assert port.send_break() is False


def test_after_close_every_use_says_so(port: Port) -> None:
    port.close()
    port.close()
    with pytest.raises(LinkLost, match="was closed while it was in use"):
        port.read(0.0)
    with pytest.raises(LinkLost, match="was closed while it was in use"):
        port.write(b"x")
    assert port.urgent(b"x") is False


def test_closing_in_another_thread_ends_a_read(port: Port) -> None:
    reasons: list[str] = []

    def read_on() -> None:
        try:
            port.read(30.0)
        except LinkLost as error:
            reasons.append(error.reason)

    reader = threading.Thread(target=read_on)
    reader.start()
    port.close()
    reader.join(10.0)
    assert not reader.is_alive()
    assert reasons
    assert "was closed while it was in use" in reasons[0]


def test_a_write_to_a_stuck_far_end_is_bounded(port: Port) -> None:
    start_s = time.monotonic()
    fill(port)
    assert time.monotonic() - start_s < 2.0


def test_urgent_gets_past_a_stuck_far_end_within_100_ms(terminal: Terminal, port: Port) -> None:
    fill(port)
    held_s, start_s = held_up_s(), time.monotonic()
    accepted = port.urgent(b"\nstop\n")
    took_s = time.monotonic() - start_s - (held_up_s() - held_s)
    assert took_s < 0.1
    assert accepted
    assert terminal.take_until(b"\nstop\n").endswith(b"\nstop\n")


def test_urgent_overtakes_a_write_that_waits_in_another_thread(terminal: Terminal, port: Port) -> None:
    fill(port)
    ended: list[str] = []

    def write_much() -> None:
        try:
            port.write(b"y" * 100_000)
            ended.append("overtaken")
        except LinkLost:
            ended.append("timed out")

    writer = threading.Thread(target=write_much)
    writer.start()
    accepted = port.urgent(b"\nstop\n")
    writer.join(10.0)
    assert not writer.is_alive()
    assert accepted
    assert b"\nstop\n" in terminal.take_until(b"\nstop\n")
    assert len(ended) == 1


def test_a_second_open_is_refused_and_told_who_holds_the_port(terminal: Terminal, port: Port) -> None:
    with pytest.raises(PortUnavailable, match=rf"is in use by process {os.getpid()} \("):
        open_device(terminal.name)
    port.close()
    open_device(terminal.name).close()


def test_a_port_that_is_not_there_is_told_with_what_is(tmp_path: Path) -> None:
    with pytest.raises(PortNotFound, match=r"there is no port .*gone; there are: /dev/ttyX3, /dev/ttyX4"):
        open_device(str(tmp_path / "gone"), present=lambda: ["/dev/ttyX3", "/dev/ttyX4"])


def test_what_is_no_serial_port_is_told(tmp_path: Path) -> None:
    file = tmp_path / "file"
    file.write_text("")
    with pytest.raises(PortUnavailable, match="is not a serial port"):
        open_device(str(file), present=list)


def test_a_link_leads_to_the_port_again_after_a_replug(tmp_path: Path) -> None:
    link = tmp_path / "usb-Vent_rig-if00"
    first = Terminal()
    link.symlink_to(first.name)
    with open_port(str(link)) as port:
        first.unplug()
        with pytest.raises(LinkLost):
            port.read(1.0)
    link.unlink()
    with pytest.raises(PortNotFound):
        open_device(str(link), present=list)
    second = Terminal()
    link.symlink_to(second.name)
    with open_port(str(link)) as port:
        os.write(second.far, b"N00")
        assert port.read(1.0) == b"N00"
    second.unplug()


@pytest.mark.parametrize("dtr", ["leave", "assert", "clear"])
def test_every_dtr_choice_opens_where_there_are_no_such_lines(terminal: Terminal, dtr: Dtr) -> None:
    with open_device(terminal.name, dtr=dtr) as port:
        port.write(b"who\n")
        assert terminal.take_until(b"who\n") == b"who\n"
        keeps_dtr_at_close = not termios.tcgetattr(terminal.far)[2] & termios.HUPCL
        assert keeps_dtr_at_close == (dtr == "leave")


def test_a_pseudo_terminal_has_no_break(port: Port) -> None:
    assert port.send_break() is False


def test_no_descriptor_is_left_behind(terminal: Terminal, tmp_path: Path) -> None:
    folder = Path("/proc/self/fd")
    if not folder.is_dir():
        pytest.skip("open descriptors are counted in /proc, which only Linux has")
    before = len(list(folder.iterdir()))
    for _ in range(20):
        open_device(terminal.name).close()
        with pytest.raises(PortNotFound):
            open_device(str(tmp_path / "gone"), present=list)
    assert len(list(folder.iterdir())) == before
