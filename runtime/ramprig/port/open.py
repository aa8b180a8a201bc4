"""Open the port that a text names: a device, or a scheme and what follows it."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import get_args

from ramprig.errors import UsageError
from ramprig.port import find, serialport
from ramprig.port.base import Port
from ramprig.port.clock import Clock
from ramprig.port.serialport import Dtr

SCHEME = re.compile(r"([a-z][a-z0-9+-]+):(?://)?(.*)", re.DOTALL)
"""Two letters at least: `C:` is a drive."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Wanted:
    """What was asked for: the whole `url`, the `rest` after its scheme, and the options."""

    url: str
    rest: str
    baud: int
    dtr: Dtr
    clock: Clock | None


Factory = Callable[[Wanted], Port]


def _socket(wanted: Wanted) -> Port:
    return serialport.open_socket(wanted.url, clock=wanted.clock)


def _rfc2217(wanted: Wanted) -> Port:
    return serialport.open_rfc2217(wanted.url, baud=wanted.baud, dtr=wanted.dtr, clock=wanted.clock)


def _device(wanted: Wanted) -> Port:
    return serialport.open_device(wanted.rest, baud=wanted.baud, dtr=wanted.dtr, clock=wanted.clock)


def _usb(wanted: Wanted) -> Port:
    return _device(replace(wanted, rest=find.by_serial_number(wanted.rest).device))


def _usb_path(wanted: Wanted) -> Port:
    return _device(replace(wanted, rest=find.by_location(wanted.rest).device))


def _lockstep(wanted: Wanted) -> Port:
    from ramprig.port.lockstep import LockstepPort

    pipe = open_port(wanted.rest, baud=wanted.baud, dtr=wanted.dtr)
    return LockstepPort(pipe, name=wanted.url)


_factories: dict[str, Factory] = {
    "socket": _socket,
    "rfc2217": _rfc2217,
    "usb": _usb,
    "usb-path": _usb_path,
    "lockstep": _lockstep,
}


def register(scheme: str, factory: Factory) -> None:
    """Have `open_port` give texts that begin with `scheme:` to `factory`; a room above this one calls it.

    Registering the same scheme again replaces it. `scheme` is lower case, two characters at least.
    """
    if SCHEME.fullmatch(scheme + ":") is None:
        raise ValueError(f"not a scheme: {scheme!r}")
    _factories[scheme] = factory


def open_port(url: str, *, baud: int = 115200, dtr: Dtr = "leave", clock: Clock | None = None) -> Port:
    """Open the port `url` names and return it.

    A device name or a link to one (`/dev/serial/by-id/...`, `COM3`), `usb:SERIALNUMBER`, `usb-path:1-1.4`,
    `socket://host:port`, `rfc2217://host:port`, `lockstep:` before one of these, or a registered scheme.
    Nothing is sent. `clock` replaces the port's own. Raises UsageError for a text or option that means
    nothing, PortNotFound, PortUnavailable.
    """
    if dtr not in get_args(Dtr):
        raise UsageError(f"dtr is {dtr!r}; it is one of {', '.join(get_args(Dtr))}")
    if not 50 <= baud <= 20_000_000:
        raise UsageError(f"{baud} is not a baud rate")
    if not url.strip():
        raise UsageError("the port's name is empty")
    match = SCHEME.fullmatch(url)
    if match is None:
        return _device(Wanted(url=url, rest=url, baud=baud, dtr=dtr, clock=clock))
    scheme, rest = match.groups()
    factory = _factories.get(scheme)
    if factory is None:
        raise UsageError(f"{url}: no port is called '{scheme}:'; there are {', '.join(sorted(_factories))}")
    return factory(Wanted(url=url, rest=rest, baud=baud, dtr=dtr, clock=clock))
