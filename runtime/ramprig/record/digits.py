"""Prints whole columns of numbers at once, as the text that CSV wants, without a Python step per number.

Every field becomes a few *pieces*: arrays of four-byte words, one word a row, looked up in tables of ready-printed
digit groups. A word shorter than four characters is filled with NUL. Laid side by side and freed of their NULs, the
pieces are the text of the rows. So a row costs a few table look-ups, whatever the interpreter costs.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from functools import cache

import numpy as np
from numpy.typing import NDArray

Piece = NDArray[np.uint32]

GROUP = 10_000  # four decimal digits are what one word holds
DECIMALS_MAX = 7  # a point and three digits, then four more
LARGEST = 10**18  # beyond this the sums of the callers could leave 64 bits


def words_of(texts: Iterable[str]) -> Piece:
    """One word for each ASCII text of at most four characters; raises ValueError for a longer one."""
    blocks = []
    for text in texts:
        block = text.encode("ascii")
        if len(block) > 4:
            raise ValueError(f"{text!r} is longer than one word")
        blocks.append(block.ljust(4, b"\0"))
    return np.frombuffer(b"".join(blocks), dtype=np.uint32)


@cache
def _signs(lead: str) -> Piece:
    return words_of([lead, lead + "-"])


@cache
def _units() -> Piece:
    """Last group of a whole number: the first half where no group stands before it, the second half where one does."""
    return words_of([*map(str, range(GROUP)), *(f"{value:04d}" for value in range(GROUP))])


@cache
def _higher() -> Piece:
    """Any other group: nothing for 0 where no group stands before it."""
    return words_of(["", *map(str, range(1, GROUP)), *(f"{value:04d}" for value in range(GROUP))])


@cache
def _fraction(digits: int, point: bool) -> Piece:
    return words_of(("." if point else "") + f"{value:0{digits}d}" for value in range(10**digits))


def prepare() -> None:
    """Make the tables now (some 20 ms), so that the first rows of a run need not wait for them."""
    _units()
    _higher()
    for digits in (1, 2, 3):
        _fraction(digits, True)
    for digits in (1, 2, 3, 4):
        _fraction(digits, False)


def whole_pieces(values: NDArray[np.int64]) -> list[Piece]:
    """The digits of (n,) int64 `values`, 0 to LARGEST, without leading zeros."""
    pieces: list[Piece] = []
    rest = values
    left = int(values.max(initial=0))
    table = _units()
    while left >= GROUP:
        rest, low = rest // GROUP, rest % GROUP
        pieces.append(table.take(low + GROUP * (rest > 0)))
        table = _higher()
        left //= GROUP
    pieces.append(table.take(rest))
    return pieces[::-1]


def number_pieces(scaled: NDArray[np.int64], *, decimals: int, lead: str = ",") -> list[Piece]:
    """The numbers scaled / 10^decimals with exactly that many decimals, each after `lead` (at most three characters).

    `scaled` is (n,) int64 within plus or minus LARGEST; `decimals` is 0 to DECIMALS_MAX. Zero never has a sign.
    """
    if not 0 <= decimals <= DECIMALS_MAX:
        raise ValueError(f"{decimals} decimals: 0 to {DECIMALS_MAX} are possible")
    pieces = [_signs(lead).take(scaled < 0)]
    size = np.abs(scaled)
    if decimals == 0:
        return pieces + whole_pieces(size)
    unit = 10**decimals
    pieces += whole_pieces(size // unit)
    part = size % unit
    if decimals <= 3:
        return [*pieces, _fraction(decimals, True).take(part)]
    tail = decimals - 3
    pieces.append(_fraction(3, True).take(part // 10**tail))
    pieces.append(_fraction(tail, False).take(part % 10**tail))
    return pieces


def text_pieces(codes: NDArray[np.int64], texts: Sequence[str], *, lead: str = ",") -> list[Piece]:
    """For each of (n,) `codes` the ASCII text `texts[code]` after `lead`; the texts must not contain NUL."""
    count = max(1, -(-max(len(lead) + len(text) for text in texts) // 4))
    table = np.frombuffer(b"".join((lead + text).encode("ascii").ljust(4 * count, b"\0") for text in texts), np.uint32)
    rows = table.reshape(len(texts), count)[codes]
    return [rows[:, place] for place in range(count)]


def constant_piece(text: str, count: int) -> Piece:
    """The same text of at most four characters in `count` rows."""
    return np.broadcast_to(words_of([text]), (count,))


def blank(pieces: list[Piece], where: NDArray[np.bool_]) -> list[Piece]:
    """The pieces of a field with everything after its lead left out in the rows `where`; the lead must be one
    character."""
    first, *others = pieces
    lead = first.view(np.uint8).reshape(-1, 4).copy()
    lead[where, 1:] = 0
    return [lead.view(np.uint32).reshape(-1), *(np.where(where, np.uint32(0), piece) for piece in others)]


def joined(pieces: Sequence[Piece]) -> bytes:
    """The text of all rows, one after another."""
    grid = np.empty((len(pieces[0]), len(pieces)), dtype=np.uint32)
    for place, piece in enumerate(pieces):
        grid[:, place] = piece
    return grid.tobytes().translate(None, b"\0")
