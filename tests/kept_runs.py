"""The same run of three cycles on the mock, logged whole or thinned, for the tests of ranges and reports."""

from __future__ import annotations

from pathlib import Path

from ramprig.bench import load_bench
from ramprig.endure.live import watching
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.sequence.reading import read_sequence
from ramprig.sequence.running import RunWish, run_sequence
from sequence_rig import BENCH

CYCLES = """
sequence: ranges
bench: bench.yaml
LOG
on interruption: stop
steps:
  - hold: 200 ms
  - cycle:
      name: open
      times: 3
      rest: 200 ms
      before: [{move: {servo: latch, to: 5 deg, in: 200 ms}}]
      check every: 2
      check: [{hold: 200 ms}]
      steps:
        - ramp: {motor: vent, to: 60 %, in: 600 ms}
        - hold: 200 ms
        - confirm: {position of: vent, is: at least 20 deg}
        - coast: {motor: vent, in: 300 ms}
        - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}
  - hold: 100 ms
"""
FULL = "log: {period: 2 ms}"
THIN = "log: {period: 2 ms, thin: {keep every: 50, ranges every: 1 s, before: 0 s, after: 0 s}}"


def rehearsed(folder: Path, log: str, *, watched: bool = True, sequence: str = CYCLES) -> Path:
    """A run of three cycles with two checks on the mock; its folder."""
    folder.mkdir()
    (folder / "bench.yaml").write_text(BENCH, "utf-8")
    (folder / "ranges.yaml").write_text(sequence.replace("LOG", log), "utf-8")
    bench = load_bench(folder / "bench.yaml")
    port = MockPort(MockDevice(setup_of_bench(bench), seed=3), pace="virtual", seed=3)
    wish = RunWish(
        sequence=read_sequence(folder / "ranges.yaml"),
        bench=bench,
        runs=folder / "runs",
        seed=3,
        virtual=True,
        watching=watching(lambda text: None) if watched else None,
    )
    result = run_sequence(wish, port)
    assert result.folder is not None
    assert result.outcome.verdict.word == "passed"
    return result.folder
