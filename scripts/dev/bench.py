"""Measures what the project holds itself to, as ratios in one run, each beside its aim.

    python scripts/dev/bench.py          inside the private environment (`.env/bin/python scripts/dev/bench.py`)

A ratio taken within one run says more than a time: the machine's speed drops out where it can. Nothing here is a test;
a figure that misses its aim is printed as it is.
"""

from __future__ import annotations

import platform
import sys
from collections.abc import Callable
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from dev import (
    bench_codec,
    bench_csv,
    bench_emulated,
    bench_forecast,
    bench_night,
    bench_rehearsal,
    bench_report,
    bench_roundtrip,
    bench_start,
)

CSV_AIM = 2.0


def csv_lines() -> list[str]:
    """Rows of the log against the csv module."""
    rates = bench_csv.csv_rates()
    return [
        f"CSV rows:            {rates.ratio:.2f} times the csv module's rows a second (aim {CSV_AIM:g} or more); "
        f"{rates.batched:,.0f} rows/s",
        f"                     {rates.single_blocks / rates.csv_module:.2f} times where each data line is a write",
    ]


PARTS: tuple[Callable[[], list[str]], ...] = (
    bench_roundtrip.lines,
    bench_codec.lines,
    bench_rehearsal.lines,
    bench_night.lines,
    bench_forecast.lines,
    csv_lines,
    bench_report.lines,
    bench_emulated.lines,
    bench_start.lines,
)


def main() -> None:
    """Print all figures as they come."""
    print(f"Python {platform.python_version()} on {platform.system()} {platform.machine()}", flush=True)
    for part in PARTS:
        print("\n".join(part()), flush=True)


if __name__ == "__main__":
    main()
