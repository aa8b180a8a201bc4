"""Has `open_port` open `mock:` and `core:` texts: a port scheme that lives above `port` is registered from above."""

from __future__ import annotations

from ramprig.port import open as port_open
from ramprig.port.base import Port
from ramprig.port.clock import VirtualClock

from .url import open_mock


def _mock_factory(wanted: port_open.Wanted) -> Port:
    clock = wanted.clock
    return open_mock(wanted.url, clock=clock if isinstance(clock, VirtualClock) else None)


def _core_factory(wanted: port_open.Wanted) -> Port:
    from .core.url import open_core  # only where it is asked for: it looks for a compiler

    clock = wanted.clock
    return open_core(wanted.url, clock=clock if isinstance(clock, VirtualClock) else None)


def register() -> None:
    """Have `ramprig.port.open.open_port` open `mock:` and `core:` texts."""
    port_open.register("mock", _mock_factory)
    port_open.register("core", _core_factory)
