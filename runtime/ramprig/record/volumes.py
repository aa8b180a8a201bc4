"""The volumes of a samples log: how a long one is cut into files, what they are called, and how they are read as one.

    samples.csv           the first volume of the first part of a run
    samples.0002.csv      its second one, begun when the first was full
    samples-2.csv         the first volume of the second part, which followed an interruption
    samples-2.0002.csv    its second one

Each is a whole CSV file with the header, and read together they are one stream of rows. A volume that is full is synced
and closed for good before the next one takes its first row, so a crash around the change finds every synced row in
one of the two.
"""

from __future__ import annotations

import re
from collections.abc import Collection, Iterator, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import RecordError
from .scan import PIECE_BYTES, TAIL_BYTES, Piece, Scan

SAMPLES_FIRST = "samples.csv"
VOLUMES_MAX = 9999
"""The last volume of a part, which is not cut any more: nothing is lost, it only grows."""
ROWS_DEFAULT = 1_000_000
"""Rows of a volume: with its header it stays within the 1,048,576 rows of a sheet in Microsoft Excel."""
HEADER_MAX_BYTES = 1024 * 1024
LAST_ROW_BYTES = 64 * 1024
HELD_NAMES = ("held-1.csv", "held-2.csv")
"""Files of a thinned log with the rows that are not decided yet; see `held.py`."""
OWN_NAME = re.compile(r"(samples(-[0-9]+)?(\.[0-9]{4})?|held-[12])\.csv", re.IGNORECASE)
"""Names that volumes have; nothing else in a run folder may be called so."""


@dataclass(frozen=True, slots=True, kw_only=True)
class VolumeLimits:
    """A volume is full with so many rows, or when its first row is so long ago by the board's ticks."""

    rows: int = ROWS_DEFAULT
    span_s: float | None = None


def volume_name(first: str, number: int) -> str:
    """The name of a volume, counted from 1, of the part whose first one is called `first`."""
    return first if number == 1 else f"{first.removesuffix('.csv')}.{number:04d}.csv"


def volume_names(folder: Path, part: Mapping[str, Any]) -> list[str]:  # Any: JSON as it comes
    """The volumes of a part of a run, in order, by its entry in `run.json`.

    Where the part never ended in order, the last ones may not be listed, and are looked for in the folder.
    """
    first = str(part.get("samples_file") or SAMPLES_FIRST)
    names = [str(name) for name in part.get("samples_files") or [first]]
    if part.get("status") != "finished":
        while len(names) < VOLUMES_MAX and (folder / volume_name(first, len(names) + 1)).exists():
            names.append(volume_name(first, len(names) + 1))
    return names


def volume_files(folder: Path, part: Mapping[str, Any]) -> list[Path]:  # Any: JSON as it comes
    """The volumes that were begun, in order, then those of held rows where the part is not over.

    A part that broke off at once may have none.
    """
    paths = [folder / name for name in volume_names(folder, part)]
    held = held_files(folder) if part.get("status") == "running" else []  # those of an earlier part were absorbed
    return [path for path in paths if has_header(path)] + held


def held_files(folder: Path) -> list[Path]:
    """The files of held rows that have any, the older first. Raises RecordError where one holds something else."""
    found = []
    for path in (folder / name for name in HELD_NAMES):
        if has_header(path):
            with open(path, "rb") as file:
                file.readline()
                tick, comma, _ = file.readline(HEADER_MAX_BYTES).partition(b",")
            if b"\0" in tick:
                continue  # no row was on the disk when the power went: see `whole_length`
            if comma and not tick.isdigit():
                raise RecordError(f"{path} is no samples file: its first row begins with {tick[:20]!r}, not a tick")
            if comma:
                found.append((int(tick), path))
    return [path for _, path in sorted(found)]


def has_header(path: Path) -> bool:
    """Whether a samples file was begun: a part that broke off at once may have left none, or a piece of its header."""
    try:
        with open(path, "rb") as file:
            return file.readline(HEADER_MAX_BYTES).endswith(b"\n")
    except FileNotFoundError:
        return False


class Stream:
    """Iterates over the pieces of all volumes of a part as if they were one file; see `Scan`.

    Of files of held rows those are taken that come after the ones before.
    Raises RecordError where one is no samples file, or has not the columns of the first.
    """

    def __init__(
        self, paths: Sequence[Path], columns: Collection[str] | None = None, *, piece_bytes: int = PIECE_BYTES
    ) -> None:
        self._scans = [Scan(path, columns, piece_bytes=piece_bytes) for path in paths]
        self.names = self._scans[0].names if self._scans else ()
        for scan in self._scans:
            if scan.names != self.names:
                raise RecordError(f"{scan.path} has not the columns of {paths[0].name}, which it should go on from")

    @property
    def torn_bytes(self) -> int:
        """Once all pieces were read: the length of unfinished last rows."""
        return sum(scan.torn_bytes for scan in self._scans)

    def __iter__(self) -> Iterator[Piece]:
        last: int | None = None
        for scan in self._scans:
            for piece in scan:
                later = _after(piece, last) if scan.path.name in HELD_NAMES else piece
                if len(later):
                    last = int(later.ticks[-1])
                    yield later

    def tail(self, size_bytes: int = TAIL_BYTES) -> Piece:
        """The last rows, as many as about `size_bytes` hold, from more than one volume where the last one is short."""
        pieces: list[Piece] = []
        left = size_bytes
        last = self._last_of_volumes()
        for scan in reversed(self._scans):
            piece = scan.tail(left)
            later = _after(piece, last) if scan.path.name in HELD_NAMES else piece
            pieces.insert(0, later)
            left -= scan.path.stat().st_size * len(later) // max(1, len(piece))
            if left <= 0:
                break
        return joined(pieces)

    def _last_of_volumes(self) -> int | None:
        """The tick of the last row that is in a volume, where held rows follow; None where there is none."""
        volumes = [scan for scan in self._scans if scan.path.name not in HELD_NAMES]
        if len(volumes) == len(self._scans):
            return None
        tails = (scan.tail(LAST_ROW_BYTES) for scan in reversed(volumes))
        return next((int(tail.ticks[-1]) for tail in tails if len(tail)), None)


def _after(piece: Piece, tick: int | None) -> Piece:
    """The rows of a piece that come after this tick."""
    if tick is None or not len(piece) or piece.ticks[0] > tick:
        return piece
    begin = int(np.searchsorted(piece.ticks, tick, side="right"))
    return Piece(
        piece.ticks[begin:],
        {name: numbers[begin:] for name, numbers in piece.numbers.items()},
        {name: words[begin:] for name, words in piece.words.items()},
    )


def joined(pieces: Sequence[Piece]) -> Piece:
    """Pieces with the same columns as one."""
    if len(pieces) == 1:
        return pieces[0]
    found = Piece(np.concatenate([np.empty(0, np.int64), *(piece.ticks for piece in pieces)]))
    for name in pieces[0].numbers if pieces else ():
        found.numbers[name] = np.concatenate([piece.numbers[name] for piece in pieces])
    for name in pieces[0].words if pieces else ():
        found.words[name] = np.concatenate([piece.words[name] for piece in pieces])
    return found
