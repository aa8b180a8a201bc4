"""The board's limits: reading, setting, which way is tighter, and their digest (SPEC `limit`)."""

from __future__ import annotations

import json
import os
from collections.abc import Iterator, Mapping
from pathlib import Path

from ramprig.errors import FileError
from ramprig_link.check import digest
from ramprig_link.words import LIMITS, Limit, Per, Reason, Tighter

from .board import Board

OFF_AT_ZERO = frozenset({"under_mv", "rated_ma", "stall_duty", "speed_counts"})
"""Limits of which 0 means that the trip is off, so that 0 is looser than every other value."""

Key = tuple[str, int]


def is_looser(limit: Limit, before: int, after: int) -> bool:
    """Whether setting `after` would loosen the limit that is `before` (LIMIT-3); an equal value never does."""
    if after == before:
        return False
    if limit.tighter is Tighter.NONE:
        return True
    if limit.name in OFF_AT_ZERO and 0 in (before, after):
        return after == 0
    return after > before if limit.tighter is Tighter.LOWER else after < before


class LimitStore:
    """All limits of one board, in force across its restarts, and across those of this program where `path` is given.

    `path` is written as a whole and renamed into place, so a cut in between leaves the old or the new (LIMIT-4).
    `values` presets limits over the table's defaults.
    """

    def __init__(self, board: Board, *, values: Mapping[Key, int] | None = None, path: Path | None = None) -> None:
        self.board = board
        self._path = path
        self._values: dict[Key, int] = {}
        for limit in LIMITS.values():
            for index in range(self._fitted(limit)):
                self._values[limit.name, index] = limit.default
        for index in range(board.axes):
            self._values["ceiling_duty", index] = min(self._values["ceiling_duty", index], board.max_duty)
        if path is not None and path.exists():
            values = {**(values or {}), **self._load(path)}
        for (name, index), value in (values or {}).items():
            # Not one by one through `refusal`: pulse_min_us and pulse_max_us may pass each other on the way.
            if (name, index) not in self._values or self.refusal_of_range(name, index, value):
                raise FileError(f"limit {name} {index} is {value}", wanted="the board has no such limit, or not so far")
            self._values[name, index] = value

    def _fitted(self, limit: Limit) -> int:
        return {Per.DEVICE: 1, Per.AXIS: self.board.axes, Per.SERVO: self.board.servos}[limit.per]

    def __getitem__(self, key: Key) -> int:
        return self._values[key]

    def __contains__(self, key: object) -> bool:
        return key in self._values

    def __iter__(self) -> Iterator[Key]:
        """The keys in the order of the digest: by the item's number, then by index."""
        return iter(sorted(self._values, key=lambda key: (LIMITS[key[0]].number, key[1])))

    def refusal_of_range(self, name: str, index: int, value: int) -> bool:
        """Whether the value lies outside the item's own range, or the board's."""
        limit = LIMITS[name]
        if not limit.lowest <= value <= limit.highest:
            return True
        return name == "ceiling_duty" and value > self.board.max_duty

    def refusal(self, name: str, index: int, value: int, *, armed: bool) -> Reason | None:
        """Why the limit may not be set so, None where it may. The key must exist."""
        if self.refusal_of_range(name, index, value):
            return Reason.RANGE
        if name == "pulse_min_us" and value > self._values["pulse_max_us", index]:
            return Reason.RANGE
        if name == "pulse_max_us" and value < self._values["pulse_min_us", index]:
            return Reason.RANGE
        if armed and is_looser(LIMITS[name], self._values[name, index], value):
            return Reason.ARMED
        return None

    def set(self, name: str, index: int, value: int) -> None:
        """Set a limit that `refusal` has allowed."""
        if self._values[name, index] != value:
            self._values[name, index] = value
            self._save()

    def digest(self) -> str:
        """The digest by which `arm` compares (LIMIT-5)."""
        return digest(self._values[key] for key in self)

    def _load(self, path: Path) -> dict[Key, int]:
        try:
            raw = json.loads(path.read_text("utf-8"))
            return {(name, index): int(value) for name, row in raw.items() for index, value in enumerate(row)}
        except (OSError, ValueError, AttributeError, TypeError) as error:
            raise FileError(
                f"{path} holds no limits: {error}", wanted="delete it to begin with the defaults"
            ) from error

    def _save(self) -> None:
        if self._path is None:
            return
        rows: dict[str, list[int]] = {}
        for name, index in self:
            rows.setdefault(name, []).append(self._values[name, index])
        keep(self._path, json.dumps(rows, indent=1).encode("utf-8"))


def keep(path: Path, content: bytes) -> None:
    """Write a board's limits as a whole and rename them into place; raises FileError where that cannot be."""
    try:
        fresh = path.with_name(path.name + ".new")
        fresh.write_bytes(content)
        os.replace(fresh, path)
    except OSError as error:
        raise FileError(
            f"the board's limits cannot be kept in {path}: {error.strerror}", wanted="name a file that can be written"
        ) from error
