"""Measures how fast sample blocks become rows of a samples file, against the csv module writing the same rows.

The csv module is given every advantage: its rows are ready, as tuples of Python numbers rounded to the same decimals,
so that only its printing is timed. Ours starts from the blocks: scales, positions, speed estimate and printing are
all timed. Both write to a file that is thrown away.

    python scripts/dev/bench_csv.py
"""

from __future__ import annotations

import csv
import io
import tempfile
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from ramprig.record.columns import Columns, MotorColumns, ServoColumns, columns_of
from ramprig.record.recorder import BATCH_ROWS
from ramprig.record.rows import RowPrinter
from ramprig.session.blocks import Block, Layout
from ramprig_link.samples import channels_of

TICK_US = 1000
PERIOD_TICKS = 2
BLOCK_SAMPLES = 50  # what a data line holds at 500 samples a second
MASK = 0b101_0001_0000_0000_0111  # axis 0, servo 0, supply, state


@dataclass(frozen=True, slots=True)
class CsvRates:
    """Rows a second: the csv module's, ours as in a rehearsal, and ours where every data line is written by itself."""

    csv_module: float
    batched: float
    single_blocks: float

    @property
    def ratio(self) -> float:
        """Ours against the csv module's, as in a rehearsal."""
        return self.batched / self.csv_module


def bench_columns() -> Columns:
    """One motor and one servo, with invented figures."""
    return columns_of([MotorColumns("vent", 0, 1632.67)], [ServoColumns("latch", 0, 1500, 10)], tick_us=TICK_US)


def bench_blocks(rows: int) -> list[Block]:
    """A motor that reverses, with noise in current and supply."""
    random = np.random.default_rng(7)
    duty = np.round(6000 * np.sin(np.arange(rows) / 200))
    current = np.abs(duty) / 8 + random.normal(0, 12, rows)
    columns = [
        duty,
        np.floor(np.cumsum(duty / 6000 * 3.2)),
        current,
        np.where(np.arange(rows) // 800 % 2, 1600, 1500),
        12_000 - current / 5 + random.normal(0, 5, rows),
        np.where(np.arange(rows) % 500 < 30, 0x11, 0x01),
    ]
    assert len(columns) == len(channels_of(MASK))
    values = np.stack(columns, axis=1).round().astype(np.int32)
    ticks = np.arange(rows, dtype=np.int64) * PERIOD_TICKS + 60_000
    layout = Layout.of(MASK, PERIOD_TICKS)
    return [
        Block(ticks[i : i + BLOCK_SAMPLES], values[i : i + BLOCK_SAMPLES], layout)
        for i in range(0, rows, BLOCK_SAMPLES)
    ]


def bench_printer() -> RowPrinter:
    """What prints our rows."""
    return RowPrinter(bench_columns(), tick_us=TICK_US, tick_zero=60_000)


def _ours(blocks: Sequence[Block], batch: int) -> None:
    printer = bench_printer()
    with tempfile.TemporaryFile() as file:
        for start in range(0, len(blocks), batch):
            file.write(printer.rows(blocks[start : start + batch]))


def _csv_module(rows: Sequence[Sequence[object]]) -> None:
    with tempfile.TemporaryFile("w", newline="", encoding="utf-8") as file:
        csv.writer(file).writerows(rows)


def number(text: str) -> object:
    """The field as the Python object that the csv module would be given."""
    for kind in (int, float):
        try:
            return kind(text)
        except ValueError:
            continue
    return text


def _fastest_s(work: Callable[[], None], repeats: int) -> float:
    best = float("inf")
    for _ in range(repeats):
        start = time.perf_counter()
        work()
        best = min(best, time.perf_counter() - start)
    return best


def csv_rates(*, rows: int = 50_000, repeats: int = 5) -> CsvRates:
    """Measure all three in this process, each as the fastest of `repeats`."""
    blocks = bench_blocks(rows)
    texts = csv.reader(io.StringIO(bench_printer().rows(blocks).decode("utf-8"), newline=""))
    ready = [tuple(map(number, row)) for row in texts]
    batch = max(1, BATCH_ROWS // BLOCK_SAMPLES)
    return CsvRates(
        csv_module=rows / _fastest_s(lambda: _csv_module(ready), repeats),
        batched=rows / _fastest_s(lambda: _ours(blocks, batch), repeats),
        single_blocks=rows / _fastest_s(lambda: _ours(blocks, 1), repeats),
    )


def csv_ratio(*, rows: int = 50_000, repeats: int = 5) -> float:
    """How many times the csv module's rows a second ours are, in one run; the aim is 2."""
    return csv_rates(rows=rows, repeats=repeats).ratio


def main() -> None:
    """Print the rates."""
    rates = csv_rates()
    single = rates.single_blocks / rates.csv_module
    print(f"csv module, rows ready      {rates.csv_module:12,.0f} rows/s")
    print(f"ours, from blocks, batched  {rates.batched:12,.0f} rows/s  {rates.ratio:.2f} times")
    print(f"ours, one data line a time  {rates.single_blocks:12,.0f} rows/s  {single:.2f} times")


if __name__ == "__main__":
    main()
