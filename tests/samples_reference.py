"""A slow second reading of SPEC section 13, bit by bit, for the tests of the sample codec to compare with.

It shares no code with `ramprig_link.samples`, and has the channels' widths and orders written down again.
"""

from __future__ import annotations

ALPHABET = "ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/"
WIDTHS = {
    **{3 * axis + place: width for axis in range(4) for place, width in enumerate((15, 32, 18))},
    **dict.fromkeys(range(12, 16), 14),
    16: 18,
    17: 13,
    18: 16,
}
SECOND_ORDER = {3 * axis + place for axis in range(4) for place in (0, 1)}


def to_characters(bits: str) -> str:
    """DATA-2: six bits a character, the last filled up with zeros."""
    bits += "0" * (-len(bits) % 6)
    return "".join(ALPHABET[int(bits[at : at + 6], 2)] for at in range(0, len(bits), 6))


def signed_32(number: int) -> int:
    number %= 1 << 32
    return number - (1 << 32) if number >= 1 << 31 else number


class Reader:
    """Takes bits from the front; a ValueError where there are too few."""

    def __init__(self, payload: str) -> None:
        self.bits = [ALPHABET.index(character) >> place & 1 for character in payload for place in (5, 4, 3, 2, 1, 0)]
        self.bits.reverse()

    def unsigned(self, width: int) -> int:
        number = 0
        for _ in range(width):
            if not self.bits:
                raise ValueError("too few bits")
            number = 2 * number + self.bits.pop()
        return number

    def signed(self, width: int) -> int:
        number = self.unsigned(width)
        return number - 2**width if number >= 2 ** (width - 1) else number


class Mean:
    """DATA-7: A, N and k of one channel."""

    def __init__(self, k: int) -> None:
        self.a = 2**k
        self.n = 1

    def k(self) -> int:
        return next((k for k in range(15) if self.n * 2**k >= self.a), 15)

    def learn(self, u: int) -> None:
        if self.n == 32:
            self.a //= 2
            self.n //= 2
        self.a += min(u, 65535)
        self.n += 1


def reference_decode(payload: str) -> tuple[int, int, int, list[list[int]]]:
    """First tick, period, mask and columns; ValueError for a payload that DATA-10 refuses."""
    if len(payload) > 190:
        raise ValueError("too long")
    reader = Reader(payload)
    tick, period, mask, rows = (reader.unsigned(width) for width in (32, 16, 20, 8))
    if not rows or not period or not mask or mask >> 19:
        raise ValueError("cannot be")
    bits = [bit for bit in range(20) if mask >> bit & 1]
    columns: dict[int, list[int]] = {}
    means: dict[int, Mean] = {}
    for bit in bits:
        columns[bit] = [reader.signed(WIDTHS[bit])]
        if rows > 1:
            means[bit] = Mean(reader.unsigned(4))
    for _ in range(rows - 1):
        for bit in bits:
            k = means[bit].k()
            q = 0
            while q < 16 and reader.unsigned(1):
                q += 1
            u = reader.unsigned(32) if q == 16 else q * 2**k + reader.unsigned(k)
            means[bit].learn(u)
            difference = u // 2 if u % 2 == 0 else -(u + 1) // 2
            column = columns[bit]
            if bit in SECOND_ORDER and len(column) > 1:
                difference += column[-1] - column[-2]
            column.append(signed_32(column[-1] + difference))
    if len(reader.bits) >= 6 or any(reader.bits):
        raise ValueError("left over")
    return tick, period, mask, [columns[bit] for bit in bits]


def _code(u: int, k: int) -> str:
    q, low = divmod(u, 1 << k)
    if q >= 16:
        return "1" * 16 + f"{u:032b}"
    return "1" * q + "0" + (f"{low:0{k}b}" if k else "")


def _line(mask: int, period: int, tick: int, rows: list[list[int]], ks: list[int]) -> tuple[str, list[int]]:
    """One line's bits, and the k with which the next line begins."""
    bits = [bit for bit in range(20) if mask >> bit & 1]
    text = f"{tick % 2**32:032b}{period:016b}{mask:020b}{len(rows):08b}"
    means = [Mean(k) for k in ks]
    for place, bit in enumerate(bits):
        text += f"{rows[0][place] % 2 ** WIDTHS[bit]:0{WIDTHS[bit]}b}"
        if len(rows) > 1:
            text += f"{ks[place]:04b}"
    for i in range(1, len(rows)):
        for place, bit in enumerate(bits):
            e = rows[i][place] - rows[i - 1][place]
            if bit in SECOND_ORDER and i > 1:
                e -= rows[i - 1][place] - rows[i - 2][place]
            e = signed_32(e)
            u = 2 * e if e >= 0 else -2 * e - 1
            text += _code(u, means[place].k())
            means[place].learn(u)
    return text, [mean.k() for mean in means]


def reference_encode(mask: int, period: int, tick: int, rows: list[list[int]]) -> list[str]:
    """DATA-9, DATA-8: the payloads of a logging's samples, the widths of which `rows` must keep."""
    ks = [2] * mask.bit_count()
    payloads = []
    while rows:
        count = 1
        while count < min(255, len(rows)) and len(_line(mask, period, tick, rows[: count + 1], ks)[0]) <= 190 * 6:
            count += 1
        text, ks = _line(mask, period, tick, rows[:count], ks)
        payloads.append(to_characters(text))
        rows = rows[count:]
        tick += count * period
    return payloads
