"""Finding the one port that is meant, and opening it by what it is called."""

from __future__ import annotations

import dataclasses

import pytest

from ramprig.errors import PortNotFound, UsageError
from ramprig.port import find
from ramprig.port.base import ClosesItself, Port
from ramprig.port.clock import Clock, VirtualClock
from ramprig.port.find import PortSeen, by_location, by_serial_number
from ramprig.port.open import Wanted, open_port, register

VENT = PortSeen("/dev/ttyUSB0", "GH0042", "1-1.4", "USB UART")
SPARE = PortSeen("/dev/ttyUSB1", "", "1-1.3:1.0", "cheap adapter")
TWIN = PortSeen("/dev/ttyUSB2", "", "1-1.3:1.1", "cheap adapter")
CLONE = PortSeen("/dev/ttyUSB3", "GH0042", "1-2", "USB UART")


def test_a_serial_number_finds_its_port_wherever_it_is() -> None:
    moved = dataclasses.replace(VENT, device="/dev/ttyUSB7")
    assert by_serial_number("gh0042", listing=lambda: [SPARE, moved]) is moved


def test_a_place_finds_its_port_with_or_without_the_channel() -> None:
    ports = [VENT, SPARE]
    assert by_location("1-1.4", listing=lambda: ports) is VENT
    assert by_location("1-1.3", listing=lambda: ports) is SPARE
    assert by_location("1-1.3:1.0", listing=lambda: [SPARE, TWIN]) is SPARE


def test_several_matches_are_listed_and_none_is_taken() -> None:
    with pytest.raises(PortNotFound, match=r"2 ports match .*GH0042.*ttyUSB0.*ttyUSB3"):
        by_serial_number("GH0042", listing=lambda: [VENT, CLONE, SPARE])
    with pytest.raises(PortNotFound, match=r"2 ports match the place 1-1.3.*add the channel"):
        by_location("1-1.3", listing=lambda: [SPARE, TWIN])


@pytest.mark.parametrize("wanted", ["GH0043", "", " ", "GH00"])
def test_no_match_lists_what_is_there(wanted: str) -> None:
    with pytest.raises(PortNotFound, match=r"ttyUSB1 .cheap adapter, plugged in at 1-1.3:1.0."):
        by_serial_number(wanted, listing=lambda: [VENT, SPARE])


def test_part_of_a_place_is_no_match() -> None:
    with pytest.raises(PortNotFound, match="no port matches the place 1-1"):
        by_location("1-1", listing=lambda: [VENT, SPARE])


def test_the_systems_own_list_is_sorted_and_opens_nothing() -> None:
    ports = find.system_ports()
    assert [port.device for port in ports] == sorted(port.device for port in ports)


class Nowhere(ClosesItself):
    """A port that goes nowhere and remembers how it was asked for."""

    def __init__(self, wanted: Wanted) -> None:
        self.wanted = wanted
        self.name = wanted.url
        self.clock: Clock = wanted.clock or VirtualClock()

    def read(self, timeout_s: float) -> bytes:
        return b""

    def write(self, data: bytes) -> None:
        return None

    def urgent(self, data: bytes) -> bool:
        return False

    def send_break(self) -> bool:
        return False

    def close(self) -> None:
        return None


def test_a_scheme_registered_from_above_is_given_what_follows_it() -> None:
    seen: list[Wanted] = []

    def factory(wanted: Wanted) -> Port:
        seen.append(wanted)
        return Nowhere(wanted)

    register("nowhere", factory)
    clock = VirtualClock()
    port = open_port("nowhere:bench.yaml?seed=3", baud=9600, dtr="clear", clock=clock)
    assert port.clock is clock
    assert seen == [
        Wanted(url="nowhere:bench.yaml?seed=3", rest="bench.yaml?seed=3", baud=9600, dtr="clear", clock=clock)
    ]


@pytest.mark.parametrize("scheme", ["", "x", "Upper", "a:b", "a/b"])
def test_a_scheme_that_could_not_be_written_is_refused(scheme: str) -> None:
    with pytest.raises(ValueError, match="not a scheme"):
        register(scheme, Nowhere)


def test_an_unknown_scheme_lists_the_known_ones() -> None:
    with pytest.raises(UsageError, match=r"no port is called 'telnet:'.*lockstep.*rfc2217.*socket.*usb.*usb-path"):
        open_port("telnet://host:1")


@pytest.mark.parametrize(
    ("options", "words"), [({"dtr": "up"}, "leave, assert, clear"), ({"baud": 0}, "0 is not a baud rate")]
)
def test_an_option_that_means_nothing_is_refused(options: dict[str, object], words: str) -> None:
    with pytest.raises(UsageError, match=words):
        open_port("COM3", **options)  # type: ignore[arg-type] # wrong on purpose


def test_an_empty_name_is_refused() -> None:
    with pytest.raises(UsageError, match="empty"):
        open_port(" ")


def test_usb_schemes_search_by_serial_number_and_place(monkeypatch: pytest.MonkeyPatch) -> None:
    opened: list[str] = []

    def open_device(device: str, **_: object) -> Port:
        opened.append(device)
        return Nowhere(Wanted(url=device, rest=device, baud=1, dtr="leave", clock=None))

    monkeypatch.setattr("ramprig.port.find.by_serial_number", lambda text: VENT if text == "GH0042" else SPARE)
    monkeypatch.setattr("ramprig.port.find.by_location", lambda text: SPARE if text == "1-1.3" else VENT)
    monkeypatch.setattr("ramprig.port.serialport.open_device", open_device)
    open_port("usb:GH0042")
    open_port("usb-path:1-1.3")
    assert opened == ["/dev/ttyUSB0", "/dev/ttyUSB1"]
