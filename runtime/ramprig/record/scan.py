"""Reads a samples file in pieces of bounded size, so that a log of any length needs the memory of one piece.

Our own files hold plain decimal numbers with a fixed number of decimals, which is read whole columns at a time: an
integer is gathered digit by digit and divided once, which gives exactly the number that `float` reads (both parts are
whole and below 2^53, and a division rounds once). Anything else in a column is read field by field.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Collection, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import BinaryIO

import numpy as np
from numpy.typing import NDArray

from ..errors import RecordError
from .appendfile import whole_length

PIECE_BYTES = 1024 * 1024
"""So much of the file is read at a time; a row longer than this is no row of ours."""
TAIL_BYTES = 1024 * 1024
WORD_COLUMNS = ("state",)
"""The columns that hold words; every other one holds numbers or nothing."""
DIGITS_MAX = 15
"""Longer numbers than this are read field by field: whole numbers beyond 2^53 are not exact."""

Bytes = NDArray[np.uint8]
Ints = NDArray[np.int64]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Piece:
    """Rows in the order of the file: `ticks` (n,) int64, `numbers` (n,) float64 by column, NaN where a field is empty.

    `words` are the columns of words, (n,) texts.
    """

    ticks: Ints
    numbers: dict[str, Floats] = field(default_factory=dict)
    words: dict[str, NDArray[np.str_]] = field(default_factory=dict)

    def __len__(self) -> int:
        return len(self.ticks)


class Scan:
    """Iterates over the pieces of a samples file. Raises RecordError where it is none, or cannot be read.

    `columns` are those wanted besides the ticks, None for all. `names` are the columns of the file, `torn_bytes`, once
    all pieces were read, the length of an unfinished last row, which is left out.
    """

    def __init__(self, path: Path, columns: Collection[str] | None = None, *, piece_bytes: int = PIECE_BYTES) -> None:
        self.path = path
        self.names = header_of(path)
        self.torn_bytes = 0
        self._wanted = [name for name in self.names[1:] if columns is None or name in columns]
        self._piece_bytes = piece_bytes

    def __iter__(self) -> Iterator[Piece]:
        try:
            with open(self.path, "rb") as file:
                file.readline()
                rest = b""
                while data := file.read(self._piece_bytes):
                    data = rest + data
                    end = whole_length(data)
                    rest = data[end:]
                    if end:
                        yield self._piece(data[:end])
                    if b"\0" in rest:
                        self.torn_bytes = len(rest) - file.tell() + file.seek(0, io.SEEK_END)
                        return
                    if len(rest) > PIECE_BYTES:
                        raise RecordError(f"{self.path} is no samples file: a row is longer than {PIECE_BYTES} bytes")
                self.torn_bytes = len(rest)
        except OSError as error:
            raise RecordError(f"{self.path} cannot be read as a samples file: {error}") from error

    def tail(self, size_bytes: int = TAIL_BYTES) -> Piece:
        """The last rows, as many whole ones as `size_bytes` hold."""
        try:
            with open(self.path, "rb") as file:
                first = len(file.readline())
                end = file.seek(0, io.SEEK_END)
                begin = max(first, end - size_bytes)
                file.seek(begin)
                data = file.read()
                if b"\0" in data:  # rare: left by a loss of power, and rows may follow that do not count
                    end = _first_nul(file)
                    begin = max(first, end - size_bytes)
                    file.seek(begin)
                    data = file.read(end - begin)
        except OSError as error:
            raise RecordError(f"{self.path} cannot be read as a samples file: {error}") from error
        if begin > first:
            data = data[data.find(b"\n") + 1 :]
        return self._piece(data[: whole_length(data)])

    def _piece(self, data: bytes) -> Piece:
        """The rows of whole lines."""
        if b'"' in data:
            return self._quoted(data)
        buffer = np.frombuffer(data, np.uint8)
        ends = np.flatnonzero((buffer == ord(",")) | (buffer == ord("\n")))
        width = len(self.names)
        if len(ends) % width or not np.array_equal(ends[width - 1 :: width], np.flatnonzero(buffer == ord("\n"))):
            raise RecordError(f"{self.path} is no samples file: a row has not as many fields as the header")
        table = ends.reshape(-1, width)
        fields = {name: _Fields.of(buffer, data, table, place) for place, name in enumerate(self.names)}
        ticks = fields["tick"].numbers()
        if ticks is None or np.isnan(ticks).any():
            raise RecordError(f"{self.path} is no samples file: column tick does not hold whole numbers")
        piece = Piece(ticks.astype(np.int64))
        for name in self._wanted:
            if name in WORD_COLUMNS:
                piece.words[name] = fields[name].words()
                continue
            numbers = fields[name].numbers()
            if numbers is None:
                raise RecordError(f"{self.path} is no samples file: column {name} holds something else than numbers")
            piece.numbers[name] = numbers
        return piece

    def _quoted(self, data: bytes) -> Piece:
        """Rows with quoted fields, which we do not write but may be given: read field by field, once."""
        try:
            rows = list(csv.reader(io.StringIO(data.decode("utf-8"), newline=""), strict=True))
            if any(len(row) != len(self.names) for row in rows):
                raise ValueError("a row has not as many fields as the header")
            fields = dict(zip(self.names, zip(*rows, strict=True), strict=True)) if rows else {}
            piece = Piece(np.array([int(text) for text in fields.get("tick", ())], np.int64))
            for name in self._wanted:
                texts = fields.get(name, ())
                if name in WORD_COLUMNS:
                    piece.words[name] = np.array(texts, dtype=np.str_)
                else:
                    piece.numbers[name] = np.array([float(text) if text else math.nan for text in texts])
        except (ValueError, csv.Error) as error:
            raise RecordError(f"{self.path} cannot be read as a samples file: {error}") from error
        return piece


def _first_nul(file: BinaryIO) -> int:
    """Where the first NUL of a file is; its end where it has none."""
    place = file.seek(0)
    while data := file.read(PIECE_BYTES):
        found = data.find(b"\0")
        if found >= 0:
            return place + found
        place += len(data)
    return place


def header_of(path: Path) -> tuple[str, ...]:
    """The columns of a samples file; raises RecordError where it is none."""
    try:
        with open(path, "rb") as file:
            line = file.readline(PIECE_BYTES)
        names = next(csv.reader(io.StringIO(line.decode("utf-8"), newline="")), [])
    except (OSError, ValueError, csv.Error) as error:
        raise RecordError(f"{path} cannot be read as a samples file: {error}") from error
    if names[:1] != ["tick"] or not line.endswith(b"\n"):
        raise RecordError(f"{path} is no samples file: its first column is not tick")
    return tuple(names)


def read_ticks(path: Path) -> tuple[Ints, int]:
    """All ticks of a samples file, (n,) int64, and the length in bytes of an unfinished last row."""
    scan = Scan(path, columns=())
    ticks = np.concatenate([np.empty(0, np.int64), *(piece.ticks for piece in scan)])
    return ticks, scan.torn_bytes


@dataclass(frozen=True, slots=True)
class _Fields:
    """One column of a piece: where each of its fields begins and ends in the buffer."""

    buffer: Bytes
    data: bytes
    starts: Ints
    ends: Ints

    @classmethod
    def of(cls, buffer: Bytes, data: bytes, table: Ints, place: int) -> _Fields:
        ends = table[:, place]
        if place:
            starts = table[:, place - 1] + 1
        else:
            starts = np.concatenate((np.zeros(min(1, len(table)), np.int64), table[:-1, -1] + 1))
        if place == table.shape[1] - 1 and len(table):
            ends = ends - (buffer[np.maximum(ends - 1, 0)] == ord("\r"))
        return cls(buffer, data, starts, ends)

    def numbers(self) -> Floats | None:
        """(n,) float64, NaN where a field is empty; None where there is something else than numbers."""
        filled = self.ends > self.starts
        found = np.full(len(filled), np.nan)
        if filled.any():
            starts, ends = self.starts[filled], self.ends[filled]
            values = self._fixed(starts, ends)
            if values is None:
                values = self._one_by_one(starts, ends)
            if values is None:
                return None
            found[filled] = values
        return found

    def _fixed(self, starts: Ints, ends: Ints) -> Floats | None:
        """Plain decimal numbers that all have as many decimals as the first one; None for any other."""
        buffer = self.buffer
        negative = buffer[starts] == ord("-")
        starts = starts + negative
        longest = int((ends - starts).max())
        if longest > DIGITS_MAX + 1:
            return None
        dot = self.data.find(b".", int(starts[0]), int(ends[0]))
        decimals = int(ends[0]) - dot - 1 if dot >= 0 else 0
        least = decimals + 2 if dot >= 0 else 1
        if int((ends - starts).min()) < least or decimals > DIGITS_MAX:
            return None
        values = np.zeros(len(starts), np.int64)
        scale = 1
        for back in range(1, longest + 1):
            at = ends - back
            if back <= least:
                character = buffer[at]
            else:
                outside = at < starts
                character = buffer[np.maximum(at, 0)]
                character[outside] = ord("0")
            if dot >= 0 and back == decimals + 1:
                if not (character == ord(".")).all():
                    return None
                continue
            digit = character - np.uint8(ord("0"))
            if int(digit.max()) > 9:
                return None
            values += digit * np.int64(scale)
            scale *= 10
        signed = np.where(negative, -values, values)
        result: Floats = signed / 10.0**decimals
        if decimals:
            result[negative & (values == 0)] = -0.0
        return result

    def _one_by_one(self, starts: Ints, ends: Ints) -> Floats | None:
        try:
            return np.array([float(self.data[a:b]) for a, b in zip(starts.tolist(), ends.tolist(), strict=True)])
        except ValueError:
            return None

    def words(self) -> NDArray[np.str_]:
        """(n,) texts."""
        lengths = self.ends - self.starts
        width = int(lengths.max(initial=1))
        places = np.arange(max(width, 1))
        at = np.minimum(self.starts[:, None] + places, len(self.buffer) - 1)
        letters = np.where(places < lengths[:, None], self.buffer[at], np.uint8(0))
        texts = np.ascontiguousarray(letters).view(f"S{max(width, 1)}")[:, 0]
        return np.char.decode(texts, "utf-8")
