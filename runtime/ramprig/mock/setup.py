"""What a mock is made from: the board, the plant behind it, its limits and the wire's rate."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

from ramprig.errors import FileError

from .board import Board
from .limits import Key
from .plant import VENT_BENCH, PlantParameters


@dataclass(frozen=True, slots=True, kw_only=True)
class TimedFault:
    """A fault that comes and goes by the mock's own time; `until_s` None: it stays. `text` as `faults.parse_fault`."""

    text: str
    from_s: float
    until_s: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class MockSetup:
    """A mock's parameters; raises `FileError` where board and plant do not fit together.

    `baud` 0 is a wire that takes no time. `boot_ticks` is how long the board hears nothing after a reset. Below
    `brownout_mv` on the supply the board resets; 0 never. `limits` are presets over the protocol's defaults;
    `limits_path` is a file that keeps them beyond this process. `faults` are on from the start, `timed_faults`
    for a time.
    """

    board: Board = field(default_factory=Board)
    plant: PlantParameters = VENT_BENCH
    limits: Mapping[Key, int] = field(default_factory=dict)
    limits_path: Path | None = None
    baud: int = 115200
    boot_ticks: int = 300
    brownout_mv: int = 4500
    faults: tuple[str, ...] = ()
    timed_faults: tuple[TimedFault, ...] = ()

    def __post_init__(self) -> None:
        fitted = (self.board.axes, self.board.servos)
        wired = (len(self.plant.axes), len(self.plant.servos))
        if fitted != wired:
            raise FileError(
                f"the plant has {wired[0]} motors and {wired[1]} servos",
                wanted=f"the board has {fitted[0]} axes and {fitted[1]} servos, and they must be as many",
            )
        if not (self.baud == 0 or 300 <= self.baud <= 20_000_000):
            raise FileError(f"the baud rate is {self.baud}", wanted="0, or 300 to 20000000")
