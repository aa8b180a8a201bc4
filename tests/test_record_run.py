"""A whole run written down and read back: folder, manifest, account, trail, trouble, and the same bytes in virtual
time."""

from __future__ import annotations

import errno
import hashlib
import json
import os
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from ramprig.errors import RecordError
from ramprig.port.clock import VirtualClock
from ramprig.record.appendfile import RESERVE_BYTES
from ramprig.record.folder import InputFile, RunDescription, RunFolder, slug_of
from ramprig.record.manifest import Anchor, RunEnd
from ramprig.record.reading import audit, read_events, read_manifest, read_samples
from ramprig.record.recorder import BATCH_ROWS, Recorder
from ramprig.record.space import MB, SpacePolicy
from ramprig.record.writer import Trouble
from ramprig.session.blocks import Block, Layout
from ramprig.session.events import GapFound, Tripped
from ramprig.session.gaps import Accounting, Gap, GapReason
from record_samples import TICK_US, UTC_START_S, blocks_of, start_anchor, vent_columns, vent_values, virtual_clock

DESCRIPTION = RunDescription(
    name="Vent endurance",
    port="mock:",
    identity={"board": "demo", "serial": "0001", "boot": 3},
    settings={"seed": 7, "operator": "nobody"},
    inputs=(
        InputFile("bench", "rigs/bench.yaml", b"motors: {}\n"),
        InputFile("sequence", "vent.yaml", b"steps: []\n"),
        InputFile("include", "other/vent.yaml", b"steps: [1]\n"),
    ),
)


@dataclass
class Rig:
    """A recorder with what it was made with."""

    recorder: Recorder
    clock: VirtualClock
    troubles: list[Trouble] = field(default_factory=list)

    @property
    def path(self) -> Path:
        return self.recorder.folder.path


def begin(root: Path, *, threaded: bool = False, free: int = 10**12, space: SpacePolicy | None = None) -> Rig:
    clock = virtual_clock()
    troubles: list[Trouble] = []
    folder = RunFolder.create(root, DESCRIPTION, started_unix_s=UTC_START_S, short_id="abc123")
    recorder = Recorder(
        folder,
        vent_columns(),
        start=start_anchor(),
        tick_us=TICK_US,
        clock=clock,
        on_trouble=troubles.append,
        threaded=threaded,
        space=space,
        free=lambda _: free,
    )
    return Rig(recorder, clock, troubles)


def account_of(samples: int, *, gaps: tuple[Gap, ...] = (), first_tick: int = 5000, period: int = 2) -> Accounting:
    lost = sum(gap.count for gap in gaps)
    return Accounting(
        first_tick=first_tick,
        period_ticks=period,
        expected=samples,
        received=samples - lost,
        lost=lost,
        gaps=gaps,
        gaps_unlisted=0,
        made=samples,
        asked_again=1,
        recovered=0,
        duplicates=0,
        strange_lines=0,
    )


def end_of(samples: int, *, gaps: tuple[Gap, ...] = ()) -> RunEnd:
    return RunEnd(
        verdict="passed",
        stop_reason="the sequence came to its end",
        end=Anchor(tick=4000 + 60_003, host_s=160.0, unix_s=UTC_START_S + 60.5),
        accounts=(account_of(samples, gaps=gaps),),
        link={"garbled": 0, "duplicates": 0},
        results={"expectations": [{"speed_rpm": 30.1, "passed": True}]},
    )


def run(root: Path, samples: int = 3000, *, threaded: bool = False) -> Path:
    rig = begin(root, threaded=threaded)
    for block in blocks_of(samples):
        rig.recorder.on_block(block)
    return rig.recorder.finish(end_of(samples))


def contents(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in sorted(folder.iterdir())}


@pytest.mark.parametrize("threaded", [False, True])
def test_a_run_is_read_back_exactly(tmp_path: Path, threaded: bool) -> None:
    path = run(tmp_path, threaded=threaded)
    assert audit(path).statements == ()
    assert audit(path).rows == 3000
    samples = read_samples(path / "samples.csv")
    assert samples.ticks.tolist() == list(range(5000, 11_000, 2))
    assert np.array_equal(samples.numbers["vent.counts"], vent_values(3000)[:, 1])
    assert samples.words["state"][:25] == ["armed at_slew"] * 20 + ["armed"] * 5
    assert [event["kind"] for event in read_events(path / "events.jsonl")[0]] == ["run_started", "run_finished"]


def test_the_folder_is_named_for_the_start_the_name_and_an_id_and_holds_the_files(tmp_path: Path) -> None:
    path = run(tmp_path / "runs")
    assert path == tmp_path / "runs" / "20260301T083000Z-vent-endurance-abc123"
    assert list(contents(path)) == [
        "bench.yaml", "events.jsonl", "run.json", "samples.csv", "vent-2.yaml", "vent.yaml",
    ]  # fmt: skip
    assert (path / "vent.yaml").read_bytes() == b"steps: []\n"
    assert (path / "vent-2.yaml").read_bytes() == b"steps: [1]\n"


def test_the_same_input_in_virtual_time_gives_the_same_bytes(tmp_path: Path) -> None:
    assert contents(run(tmp_path / "a")) == contents(run(tmp_path / "b"))


def test_threads_write_the_same_samples_as_virtual_time(tmp_path: Path) -> None:
    assert contents(run(tmp_path / "a", threaded=True))["samples.csv"] == contents(run(tmp_path / "b"))["samples.csv"]


def test_a_folder_is_never_used_twice(tmp_path: Path) -> None:
    first, second = run(tmp_path, 100), run(tmp_path, 200)
    assert second.name == first.name + "-2"
    assert audit(first).rows == 100
    assert audit(second).rows == 200


def test_random_ids_tell_runs_of_one_second_apart(tmp_path: Path) -> None:
    paths = {RunFolder.create(tmp_path, DESCRIPTION, started_unix_s=UTC_START_S).path.name for _ in range(5)}
    assert len(paths) == 5
    assert all(len(name.rsplit("-", 1)[1]) == 6 for name in paths)


@pytest.mark.parametrize(
    ("name", "slug"),
    [
        ("Vent endurance", "vent-endurance"),
        ("../Lüfter: Öffnen!", "lufter-offnen"),
        ("日本", "run"),
        ("a" * 99, "a" * 40),
    ],
)
def test_a_name_becomes_a_safe_part_of_a_folder_name(name: str, slug: str) -> None:
    assert slug_of(name) == slug


def test_a_root_that_cannot_be_written_is_said(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(RecordError, match="run folder cannot be made"):
        RunFolder.create(tmp_path / "file", DESCRIPTION, started_unix_s=0)


def test_an_input_that_cannot_be_read_is_said(tmp_path: Path) -> None:
    with pytest.raises(RecordError, match=r"none\.yaml cannot be copied"):
        InputFile.read("bench", tmp_path / "none.yaml")
    (tmp_path / "some.yaml").write_bytes(b"a: 1\n")
    assert InputFile.read("bench", tmp_path / "some.yaml").content == b"a: 1\n"


def test_the_manifest_says_what_the_run_was_made_with(tmp_path: Path) -> None:
    manifest = read_manifest(run(tmp_path))
    assert manifest["status"] == "finished"
    assert manifest["verdict"] == "passed"
    assert manifest["stop_reason"] == "the sequence came to its end"
    assert manifest["started"] == "2026-03-01T08:30:00.000Z"
    assert set(manifest["software"]) == {"ramprig", "python", "numpy", "os", "machine"}
    assert manifest["device"] == {"board": "demo", "serial": "0001", "boot": 3}
    assert manifest["settings"]["operator"] == "nobody"
    assert manifest["link"] == {"garbled": 0, "duplicates": 0}
    assert manifest["results"]["expectations"][0]["passed"] is True
    assert manifest["columns"] == list(vent_columns().names)
    bench = manifest["inputs"][0]
    assert bench["name"] == "rigs/bench.yaml"
    assert bench["sha256"] == hashlib.sha256(b"motors: {}\n").hexdigest()


def test_the_manifest_has_the_hash_of_every_file(tmp_path: Path) -> None:
    path = run(tmp_path)
    listed = {entry["file"]: entry for entry in read_manifest(path)["files"]}
    assert set(listed) == {"samples.csv", "events.jsonl"}
    for name, entry in listed.items():
        data = (path / name).read_bytes()
        assert (entry["bytes"], entry["sha256"]) == (len(data), hashlib.sha256(data).hexdigest())


def test_the_clocks_are_tied_together_twice_and_compared(tmp_path: Path) -> None:
    found = read_manifest(run(tmp_path))["clocks"]
    assert found["tick_zero"] == 4000
    assert found["start"] == {"tick": 4000, "host_s": 100.0, "utc": "2026-03-01T08:30:00.000000Z"}
    assert found["end"] == {"tick": 64_003, "host_s": 160.0, "utc": "2026-03-01T08:31:00.500000Z"}
    assert found["device_against_host_ppm"] == 50.0  # 60.003 s by the device in 60 s by the host
    assert found["wall_moved_s"] == 0.5


def test_the_speed_method_and_its_resolution_are_stated(tmp_path: Path) -> None:
    found = read_manifest(run(tmp_path))["speed"]
    assert "100 counts or 50 ms" in found["method"]
    column = found["columns"][0]
    assert column["column"] == "vent.speed_rpm"
    assert column["counts_per_rev"] == 1632.67
    at_10_rpm = [entry["rpm"] for entry in column["resolution"] if entry["at_rpm"] == 10 and entry["period_ticks"] == 2]
    counts_per_s = 10 / 60 * 1632.67
    assert at_10_rpm == [pytest.approx(counts_per_s * 0.002 / 0.05 * 60 / 1632.67, rel=1e-3)]


def test_a_gap_is_in_the_account_and_not_a_fault_of_the_file(tmp_path: Path) -> None:
    gap = Gap(5200, 50, 2, GapReason.NOT_KEPT)
    rig = begin(tmp_path)
    for block in blocks_of(1000):
        if block.ticks[0] == gap.first_tick:
            event = GapFound(tick=gap.first_tick, host_s=101.0, count=50, period_ticks=2, reason=gap.reason)
            rig.recorder.on_event(event)
        else:
            rig.recorder.on_block(block)
    path = rig.recorder.finish(end_of(1000, gaps=(gap,)))
    found = audit(path)
    assert found.statements == ()
    assert (found.rows, found.known_lost, found.missing) == (950, 50, 0)
    account = read_manifest(path)["samples"]
    assert (account["expected"], account["received"], account["lost"], account["written"]) == (1000, 950, 50, 950)
    assert account["unwritten"] == 0
    assert account["complete"] is True
    assert account["gaps"] == [
        {"first_tick": 5200, "count": 50, "period_ticks": 2, "reason": "the device no longer keeps the line"}
    ]


def edited(path: Path, **changes: object) -> None:
    manifest = read_manifest(path)
    manifest["samples"] |= changes
    (path / "run.json").write_text(json.dumps(manifest), encoding="utf-8")


def test_rows_that_are_missing_or_too_many_are_found(tmp_path: Path) -> None:
    path = run(tmp_path, 300)
    rows = (path / "samples.csv").read_bytes().split(b"\r\n")
    extra = rows[-2].replace(rows[-2].split(b",")[0], b"9999", 1)
    (path / "samples.csv").write_bytes(b"\r\n".join([*rows[:10], *rows[12:-1], extra, b""]))
    found = audit(path)
    assert (found.missing, found.unexpected) == (2, 1)
    assert not found.exact
    assert found.statements == (
        "2 samples are missing that were received: ticks 5018, 5020",
        "1 rows are of ticks that no logging made: 9999",
        "samples.csv was changed after the run",
    )


def test_rows_in_another_order_are_found(tmp_path: Path) -> None:
    path = run(tmp_path, 300)
    rows = (path / "samples.csv").read_bytes().split(b"\r\n")
    rows[5], rows[6] = rows[6], rows[5]
    (path / "samples.csv").write_bytes(b"\r\n".join(rows))
    assert audit(path).statements[0].startswith("the rows are not in the order")


def test_a_missing_copy_is_found(tmp_path: Path) -> None:
    path = run(tmp_path, 300)
    (path / "bench.yaml").unlink()
    assert audit(path).statements == ("bench.yaml is missing",)


def test_a_run_without_an_end_says_so(tmp_path: Path) -> None:
    rig = begin(tmp_path)
    for block in blocks_of(BATCH_ROWS + 100):
        rig.recorder.on_block(block)
    manifest = read_manifest(rig.path)
    assert (manifest["status"], manifest["verdict"], manifest["ended"]) == ("running", None, None)
    found = audit(rig.path)
    assert not found.finished
    assert "did not end in order" in found.statements[0]
    assert "last event is 'run_started'" in found.statements[0]
    rig.recorder.finish(end_of(BATCH_ROWS + 100))
    assert audit(rig.path).exact


@pytest.mark.parametrize("cut", [1, 2, 20, 70])
def test_a_torn_last_row_is_left_out_and_said(tmp_path: Path, cut: int) -> None:
    path = run(tmp_path, 300)
    data = (path / "samples.csv").read_bytes()
    (path / "samples.csv").write_bytes(data[:-cut])
    samples = read_samples(path / "samples.csv")
    whole = data[:-cut].rfind(b"\n") + 1
    assert len(samples) == data[:whole].count(b"\n") - 1
    assert samples.torn_bytes == len(data) - cut - whole
    assert any("the last row is torn" in text for text in audit(path).statements)


def test_a_torn_last_event_is_left_out_and_said(tmp_path: Path) -> None:
    path = run(tmp_path, 300)
    (path / "events.jsonl").write_bytes((path / "events.jsonl").read_bytes()[:-3])
    events, torn_bytes = read_events(path / "events.jsonl")
    assert [event["kind"] for event in events] == ["run_started"]
    assert torn_bytes > 0
    assert any("the last event is torn" in text for text in audit(path).statements)


def test_an_unfinished_run_with_an_untold_hole_says_where(tmp_path: Path) -> None:
    rig = begin(tmp_path, threaded=True)
    for block in blocks_of(1000):
        if block.ticks[0] not in (5300, 5700):
            rig.recorder.on_block(block)
    rig.recorder.on_event(GapFound(tick=5300, host_s=101.0, count=50, period_ticks=2, reason="lost"))
    rig.recorder._writer.close()
    found = audit(rig.path)
    assert found.known_lost == 50
    assert found.statements[1] == "rows are missing, or the period changed, at 1 places: ticks 5700"
    rig.recorder.finish(end_of(1000))


@pytest.mark.parametrize(
    "text",
    [b"", b"{}", b"[1]", b"{", b'{"format": "something else"}', b"\xff"],
    ids=lambda text: text.decode("latin-1"),
)
def test_what_is_no_run_folder_is_refused(tmp_path: Path, text: bytes) -> None:
    (tmp_path / "run.json").write_bytes(text)
    with pytest.raises(RecordError):
        read_manifest(tmp_path)
    with pytest.raises(RecordError, match="is no run folder"):
        read_manifest(tmp_path / "none")


@pytest.mark.parametrize(
    "text", [b"a,b\r\n1,2\r\n", b"tick,x\r\n1\r\n", b"tick,x\r\nabc,1\r\n", b"tick\r\n\xff\r\n", b'tick,x\r\n1,"2\r\n']
)
def test_what_is_no_samples_file_is_refused(tmp_path: Path, text: bytes) -> None:
    (tmp_path / "samples.csv").write_bytes(text)
    with pytest.raises(RecordError, match="samples file"):
        read_samples(tmp_path / "samples.csv")


def test_an_empty_samples_file_has_no_rows(tmp_path: Path) -> None:
    (tmp_path / "samples.csv").write_bytes(b"")
    assert len(read_samples(tmp_path / "samples.csv")) == 0


def test_only_the_columns_asked_for_are_read(tmp_path: Path) -> None:
    samples = read_samples(run(tmp_path) / "samples.csv", columns=["vent.speed_rpm", "state"])
    assert list(samples.numbers) == ["vent.speed_rpm"]
    assert list(samples.words) == ["state"]


def test_a_large_file_is_read_in_pieces(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = run(tmp_path)
    whole = read_samples(path / "samples.csv")
    monkeypatch.setattr("ramprig.record.reading.CHUNK_BYTES", 1000)
    pieces = read_samples(path / "samples.csv")
    assert pieces.words == whole.words
    assert all(np.array_equal(pieces.numbers[name], whole.numbers[name], equal_nan=True) for name in whole.numbers)


def test_a_trip_leaves_its_trail(tmp_path: Path) -> None:
    rig = begin(tmp_path)
    layout = Layout.of(0b101_0000_0000_0000_0111, 1)
    values = np.delete(vent_values(64), 3, axis=1)
    trail = [Block(np.arange(5936, 6000), values, layout)]
    rig.recorder.on_event(
        Tripped(tick=5990, host_s=102.0, trip="overcurrent", index=0, value=2600, bound=2500, learned=_NOTICE)
    )
    rig.recorder.on_trail(trail)
    rig.recorder.on_trail(trail)
    rig.recorder.on_trail([])
    path = rig.recorder.finish(replace(end_of(0), verdict="tripped"))
    found = read_samples(path / "trail.csv")
    assert found.names == (
        "tick", "time_s", "vent.duty_pct", "vent.counts", "vent.position_rev", "vent.speed_rpm", "vent.current_a",
        "supply_v", "state",
    )  # fmt: skip
    assert found.ticks.tolist() == list(range(5936, 6000))
    assert (path / "trail-2.csv").read_bytes() == (path / "trail.csv").read_bytes()
    assert {"trail.csv", "trail-2.csv"} <= {entry["file"] for entry in read_manifest(path)["files"]}
    assert audit(path).exact


_NOTICE: Any = "notice"  # the word as it is written


def test_little_space_warns_and_less_asks_for_a_stop_while_the_log_goes_on(tmp_path: Path) -> None:
    rig = begin(tmp_path, free=10 * MB)
    for block in blocks_of(200):
        rig.clock.advance(0.5)
        rig.recorder.on_event(GapFound(tick=1, host_s=0.0, count=1, period_ticks=1, reason="x"))
        rig.recorder.on_block(block)
    assert [trouble.kind for trouble in rig.troubles] == ["space_low"]
    path = rig.recorder.finish(end_of(200))
    assert audit(path).rows == 200
    assert read_manifest(path)["disk_troubles"][0]["kind"] == "space_low"
    assert "disk_trouble" in [event["kind"] for event in read_events(path / "events.jsonl")[0]]


class FullDisk:
    """Stands in for os.write: so much room in all, and the reserve's as well once it is freed."""

    def __init__(self, room: int, folder: Path, happened: list[str]) -> None:
        self.room = room
        self.reserve = folder / "reserve.bin"
        self.happened = happened
        self._write = os.write
        self._freed = False

    def __call__(self, handle: int, data: bytes | memoryview) -> int:
        if not self._freed and not self.reserve.exists():
            self._freed = True
            self.happened.append("reserve freed")
            self.room += RESERVE_BYTES
        if self.room == 0:
            self.happened.append("no room")
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        done = self._write(handle, bytes(data)[: self.room])
        self.room -= done
        return done


@pytest.mark.parametrize("threaded", [False, True])
@pytest.mark.parametrize("room", [0, 1, 5000, 150_000])
def test_a_full_disk_stops_the_motor_first_and_then_writes_down_why(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, threaded: bool, room: int
) -> None:
    rows = 3 * BATCH_ROWS
    rig = begin(tmp_path, threaded=threaded)
    if threaded:
        rig.recorder._writer._queue.join()
    happened: list[str] = []
    monkeypatch.setattr(rig.recorder, "_user_on_trouble", lambda trouble: happened.append(f"stop: {trouble.kind}"))
    monkeypatch.setattr("ramprig.record.appendfile.os.write", FullDisk(room, rig.path, happened))
    try:
        for block in blocks_of(rows):
            rig.recorder.on_block(block)
            if threaded:
                rig.recorder._writer._queue.join()
    except RecordError:
        happened.append("raised")
    path = rig.recorder.finish(replace(end_of(rows), verdict="failed", stop_reason="the disk is full"))
    assert happened[:2] == ["no room", "stop: disk_full"]
    assert sorted(happened[2:]) == ["raised", "reserve freed"]
    manifest = read_manifest(path)
    assert manifest["status"] == "finished"
    assert manifest["disk_troubles"] == [
        {"kind": "disk_full", "text": f"the disk is full: {os.strerror(errno.ENOSPC)}"}
    ]
    events, torn_bytes = read_events(path / "events.jsonl")
    assert [event["kind"] for event in events] == ["run_started", "disk_trouble", "run_finished"]
    assert torn_bytes == 0
    samples = read_samples(path / "samples.csv")
    assert samples.torn_bytes == 0
    assert manifest["samples"]["written"] == len(samples)
    assert manifest["samples"]["unwritten"] == rows - len(samples)
    found = audit(path)
    assert found.missing == rows - len(samples)
    assert not found.exact
    assert not (path / "reserve.bin").exists()


def test_finishing_twice_does_nothing_more(tmp_path: Path) -> None:
    rig = begin(tmp_path)
    rig.recorder.finish(end_of(0))
    before = contents(rig.path)
    rig.recorder.finish(replace(end_of(0), verdict="failed"))
    assert contents(rig.path) == before


def test_a_manifest_that_cannot_be_written_at_the_end_is_said(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    rig = begin(tmp_path)

    def refuse(_path: Path, _data: bytes) -> None:
        raise OSError(errno.EIO, "broken")

    monkeypatch.setattr("ramprig.record.folder.replace_file", refuse)
    with pytest.raises(RecordError, match=r"run\.json cannot be written.*broken"):
        rig.recorder.finish(end_of(0))


def test_the_account_of_the_file_is_checked_against_what_was_edited(tmp_path: Path) -> None:
    path = run(tmp_path, 100)
    edited(path, loggings=[], written=99)
    assert audit(path).statements == ("100 rows are there, 99 were written",)
