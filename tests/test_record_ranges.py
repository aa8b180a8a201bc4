"""The ranges that are written while a run is recorded are those that the full log gives, to the last digit."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator
from decimal import ROUND_HALF_UP, Decimal
from fractions import Fraction
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from kept_runs import FULL, THIN, rehearsed
from ramprig.record.keeping import Keeping, Thinning
from ramprig.record.ranges import EDGES_MAX, LAG_S, CycleRanges, SpanPrinter
from ramprig.record.reading import audit, read_cycles, read_events, read_manifest, sample_files
from ramprig.record.recorder import EDGES_AHEAD_MAX
from ramprig.record.rows import Rows
from ramprig.sequence.happened import CycleBegun, CycleDone
from record_long import PERIOD, begin, finish, rows_of
from record_samples import TICK_US, blocks_of, vent_columns


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return rehearsed(tmp_path_factory.mktemp("ranges") / "full", FULL)


@pytest.fixture(scope="module")
def thinned(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return rehearsed(tmp_path_factory.mktemp("ranges") / "thinned", THIN)


def table(path: Path) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(path.read_text("utf-8"), newline="")))


def log_of(folder: Path) -> Iterator[dict[str, str]]:
    for path in sample_files(folder):
        yield from table(path)


def expected_line(rows: list[dict[str, str]], column: str) -> tuple[str, str, str, str]:
    """Least, mean, greatest and count by definition, from the text of the log, in exact arithmetic."""
    texts = [row[column] for row in rows if row[column] and not (column.endswith(".pulse_us") and row[column] == "0")]
    if not texts:
        return "", "", "", "0"
    decimals = len(texts[0].partition(".")[2])
    mean = Fraction(sum(Fraction(text) for text in texts), len(texts)) * 10 ** (decimals + 3)
    whole = Decimal(mean.numerator * 2 * 10**20 // mean.denominator) / Decimal(2 * 10**20)
    rounded = whole.quantize(Decimal(1), ROUND_HALF_UP).scaleb(-decimals - 3)
    least, greatest = (pick(texts, key=Fraction) for pick in (min, max))
    return (
        least,
        f"{rounded:f}".replace("-0." + "0" * (decimals + 3), "0." + "0" * (decimals + 3)),
        greatest,
        str(len(texts)),
    )


def check_lines(lines: list[dict[str, str]], rows: list[dict[str, str]], spans: list[tuple[int, int]]) -> None:
    """Each line against the rows with begin <= tick < end."""
    columns = [name.removesuffix(".count") for name in lines[0] if name.endswith(".count")]
    assert len(columns) > 6
    for line, (begin_tick, end_tick) in zip(lines, spans, strict=True):
        inside = [row for row in rows if begin_tick <= int(row["tick"]) < end_tick]
        assert line["samples"] == str(len(inside))
        assert (line["first_tick"], line["last_tick"]) == (inside[0]["tick"], inside[-1]["tick"])
        assert (line["first_s"], line["last_s"]) == (inside[0]["time_s"], inside[-1]["time_s"])
        for column in columns:
            found = tuple(line[f"{column}.{each}"] for each in ("least", "mean", "greatest", "count"))
            assert found == expected_line(inside, column), (line["what"], line["number"], column)


def test_the_ranges_of_each_cycle_are_those_of_the_full_log(full: Path) -> None:
    lines, rows = table(full / "cycle-ranges.csv"), list(log_of(full))
    begun = {
        (event["kind"], event.get("number", event.get("after"))): event["tick"]
        for event in read_events(full / "events.jsonl")[0]
        if event["kind"] in ("cycle_begun", "check_begun")
    }
    done = [event for event in read_cycles(full)[0] if event["kind"] in ("cycle_done", "check_done")]
    edges = [0, *sorted([*begun.values(), *(event["tick"] for event in done)]), 10**9]
    assert [(line["what"], line["number"]) for line in lines] == [
        ("between", "0"), ("check", "0"), ("between", "0"), ("cycle", "1"), ("between", "1"), ("cycle", "2"),
        ("between", "2"), ("check", "2"), ("between", "2"), ("cycle", "3"), ("between", "3"),
    ]  # fmt: skip
    check_lines(lines, rows, list(pairwise(edges)))
    assert sum(int(line["samples"]) for line in lines) == len(rows)


def test_a_thinned_log_has_the_same_ranges_of_cycles_and_those_of_its_intervals(full: Path, thinned: Path) -> None:
    assert (thinned / "cycle-ranges.csv").read_bytes() == (full / "cycle-ranges.csv").read_bytes()
    rows = list(log_of(full))
    zero = read_manifest(full)["clocks"]["tick_zero"]
    lines = table(thinned / "interval-ranges.csv")
    spans = [(zero + 1000 * int(line["number"]), zero + 1000 * int(line["number"]) + 1000) for line in lines]
    assert {line["what"] for line in lines} == {"interval"}
    check_lines(lines, rows, spans)
    assert sum(int(line["samples"]) for line in lines) == len(rows)


def test_a_thinned_run_is_judged_and_counted_as_the_full_one(full: Path, thinned: Path) -> None:
    assert len(rows_of(thinned)) < len(rows_of(full)) / 4
    assert audit(thinned).statements == audit(full).statements == ()
    assert read_cycles(thinned)[0] == read_cycles(full)[0] or _same_but_utc(thinned, full)
    one, other = read_manifest(full), read_manifest(thinned)
    assert one["results"] == other["results"]
    assert other["samples"]["received"] == one["samples"]["written"]
    assert other["samples"]["thinned"] == other["samples"]["received"] - other["samples"]["written"] > 0
    assert set(rows_of(thinned)) <= set(rows_of(full))


def _same_but_utc(one: Path, other: Path) -> bool:
    lines = [[{**line, "utc": ""} for line in read_cycles(folder)[0]] for folder in (one, other)]
    return lines[0] == lines[1]


def test_the_files_are_hashed_in_the_manifest(thinned: Path) -> None:
    assert {"cycle-ranges.csv", "interval-ranges.csv"} <= {entry["file"] for entry in read_manifest(thinned)["files"]}


def test_a_run_without_cycles_has_no_ranges_of_cycles(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(thinning=Thinning(every=10)))
    for block in blocks_of(100):
        recorder.on_block(block)
    folder = finish(recorder, 100)
    assert not list(folder.glob("*ranges.csv"))


def done(tick: int, begin_tick: int, number: int) -> CycleDone:
    return CycleDone(
        tick=tick, begin_tick=begin_tick, number=number, block=1, name="c", part=1, outcome="confirmed", found=(),
        expectations_held=0, expectations_failed=0, run_s=0.0, starts={}, commanded=number, confirmed=number,
        failed=0, interrupted=0,
    )  # fmt: skip


@pytest.mark.parametrize("late_ms", [0, 600, int(LAG_S * 1000) - 40])
def test_an_edge_that_is_told_late_falls_where_it_belongs(tmp_path: Path, late_ms: int) -> None:
    recorder = begin(tmp_path, Keeping(cycle_ranges=True), durable=True)
    due = [(6000 + late_ms, CycleBegun(tick=6000, number=1, name="c")), (12_000, done(12_000, 6000, 1))]
    for block in blocks_of(6000, size=20):
        recorder.on_block(block)
        if not due or block.ticks[-1] < due[0][0]:
            continue
        _, event = due.pop(0)
        if isinstance(event, CycleDone):
            recorder.on_cycle(event)
            lines = table(recorder.folder.path / "cycle-ranges.csv")  # the line is there when the cycle is over
        else:
            recorder.on_event(event)
    assert [(line["what"], line["first_tick"], line["last_tick"]) for line in lines] == [
        ("between", "5000", "5998"), ("cycle", "6000", "11998"),
    ]  # fmt: skip
    finish(recorder, 6000)
    assert table(recorder.folder.path / "cycle-ranges.csv")[-1]["samples"] == str((17_000 - 12_000) // PERIOD)


@pytest.mark.parametrize("early_ms", [1, 3, 40, 700])
def test_an_edge_that_is_told_before_its_rows_waits_for_them(tmp_path: Path, early_ms: int) -> None:
    """A line of samples that is asked for again comes later than the end of the cycle is told."""
    recorder = begin(tmp_path, Keeping(cycle_ranges=True), durable=True)
    due = [(6000 - early_ms, CycleBegun(tick=6000, number=1, name="c")), (8001 - early_ms, done(8001, 6000, 1))]
    for block in blocks_of(3000, size=10):
        recorder.on_block(block)
        while due and block.ticks[-1] >= due[0][0]:
            recorder.on_event(due.pop(0)[1])
    finish(recorder, 3000)
    lines = table(recorder.folder.path / "cycle-ranges.csv")
    assert [(line["what"], line["first_tick"], line["last_tick"]) for line in lines] == [
        ("between", "5000", "5998"), ("cycle", "6000", "8000"), ("between", "8002", "10998"),
    ]  # fmt: skip


@pytest.mark.parametrize("late_ms", [-60, 0, 1, 90])
def test_edges_told_ahead_of_a_batch_fall_where_they_do_without_one(tmp_path: Path, late_ms: int) -> None:
    """In virtual time rows wait in a batch, here for many more edges than may be told ahead of it."""
    found = []
    for name, durable in (("batch", False), ("at once", True)):
        recorder = begin(tmp_path / name, Keeping(cycle_ranges=True), durable=durable)
        cycles = [
            (tick, event)
            for n in range(1, 3 * EDGES_AHEAD_MAX)
            for tick, event in (
                (5000 + 40 * n + late_ms, CycleBegun(tick=5000 + 40 * n, number=n, name="c")),
                (5025 + 40 * n + late_ms, done(5025 + 40 * n, 5000 + 40 * n, n)),
            )
        ]
        for block in blocks_of(1500, size=4):
            recorder.on_block(block)
            while cycles and block.ticks[-1] >= cycles[0][0]:
                recorder.on_event(cycles.pop(0)[1])
        finish(recorder, 1500)
        assert not cycles
        found.append((recorder.folder.path / "cycle-ranges.csv").read_bytes())
    assert found[0] == found[1]
    assert found[0].count(b"\n") == 6 * EDGES_AHEAD_MAX


Told = tuple[str, int, int | None]


def printed(*happenings: list[int] | Told) -> list[tuple[str, str, str]]:
    """Spans as what, number and samples, of rows at these ticks and edges in between."""
    printer = SpanPrinter(vent_columns(), part=1, tick_us=TICK_US, tick_zero=0)
    lines: list[bytes] = []
    ranges = CycleRanges(printer, tick_us=TICK_US, write=lines.append)
    for happening in happenings:
        if isinstance(happening, list):
            ranges.take(Rows(np.array(happening, np.int64), b"\r\n" * len(happening), 2, {}))
        else:
            ranges.edge(*happening)
    ranges.close()
    fields = [line.decode().split(",") for line in lines]
    return [(line[0], line[1], line[7]) for line in fields]


def test_edges_that_wait_stay_in_order_and_none_is_lost() -> None:
    begin_2 = ("cycle", 2, 20)
    assert printed([10, 12], begin_2, ("between", 2, None), [14, 16, 18, 20]) == [
        ("between", "0", "5"), ("cycle", "2", "0"), ("between", "2", "1"),
    ]  # fmt: skip
    assert printed([10, 12], begin_2, [14, 16]) == [("between", "0", "4"), ("cycle", "2", "0")]
    assert printed([10, 12], begin_2, [0, 2]) == [("between", "0", "2"), ("cycle", "2", "2")]  # the board restarted
    assert printed(begin_2, [18, 20]) == [("between", "0", "1"), ("cycle", "2", "1")]
    many: list[Told] = [("cycle", number, 1000 + number) for number in range(EDGES_MAX + 2)]
    assert len(printed([10, 12], *many)) == EDGES_MAX + 3


def test_the_memory_of_the_ranges_is_bounded(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(cycle_ranges=True), durable=True)
    cycles = recorder._samples._cycles
    assert cycles is not None
    for block in blocks_of(30_000, size=500):
        recorder.on_block(block)
        assert cycles._held_rows <= LAG_S * 1000 / PERIOD + 500
    finish(recorder, 30_000)
