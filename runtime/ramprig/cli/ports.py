"""`ramprig ports`: the serial ports that are there, and how to name each in a bench file. Opens none of them."""

from __future__ import annotations

import argparse
from typing import TYPE_CHECKING

from ramprig.cli.say import say

if TYPE_CHECKING:
    from ramprig.port.find import PortSeen

NONE_THERE = """No serial port is there: is the cable in, and does it carry data?
A bench without hardware uses the mock, in its file:  port: {url: "mock:"}"""


def declare(parser: argparse.ArgumentParser) -> None:
    """No arguments."""
    parser.epilog = "Opening a port can restart the board behind it, so none is opened."


def carry_out(args: argparse.Namespace) -> int:
    """Print the list."""
    from ramprig.port.find import system_ports

    for line in listing(system_ports()):
        say(line)
    return 0


def listing(ports: list[PortSeen]) -> list[str]:
    """One paragraph a port: what it is, then the keys for the bench file, the surest first."""
    if not ports:
        return NONE_THERE.splitlines()
    lines = []
    for port in ports:
        lines.append(f"{port.device}  {port.description}".rstrip())
        lines += [f"    port: {{{key}: {value}}}{remark}" for key, value, remark in names_of(port)]
    return lines


def names_of(port: PortSeen) -> list[tuple[str, str, str]]:
    """Key, value and remark of each way to name the port in a bench file."""
    names = []
    if port.serial_number:
        names.append(("usb serial", quoted(port.serial_number), "   the same adapter wherever it is plugged in"))
    if port.location:
        names.append(("usb path", quoted(port.location), "   whatever is plugged in there"))
    if not names:
        names.append(("url", port.device, ""))
    return names


def quoted(text: str) -> str:
    """The text as a YAML scalar that no reader takes for something else."""
    plain = text.isalnum() and not text.isdigit() and text.isascii()
    return text if plain else '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'
