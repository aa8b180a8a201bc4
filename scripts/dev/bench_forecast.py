"""Measures how long the forecast of an eight-hour night with 200 draws takes on the firmware core in this process.

    python scripts/dev/bench_forecast.py

The processor time of all processes is told beside the time that went by: on a machine that is busy otherwise the
latter says little.
"""

from __future__ import annotations

import os
import time
from dataclasses import dataclass
from pathlib import Path

from ramprig.bench import load_bench
from ramprig.measure.forecast.forecast import ForecastWish, forecast
from ramprig.measure.forecast.montecarlo import cores
from ramprig.mock.core import why_not
from ramprig.sequence.reading import read_sequence

AIM_S = 60.0
DRAWS = 200
WORKERS = 2
NIGHT = "8 h"
SEQUENCE = Path(__file__).resolve().parent.parent / "overnight_sweep.yaml"


@dataclass(frozen=True, slots=True)
class ForecastTime:
    """How long it took, and how much processor time all processes used, in s."""

    took_s: float
    processor_s: float


def measure() -> ForecastTime:
    """One forecast of the night."""
    sequence = read_sequence(SEQUENCE, settings={"night": NIGHT})
    assert sequence.bench is not None
    bench = load_bench(sequence.bench)
    before, begin_s = os.times(), time.perf_counter()
    forecast(sequence, bench, ForecastWish(draws=DRAWS, workers=WORKERS, most_s=3600.0))
    took_s, after = time.perf_counter() - begin_s, os.times()
    used = [end - start for start, end in zip(before[:4], after[:4], strict=True)]
    return ForecastTime(took_s, sum(used))


def lines() -> list[str]:
    """The figure beside its aim."""
    reason = why_not()
    if reason is not None:
        return [f"forecast:            no core: {reason}"]
    found = measure()
    return [
        f"forecast:            {NIGHT} with {DRAWS} draws in {found.took_s:.0f} s on {min(WORKERS, cores())} cores "
        f"(aim {AIM_S:.0f} or less); {found.processor_s:.0f} s of processor time"
    ]


def main() -> None:
    """Measure and print."""
    print("\n".join(lines()))


if __name__ == "__main__":
    main()
