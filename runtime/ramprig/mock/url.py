"""What `mock:` texts mean: `mock:?pace=virtual&seed=3&fault=jammed_shaft&fault=bit_errors=1e-3&bench=FILE`."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from urllib.parse import parse_qsl

from ramprig.errors import UsageError
from ramprig.port.clock import VirtualClock

from .device import MockDevice
from .faults import parse_fault
from .port import MockPort, Pace
from .setup import MockSetup

OPTIONS = {
    "pace": "virtual (nobody sleeps) or real; real where nothing is said",
    "seed": "a whole number; the same seed and the same doings give the same bytes",
    "fault": "NAME, NAME=VALUE or NAME:AXIS=VALUE; may be given several times",
    "bench": "a bench file, whose motors, servos, limits and model the mock takes",
    "baud": "the wire's rate; 0 for a wire that takes no time",
    "limits": "a file that keeps the board's limits beyond this process",
}
"""The options of a `mock:` text, for help."""


@dataclass(frozen=True, slots=True, kw_only=True)
class MockWish:
    """What a `mock:` text asks for."""

    pace: Pace = "real"
    seed: int | None = None
    faults: tuple[str, ...] = ()
    bench: Path | None = None
    baud: int | None = None
    limits: Path | None = None


def parse_mock(text: str) -> MockWish:
    """The wish that `mock:...`, or what follows its colon, spells; raises UsageError for anything else."""
    rest = text.removeprefix("mock:").removeprefix("//")
    if rest and not rest.startswith("?"):
        raise UsageError(f"'{text}': after 'mock:' come options, such as 'mock:?pace=virtual&seed=3'")
    wish = MockWish()
    for name, value in parse_qsl(rest[1:], keep_blank_values=True):
        match name:
            case "pace":
                if value not in ("virtual", "real"):
                    raise UsageError(f"'{text}': pace is '{value}'; it may be virtual or real")
                wish = replace(wish, pace="virtual" if value == "virtual" else "real")
            case "seed":
                wish = replace(wish, seed=_whole(text, name, value))
            case "baud":
                wish = replace(wish, baud=_whole(text, name, value))
            case "fault":
                parse_fault(value)
                wish = replace(wish, faults=(*wish.faults, value))
            case "bench":
                wish = replace(wish, bench=Path(value))
            case "limits":
                wish = replace(wish, limits=Path(value))
            case _:
                raise UsageError(f"'{text}': there is no option '{name}'; there are {', '.join(OPTIONS)}")
    return wish


def _whole(text: str, name: str, value: str) -> int:
    if not (value.isascii() and value.isdigit() and len(value) <= 18):
        raise UsageError(f"'{text}': {name} is '{value}'; it must be a whole number")
    return int(value)


def make_setup(wish: MockWish) -> tuple[MockSetup, int]:
    """What the device a wish asks for is made from, and its seed. Raises UsageError and FileError."""
    setup, seed = MockSetup(), 0
    if wish.bench is not None:
        from ramprig.bench import load_bench

        from .from_bench import setup_of_bench

        bench = load_bench(wish.bench)
        setup, seed = setup_of_bench(bench), bench.mock.seed
    seed = seed if wish.seed is None else wish.seed
    if wish.baud is not None:
        setup = replace(setup, baud=wish.baud)
    if wish.limits is not None:
        setup = replace(setup, limits_path=wish.limits)
    setup = replace(setup, faults=(*setup.faults, *wish.faults))
    return setup, seed


def make_device(wish: MockWish) -> tuple[MockDevice, int]:
    """The device a wish asks for, and the seed it has been given. Raises UsageError and FileError."""
    setup, seed = make_setup(wish)
    return MockDevice(setup, seed=seed), seed


def name_of(text: str) -> str:
    """What a port of this text is called in messages: without the bench file, which no user need have typed."""
    head, mark, options = text.partition("?")
    kept = [option for option in options.split("&") if not option.startswith("bench=")]
    return head + mark * any(kept) + "&".join(kept)


def open_mock(text: str, *, clock: VirtualClock | None = None) -> MockPort:
    """A port to a new mock as `text` asks for."""
    wish = parse_mock(text)
    device, seed = make_device(wish)
    return MockPort(device, pace=wish.pace, seed=seed, name=name_of(text), clock=clock)
