"""What a board is: identity, sizes and capabilities, checked when made."""

from __future__ import annotations

import re
from dataclasses import dataclass

from ramprig.errors import FileError
from ramprig_link.words import AXES_MAX, CHANNELS, DUTY_FULL, QUEUE_MIN, SERVOS_MAX, TOKEN_MAX, TRAIL_MIN, Cap, Per

CAPS_ALL = Cap.ENCODER | Cap.CURRENT | Cap.SUPPLY | Cap.TEMPERATURE | Cap.KEEPS_LIMITS | Cap.BREAK

_TOKEN = re.compile(rf"[A-Za-z0-9._-]{{1,{TOKEN_MAX}}}", re.ASCII)
_WITHOUT = {
    "counts": Cap.ENCODER,
    "current_ma": Cap.CURRENT,
    "supply_mv": Cap.SUPPLY,
    "temperature_dc": Cap.TEMPERATURE,
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Board:
    """The figures of `who`, and the sizes of the board's own buffers.

    `queue` is in orders, `trail` in records, `keep` in data lines, `transmit_bytes` and `receive_bytes` in bytes.
    Raises `FileError` for what the protocol does not allow.
    """

    firmware: str = "mock-1"
    board: str = "ramprig-mock"
    serial: str = "MOCK-0001"
    tick_us: int = 1000
    axes: int = 1
    servos: int = 1
    max_duty: int = DUTY_FULL
    queue: int = 32
    trail: int = 256
    keep: int = 32
    caps: Cap = CAPS_ALL
    transmit_bytes: int = 2048
    receive_bytes: int = 1024

    def __post_init__(self) -> None:
        for name in ("firmware", "board", "serial"):
            if not _TOKEN.fullmatch(getattr(self, name)):
                raise FileError(
                    f"the board's {name} is {getattr(self, name)!r}",
                    wanted=f"it must be 1 to {TOKEN_MAX} of A-Z a-z 0-9 . _ -",
                )
        bounds = (
            ("tick_us", 1, 1_000_000), ("axes", 0, AXES_MAX), ("servos", 0, SERVOS_MAX), ("max_duty", 1, DUTY_FULL),
            ("queue", QUEUE_MIN, 1024), ("trail", TRAIL_MIN, 65536), ("keep", 0, 256),
            ("transmit_bytes", 512, 1 << 20), ("receive_bytes", 80, 1 << 20),
        )  # fmt: skip
        for name, lowest, highest in bounds:
            if not lowest <= getattr(self, name) <= highest:
                raise FileError(
                    f"the board's {name} is {getattr(self, name)}", wanted=f"it must lie in {lowest} to {highest}"
                )

    @property
    def mask(self) -> int:
        """The `log` mask of all channels this board has."""
        fitted = {Per.AXIS: self.axes, Per.SERVO: self.servos, Per.DEVICE: 1}
        return sum(
            1 << (channel.first_bit + index * channel.step)
            for channel in CHANNELS.values()
            if _WITHOUT.get(channel.name, Cap(0)) in self.caps
            for index in range(fitted[channel.per])
        )
