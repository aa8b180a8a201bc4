"""Find the one port that is meant: by USB serial number, by where it is plugged in, or by an explicit name.

Never by index: `/dev/ttyUSB0` becomes `ttyUSB1` after a replug, and the board behind it another one. Where
several ports match, all are listed and none is taken.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass

from ramprig.errors import PortNotFound


@dataclass(frozen=True, slots=True)
class PortSeen:
    """A port that is there: its device name, and what its USB adapter tells about itself ("" where nothing).

    `location` is the way through the hubs as the system writes it, such as `1-1.4:1.0`: bus 1, port 1, port
    4, and the adapter's own channel after the colon.
    """

    device: str
    serial_number: str = ""
    location: str = ""
    description: str = ""

    def __str__(self) -> str:
        facts = [
            self.description,
            f"serial number {self.serial_number}" if self.serial_number else "",
            f"plugged in at {self.location}" if self.location else "",
        ]
        told = ", ".join(fact for fact in facts if fact)
        return f"{self.device} ({told})" if told else self.device


def system_ports() -> list[PortSeen]:
    """The serial ports of this machine, by device name; opens none of them."""
    from serial.tools import list_ports

    seen = [
        PortSeen(
            device=str(info.device),
            serial_number=info.serial_number or "",
            location=info.location or "",
            description="" if info.description in (None, "n/a") else str(info.description),
        )
        for info in list_ports.comports()
    ]
    return sorted(seen, key=lambda port: port.device)


Listing = Callable[[], Sequence[PortSeen]]


def by_serial_number(serial_number: str, *, listing: Listing = system_ports) -> PortSeen:
    """The one port whose USB adapter has this serial number (upper and lower case alike); else raises
    PortNotFound.
    """
    ports = listing()
    wanted = serial_number.strip().casefold()
    matches = [port for port in ports if wanted and port.serial_number.casefold() == wanted]
    hint = "adapters without a serial number of their own are told apart by where they are plugged in: usb-path:..."
    return _only(matches, f"the USB serial number {serial_number}", ports, hint)


def by_location(location: str, *, listing: Listing = system_ports) -> PortSeen:
    """The one port plugged in at `location`, such as `1-1.4` or, with the adapter's channel, `1-1.4:1.0`.

    Raises PortNotFound where there is none, or where an adapter has several channels and none is named.
    """
    ports = listing()
    matches = [port for port in ports if port.location == location]
    if not matches and ":" not in location:
        matches = [port for port in ports if re.fullmatch(re.escape(location) + r":[\w.]+", port.location)]
    return _only(matches, f"the place {location}", ports, "add the channel, as listed, after a colon")


def _only(matches: Sequence[PortSeen], what: str, ports: Sequence[PortSeen], hint: str) -> PortSeen:
    if len(matches) == 1:
        return matches[0]
    if matches:
        listed = "; ".join(str(port) for port in matches)
        raise PortNotFound(f"{len(matches)} ports match {what}, and none is taken: {listed}; {hint}")
    there = "; ".join(str(port) for port in ports) or "none"
    raise PortNotFound(f"no port matches {what}; ports that are there: {there}")
