"""Measures the rehearsal of a whole night on the firmware core: time, as a multiple of real time too, and memory.

The night is scripts/vent_night.yaml as it stands, recorded as a user's rehearsal is, with the features of each cycle
and the limits to their wear judged on the way. It runs in a process of its own, so that its memory is its own.
Processor time is told beside the time that passed: on a machine that does other things only the first says something.

    python scripts/dev/bench_night.py [CYCLES]
"""

from __future__ import annotations

import json
import subprocess
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

from ramprig.mock.core import why_not

CYCLES = 1000
AIM_S = 30.0
NIGHT_S = 8 * 3600.0
NIGHT = Path(__file__).resolve().parent.parent / "vent_night.yaml"

CHILD = """
import resource, sys, time
from ramprig.cli import main
begin = time.perf_counter()
code = main(["rehearse", sys.argv[1], "--on", "core", "--set", f"cycles={sys.argv[2]}", "--runs", sys.argv[3]])
took_s = time.perf_counter() - begin
used = resource.getrusage(resource.RUSAGE_SELF)
scale = 1 if sys.platform == "darwin" else 1024
print(code, took_s, used.ru_utime + used.ru_stime, used.ru_maxrss * scale)
"""


@dataclass(frozen=True, slots=True)
class Night:
    """What the rehearsal of so many rows and so much simulated time took: s that passed, s of processor time, bytes."""

    rows: int
    simulated_s: float
    took_s: float
    processor_s: float
    peak_bytes: float


def measure(cycles: int = CYCLES) -> Night:
    """Rehearse the night; RuntimeError where it does not pass."""
    with tempfile.TemporaryDirectory(prefix="ramprig-bench-") as root:
        command = [sys.executable, "-c", CHILD, str(NIGHT), str(cycles), root]
        done = subprocess.run(command, capture_output=True, text=True, check=False)
        told = done.stdout.splitlines()[-1].split() if done.stdout else []
        if done.returncode != 0 or told[0] != "0":
            raise RuntimeError(f"the night did not pass: {done.stdout}{done.stderr}")
        (manifest,) = Path(root).glob("*/run.json")
        run = json.loads(manifest.read_text("utf-8"))
    took_s, processor_s, peak_bytes = map(float, told[1:])
    return Night(run["samples"]["written"], run["results"]["elapsed_s"], took_s, processor_s, peak_bytes)


def lines(cycles: int = CYCLES) -> list[str]:
    """The figures, beside the aim."""
    reason = why_not()
    if reason is not None:
        return [f"night with trends:   no core: {reason}"]
    night = measure(cycles)
    aim_s = AIM_S * night.simulated_s / NIGHT_S
    return [
        f"night with trends:   {night.took_s:.1f} s, {night.processor_s:.1f} s of it the processor's, for "
        f"{night.simulated_s / 3600:.2f} h and {night.rows:,} rows (aim {AIM_S:g} s for 8 h: "
        f"{night.processor_s / aim_s:.2f} of it); {night.simulated_s / night.processor_s:.0f} times real time",
        f"                     greatest memory {night.peak_bytes / 1e6:.0f} MB",
    ]


if __name__ == "__main__":
    print("\n".join(lines(int(sys.argv[1]) if len(sys.argv) > 1 else CYCLES)))
