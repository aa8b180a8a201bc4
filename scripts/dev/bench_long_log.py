"""Measures the memory that recording a long run takes, and checking its account, over rising numbers of rows.

The rows are those of `bench_report.py`: a motor that opens and closes every 13 s at 100 samples a second, each opening
and closing a cycle of the count. Each figure is the greatest resident memory of a process of its own, less that of
one that has loaded the same modules and recorded a thousand rows.

    python scripts/dev/bench_long_log.py [ROWS ...]        (POSIX only)
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from dev.bench_report import BENCH, PASS_S, PERIOD_TICKS, made_up_block

from ramprig.bench import load_bench
from ramprig.port.clock import VirtualClock
from ramprig.record.folder import RunDescription, RunFolder
from ramprig.record.keeping import Keeping, Thinning
from ramprig.record.manifest import Anchor, RunEnd
from ramprig.record.reading import audit, read_manifest
from ramprig.record.recorder import Recorder
from ramprig.record.volumes import VolumeLimits
from ramprig.sequence.columns import bench_columns
from ramprig.sequence.happened import CycleBegun, CycleDone
from ramprig.sequence.rig import Rig
from ramprig.session.blocks import Layout
from ramprig.session.gaps import Accounting

ROWS = (100_000, 400_000, 1_600_000, 2_880_000)
LEAST_ROWS = 1000
BLOCK_SAMPLES = 50
START = Anchor(tick=1000, host_s=0.0, unix_s=1_772_353_800.0)
PASS_TICKS = round(PASS_S * 1000)
KEEPINGS = {
    "whole": Keeping(volumes=VolumeLimits(rows=500_000), cycle_ranges=True),
    "thinned": Keeping(
        volumes=VolumeLimits(rows=500_000), thinning=Thinning(every=100, ranges_s=10.0), cycle_ranges=True
    ),
}


def cycle_done(number: int, tick: int) -> CycleDone:
    """A cycle as the count has it."""
    return CycleDone(
        tick=tick, begin_tick=tick - PASS_TICKS, number=number, block=1, name="open and close", part=1,
        outcome="confirmed", found=("90 deg",), expectations_held=1, expectations_failed=0, run_s=number * PASS_S,
        starts={"vent": 2}, commanded=number, confirmed=number, failed=0, interrupted=0,
    )  # fmt: skip


def record(root: Path, rows: int, keeping: Keeping) -> Path:
    """Write a run of so many rows as a real one is written; its folder."""
    bench = load_bench(BENCH)
    clock = VirtualClock(start_s=0.0, wall_s=START.unix_s)
    folder = RunFolder.create(root, RunDescription(name="long"), started_unix_s=START.unix_s, short_id="made")
    recorder = Recorder(
        folder, bench_columns(bench, tick_us=1000), start=START, tick_us=1000, clock=clock,
        on_trouble=lambda trouble: None, threaded=False, keeping=keeping,
    )  # fmt: skip
    layout = Layout.of(Rig.of(bench).mask, PERIOD_TICKS)
    random = np.random.default_rng(1)
    counts, number = 0.0, 0
    for first in range(0, rows, BLOCK_SAMPLES):
        ticks = START.tick + (first + np.arange(min(BLOCK_SAMPLES, rows - first))) * PERIOD_TICKS
        block, counts = made_up_block(ticks, layout, random, counts)
        recorder.on_block(block)
        while (begin := START.tick + number * PASS_TICKS) <= ticks[-1]:
            if number:
                recorder.on_cycle(cycle_done(number, begin))
            number += 1
            recorder.on_event(CycleBegun(tick=begin, number=number, name="open and close"))
    account = Accounting(
        first_tick=START.tick, period_ticks=PERIOD_TICKS, made=rows, expected=rows, received=rows, lost=0,
        gaps=(), gaps_unlisted=0, asked_again=0, recovered=0, duplicates=0, strange_lines=0,
    )  # fmt: skip
    return recorder.finish(RunEnd(verdict="passed", stop_reason="all steps carried out", accounts=(account,)))


def peak_bytes() -> int:
    """The greatest resident memory of this process so far."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1 if sys.platform == "darwin" else 1024)


def child(rows: int, kind: str) -> None:
    """Record and check in this process; the figures as JSON."""
    with tempfile.TemporaryDirectory(prefix="ramprig-bench-") as root:
        begin = time.perf_counter()
        folder = record(Path(root), rows, KEEPINGS[kind])
        took_s, recorded = time.perf_counter() - begin, peak_bytes()
        statements = audit(folder).statements
        assert statements == (), statements
        account = read_manifest(folder)["samples"]
        size = sum(path.stat().st_size for path in folder.iterdir())
        found = {"recorded": recorded, "checked": peak_bytes(), "took_s": took_s, "disk": size}
        print(json.dumps(found | {key: account[key] for key in ("written", "thinned")}))


def measure(rows: int, kind: str) -> dict[str, float]:
    """The figures of a process of its own."""
    command = [sys.executable, __file__, "--child", str(rows), kind]
    found: dict[str, float] = json.loads(subprocess.run(command, capture_output=True, text=True, check=True).stdout)
    return found


def main(counts: tuple[int, ...]) -> None:
    """Print the figures."""
    print("log      rows received    written  MB on disk    s  memory: recording, then checking")
    for kind in KEEPINGS:
        base = measure(LEAST_ROWS, kind)["recorded"]
        for rows in counts:
            found = measure(rows, kind)
            recorded, checked = ((found[key] - base) / 1e6 for key in ("recorded", "checked"))
            print(
                f"{kind:<8} {rows:>13,} {found['written']:>10,} {found['disk'] / 1e6:>11.1f} {found['took_s']:>4.0f}"
                f"  {recorded:+.1f} MB, {checked:+.1f} MB"
            )


if __name__ == "__main__":
    if sys.argv[1:2] == ["--child"]:
        child(int(sys.argv[2]), sys.argv[3])
    else:
        main(tuple(map(int, sys.argv[1:])) or ROWS)
