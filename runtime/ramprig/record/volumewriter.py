"""Writes the rows of one part of a run into volumes, one after another."""

from __future__ import annotations

import contextlib
from collections.abc import Callable

import numpy as np

from .appendfile import AppendFile, sync_folder
from .folder import SAMPLES_FILE, RunFolder
from .rows import Ints, Rows
from .volumes import VOLUMES_MAX, VolumeLimits, volume_name


class VolumeWriter:
    """Appends rows to the current volume and begins the next one when it is full.

    `on_begun` is called once a further volume is on the disk and the one before is closed, with the tick of its first
    row and the rows of the one before; it may raise OSError. `names` are the volumes so far, `written_rows` the rows in
    all of them, `synced_rows` those known to be on the disk itself. Not for use by two threads at once.
    """

    def __init__(
        self,
        folder: RunFolder,
        header: bytes,
        *,
        limits: VolumeLimits,
        tick_us: int,
        on_begun: Callable[[int, int], None],
    ) -> None:
        """Begins the first volume. Raises OSError."""
        self._folder = folder
        self._header = header
        self._limits = limits
        self._span_ticks = None if limits.span_s is None else max(1, round(limits.span_s * 1e6 / tick_us))
        self._on_begun = on_begun
        self._file = self._begin(SAMPLES_FILE)
        self.names: list[str] = [self._file.path.name]
        self._first_tick: int | None = None
        self._closed_rows = 0

    @property
    def written_rows(self) -> int:
        """Rows that were appended whole."""
        return self._closed_rows + max(0, self._file.lines - 1)

    @property
    def synced_rows(self) -> int:
        """Rows that the disk itself is known to hold."""
        return self._closed_rows + max(0, self._file.synced_lines - 1)

    def append(self, rows: Rows) -> None:
        """Write the rows, into further volumes where this one is full.

        Raises OSError where not all could be written; the counts then say how many could.
        """
        while len(rows):
            if self._first_tick is None:
                self._first_tick = int(rows.ticks[0])
            room = self._room(rows.ticks)
            if room == 0:
                self._next(int(rows.ticks[0]))
                continue
            self._file.append(rows[:room].data)
            rows = rows[room:]

    def _room(self, ticks: Ints) -> int:
        """How many of these rows the current volume still takes; at least one where it has none."""
        if len(self.names) >= VOLUMES_MAX:
            return len(ticks)
        room = max(0, self._limits.rows - max(0, self._file.lines - 1))
        if self._span_ticks is not None and self._first_tick is not None:
            room = min(room, int(np.count_nonzero(ticks < self._first_tick + self._span_ticks)))
        return min(room, len(ticks))

    def _next(self, tick: int) -> None:
        self._file.sync()
        name = volume_name(self.names[0], len(self.names) + 1)
        file = self._begin(name)
        rows = max(0, self._file.lines - 1)
        self._closed_rows += rows
        self._folder.seal(self._file)
        self._file, self._first_tick = file, None
        self.names.append(file.path.name)
        self._on_begun(tick, rows)

    def _begin(self, name: str) -> AppendFile:
        """A new volume with its header, on the disk; where that fails nothing of it is left behind. Raises OSError."""
        file = self._folder.new_file(name)
        try:
            file.append(self._header)
            file.sync()
            sync_folder(self._folder.path)
        except OSError:
            self._folder.drop(file)
            with contextlib.suppress(OSError):
                file.path.unlink()
            raise
        return file

    def sync(self) -> None:
        """Have the disk hold all rows; raises OSError. The volumes before the current one are on it already."""
        self._file.sync()

    def let_go(self) -> None:
        """Have it take no more, from any thread."""
        self._file.let_go()

    def close(self) -> None:
        """Close the current volume without syncing."""
        self._file.close()
