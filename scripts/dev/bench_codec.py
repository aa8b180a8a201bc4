"""Measures the sample codec: characters a sample against entropy and decimal text, and the rate of decoding.

`characters_per_sample` and `decode_rate` give ratios measured within one run, so that the machine's speed drops out
where it can. The samples are those of a simulated motor that reverses, 1 kHz, with duty, counts and current. Run:
`python scripts/dev/bench_codec.py` inside `.env`.
"""

from __future__ import annotations

import math
import time
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

from ramprig.mock.plant import Plant
from ramprig_link.samples import Encoder, decode
from ramprig_link.words import DUTY_FULL, FLUSH_TICKS

MASK = 0b111
BAUD = 115_200
CHARACTERS_A_SECOND = BAUD // 10  # 8N1: ten bits on the line for each character
LINE_OVERHEAD_CHARACTERS = len("Dnn ") + len(" cccc\n")
ENTROPY_AIM = 1.7
DECODE_AIM = 20.0

Row = tuple[int, int, int]


@dataclass(frozen=True, slots=True)
class WireCost:
    """What a sample costs on the wire, line overhead included, and what it is held against.

    `entropy_bits` is the sum over the channels of the empirical entropy (order 0) of the first differences; `text` is
    `tick,duty,counts,current` with a line end; `plain` the protocol's own plain form.
    """

    characters: float
    entropy_bits: float
    text_characters: float
    plain_characters: float

    @property
    def against_entropy(self) -> float:
        """Bits sent, six a character, as a multiple of the entropy."""
        return 6.0 * self.characters / self.entropy_bits

    @property
    def against_text(self) -> float:
        """Characters as a share of those of decimal text."""
        return self.characters / self.text_characters


def reversing_motor(ticks: int = 60_000, *, peak_duty: int = 6000, slew_duty: int = 10, hold: int = 2000) -> list[Row]:
    """Duty, counts and current of each tick: up, hold, down, dwell, and the same the other way, over and over."""
    plant = Plant(seed=1)
    climb = range(0, peak_duty, slew_duty)
    half = [*climb, *[peak_duty] * hold, *reversed(climb), *[0] * 250]
    rows: list[Row] = []
    while len(rows) < ticks:
        sign = 1 if len(rows) // len(half) % 2 == 0 else -1
        for duty in half:
            plant.axes[0].duty = sign * duty
            plant.step()
            rows.append((sign * duty, plant.read_counts(0), plant.read_current_ma(0)))
    return rows[:ticks]


def packed(rows: Sequence[Row]) -> list[str]:
    """The payloads a device sends of these samples at period 1, flushed as SPEC DATA-9 says."""
    encoder = Encoder(MASK, 1)
    payloads: list[str | None] = []
    for tick, row in enumerate(rows):
        payloads.append(encoder.add(tick, row))
        if encoder.oldest_tick is not None and tick - encoder.oldest_tick >= FLUSH_TICKS:
            payloads.append(encoder.flush())
    payloads.append(encoder.flush())
    return [payload for payload in payloads if payload is not None]


def entropy_bits(symbols: Sequence[int]) -> float:
    """The empirical entropy of order 0, in bits a symbol."""
    total = len(symbols)
    return -sum(n / total * math.log2(n / total) for n in Counter(symbols).values())


def characters_per_sample(rows: Sequence[Row] | None = None) -> WireCost:
    """What a sample of the reversing motor costs on the wire."""
    rows = reversing_motor() if rows is None else rows
    total = len(rows)
    columns = [[row[place] for row in rows] for place in range(3)]
    bits = sum(entropy_bits([b - a for a, b in pairwise(column)]) for column in columns)
    plain = (f"{tick} 1 {MASK} {duty} {counts} {current}" for tick, (duty, counts, current) in enumerate(rows))
    text = (f"{tick},{duty},{counts},{current}\n" for tick, (duty, counts, current) in enumerate(rows))
    return WireCost(
        characters=sum(len(payload) + LINE_OVERHEAD_CHARACTERS for payload in packed(rows)) / total,
        entropy_bits=bits,
        text_characters=sum(map(len, text)) / total,
        plain_characters=sum(len(line) + LINE_OVERHEAD_CHARACTERS for line in plain) / total,
    )


def decode_rate(rows: Sequence[Row] | None = None, *, rounds: int = 5) -> float:
    """Samples decoded a second, as a multiple of what a saturated 115200-baud line delivers of the same lines."""
    rows = reversing_motor() if rows is None else rows
    payloads = packed(rows)
    line_s = sum(len(payload) + LINE_OVERHEAD_CHARACTERS for payload in payloads) / CHARACTERS_A_SECOND
    fastest_s = math.inf
    for _ in range(rounds):
        began_s = time.perf_counter()
        for payload in payloads:
            decode(payload)
        fastest_s = min(fastest_s, time.perf_counter() - began_s)
    return line_s / fastest_s


def encode_us(rows: Sequence[Row] | None = None, *, rounds: int = 5) -> float:
    """Microseconds to code one sample of seven channels (the motor's, a servo's, supply, temperature and state)."""
    rows = reversing_motor(20_000) if rows is None else rows
    wide = [(*row, 1500 + row[0] * 400 // DUTY_FULL, 12_000 - abs(row[2]) // 8, 250, 1) for row in rows]
    fastest_s = math.inf
    for _ in range(rounds):
        encoder = Encoder(MASK | 0b1110001 << 12, 1)
        began_s = time.perf_counter()
        for tick, row in enumerate(wide):
            encoder.add(tick, row)
        fastest_s = min(fastest_s, time.perf_counter() - began_s)
    return fastest_s / len(wide) * 1e6


def lines() -> list[str]:
    """The figures as sentences."""
    rows = reversing_motor()
    cost = characters_per_sample(rows)
    return [
        f"samples on the wire: {cost.characters:.2f} characters each, {cost.against_entropy:.2f} times the entropy of "
        f"the deltas ({cost.entropy_bits:.2f} bits; aim {ENTROPY_AIM} or less)",
        f"                     {cost.against_text:.3f} of decimal text ({cost.text_characters:.1f} characters), "
        f"{cost.characters / cost.plain_characters:.3f} of plain lines ({cost.plain_characters:.1f})",
        f"samples decoded:     {decode_rate(rows):.0f} times what a saturated {BAUD}-baud line delivers "
        f"(aim {DECODE_AIM:.0f} or more)",
        f"samples coded:       {encode_us(rows[:20_000]):.1f} us for seven channels",
    ]


def main() -> None:
    """Print the figures."""
    print("\n".join(lines()))


if __name__ == "__main__":
    main()
