"""A thinned log holds full rate around events, some of the rows elsewhere, and an account that comes out to the row."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.errors import RecordError
from ramprig.record.keeping import AROUND_DEFAULT, AROUND_TEXTS, Around, Keeping, Thinning
from ramprig.record.reading import audit, read_events, read_manifest
from ramprig.record.recorder import Recorder
from ramprig.record.rows import Cells, Rows
from ramprig.record.thinning import FullRateBegun, FullRateEnded, Thinner
from ramprig.record.volumes import VolumeLimits
from ramprig.sequence.happened import CycleBegun, Marked
from ramprig.session.blocks import Block
from ramprig.session.events import GapFound, Learned, Tripped
from ramprig.session.gaps import Gap, GapReason
from record_long import FIRST_TICK, PERIOD, begin, finish, rows_of
from record_samples import blocks_of, start_anchor

SAMPLES = 3000  # 6 s at 500 a second
RULE = Thinning(every=20, before_s=0.1, after_s=0.3, around=frozenset({Around.MARK, Around.TRIP}))


def run(
    root: Path,
    rule: Thinning | None,
    marks: Sequence[int] = (),
    *,
    size: int = 50,
    rows: int = 10**6,
    finished: bool = True,
) -> Path:
    """A run with a mark after these samples have come, at the tick of the last of them."""
    recorder = begin(root, Keeping(volumes=VolumeLimits(rows=rows), thinning=rule))
    hand_over(recorder, blocks_of(SAMPLES, size=size), marks)
    if finished:
        return finish(recorder, SAMPLES)
    recorder._submit_batch()
    return recorder.folder.path


def hand_over(recorder: Recorder, blocks: Sequence[Block], marks: Sequence[int]) -> None:
    done, due = 0, sorted(marks)
    for block in blocks:
        recorder.on_block(block)
        done += len(block)
        while due and due[0] <= done:
            recorder.on_event(Marked(tick=int(block.ticks[-1]), name="here"))
            due.pop(0)


def expected_ticks(rule: Thinning, events: Sequence[int]) -> set[int]:
    """By definition: around the run's begin and end and each event all ticks, elsewhere each whose number fits."""
    ticks = [FIRST_TICK + PERIOD * number for number in range(SAMPLES)]
    before, after = round(rule.before_s * 1000), round(rule.after_s * 1000)
    spans = [(at - before, at + after) for at in (start_anchor().tick, *events)] + [(ticks[-1] - before, ticks[-1])]
    return {
        tick
        for tick in ticks
        if any(low <= tick <= high for low, high in spans)
        or (rule.every is not None and tick // PERIOD % rule.every == 0)
    }


def ticks_of(folder: Path) -> list[int]:
    return [int(row.split(b",")[0]) for row in rows_of(folder)]


@settings(max_examples=25, deadline=None)
@given(
    marks=st.lists(st.integers(1, SAMPLES), max_size=6),
    size=st.integers(20, 400),
    every=st.none() | st.integers(2, 300),
    before_ms=st.integers(0, 800),
    after_ms=st.integers(0, 1500),
)
def test_what_is_kept_follows_from_the_events_and_is_what_the_full_log_holds(
    tmp_path_factory: pytest.TempPathFactory,
    marks: list[int], size: int, every: int | None, before_ms: int, after_ms: int,
) -> None:  # fmt: skip
    root = tmp_path_factory.mktemp("thinned")
    rule = replace(RULE, every=every, before_s=before_ms / 1000, after_s=after_ms / 1000)
    thinned = run(root, rule, marks, size=size)
    told = [e["tick"] for e in read_events(thinned / "events.jsonl")[0] if e["kind"] == "marked"]
    assert len(told) == len(marks)
    expected = expected_ticks(rule, told)
    full = {int(row.split(b",")[0]): row for row in full_rows(tmp_path_factory)}
    assert rows_of(thinned) == [full[tick] for tick in sorted(expected)]
    account = read_manifest(thinned)["samples"]
    assert (account["written"], account["thinned"]) == (len(expected), SAMPLES - len(expected))
    assert (account["unwritten"], account["lost"]) == (0, 0)
    assert audit(thinned).statements == ()


_FULL: list[bytes] = []


def full_rows(folders: pytest.TempPathFactory) -> list[bytes]:
    """The rows of the log that is not thinned, made once."""
    if not _FULL:
        _FULL.extend(rows_of(run(folders.mktemp("full"), None)))
    return _FULL


def test_a_thinned_log_goes_on_in_volumes(tmp_path: Path) -> None:
    cut = run(tmp_path / "cut", RULE, [700, 2000], rows=100)
    assert rows_of(cut) == rows_of(run(tmp_path / "whole", RULE, [700, 2000]))
    assert len(read_manifest(cut)["samples_files"]) > 3
    assert audit(cut).statements == ()


def test_the_events_say_where_full_rate_was_kept_and_why(tmp_path: Path) -> None:
    events = read_events(run(tmp_path, RULE, [1500]) / "events.jsonl")[0]
    spans = [(e["kind"], e["tick"], e.get("because")) for e in events if e["kind"].startswith("full_rate")]
    assert spans == [
        ("full_rate_begun", 4000, "begin"),
        ("full_rate_ended", 4300, None),
        ("full_rate_begun", 7998 - 100, "mark"),
        ("full_rate_ended", 7998 + 300, None),
        ("full_rate_begun", 10_998 - 100, "end"),
    ]


def test_an_event_that_is_told_late_keeps_what_is_not_decided_yet_and_says_so(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(thinning=RULE))
    blocks = blocks_of(SAMPLES, size=50)
    for place, block in enumerate(blocks):
        recorder.on_block(block)
        if place == 29:
            recorder.on_event(Marked(tick=FIRST_TICK + 1000, name="long ago"))
            newest = int(block.ticks[-1])
    folder = finish(recorder, SAMPLES)
    events = read_events(folder / "events.jsonl")[0]
    spans = [(e["kind"], e["tick"]) for e in events if e["kind"].startswith("full_rate")]
    assert spans[2:4] == [("full_rate_begun", newest - 100), ("full_rate_ended", newest)]
    assert audit(folder).statements == ()


def test_the_manifest_says_how_the_log_was_thinned(tmp_path: Path) -> None:
    kept = read_manifest(run(tmp_path, RULE))["keeping"]
    assert kept["thinning"] == {
        "every": 20, "ranges_s": None, "before_s": 0.1, "after_s": 0.3, "around": ["mark", "trip"],
    }  # fmt: skip


@pytest.mark.parametrize("place", [3, 60, 150, -2])
def test_a_row_that_is_missing_or_too_many_is_found(tmp_path: Path, place: int) -> None:
    folder = run(tmp_path, RULE, [1500])
    path = folder / "samples.csv"
    header, *rows = path.read_bytes().splitlines(keepends=True)
    gone = rows.pop(place)
    path.write_bytes(b"".join([header, *rows]))
    found = audit(folder)
    assert (found.missing, found.unexpected) == (1, 0)
    assert f"1 samples are missing that were received: ticks {gone.split(b',')[0].decode()}" in found.statements
    far = next(i for i, (a, b) in enumerate(pairwise(rows)) if _tick(b) - _tick(a) == 40)
    extra = str(_tick(rows[far]) + 2).encode() + rows[far][rows[far].index(b",") :]
    rows.insert(far + 1, extra)
    path.write_bytes(b"".join([header, *rows]))
    found = audit(folder)
    assert (found.missing, found.unexpected) == (1, 1)


def _tick(row: bytes) -> int:
    return int(row.split(b",")[0])


def test_lost_samples_are_told_apart_from_thinned_ones(tmp_path: Path) -> None:
    blocks = blocks_of(SAMPLES)
    gaps = (Gap(7000, 50, PERIOD, GapReason.NOT_KEPT), Gap(9600, 50, PERIOD, GapReason.NOT_KEPT))
    recorder = begin(tmp_path, Keeping(thinning=replace(RULE, around=AROUND_DEFAULT)))
    for number, block in enumerate(blocks):
        if number not in (20, 46):
            recorder.on_block(block)
        else:
            gap = gaps[number == 46]
            recorder.on_event(GapFound(tick=gap.first_tick, host_s=100.0, count=50, period_ticks=2, reason=gap.reason))
    folder = finish(recorder, SAMPLES, gaps)
    account = read_manifest(folder)["samples"]
    assert (account["expected"], account["lost"], account["unwritten"]) == (SAMPLES, 100, 0)
    assert account["written"] + account["thinned"] == account["received"] == SAMPLES - 100
    assert audit(folder).statements == ()
    ticks = set(ticks_of(folder))
    assert set(range(6900, 7000, 2)) <= ticks  # trouble is an event: full rate before it and after it
    assert not ticks & set(range(7000, 7100, 2))
    assert set(range(7100, 7302, 2)) <= ticks


def test_a_run_that_was_killed_is_audited_by_its_events(tmp_path: Path) -> None:
    folder = run(tmp_path, RULE, [1500, 2900], finished=False)
    (statement,) = audit(folder).statements
    assert "did not end in order" in statement
    path = folder / "samples.csv"
    header, *rows = path.read_bytes().splitlines(keepends=True)
    for place in (180, 250, len(rows) - 30):
        path.write_bytes(b"".join([header, *rows[:place], *rows[place + 1 :]]))
        assert audit(folder).statements[1:] == (f"1 rows are missing: ticks {_tick(rows[place])}",), place


def test_full_rate_that_was_cut_off_by_a_kill_ends_with_its_last_row(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(thinning=RULE))
    hand_over(recorder, blocks_of(1000, size=10)[:60], [580])
    recorder._submit_batch()
    assert len(audit(recorder.folder.path).statements) == 1


def test_every_kind_of_event_is_said_in_words_and_claims_what_it_is_named_for() -> None:
    assert set(AROUND_TEXTS) == set(Around)
    rule = Thinning(every=10, around=frozenset(Around))
    told = {
        "tripped": "trip", "restarted": "trip", "stop_begun": "stop", "gap_found": "trouble", "late_host": "trouble",
        "wear_found": "watch", "marked": "mark", "cycle_begun": "cycle", "run_started": "begin", "state_seen": "",
    }  # fmt: skip
    assert {kind: rule.claims({"kind": kind}) for kind in told} == told
    assert rule.claims({"kind": "judged", "held": False}) == "failure"
    assert rule.claims({"kind": "judged", "held": True}) == ""
    assert rule.claims({"kind": "cycle_done", "outcome": "failed"}) == "failure"
    assert rule.claims({"kind": "cycle_done", "outcome": "confirmed"}) == "cycle"
    few = Thinning(every=10, around=frozenset({Around.TRIP}))
    assert [few.claims({"kind": kind}) for kind in ("tripped", "marked", "run_resumed")] == ["trip", "", "begin"]


def test_the_kinds_that_are_claimed_are_those_that_the_events_have() -> None:
    """The names in keeping.py are those of event classes that exist."""
    from ramprig.endure.live import WearFound
    from ramprig.endure.unfailing import WearUnjudged
    from ramprig.record.events import kind_of
    from ramprig.record.keeping import _KINDS
    from ramprig.sequence import happened
    from ramprig.session import events

    classes = [*vars(events).values(), *vars(happened).values(), WearFound, WearUnjudged]
    known = {kind_of(each.__name__) for each in classes if isinstance(each, type)}
    assert set(_KINDS) <= known


# ---- the thinner alone ----------------------------------------------------------------------------------------------


def rows_at(*ticks: int) -> Rows:
    return Rows(np.array(ticks, np.int64), b"".join(b"%d\r\n" % tick for tick in ticks), 2, {})


def thinner(**rule: float) -> tuple[Thinner, list[int], list[object]]:
    kept: list[int] = []
    told: list[object] = []
    made = Thinner(
        Thinning(every=10, before_s=rule.get("before_s", 0.02), after_s=rule.get("after_s", 0.01)),
        tick_us=1000, write=lambda rows: kept.extend(rows.ticks.tolist()), tell=told.append,
    )  # fmt: skip
    return made, kept, told


def test_an_event_that_comes_late_still_gets_what_is_left_of_the_time_before_it() -> None:
    made, kept, _ = thinner()
    made.take(rows_at(*range(0, 102, 2)))
    made.claim(90, "trip")
    assert kept == [0, 20, 40, 60, *range(80, 102, 2)]  # the ring reaches back to 80


def test_an_event_in_the_future_keeps_what_is_there_and_all_up_to_its_end() -> None:
    made, kept, told = thinner()
    made.take(rows_at(*range(0, 102, 2)))
    made.claim(120, "mark")
    made.take(rows_at(*range(102, 160, 2)))
    assert kept == [0, 20, 40, 60, *range(80, 132, 2)]
    assert told == [FullRateBegun(tick=80, because="mark"), FullRateEnded(tick=130)]


def test_an_event_that_comes_late_does_not_cut_the_time_after_an_earlier_one_short() -> None:
    made, kept, _ = thinner()
    made.take(rows_at(*range(0, 102, 2)))
    made.claim(100, "mark")
    made.claim(94, "trip")
    made.take(rows_at(*range(102, 160, 2)))
    assert kept == [0, 20, 40, 60, *range(80, 112, 2), 120]
    assert made.thinned_rows == 80 - len(kept) - made._ring_rows


def test_ticks_that_begin_anew_leave_nothing_undecided() -> None:
    made, kept, _ = thinner()
    made.take(rows_at(*range(1000, 1042, 2)))
    made.take(rows_at(*range(0, 10, 2)))
    made.flush()
    assert kept == [1000, 1020, 1040, 0, 2, 4, 6, 8]
    assert made.thinned_rows == 18


def test_the_ring_is_bounded(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.record.thinning.RING_ROWS_MAX", 100)
    made, kept, _ = thinner(before_s=1000.0)
    for first in range(0, 2000, 50):
        made.take(rows_at(*range(first, first + 50, 2)))
        assert made._ring_rows <= 100
    assert kept == list(range(0, 1800, 20))
    assert made.thinned_rows + len(kept) + made._ring_rows == 1000


def test_rows_that_wait_take_no_more_memory_than_their_text() -> None:
    made, _, _ = thinner()
    cells = {"a": Cells(np.zeros(1, np.int64), 0)}
    made.take(Rows(np.array([4], np.int64), b"4\r\n", 2, cells))
    assert [rows.cells for rows in made._ring] == [{}]


def test_an_event_before_the_first_row_keeps_the_first_rows() -> None:
    made, kept, _ = thinner()
    made.claim(None, "trip")
    made.claim(0, "begin")
    made.take(rows_at(*range(0, 60, 2)))
    assert kept[:6] == [0, 2, 4, 6, 8, 10]


def test_a_disk_that_fills_up_leaves_an_account_that_comes_out(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    recorder = begin(tmp_path, Keeping(thinning=RULE), on_trouble=lambda trouble: None, durable=True)
    blocks = blocks_of(SAMPLES)
    hand_over(recorder, blocks[:40], [1500])
    volumes = recorder._samples._volumes

    def full(rows: Rows) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(recorder._samples._thinner, "_write", full)
    with pytest.raises(RecordError):
        hand_over(recorder, blocks[40:], [])
    folder = finish(recorder, SAMPLES)
    account = read_manifest(folder)["samples"]
    assert account["written"] == volumes.written_rows == len(rows_of(folder))
    assert account["unwritten"] > 0
    assert account["written"] + account["thinned"] + account["unwritten"] == SAMPLES


def test_a_trip_in_a_thinned_log_is_seen_at_full_rate(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(thinning=RULE))
    hand_over(recorder, blocks_of(SAMPLES)[:40], [])
    recorder.on_event(CycleBegun(tick=8900, number=1, name="cycle"))  # no kind that this rule keeps full rate around
    recorder.on_event(Tripped(tick=8998, host_s=100.0, trip="stall", index=0, value=0, bound=4, learned=Learned.NOTICE))
    recorder._submit_batch()
    assert set(range(8900, 9000, 2)) <= set(ticks_of(recorder.folder.path))
