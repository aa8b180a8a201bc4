"""The disk's own writer: order, bounds, liveness, and that a trouble is told before anything else happens."""

from __future__ import annotations

import errno
import os
import re
import threading
from collections.abc import Callable, Iterator
from contextlib import nullcontext
from dataclasses import dataclass, field
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.errors import RecordError
from ramprig.record.appendfile import AppendFile, Reserve, replace_file
from ramprig.record.space import MB, SpacePolicy, SpaceWatch, check_space, standing
from ramprig.record.writer import DiskWriter, Trouble, TroubleKind, trouble_of

WAIT_S = 20.0  # no test waits this long unless it fails

full_device = pytest.mark.skipif(not Path("/dev/full").exists(), reason="needs /dev/full (Linux)")


@dataclass
class Bench:
    """A writer with a hand-turned clock, and a list of what happened in which order."""

    folder: Path
    now_s: float = 0.0
    happened: list[str] = field(default_factory=list)
    writers: list[DiskWriter] = field(default_factory=list)
    files: list[AppendFile] = field(default_factory=list)

    def file(self, name: str = "a.txt") -> AppendFile:
        self.files.append(AppendFile(self.folder / name))
        return self.files[-1]

    def writer(self, *files: AppendFile, threaded: bool, queue_max: int = 8) -> DiskWriter:
        writer = DiskWriter(
            files,
            on_trouble=lambda trouble: self.happened.append(f"trouble {trouble.kind}"),
            after_trouble=lambda trouble: self.happened.append(f"after {trouble.kind}"),
            on_sync=lambda: self.happened.append("synced"),
            threaded=threaded,
            now=lambda: self.now_s,
            queue_max=queue_max,
        )
        self.writers.append(writer)
        return writer


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[Bench]:
    made = Bench(tmp_path)
    yield made
    for writer in made.writers:
        writer.close(WAIT_S)
    for file in made.files:
        file.close()


def settle(writer: DiskWriter) -> None:
    """Wait until the writer has done all that was handed over before."""
    done = threading.Event()
    writer.submit(done.set, vital=True)
    assert done.wait(WAIT_S)
    writer._queue.join()


def submit_and_check(writer: DiskWriter, work: Callable[[], None], happened: list[str]) -> None:
    try:
        writer.submit(work)
        settle(writer)
        writer.check()
    except RecordError:
        happened.append("raised")
        raise


def fails_with(code: int) -> Callable[[], None]:
    def work() -> None:
        raise OSError(code, os.strerror(code))

    return work


@pytest.mark.parametrize("threaded", [False, True])
def test_jobs_are_carried_out_in_order(bench: Bench, threaded: bool) -> None:
    file = bench.file()
    writer = bench.writer(file, threaded=threaded, queue_max=1000)
    for number in range(500):
        writer.submit(lambda number=number: file.append(b"%d\n" % number))  # type: ignore[misc]  # bound early, on purpose
    writer.close(WAIT_S)
    assert file.path.read_bytes() == b"".join(b"%d\n" % number for number in range(500))
    assert (file.lines, file.synced_lines) == (500, 500)


@pytest.mark.parametrize("threaded", [False, True])
@pytest.mark.parametrize(
    ("code", "kind"),
    [(errno.ENOSPC, "disk_full"), (errno.EFBIG, "disk_full"), (errno.EIO, "disk_error"), (errno.EROFS, "disk_error")],
)
def test_trouble_is_told_first_then_dealt_with_then_raised(bench: Bench, threaded: bool, code: int, kind: str) -> None:
    writer = bench.writer(threaded=threaded)
    with pytest.raises(RecordError, match=re.escape(os.strerror(code))):
        submit_and_check(writer, fails_with(code), bench.happened)
    assert bench.happened == [f"trouble {kind}", f"after {kind}", "raised"]
    with pytest.raises(RecordError):
        writer.submit(lambda: bench.happened.append("a row after the failure"))
    writer.submit(lambda: bench.happened.append("a vital job"), vital=True)
    settle(writer)
    assert bench.happened[3:] == ["a vital job"]


@full_device
def test_a_full_disk_is_told_at_the_first_row(bench: Bench) -> None:
    file = AppendFile(Path("/dev/full"), new=False)
    bench.files.append(file)
    writer = bench.writer(file, threaded=False)
    with pytest.raises(RecordError, match="the disk is full"):
        writer.submit(lambda: file.append(b"1,2,3\r\n"))
    assert bench.happened == ["trouble disk_full", "after disk_full"]
    assert (file.lines, file.size_bytes) == (0, 0)


@pytest.mark.parametrize("threaded", [False, True])
def test_a_fault_of_ours_stops_the_motor_too(bench: Bench, threaded: bool) -> None:
    writer = bench.writer(threaded=threaded)

    def faulty() -> None:
        raise ZeroDivisionError("oh")

    try:
        writer.submit(faulty)
    except RecordError:
        assert not threaded
    settle(writer)
    assert bench.happened == ["trouble fault", "after fault"]
    with pytest.raises(RecordError, match="ZeroDivisionError: oh"):
        writer.check()


def test_a_full_queue_is_told_at_once_by_the_one_who_hands_over(bench: Bench) -> None:
    writer = bench.writer(threaded=True, queue_max=4)
    busy, go_on = threading.Event(), threading.Event()

    def slow() -> None:
        busy.set()
        assert go_on.wait(WAIT_S)

    writer.submit(slow)
    assert busy.wait(WAIT_S)
    for _ in range(4):
        writer.submit(lambda: bench.happened.append("row"))
    with pytest.raises(RecordError, match="too slow: 4 writes"):
        writer.submit(lambda: None)
    assert bench.happened == ["trouble queue_full", "after queue_full"]
    writer.submit(lambda: bench.happened.append("reason written"), vital=True)
    go_on.set()
    settle(writer)
    assert bench.happened[2:] == ["row"] * 4 + ["reason written"]
    writer.tell(Trouble(TroubleKind.DISK_ERROR, "gone"))
    writer.close(WAIT_S, rows_end=lambda: bench.happened.append("end of the rows"))
    assert bench.happened[-1] == "trouble disk_error"


def test_liveness_is_the_time_that_work_has_waited(bench: Bench) -> None:
    writer = bench.writer(threaded=True)
    settle(writer)
    busy, go_on = threading.Event(), threading.Event()
    bench.now_s = 50.0
    assert writer.liveness_s() == 0.0  # idle is alive, for however long

    def slow() -> None:
        busy.set()
        assert go_on.wait(WAIT_S)

    writer.submit(slow)
    assert busy.wait(WAIT_S)
    assert writer.liveness_s() == 0.0
    bench.now_s = 53.0
    assert writer.liveness_s() == 3.0
    writer.submit(lambda: None)
    assert writer.liveness_s() == 3.0  # handing over more work is no progress
    go_on.set()
    writer.close(WAIT_S)
    assert writer.liveness_s() == 0.0


def test_in_virtual_time_the_writer_is_always_alive(bench: Bench) -> None:
    writer = bench.writer(threaded=False)
    writer.submit(lambda: None)
    bench.now_s = 1e6
    assert writer.liveness_s() == 0.0


def test_files_are_synced_every_second_and_after_events(bench: Bench) -> None:
    file = bench.file()
    writer = bench.writer(file, threaded=True)
    writer.submit(lambda: file.append(b"1\n"))
    settle(writer)
    assert file.synced_lines == 0
    bench.now_s = 1.0
    settle(writer)
    settle(writer)
    assert file.synced_lines == 1
    assert bench.happened == ["synced"]
    bench.now_s = 1.05
    writer.submit(lambda: file.append(b"2\n"), sync=True)
    settle(writer)
    assert file.synced_lines == 1  # a flood of events must not keep the disk busy
    bench.now_s = 1.15
    writer.submit(lambda: file.append(b"3\n"), sync=True)
    settle(writer)
    assert file.synced_lines == 3


def test_in_virtual_time_space_is_looked_at_every_second_and_nothing_is_synced(bench: Bench) -> None:
    file = bench.file()
    writer = bench.writer(file, threaded=False)
    for second in range(5):
        bench.now_s = float(second)
        writer.submit(lambda: file.append(b"1\n"))
    assert bench.happened == ["synced"] * 4
    assert file.synced_lines == 0
    writer.close()
    assert file.synced_lines == 5


def test_a_disk_that_hangs_at_the_end_is_told_and_not_waited_for(bench: Bench) -> None:
    writer = bench.writer(threaded=True)
    go_on = threading.Event()

    def hang() -> None:
        go_on.wait(WAIT_S)

    writer.submit(hang)
    writer.close(0.01)
    assert bench.happened == ["trouble disk_error", "after disk_error"]
    go_on.set()


@pytest.mark.parametrize("threaded", [False, True])
def test_a_slow_disk_is_waited_for_while_it_gets_something_done(bench: Bench, threaded: bool) -> None:
    writer = bench.writer(threaded=threaded, queue_max=1000)
    turn = threading.Event()

    def slow(number: int) -> None:
        turn.wait(0.02 if threaded else 0.0)
        bench.happened.append(f"row {number}")

    for number in range(8):
        writer.submit(lambda number=number: slow(number))  # type: ignore[misc]  # bound early, on purpose
    at_last = threading.Event()
    assert writer.close(0.06, rows_end=lambda: bench.happened.append("end"), at_last=at_last.set)
    assert [text for text in bench.happened if text != "synced"] == [*(f"row {number}" for number in range(8)), "end"]
    assert at_last.is_set()


def test_the_same_trouble_is_told_once(bench: Bench) -> None:
    writer = bench.writer(threaded=False)
    for _ in range(3):
        writer.tell(Trouble(TroubleKind.SPACE_WARNING, "little"))
    writer.tell(Trouble(TroubleKind.SPACE_LOW, "less"))
    assert bench.happened == ["trouble space_warning", "trouble space_low"]
    writer.check()  # rows can still be written


def test_what_demands_a_stop_and_what_ends_the_rows() -> None:
    assert [kind for kind in TroubleKind if not kind.demands_stop] == [TroubleKind.SPACE_WARNING]
    going_on = {TroubleKind.SPACE_WARNING, TroubleKind.SPACE_LOW, TroubleKind.DISK_STALLED}
    assert {kind for kind in TroubleKind if not kind.loses_rows} == going_on
    assert trouble_of(OSError(errno.EIO, "x", "f.csv")).text == "the disk cannot be written: x (f.csv)"


class ShortDisk:
    """Stands in for os.write: takes so many bytes in all, then has no room."""

    def __init__(self, room: int) -> None:
        self.room = room
        self._write = os.write

    def __call__(self, handle: int, data: bytes | memoryview) -> int:
        if self.room == 0:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        done = self._write(handle, bytes(data)[: self.room])
        self.room -= done
        return done


@settings(max_examples=80, deadline=None)
@given(
    rows=st.lists(st.integers(0, 10**9), min_size=1, max_size=20), room=st.integers(0, 150), at_once=st.integers(1, 5)
)
def test_a_file_that_runs_out_of_room_ends_after_a_whole_row(
    tmp_path_factory: pytest.TempPathFactory, rows: list[int], room: int, at_once: int
) -> None:
    lines = [b"%d,x\r\n" % row for row in rows]
    fitting = next((n for n in range(len(lines) + 1) if sum(map(len, lines[: n + 1])) > room), len(lines))
    file = AppendFile(tmp_path_factory.mktemp("short") / "a.csv")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("ramprig.record.appendfile.os.write", ShortDisk(room))
        with pytest.raises(OSError, match="space") if fitting < len(lines) else nullcontext():
            for start in range(0, len(lines), at_once):
                file.append(b"".join(lines[start : start + at_once]))
    file.close()
    assert file.path.read_bytes() == b"".join(lines[:fitting])
    assert file.lines == fitting


def test_a_file_is_never_written_over(tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_text("precious")
    with pytest.raises(FileExistsError):
        AppendFile(tmp_path / "a.csv")
    assert (tmp_path / "a.csv").read_text() == "precious"


def test_replacing_a_file_leaves_the_old_one_where_it_fails(tmp_path: Path) -> None:
    path = tmp_path / "run.json"
    replace_file(path, b"old")

    def refuse(handle: int) -> None:
        raise OSError(errno.ENOSPC, "full")

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("ramprig.record.appendfile.os.fsync", refuse)
        with pytest.raises(OSError, match="full"):
            replace_file(path, b"new")
    assert path.read_bytes() == b"old"
    assert [found.name for found in tmp_path.iterdir()] == ["run.json"]


def test_the_reserve_gives_its_space_back_once(tmp_path: Path) -> None:
    reserve = Reserve(tmp_path / "reserve.bin")
    assert not reserve.free()
    reserve.take(5000)
    assert reserve.path.stat().st_size == 5000
    assert reserve.free()
    assert not reserve.path.exists()
    assert not reserve.free()


@pytest.mark.parametrize(
    ("free", "kinds"),
    [(300 * MB, []), (100 * MB, ["space_warning"]), (10 * MB, ["space_low"])],
)
def test_little_space_is_warned_of_and_less_asks_for_a_stop(tmp_path: Path, free: int, kinds: list[str]) -> None:
    told: list[Trouble] = []
    SpaceWatch(tmp_path, SpacePolicy(), tell=told.append, free=lambda _: free).look()
    assert [trouble.kind for trouble in told] == kinds
    assert all(f"{free // MB} MB free" in trouble.text for trouble in told)


def test_a_run_that_would_be_stopped_at_once_is_not_begun(tmp_path: Path) -> None:
    asked: list[Path] = []

    def free(path: Path) -> int:
        asked.append(path)
        return 31 * MB

    with pytest.raises(RecordError, match="31 MB are free, and 32 MB are kept back: make room"):
        check_space(tmp_path / "runs" / "of" / "the night", free=free)
    assert asked == [tmp_path]  # the nearest folder that is there has the disk
    check_space(tmp_path, free=lambda path: 32 * MB)


def test_a_drive_that_is_not_there_is_not_looked_for_for_ever(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.record.space.Path.exists", lambda path: False)
    assert standing(tmp_path / "runs") == Path(tmp_path.anchor)


def test_a_folder_that_is_gone_is_a_disk_error(tmp_path: Path) -> None:
    told: list[Trouble] = []
    SpaceWatch(tmp_path / "gone", SpacePolicy(), tell=told.append).look()
    assert [trouble.kind for trouble in told] == ["disk_error"]


def test_the_warning_comes_at_twice_the_need() -> None:
    assert SpacePolicy.for_run(500 * MB, stop_bytes=MB) == SpacePolicy(warn_bytes=1001 * MB, stop_bytes=MB)
