"""What a sequence may say of its log, what `check` tells of it, and how near the forecast of its size comes."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from ramprig.bench import load_bench
from ramprig.errors import FileError
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.record.keeping import AROUND_DEFAULT, Around, Keeping, Thinning
from ramprig.record.reading import read_manifest, sample_files
from ramprig.record.volumes import VolumeLimits
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.log_forecast import forecast_log, log_text, thinning_text
from ramprig.sequence.reading import Sequence, sequence_of_text
from ramprig.sequence.report import report_lines
from ramprig.sequence.running import RunWish, run_sequence
from ramprig.sequence.schema import sequence_schema
from sequence_rig import BENCH, small_bench


def read(log: str, *, steps: str = "- hold: 1 h", values: str = "") -> Sequence:
    return sequence_of_text(f"sequence: t\nlog: {log}\n{values}steps:\n  {steps}\n", "t.yaml")


def test_what_is_left_out_is_as_it_always_is() -> None:
    assert read("{period: 10 ms}").keeping == Keeping()
    assert read("{new file: {after rows: 500}}").log_period_s is None
    thin = read("{thin: {keep every: 100}}").keeping.thinning
    assert thin == Thinning(every=100, ranges_s=None, before_s=10.0, after_s=30.0, around=AROUND_DEFAULT)


def test_everything_can_be_said() -> None:
    keeping = read(
        "{period: 10 ms, new file: {after rows: 5000, after: 2 h}, thin: {keep every: often, ranges every: length, "
        "before: 1 s, after: 2 s, around: [mark, trip]}}",
        values="values: {often: 50, length: 20 s}\n",
    ).keeping
    assert keeping == Keeping(
        volumes=VolumeLimits(rows=5000, span_s=7200.0),
        thinning=Thinning(
            every=50, ranges_s=20.0, before_s=1.0, after_s=2.0, around=frozenset({Around.MARK, Around.TRIP})
        ),
    )
    assert read("{new file: {after: 1 h}}").keeping.volumes == VolumeLimits(span_s=3600.0)


@pytest.mark.parametrize(
    ("log", "column", "text"),
    [
        ("{}", 6, "this says nothing of the log; give 'period', 'new file' or 'thin', or leave 'log' out"),
        (
            "{new file: {}}", 17,
            "this does not say when a new file begins; give 'after rows', 'after', or both",
        ),
        ("{new file: {after rows: 99}}", 30, "found 99 for 'after rows'; it must lie in 100 to 1000000000"),
        ("{new file: {after: 5 s}}", 25, "found '5 s' for 'after'; it must lie in 1 min to 1000 h"),
        (
            "{thin: {before: 1 s}}", 13,
            "this does not say what is kept far from events; give 'keep every', 'ranges every', or both",
        ),
        ("{thin: {keep every: 1}}", 26, "found 1 for 'keep every'; it must lie in 2 to 1000000"),
        ("{thin: {keep every: 9, around: [trip, mark, trip]}}", 37, "'trip' stands here twice"),
        ("{thin: {keep every: 9, around: [trips]}}", 38, "did you mean 'trip'"),
        ("{thin: {keep evry: 9}}", 14, "unknown key 'keep evry'"),
        ("{thin: {ranges every: 10}}", 28, "without a unit"),
    ],
)  # fmt: skip
def test_a_mistake_is_told_with_its_place_and_what_would_be_right(log: str, column: int, text: str) -> None:
    with pytest.raises(FileError) as caught:
        read(log)
    assert str(caught.value).splitlines()[0].startswith(f"t.yaml:2:{column}: "), str(caught.value)
    assert text in str(caught.value)


def test_editors_are_told_every_key() -> None:
    schema = json.loads(json.dumps(sequence_schema()))
    log = schema["properties"]["log"]["properties"]
    assert set(log) == {"period", "new file", "thin"}
    assert set(log["thin"]["properties"]) == {"keep every", "ranges every", "before", "after", "around"}
    assert log["thin"]["properties"]["around"]["items"]["enum"] == [word.value for word in Around]


def test_check_tells_the_files_and_how_the_log_is_thinned() -> None:
    bench = small_bench()
    whole = compile_plan(read("{period: 1 ms}"), bench)
    assert log_text(whole, bench).startswith("every 1 ms, about 3600001 rows, ")
    assert log_text(whole, bench).endswith(" in 4 files")
    hourly = compile_plan(read("{period: 100 ms, new file: {after: 20 min}}"), bench)
    assert log_text(hourly, bench).endswith(" in 4 files")  # the last sample is at the end of the third 20 minutes
    thinned = compile_plan(read("{period: 1 ms, thin: {keep every: 100, ranges every: 10 s}}"), bench)
    lines = report_lines(thinned, bench)
    assert (
        "thinned   every 100th row and ranges over each 10 s; full rate from 10 s before to 30 s after: "
        "trip, stop, failure, trouble, watch"
    ) in lines
    assert thinning_text(whole) == ""
    assert forecast_log(thinned, bench, thinned.totals.least).rows == 40_001 + (3_600_001 - 40_001) // 100


CYCLES = """
sequence: t
bench: bench.yaml
log:
  period: 2 ms
  new file: {after rows: 2000}
  thin: {keep every: 20, ranges every: 1 s, before: 200 ms, after: 300 ms, AROUND}
on interruption: stop
steps:
  - cycle:
      times: 5
      rest: 2 s
      steps: [{ramp: {motor: vent, to: 60 %, in: 600 ms}}, {hold: 1 s}, {coast: {motor: vent, in: 300 ms}}]
"""


@pytest.mark.parametrize("around", ["around: [trip]", "around: [trip, cycle]"])
def test_the_forecast_of_a_thinned_log_comes_near_what_is_written(tmp_path: Path, around: str) -> None:
    (tmp_path / "bench.yaml").write_text(BENCH, "utf-8")
    bench = load_bench(tmp_path / "bench.yaml")
    sequence = sequence_of_text(CYCLES.replace("AROUND", around), str(tmp_path / "t.yaml"))
    plan = compile_plan(sequence, bench)
    port = MockPort(MockDevice(setup_of_bench(bench), seed=3), pace="virtual", seed=3)
    folder = run_sequence(
        RunWish(sequence=sequence, bench=bench, runs=tmp_path / "runs", seed=3, virtual=True), port
    ).folder
    assert folder is not None
    account = read_manifest(folder)["samples"]
    expected = forecast_log(plan, bench, account["expected"] * plan.period_ticks)
    assert account["written"] == pytest.approx(expected.rows, rel=0.1)
    assert expected.files == len(sample_files(folder))
    sizes = [path.stat().st_size for path in [*folder.glob("samples*.csv"), *folder.glob("*ranges.csv")]]
    assert sum(sizes) == pytest.approx(expected.size_bytes, rel=0.34)
