"""Keeps on the disk what a thinned log has not decided yet, so that a killed run has its last rows at full rate.

Two files take turns, each with the header and all rows of some seconds:

    held-1.csv   rows of the present turn          a turn ends after the time that rows wait to be decided;
    held-2.csv   rows of the turn before           then the older file is begun anew

Rows are held, then they decide, and only then a turn may end: what the older file holds by then has been decided and,
before it goes, synced in its volume. A run that ends in order writes its undecided rows to the volume and removes both;
whoever reads one that did not takes from them the rows after the last one of its volumes, and resuming moves those
there. Of a run that ended because its disk was full, resuming keeps them as `unwritten-1.csv` and so on: its account
tells those rows as unwritten.
"""

from __future__ import annotations

import functools
import math
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from ..errors import RecordError
from .appendfile import AppendFile, patiently, sync_folder, whole_lines
from .rows import Rows
from .volumes import HELD_NAMES, Stream, held_files, volume_files

TURN_LEAST_S = 5.0
"""A turn is no shorter than this, however soon rows are decided."""


class HeldRows:
    """Writes the files; `settle` is called before an older one goes, and has the disk hold what was decided.

    Raises OSError.
    """

    def __init__(self, folder: Path, header: bytes, *, wait_s: float, tick_us: int, settle: Callable[[], None]) -> None:
        self._folder = folder
        self._header = header
        self._turn_ticks = round(max(wait_s, TURN_LEAST_S) * 1e6 / tick_us)
        self._settle = settle
        self._turn = 0
        self._begin_tick: int | None = None
        self._first = self._newest = 0
        self._file: AppendFile | None = None

    def follows(self, rows: Rows) -> bool:
        """Whether the ticks of these rows go on from those before, and do not begin anew."""
        return self._begin_tick is None or int(rows.ticks[0]) > self._newest

    def append(self, rows: Rows) -> None:
        """Rows that follow those before, in one write; what they decide comes after it, and then `turn`."""
        if self._file is None:
            self._begin()
        assert self._file is not None  # a turn has just begun
        self._file.append(rows.data)
        self._first, self._newest = int(rows.ticks[0]), int(rows.ticks[-1])
        if self._begin_tick is None:
            self._begin_tick = self._first

    def turn(self, *, now: bool = False) -> None:
        """All that the rows so far decide is written: the next turn begins where this one has lasted long enough."""
        if self._file is None or self._begin_tick is None:
            return
        if now or self._first >= self._begin_tick + self._turn_ticks:
            self._settle()
            self._file.sync()
            self.close()
            self._begin()

    def _begin(self) -> None:
        path = self._folder / HELD_NAMES[self._turn % len(HELD_NAMES)]
        patiently(lambda: path.unlink(missing_ok=True))
        self._file = AppendFile(path)
        self._file.append(self._header)
        self._turn += 1
        self._begin_tick = None
        sync_folder(self._folder)

    def sync(self) -> None:
        """Have the disk hold all that was written. Raises OSError."""
        if self._file is not None:
            self._file.sync()

    def let_go(self) -> None:
        """Have it take no more, from any thread."""
        file = self._file
        if file is not None:
            file.let_go()

    def close(self) -> None:
        """Close the file; what it holds stays."""
        file, self._file = self._file, None
        if file is not None:
            file.close()

    def remove(self) -> None:
        """The volumes hold all rows that they are to hold. Raises OSError."""
        self._settle()
        self.close()
        _remove(self._folder)


def _remove(folder: Path) -> None:
    for path in [folder / name for name in HELD_NAMES]:
        patiently(functools.partial(path.unlink, missing_ok=True))
    sync_folder(folder)


def absorb_held(folder: Path, part: Mapping[str, Any]) -> None:  # Any: JSON as it comes
    """Move the held rows of a part that broke off to the end of its last volume. Raises OSError, RecordError.

    Where that is broken off too, doing it again comes to the same. A part whose account is made is left as it is, and
    held rows that no volume is there for, or that cannot be read, are never removed.
    """
    held = held_files(folder)
    volumes = [path for path in volume_files(folder, part) if path not in held]
    if part.get("status") == "finished" or not volumes:
        for path in held:
            _set_aside(path)
        return
    if not held:
        return
    Stream([*volumes, *held], columns=())  # raises where they do not belong together
    last = _last_tick(volumes)
    file, _ = AppendFile.reopen(volumes[-1])
    try:
        for path in held:
            last = _move_rows(path, file, after=last)
        file.sync()
    finally:
        file.close()
    _remove(folder)


def _move_rows(path: Path, to: AppendFile, *, after: float) -> float:
    """Append the whole rows after this tick; returns the last tick there is then. Raises OSError, RecordError."""
    last = after
    header = True
    for data, _ in whole_lines(path):
        lines: list[bytes] = []
        for line in data.splitlines(keepends=True)[header:]:
            tick = _tick_of(line, path)
            if tick > last:
                lines.append(line)
                last = tick
        header = False
        to.append(b"".join(lines))
    return last


def _tick_of(line: bytes, path: Path) -> int:
    try:
        return int(line.partition(b",")[0])
    except ValueError as error:
        raise RecordError(f"{path} is no samples file: a row begins with {line[:20]!r}, not with a tick") from error


def _set_aside(path: Path) -> None:
    """Give a file of held rows a name that nobody writes to again."""
    number = 1
    while (to := path.with_name(f"unwritten-{number}.csv")).exists():
        number += 1
    path.rename(to)
    sync_folder(path.parent)


def _last_tick(volumes: list[Path]) -> float:
    """The tick of the last row; before all of them where there is none."""
    ticks = Stream(volumes, columns=()).tail().ticks
    return float(ticks[-1]) if len(ticks) else -math.inf
