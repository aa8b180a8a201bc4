"""Measures the report of an eight-hour run at 100 samples a second: time, greatest memory, and the size of the page.

The run is made up (a motor that opens and closes every 13 s, with noise, a servo, and an expectation judged on every
pass) and written by the recorder as a real one is. The report is then made in a process of its own, so that its
memory is its own.

    python scripts/dev/bench_report.py [HOURS]
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from ramprig.bench import load_bench
from ramprig.port.clock import VirtualClock
from ramprig.record.folder import InputFile, RunDescription, RunFolder
from ramprig.record.manifest import Anchor, RunEnd
from ramprig.record.recorder import Recorder
from ramprig.sequence.columns import bench_columns
from ramprig.sequence.happened import PassBegun
from ramprig.sequence.outcome import Judged
from ramprig.sequence.rig import Rig
from ramprig.session.blocks import Block, Layout
from ramprig.session.gaps import Accounting

HOURS = 8.0
PERIOD_TICKS = 10
BLOCK_SAMPLES = 5000
PASS_S = 13.0
AIM_S, AIM_MB, AIM_PAGE_MB = 20.0, 500.0, 5.0
BENCH = Path(__file__).resolve().parent.parent / "vent_bench.yaml"

CHILD = """
import resource, sys, time
from pathlib import Path
from ramprig.report.making import make_report
begin = time.perf_counter()
made = make_report([Path(sys.argv[1])], out=Path(sys.argv[1]), issued="2026-01-01T00:00:00Z")
took_s = time.perf_counter() - begin
scale = 1 if sys.platform == "darwin" else 1024
print(took_s, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * scale, made.report.stat().st_size)
"""


@dataclass(frozen=True, slots=True)
class Measured:
    """What the report of a made-up run of so many rows took."""

    rows: int
    written_s: float
    took_s: float
    peak_bytes: float
    page_bytes: int


def make_run(root: Path, hours: float) -> tuple[Path, int]:
    """Write the run; its folder and its rows."""
    bench = load_bench(BENCH)
    rig = Rig.of(bench)
    rows = round(hours * 3600 * 1000 / PERIOD_TICKS)
    start = Anchor(tick=1000, host_s=0.0, unix_s=1_772_353_800.0)
    clock = VirtualClock(start_s=0.0, wall_s=start.unix_s)
    description = RunDescription(
        name="eight hours", port="made up", inputs=[InputFile("bench", str(BENCH), BENCH.read_bytes())]
    )
    folder = RunFolder.create(root, description, started_unix_s=start.unix_s, short_id="made")
    recorder = Recorder(
        folder, bench_columns(bench, tick_us=1000), start=start, tick_us=1000, clock=clock,
        on_trouble=lambda trouble: None, threaded=False,
    )  # fmt: skip
    layout = Layout.of(rig.mask, PERIOD_TICKS)
    random = np.random.default_rng(1)
    counts, passes = 0.0, 0
    for first in range(0, rows, BLOCK_SAMPLES):
        count = min(BLOCK_SAMPLES, rows - first)
        tick = start.tick + (first + np.arange(count)) * PERIOD_TICKS
        block, counts = made_up_block(tick, layout, random, counts)
        while passes * PASS_S * 1000 < tick[-1] - start.tick:
            begin = start.tick + round(passes * PASS_S * 1000)
            passes += 1
            recorder.on_event(PassBegun(tick=begin, place="made_up.yaml:9:5", number=passes, of=10**6))
            recorder.on_event(
                Judged(tick=begin + 4000, place="made_up.yaml:12:9", expectation="speed of vent is 38 rpm +- 10 %",
                       held=True, found="38 rpm", value=38.0 + passes * 1e-4, why="")
            )  # fmt: skip
        recorder.on_block(block)
    account = Accounting(
        first_tick=start.tick, period_ticks=PERIOD_TICKS, made=rows, expected=rows, received=rows, lost=0,
        gaps=(), gaps_unlisted=0, asked_again=0, recovered=0, duplicates=0, strange_lines=0,
    )  # fmt: skip
    end = RunEnd(verdict="passed", stop_reason="all steps carried out", accounts=(account,))
    return recorder.finish(end), rows


def made_up_block(
    tick: np.ndarray[tuple[int], np.dtype[np.int64]], layout: Layout, random: np.random.Generator, counts: float
) -> tuple[Block, float]:
    """A motor that goes one way, rests, goes the other way; the counts it ends at."""
    phase = (tick % round(PASS_S * 1000)) / (PASS_S * 1000)
    duty = np.where(phase < 0.4, 6000.0, np.where((phase > 0.5) & (phase < 0.9), -6000.0, 0.0))
    path = counts + np.cumsum(duty / 6000 * 3.65 * PERIOD_TICKS)
    current = duty / 60 + random.normal(0, 6, len(tick))
    columns = {
        "duty": duty,
        "counts": np.floor(path),
        "current_ma": current,
        "pulse_us": np.where(phase < 0.5, 1800.0, 1200.0),
        "supply_mv": 12_000 - np.abs(current) / 8,
        "state": np.ones(len(tick)),
    }
    values = np.stack([np.round(columns[channel.kind]) for channel in layout.channels], axis=1).astype(np.int32)
    return Block(tick, values, layout), float(path[-1])


def measure(hours: float = HOURS) -> Measured:
    """Make the run and its report."""
    with tempfile.TemporaryDirectory(prefix="ramprig-bench-") as root:
        begin = time.perf_counter()
        folder, rows = make_run(Path(root), hours)
        written_s = time.perf_counter() - begin
        done = subprocess.run([sys.executable, "-c", CHILD, str(folder)], capture_output=True, text=True, check=True)
        took_s, peak_bytes, page_bytes = done.stdout.split()
        return Measured(rows, written_s, float(took_s), float(peak_bytes), int(page_bytes))


def lines(hours: float = HOURS) -> list[str]:
    """The figures, each beside its aim."""
    found = measure(hours)
    return [
        f"report:              {found.took_s:.1f} s for {found.rows:,} rows (aim {AIM_S:g} s for 2,880,000), greatest "
        f"memory {found.peak_bytes / 1e6:.0f} MB (aim {AIM_MB:g}), page {found.page_bytes / 1e6:.2f} MB "
        f"(aim {AIM_PAGE_MB:g})",
        f"                     the same run was written in {found.written_s:.1f} s",
    ]


if __name__ == "__main__":
    print("\n".join(lines(float(sys.argv[1]) if len(sys.argv) > 1 else HOURS)))
