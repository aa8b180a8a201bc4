"""What `core:` texts mean, and what a bench is rehearsed on.

`core:?pace=virtual&seed=3&fault=jammed_shaft&bench=FILE` has the options of `mock:`; `limits` names a file for the
board's store. See `ramprig.mock.url`.
"""

from __future__ import annotations

from dataclasses import dataclass

from ramprig.bench import Bench
from ramprig.errors import UsageError
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import DevicePort
from ramprig.mock.url import make_setup, name_of, parse_mock
from ramprig.port.clock import VirtualClock

from .device import SimulatedDevice
from .library import defines, load


class CorePort(DevicePort[SimulatedDevice]):
    """A `Port` to a board of core and plant in C in this process."""


def open_core(text: str, *, clock: VirtualClock | None = None) -> CorePort:
    """A port to a new board as `text` asks for; raises UsageError where the core cannot be built, and FileError."""
    rest = text.removeprefix("core:").removeprefix("//")
    if rest and not rest.startswith("?"):
        raise UsageError(f"'{text}': after 'core:' come options, such as 'core:?pace=virtual&seed=3'")
    wish = parse_mock(f"mock:{rest}")
    setup, seed = make_setup(wish)
    return CorePort(SimulatedDevice(setup, seed=seed), pace=wish.pace, seed=seed, name=name_of(text), clock=clock)


@dataclass(frozen=True, slots=True, kw_only=True)
class Rehearsal:
    """What a rehearsal runs on: `scheme` is `core:` or `mock:`, `on` says it to a person, and why not on the core."""

    scheme: str
    on: str


def rehearsal_on(bench: Bench, *, wanted: str | None = None) -> Rehearsal:
    """The firmware core where it can be built for the bench's board, else the mock; or the one that is `wanted`.

    Raises UsageError where the core is wanted and cannot be built, and FileError at what the bench's model lacks.
    """
    if wanted == "mock":
        return Rehearsal(scheme="mock:", on="the mock in Python")
    setup = setup_of_bench(bench)
    try:
        load(defines(setup.board))
    except UsageError as error:
        if wanted is not None:
            raise
        return Rehearsal(scheme="mock:", on=f"the mock in Python ({error})")
    return Rehearsal(scheme="core:", on="the firmware core and plant in C")
