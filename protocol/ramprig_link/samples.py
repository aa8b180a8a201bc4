"""Blocks of samples on the wire: packed and plain data lines, both ways (SPEC section 13).

A packed payload is one number written in base64 characters: a header, the first sample in full, then for every later
sample and channel the Golomb-Rice code of a difference, whose parameter follows the running mean of what came before.
Sender and receiver keep the same running means, so no parameter is sent but the first.

    header    tick 32 | period 16 | mask 20 | count 8
    channel   first value | k 4 (only where count > 1)          for each channel in order of its bit
    residual  q ones | 0 | k low bits      or      RICE_QUOTIENT_MAX ones | 32 bits      for each sample and channel
"""

from __future__ import annotations

import re
from binascii import a2b_base64, b2a_base64
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache
from typing import Any, Protocol

from .faults import FieldError, SampleFault
from .fields import read_i32, read_u32
from .words import (
    AXES_MAX,
    BLOCK_SAMPLES_MAX,
    CHANNELS,
    PAYLOAD_MAX,
    RICE_K_MAX,
    RICE_K_START,
    RICE_QUOTIENT_MAX,
    RICE_RESET,
    RICE_SUM_CAP,
    SERVOS_MAX,
    Per,
)

PERIOD_MAX = 0xFFFF
_TICK_BITS, _PERIOD_BITS, _MASK_BITS, _COUNT_BITS, _K_BITS, _ESCAPED_BITS = 32, 16, 20, 8, 4, 32
_HEADER_BITS = _TICK_BITS + _PERIOD_BITS + _MASK_BITS + _COUNT_BITS
_CHARACTER_BITS = 6
_U32 = 0xFFFFFFFF
_I32_WRAP = 0x80000000

_PAYLOAD = re.compile(rf"[A-Za-z0-9+/]{{{_HEADER_BITS // _CHARACTER_BITS + 1},{PAYLOAD_MAX}}}")
_ESCAPE = ((1 << RICE_QUOTIENT_MAX) - 1) << _ESCAPED_BITS
# With u = q 2^k + low, the code of q ones, a zero and k low bits is the number (2^(q+1) - 2) 2^k + low,
# that is, _UNARY[q] 2^k + u.
_UNARY = tuple((1 << (q + 1)) - 2 - q for q in range(RICE_QUOTIENT_MAX))


@dataclass(frozen=True, slots=True)
class ChannelRef:
    """One channel of a logging: what it is (`kind`, as in protocol.toml), of which axis or servo, and its mask bit.

    `width_bits` is the two's complement width of its first sample; `order` (1 or 2) that of the difference coded.
    """

    kind: str
    index: int
    bit: int
    width_bits: int
    order: int


class Columns(Protocol):
    """Lists of integers, or what is read like them, such as an array of two dimensions."""

    def __len__(self) -> int: ...

    def __iter__(self) -> Iterator[Any]: ...

    def __getitem__(self, place: int, /) -> Any: ...


@dataclass(frozen=True, slots=True)
class SampleBlock:
    """Samples one period apart: sample i was taken at tick `first_tick` + i `period`, modulo 2^32.

    `columns` has `rows` integers for each channel of `mask`, in order of the bits; the units are those of
    protocol.toml. `period` is 1 to 65535 ticks, `rows` 1 to 255.
    """

    first_tick: int
    period: int
    mask: int
    rows: int
    columns: Columns


def _all_channels() -> tuple[ChannelRef, ...]:
    fitted = {Per.AXIS: AXES_MAX, Per.SERVO: SERVOS_MAX, Per.DEVICE: 1}
    refs = [
        ChannelRef(channel.name, index, channel.first_bit + index * channel.step, channel.bits, channel.order)
        for channel in CHANNELS.values()
        for index in range(fitted[channel.per])
    ]
    return tuple(sorted(refs, key=lambda ref: ref.bit))


ALL_CHANNELS = _all_channels()
ALL_MASK = sum(1 << ref.bit for ref in ALL_CHANNELS)


@lru_cache(maxsize=64)
def channels_of(mask: int) -> tuple[ChannelRef, ...]:
    """The channels of a `log` mask in order of their bits; raises SampleFault for 0 or a bit of no channel."""
    if mask <= 0 or mask & ~ALL_MASK:
        raise SampleFault(f"mask {mask:#x} has no channel or a bit of none; its bits must lie in {ALL_MASK:#x}")
    return tuple(ref for ref in ALL_CHANNELS if mask >> ref.bit & 1)


def rice_parameter(total: int, count: int) -> int:
    """The least k, at most RICE_K_MAX, with `count` 2^k >= `total` (DATA-7), for `count` of 1 and more."""
    k = ((total - 1) // count).bit_length() if total else 0
    return k if k < RICE_K_MAX else RICE_K_MAX


def _wrapped(value: int) -> int:
    """The value modulo 2^32, signed."""
    return ((value + _I32_WRAP) & _U32) - _I32_WRAP


# ---- receiving -------------------------------------------------------------------------------------------------


class _Track:
    """What the decoder keeps of one channel while it goes through a block."""

    __slots__ = ("bent", "column", "k", "last", "slope", "total")

    def __init__(self, first: int, k: int, *, bent: bool) -> None:
        self.column = [first]
        self.last = first
        self.slope = 0
        self.bent = bent
        self.k = k
        self.total = 1 << k


def decode(payload: str) -> SampleBlock:
    """The samples of a packed payload (DATA-2 to DATA-10); raises SampleFault, and nothing else, for any other text.

    Work is bounded by PAYLOAD_MAX characters and BLOCK_SAMPLES_MAX samples.
    """
    if not _PAYLOAD.fullmatch(payload):
        raise SampleFault(f"{len(payload)} characters are no payload: too few, too many, or not of the base64 alphabet")
    raw = a2b_base64(payload + "A" * (-len(payload) % 4))
    end = _CHARACTER_BITS * len(payload)
    bits = f"{int.from_bytes(raw, 'big'):0{8 * len(raw)}b}"[:end]
    first_tick = int(bits[:32], 2)
    period = int(bits[32:48], 2)
    mask = int(bits[48:68], 2)
    rows = int(bits[68:_HEADER_BITS], 2)
    if not period or not rows:
        raise SampleFault(f"a block of {rows} samples every {period} ticks; both must be at least 1")
    channels = channels_of(mask)
    # Zeros beyond the end let each sample be read without asking for the end at every field.
    bits += "0" * (len(channels) * (RICE_QUOTIENT_MAX + _ESCAPED_BITS))
    tracks, at = _first_sample(bits, channels, rows)
    at = _later_samples(bits, at, end, tracks, rows)
    if end - at >= _CHARACTER_BITS or "1" in bits[at:end]:
        raise SampleFault(f"{end - at} bits are left over after {rows} samples; fewer than 6, all 0, must be")
    return SampleBlock(first_tick, period, mask, rows, [track.column for track in tracks])


def _first_sample(bits: str, channels: tuple[ChannelRef, ...], rows: int) -> tuple[list[_Track], int]:
    """One track a channel with the sample in full, and where the residuals begin."""
    at = _HEADER_BITS
    tracks = []
    for ref in channels:
        value = int(bits[at : at + ref.width_bits], 2)
        value -= (value >> (ref.width_bits - 1)) << ref.width_bits
        at += ref.width_bits
        k = 0
        if rows > 1:
            k = int(bits[at : at + _K_BITS], 2)
            at += _K_BITS
        tracks.append(_Track(value, k, bent=ref.order == 2))
    return tracks, at


def _later_samples(bits: str, at: int, end: int, tracks: list[_Track], rows: int) -> int:
    """Append the residuals' samples to the tracks' columns; returns where they end.

    Raises SampleFault as soon as a sample reaches beyond `end`.
    """
    find = bits.find
    count = 1
    for row in range(1, rows):
        halve = count == RICE_RESET
        count = count // 2 + 1 if halve else count + 1
        for track in tracks:
            k = track.k
            zero = find("0", at, at + RICE_QUOTIENT_MAX)
            if zero >= 0:
                u = zero - at
                at = zero + 1 + k
                if k:
                    u = (u << k) + int(bits[zero:at], 2)
            else:
                at += RICE_QUOTIENT_MAX + _ESCAPED_BITS
                u = int(bits[at - _ESCAPED_BITS : at], 2)
            rise = track.slope - ((u + 1) >> 1) if u & 1 else track.slope + (u >> 1)
            value = track.last + rise
            if not -_I32_WRAP <= value < _I32_WRAP:
                value = _wrapped(value)
            track.last = value
            track.column.append(value)
            if track.bent:
                track.slope = rise if -_I32_WRAP <= rise < _I32_WRAP else _wrapped(rise)
            total = track.total >> 1 if halve else track.total
            track.total = total = total + (u if u < RICE_SUM_CAP else RICE_SUM_CAP)
            k = ((total - 1) // count).bit_length() if total else 0  # `rice_parameter`, without the call
            track.k = k if k < RICE_K_MAX else RICE_K_MAX
        if at > end:
            raise SampleFault(f"the bits end in sample {row + 1} of {rows}")
    if at > end:
        raise SampleFault("the bits end in the first sample")
    return at


def decode_plain(fields: Sequence[str]) -> SampleBlock:
    """The one sample of a plain data line, from its fields tick, period, mask and values; raises SampleFault."""
    try:
        first_tick, period, mask = (read_u32(field) for field in fields[:3])
        values = [read_i32(field) for field in fields[3:]]
    except (FieldError, ValueError) as fault:
        raise SampleFault(f"no plain sample of tick, period, mask and values: {fault}") from fault
    if not 1 <= period <= PERIOD_MAX:
        raise SampleFault(f"period {period}; it must lie in 1 to {PERIOD_MAX}")
    if len(values) != len(channels_of(mask)):
        raise SampleFault(f"{len(values)} values for a mask of {len(channels_of(mask))} channels")
    return SampleBlock(first_tick, period, mask, 1, [[value] for value in values])


def decode_data(body: str) -> SampleBlock:
    """The samples of a data line from what follows its number, packed or plain; raises SampleFault."""
    return decode_plain(body.split(" ")) if " " in body else decode(body)


# ---- sending ---------------------------------------------------------------------------------------------------


class Encoder:
    """Makes packed payloads from samples as they come, in memory that does not grow.

    `oldest_tick` is the tick of the first sample held, None while none is: a device closes the line by it (DATA-9).
    """

    def __init__(self, mask: int, period: int, *, payload_max: int = PAYLOAD_MAX) -> None:
        """Code the channels of `mask`, `period` ticks (1 to 65535) apart, into at most `payload_max` characters.

        Raises SampleFault for a mask or period that no block can have, ValueError where one sample may not fit.
        """
        if not 1 <= period <= PERIOD_MAX:
            raise SampleFault(f"period {period}; it must lie in 1 to {PERIOD_MAX}")
        self._channels = channels_of(mask)
        self._identity = (period << _MASK_BITS) + mask
        self._period = period
        self._room_bits = payload_max * _CHARACTER_BITS
        widths = [ref.width_bits for ref in self._channels]
        self._full_bits = _HEADER_BITS + sum(widths)
        if self._room_bits < self._full_bits:
            raise ValueError(f"{payload_max} characters are too few for one sample of {len(widths)} channels")
        self._ends = [(-(1 << (width - 1)), (1 << (width - 1)) - 1) for width in widths]
        self._bent = [ref.order == 2 for ref in self._channels]
        self._ks = [RICE_K_START] * len(widths)  # of the next residual; they outlive the line
        self.oldest_tick: int | None = None
        self._next_tick = 0
        self._rows = 0

    def add(self, tick: int, values: Sequence[int]) -> str | None:
        """Take the sample of `tick`, one value a channel in order of the bits; values are held in their widths.

        Returns a finished payload where a line had to be closed: without this sample, if it does not fit or is not
        one period after the last, or with it, if it makes the line full. Raises ValueError for a wrong number of
        values.
        """
        held = [
            value if low <= value <= high else (low if value < low else high)
            for value, (low, high) in zip(values, self._ends, strict=True)
        ]
        closed = None
        if self.oldest_tick is None:
            self._begin(tick, held)
        elif tick != self._next_tick or not self._append(held):
            closed = self.flush()
            self._begin(tick, held)
        self._next_tick = (tick + self._period) & _U32
        return self.flush() if self._rows == BLOCK_SAMPLES_MAX else closed

    def flush(self) -> str | None:
        """Close the line: the payload of what is held, None if nothing is."""
        if self.oldest_tick is None:
            return None
        number = (((self.oldest_tick << (_PERIOD_BITS + _MASK_BITS)) + self._identity) << _COUNT_BITS) + self._rows
        for ref, value, k in zip(self._channels, self._first, self._first_ks, strict=True):
            number = (number << ref.width_bits) + (value & ((1 << ref.width_bits) - 1))
            if self._rows > 1:
                number = (number << _K_BITS) + k
        size_bits = self._full_bits
        if self._rows > 1:
            number = (number << self._residual_bits) + self._residuals
            size_bits = self._used_bits
        self.oldest_tick = None
        self._rows = 0
        number <<= -size_bits % 24  # three bytes are four characters: no padding character arises
        text = b2a_base64(number.to_bytes((size_bits + 23) // 24 * 3, "big"), newline=False)
        return text[: -(-size_bits // _CHARACTER_BITS)].decode("ascii")

    def _begin(self, tick: int, held: list[int]) -> None:
        self.oldest_tick = tick
        self._rows = self._count = 1
        self._first = self._last = held
        self._first_ks = self._ks
        self._totals = [1 << k for k in self._ks]
        self._slopes = [0] * len(held)
        self._residuals = 0
        self._residual_bits = 0
        self._used_bits = self._full_bits + _K_BITS * len(held)

    def _append(self, held: list[int]) -> bool:
        """Code one more sample, whole or not at all; False where it does not fit."""
        halve = self._count == RICE_RESET
        count = self._count // 2 + 1 if halve else self._count + 1
        code = code_bits = 0
        slopes, totals, ks = [], [], []
        for value, last, slope, total, k, bent in zip(
            held, self._last, self._slopes, self._totals, self._ks, self._bent, strict=True
        ):
            rise = value - last
            residual = rise - slope
            u = residual + residual if residual >= 0 else -1 - residual - residual
            if u > _U32:
                residual = _wrapped(residual)
                u = residual + residual if residual >= 0 else -1 - residual - residual
            q = u >> k
            if q < RICE_QUOTIENT_MAX:
                bits = q + 1 + k
                code = (code << bits) + (_UNARY[q] << k) + u
            else:
                bits = RICE_QUOTIENT_MAX + _ESCAPED_BITS
                code = (code << bits) + _ESCAPE + u
            code_bits += bits
            total = (total >> 1 if halve else total) + (u if u < RICE_SUM_CAP else RICE_SUM_CAP)
            slopes.append(rise if bent else 0)
            totals.append(total)
            ks.append(rice_parameter(total, count))
        if self._used_bits + code_bits > self._room_bits:
            return False
        self._residuals = (self._residuals << code_bits) + code
        self._residual_bits += code_bits
        self._used_bits += code_bits
        self._rows += 1
        self._count = count
        self._last, self._slopes, self._totals, self._ks = held, slopes, totals, ks
        return True


def encode_plain(tick: int, period: int, mask: int, values: Sequence[int]) -> str:
    """What follows the number in a plain data line: tick, period, mask and the values, held in their widths.

    Raises SampleFault for a mask no line can have, ValueError for a wrong number of values.
    """
    held = [
        min(max(value, -(1 << (ref.width_bits - 1))), (1 << (ref.width_bits - 1)) - 1)
        for ref, value in zip(channels_of(mask), values, strict=True)
    ]
    return " ".join(map(str, (tick, period, mask, *held)))
