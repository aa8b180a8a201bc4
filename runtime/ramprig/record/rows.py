"""Turns sample blocks into the rows of a samples file, whole columns at a time."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
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
        """The rows of the blocks, in order; blocks of one layout that follow each other are printed together."""
        texts = []
        together: list[Block] = []
        count = 0
        for block in blocks:
            if together and (block.layout != together[-1].layout or block.ticks[0] <= together[-1].ticks[-1]):
                texts.append(self._print(together))
                together, count = [], 0
            together.append(block)
            count += len(block)
            if count >= ROWS_AT_ONCE:
                texts.append(self._print(together))
                together, count = [], 0
        if together:
            texts.append(self._print(together))
        return b"".join(texts)

    def _print(self, blocks: list[Block]) -> bytes:
        if len(blocks) == 1:
            ticks, values = blocks[0].ticks, blocks[0].values
        else:
            ticks = np.concatenate([block.ticks for block in blocks])
            values = np.concatenate([block.values for block in blocks])
        if self._last_tick is not None and ticks[0] <= self._last_tick:
            self._begin_anew()
        self._last_tick = int(ticks[-1])
        batch = _Batch(ticks, values, blocks[0].layout, self._unwrappers)
        pieces: list[Piece] = []
        for place, field in enumerate(self.columns.fields):
            pieces += self._field(field, batch, "," if place else "")
        pieces.append(digits.constant_piece("\r\n", len(ticks)))
        return digits.joined(pieces)

    def _field(self, field: Field, batch: _Batch, lead: str) -> list[Piece]:
        match field:
            case TickField():
                return digits.number_pieces(batch.ticks, decimals=0, lead=lead)
            case TimeField():
                micros = (batch.ticks - self._tick_zero) * field.tick_us
                scaled = micros // 1000 if field.decimals == 3 else micros
                return digits.number_pieces(scaled, decimals=field.decimals, lead=lead)
        raw = batch.raw(field.channel)
        if raw is None:
            return [digits.constant_piece(lead, len(batch.ticks))]
        match field:
            case ScaledField():
                return _scaled(field, raw, lead)
            case CountsField():
                return digits.number_pieces(batch.unwrapped(field.channel), decimals=0, lead=lead)
            case TurnsField():
                factor = field.sign * 10**field.decimals / field.counts_per_rev
                turns = np.rint(batch.unwrapped(field.channel) * factor).astype(np.int64)
                return digits.number_pieces(turns, decimals=field.decimals, lead=lead)
            case SpeedField():
                return self._speed(field, raw, batch, lead)
            case LabelField():
                return _labels(raw, self._label[field.name], lead)

    def _speed(self, field: SpeedField, raw: NDArray[np.int32], batch: _Batch, lead: str) -> list[Piece]:
        rpm = self._speeds[field.name].feed(batch.ticks, raw, period_ticks=batch.layout.period_ticks)
        unknown = np.isnan(rpm)
        scaled = np.rint(np.where(unknown, 0.0, rpm) * (field.sign * 10**field.decimals)).astype(np.int64)
        pieces = digits.number_pieces(scaled, decimals=field.decimals, lead=lead)
        return digits.blank(pieces, unknown) if unknown.any() else pieces


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


def _scaled(field: ScaledField, raw: NDArray[np.int32], lead: str) -> list[Piece]:
    factor = field.factor * 10**field.decimals
    whole = round(factor)
    if field.offset == 0 and math.isclose(factor, whole, rel_tol=1e-12):
        scaled = raw.astype(np.int64) * whole  # exact: duty, current and supply are printed as the device told them
    else:
        scaled = np.rint((raw + field.offset) * factor).astype(np.int64)
    pieces = digits.number_pieces(scaled, decimals=field.decimals, lead=lead)
    if field.blank_at is None:
        return pieces
    none = raw == field.blank_at
    return digits.blank(pieces, none) if none.any() else pieces


def _labels(raw: NDArray[np.int32], label: Callable[[int], str], lead: str) -> list[Piece]:
    values, codes = np.unique(raw, return_inverse=True)
    return digits.text_pieces(codes, [csv_field(label(int(value))) for value in values], lead=lead)
