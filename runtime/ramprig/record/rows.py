"""Turns sample blocks into the rows of a samples file, whole columns at a time."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from ..session.blocks import Block, Layout
from . import digits
from .columns import (
    ChannelKey,
    Columns,
    CountsField,
    Field,
    LabelField,
    ScaledField,
    SpeedField,
    TickField,
    TimeField,
    TurnsField,
)
from .csvfile import field as csv_field
from .csvfile import record
from .digits import Piece
from .speed import SpeedEstimator, SpeedMethod

Ints = NDArray[np.int64]
LABELS_MAX = 1024  # labels remembered; the state bits have a few dozen values in practice
ROWS_AT_ONCE = 4096  # bounds the memory of one formatting step


class Unwrapper:
    """Carries counts on past the wrap of 32 bits: equal to the device's modulo 2^32, and near the value before."""

    __slots__ = ("_raw", "_value")

    def __init__(self) -> None:
        self._raw: np.int32 | None = None
        self._value = 0

    def feed(self, raw: NDArray[np.int32]) -> Ints:
        """(n,) int64 for (n,) int32; steps of 2^31 and more cannot be told from their opposite."""
        before = raw[0] if self._raw is None else self._raw
        start = int(raw[0]) if self._raw is None else self._value
        values: Ints = start + np.cumsum(np.diff(raw, prepend=before).astype(np.int64))
        self._raw, self._value = raw[-1], int(values[-1])
        return values


@dataclass(frozen=True, slots=True)
class Cells:
    """One column of printed rows as numbers: `scaled` (n,) int64 / 10^`decimals`; nothing stands where `blank` is true.

    The numbers are those of the text, digit by digit. `blank` is (n,) bool, None where every field is filled.
    """

    scaled: Ints
    decimals: int
    blank: NDArray[np.bool_] | None = None

    def __getitem__(self, rows: slice) -> Cells:
        """Some of the rows; nothing is copied."""
        return Cells(self.scaled[rows], self.decimals, None if self.blank is None else self.blank[rows])

    def values(self) -> NDArray[np.float64]:
        """(n,) float64, exactly what reading the text gives; NaN where nothing stands."""
        values: NDArray[np.float64] = self.scaled / 10.0**self.decimals
        if self.blank is not None:
            values[self.blank] = math.nan
        return values

    def pieces(self, lead: str) -> list[Piece]:
        """The column as text."""
        pieces = digits.number_pieces(self.scaled, decimals=self.decimals, lead=lead)
        return pieces if self.blank is None else digits.blank(pieces, self.blank)


@dataclass(frozen=True, slots=True)
class Rows:
    """Printed rows of one logging, in order of tick: `data` has one line for each of `ticks`, (n,) int64.

    `cells` are the columns of numbers by name, without tick and time; a column that was not logged is not among them.
    """

    ticks: Ints
    data: bytes
    period_ticks: int
    cells: Mapping[str, Cells]

    def __len__(self) -> int:
        return len(self.ticks)

    def __getitem__(self, rows: slice) -> Rows:
        """Some of the rows, which follow each other."""
        begin, end, _ = rows.indices(len(self.ticks))
        if (begin, end) == (0, len(self.ticks)):
            return self
        data = b""
        if self.data:
            edges = self._edges()
            data = self.data[edges[begin] : edges[end]]
        cells = {name: cells[rows] for name, cells in self.cells.items()}
        return Rows(self.ticks[rows], data, self.period_ticks, cells)

    def numbers(self) -> Rows:
        """The rows without their text, for those who read numbers alone: to cut them no line is looked for."""
        return Rows(self.ticks, b"", self.period_ticks, self.cells)

    def only(self, kept: NDArray[np.bool_]) -> Rows:
        """The rows where (n,) `kept` is true, without their cells."""
        if kept.all():
            return self
        edges = self._edges()
        data = b"".join(self.data[edges[row] : edges[row + 1]] for row in np.flatnonzero(kept).tolist())
        return Rows(self.ticks[kept], data, self.period_ticks, {})

    def bare(self) -> Rows:
        """The rows without their cells, which take as much memory again."""
        return Rows(self.ticks, self.data, self.period_ticks, {})

    def _edges(self) -> list[int]:
        """Where each row begins in the text, and where the last one ends."""
        edges: list[int] = (np.flatnonzero(np.frombuffer(self.data, np.uint8) == ord("\n")) + 1).tolist()
        return [0, *edges]


class RowPrinter:
    """Prints blocks as rows of one samples file; remembers between blocks what counts and speeds need, in fixed memory.

    `tick_zero` is the tick at which `time_s` is 0. Blocks must come in the order of their ticks; where the ticks jump
    back the device has restarted, and counts and speeds begin anew.
    """

    def __init__(self, columns: Columns, *, tick_us: int, tick_zero: int, method: SpeedMethod | None = None) -> None:
        self.columns = columns
        self._tick_us = tick_us
        self._tick_zero = tick_zero
        self._method = method or SpeedMethod()
        self._last_tick: int | None = None
        self._label = {
            field.name: lru_cache(LABELS_MAX)(field.label) for field in columns.fields if isinstance(field, LabelField)
        }
        digits.prepare()
        self._begin_anew()

    def _begin_anew(self) -> None:
        self._unwrappers: dict[ChannelKey, Unwrapper] = {}
        self._speeds = {
            field.name: SpeedEstimator(
                counts_per_rev=field.counts_per_rev, tick_s=self._tick_us / 1e6, method=self._method
            )
            for field in self.columns.speeds
        }

    def header(self) -> bytes:
        """The first line of the file."""
        return record(self.columns.names)

    def rows(self, blocks: Sequence[Block]) -> bytes:
        """The rows of the blocks, in order, as text."""
        return b"".join(rows.data for rows in self.tables(blocks))

    def tables(self, blocks: Sequence[Block]) -> Iterator[Rows]:
        """The rows of the blocks, in order; blocks of one layout that follow each other are printed together."""
        for together in _together(blocks):
            yield self._print(together)

    def numbers(self, blocks: Sequence[Block]) -> Iterator[tuple[Ints, dict[str, Cells]]]:
        """The same without the text: ticks, and the columns of numbers by name. A printer serves for one or the
        other."""
        for together in _together(blocks):
            batch = self._batch(together)
            fields = [field for field in self.columns.fields if not isinstance(field, TickField | TimeField)]
            known = {field.name: self._cells(field, batch) for field in fields}
            yield batch.ticks, {name: cells for name, cells in known.items() if cells is not None}

    def pass_over(self, blocks: Sequence[Block]) -> None:
        """Give neither, but remember what the counts and speeds of later blocks need."""
        for together in _together(blocks):
            batch = self._batch(together)
            for field in self.columns.fields:
                if isinstance(field, CountsField | TurnsField | SpeedField):
                    self._cells(field, batch)

    def _batch(self, blocks: list[Block]) -> _Batch:
        if len(blocks) == 1:
            ticks, values = blocks[0].ticks, blocks[0].values
        else:
            ticks = np.concatenate([block.ticks for block in blocks])
            values = np.concatenate([block.values for block in blocks])
        if self._last_tick is not None and ticks[0] <= self._last_tick:
            self._begin_anew()
        self._last_tick = int(ticks[-1])
        return _Batch(ticks, values, blocks[0].layout, self._unwrappers)

    def _print(self, blocks: list[Block]) -> Rows:
        batch = self._batch(blocks)
        ticks = batch.ticks
        pieces: list[Piece] = []
        known: dict[str, Cells] = {}
        for place, field in enumerate(self.columns.fields):
            lead = "," if place else ""
            cells = self._cells(field, batch)
            if cells is not None:
                pieces += cells.pieces(lead)
                if not isinstance(field, TickField | TimeField):
                    known[field.name] = cells
            else:
                pieces += self._words(field, batch, lead)
        pieces.append(digits.constant_piece("\r\n", len(ticks)))
        return Rows(ticks, digits.joined(pieces), blocks[0].layout.period_ticks, known)

    def _cells(self, field: Field, batch: _Batch) -> Cells | None:
        """The numbers of a column; None where it holds words, or nothing because it is not logged."""
        match field:
            case TickField():
                return Cells(batch.ticks, 0)
            case TimeField():
                micros = (batch.ticks - self._tick_zero) * field.tick_us
                return Cells(micros // 1000 if field.decimals == 3 else micros, field.decimals)
        raw = batch.raw(field.channel)
        if raw is None:
            return None
        match field:
            case ScaledField():
                return _scaled(field, raw)
            case CountsField():
                return Cells(batch.unwrapped(field.channel), 0)
            case TurnsField():
                factor = field.sign * 10**field.decimals / field.counts_per_rev
                turns = np.rint(batch.unwrapped(field.channel) * factor).astype(np.int64)
                return Cells(turns, field.decimals)
            case SpeedField():
                return self._speed(field, raw, batch)
            case LabelField():
                return None

    def _words(self, field: Field, batch: _Batch, lead: str) -> list[Piece]:
        """A column that holds words, or nothing."""
        raw = batch.raw(field.channel) if isinstance(field, LabelField) else None
        if raw is None:
            return [digits.constant_piece(lead, len(batch.ticks))]
        return _labels(raw, self._label[field.name], lead)

    def _speed(self, field: SpeedField, raw: NDArray[np.int32], batch: _Batch) -> Cells:
        rpm = self._speeds[field.name].feed(batch.ticks, raw, period_ticks=batch.layout.period_ticks)
        unknown = np.isnan(rpm)
        scaled = np.rint(np.where(unknown, 0.0, rpm) * (field.sign * 10**field.decimals)).astype(np.int64)
        return Cells(scaled, field.decimals, unknown if unknown.any() else None)


def _together(blocks: Sequence[Block]) -> Iterator[list[Block]]:
    """Blocks of one layout that follow each other, ROWS_AT_ONCE rows or a block more at most."""
    together: list[Block] = []
    count = 0
    for block in blocks:
        if together and (block.layout != together[-1].layout or block.ticks[0] <= together[-1].ticks[-1]):
            yield together
            together, count = [], 0
        together.append(block)
        count += len(block)
        if count >= ROWS_AT_ONCE:
            yield together
            together, count = [], 0
    if together:
        yield together


class _Batch:
    """The samples that are printed together, with the counts of each channel unwrapped once."""

    def __init__(
        self, ticks: Ints, values: NDArray[np.int32], layout: Layout, unwrappers: dict[ChannelKey, Unwrapper]
    ) -> None:
        self.ticks = ticks
        self.layout = layout
        self._values = values
        self._unwrappers = unwrappers
        self._unwrapped: dict[ChannelKey, Ints] = {}

    def raw(self, channel: ChannelKey) -> NDArray[np.int32] | None:
        place = self.layout.position(*channel)
        return None if place is None else self._values[:, place]

    def unwrapped(self, channel: ChannelKey) -> Ints:
        if channel not in self._unwrapped:
            raw = self.raw(channel)
            assert raw is not None, "asked for only where it is logged"
            self._unwrapped[channel] = self._unwrappers.setdefault(channel, Unwrapper()).feed(raw)
        return self._unwrapped[channel]


def _scaled(field: ScaledField, raw: NDArray[np.int32]) -> Cells:
    factor = field.factor * 10**field.decimals
    whole = round(factor)
    if field.offset == 0 and math.isclose(factor, whole, rel_tol=1e-12):
        scaled = raw.astype(np.int64) * whole  # exact: duty, current and supply are printed as the device told them
    else:
        scaled = np.rint((raw + field.offset) * factor).astype(np.int64)
    if field.blank_at is None:
        return Cells(scaled, field.decimals)
    none = raw == field.blank_at
    return Cells(scaled, field.decimals, none if none.any() else None)


def _labels(raw: NDArray[np.int32], label: Callable[[int], str], lead: str) -> list[Piece]:
    values, codes = np.unique(raw, return_inverse=True)
    return digits.text_pieces(codes, [csv_field(label(int(value))) for value in values], lead=lead)
