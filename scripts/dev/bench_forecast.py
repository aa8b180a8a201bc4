"""Measures how long the forecasts of eight-hour nights with 200 draws take on the firmware core in this process.

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
SCRIPTS = Path(__file__).resolve().parent.parent
NIGHTS = (
    ("repeat for 8 h", "overnight_sweep.yaml", {"night": "8 h"}),
    ("950 cycles", "vent_night.yaml", {"cycles": "950"}),
)
"""A repeat, and cycles with checks whose starts are spaced so that they take eight hours."""


@dataclass(frozen=True, slots=True)
class ForecastTime:
    """How long it took, and how much processor time all processes used, in s."""

    took_s: float
    processor_s: float


def measure(file: str, settings: dict[str, str]) -> ForecastTime:
    """One forecast of a night."""
    sequence = read_sequence(SCRIPTS / file, settings=settings)
    assert sequence.bench is not None
    bench = load_bench(sequence.bench)
    before, begin_s = os.times(), time.perf_counter()
    forecast(sequence, bench, ForecastWish(draws=DRAWS, workers=WORKERS, most_s=3600.0))
    took_s, after = time.perf_counter() - begin_s, os.times()
    used = [end - start for start, end in zip(before[:4], after[:4], strict=True)]
    return ForecastTime(took_s, sum(used))


def lines() -> list[str]:
    """The figures beside their aim."""
    reason = why_not()
    if reason is not None:
        return [f"forecast:            no core: {reason}"]
    found = [(name, measure(file, settings)) for name, file, settings in NIGHTS]
    return [
        f"forecast:            {name} with {DRAWS} draws in {one.took_s:.0f} s on {min(WORKERS, cores())} cores "
        f"(aim {AIM_S:.0f} or less); {one.processor_s:.0f} s of processor time"
        for name, one in found
    ]


def main() -> None:
    """Measure and print."""
    print("\n".join(lines()))


if __name__ == "__main__":
    main()
