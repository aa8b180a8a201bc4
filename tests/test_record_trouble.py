"""A disk that fails, fills up or hangs: nothing is written twice or to a wrong file, and nothing is claimed that is not
so."""

from __future__ import annotations

import errno
import os
import sys
import threading
from collections.abc import Callable
from pathlib import Path

import pytest

from ramprig.errors import RecordError
from ramprig.record import recorder as recorder_module
from ramprig.record.appendfile import REPLACE_TRIES, AppendFile, Reserve, replace_file
from ramprig.record.folder import RunDescription, RunFolder
from ramprig.record.keeping import Keeping, Thinning
from ramprig.record.manifest import RunEnd
from ramprig.record.reading import audit, read_cycles, read_events, read_manifest, read_samples
from ramprig.record.recorder import Recorder
from ramprig.record.volumes import held_files
from ramprig.record.writer import QUEUE_MAX, VITAL_MAX, DiskWriter, Trouble, within
from ramprig.sequence.happened import CycleCommanded, Marked
from ramprig.session.blocks import Block
from record_long import begin
from record_samples import TICK_US, UTC_START_S, blocks_of, start_anchor, vent_columns, virtual_clock

WAIT_S = 20.0  # no test waits this long unless it fails
END = RunEnd(verdict="failed", stop_reason="over")


def no_room(*_: object) -> int:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


# ---- one file -------------------------------------------------------------------------------------------------------


def test_a_closed_file_takes_nothing_though_its_descriptor_is_another_files_by_now(tmp_path: Path) -> None:
    file = AppendFile(tmp_path / "a.csv")
    file.append(b"1\n")
    file.close()
    other = AppendFile(tmp_path / "b.csv")
    assert other._handle == file._handle  # POSIX gives the lowest free number
    with pytest.raises(OSError, match="the file was closed") as found:
        file.append(b"2\n")
    assert found.value.errno == errno.EBADF
    with pytest.raises(OSError, match="the file was closed"):
        file.sync()
    other.close()
    assert (tmp_path / "b.csv").read_bytes() == b""
    assert (file.lines, file.size_bytes) == (1, 2)


def test_a_write_that_comes_back_late_finds_that_the_file_was_let_go(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file = AppendFile(tmp_path / "a.csv")
    real = os.write

    def slow(handle: int, data: bytes) -> int:
        file.let_go()  # the main thread does not wait any longer
        return real(handle, bytes(data)[:3])

    monkeypatch.setattr("ramprig.record.appendfile.os.write", slow)
    with pytest.raises(OSError, match="the file was closed"):
        file.append(b"1\n2\n3\n")
    file.close()
    assert (tmp_path / "a.csv").read_bytes() == b"1\n2"
    assert file.lines == 1


def test_nothing_is_appended_behind_a_torn_line(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = AppendFile(tmp_path / "events.jsonl")
    real_write, real_cut = os.write, os.ftruncate
    writes = [5, None]
    cuts: list[bool] = [False, False, True]  # the disk refuses to cut the first two times

    def write(handle: int, data: bytes) -> int:
        room = writes.pop(0) if writes else len(data)
        return no_room() if room is None else real_write(handle, bytes(data)[:room])

    def cut(handle: int, size: int) -> None:
        if not cuts.pop(0):
            raise OSError(errno.EIO, os.strerror(errno.EIO))
        real_cut(handle, size)

    monkeypatch.setattr("ramprig.record.appendfile.os.write", write)
    monkeypatch.setattr("ramprig.record.appendfile.os.ftruncate", cut)
    with pytest.raises(OSError, match="No space"):
        file.append(b"{1}\n{2}\n")
    with pytest.raises(OSError, match="Input/output"):
        file.append(b"{3}\n")
    file.append(b"{4}\n")
    file.close()
    assert (tmp_path / "events.jsonl").read_bytes() == b"{1}\n{4}\n"
    assert (file.lines, file.size_bytes) == (2, 8)


@pytest.mark.parametrize("refusals", [1, 2])
def test_a_torn_line_that_could_not_be_cut_off_is_cut_off_at_the_end_or_told_for_what_it_is(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, refusals: int
) -> None:
    recorder = begin(tmp_path, Keeping(), on_trouble=lambda trouble: None, durable=True)
    folder = recorder.folder.path
    hand_over(recorder, blocks_of(100))
    samples = recorder._samples._volumes._file
    real_write, real_cut = os.write, os.ftruncate
    took: list[int] = []
    cuts: list[int] = []

    def write(handle: int, data: bytes) -> int:
        if handle == samples._handle:
            took.append(real_write(handle, bytes(data)[:10]) if not took else no_room())
        return took[0] if handle == samples._handle else real_write(handle, data)

    def cut(handle: int, size: int) -> None:
        cuts.append(size)
        if len(cuts) <= refusals:
            raise OSError(errno.EIO, os.strerror(errno.EIO))
        real_cut(handle, size)

    with monkeypatch.context() as patch:
        patch.setattr("ramprig.record.appendfile.os.write", write)
        patch.setattr("ramprig.record.appendfile.os.ftruncate", cut)
        with pytest.raises(RecordError):
            hand_over(recorder, blocks_of(50, first_tick=5200))
        recorder.finish(END)
    found = audit(folder).statements
    assert len(cuts) == 2
    assert len(read_samples(folder / "samples.csv")) == read_manifest(folder)["samples"]["written"] == 100
    assert ("samples.csv has 10 bytes more than the run knows of" in found) == (refusals == 2)
    assert not [text for text in found if "was changed" in text]


def test_a_sync_that_failed_is_tried_again_and_never_believed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file = AppendFile(tmp_path / "a.csv")
    file.append(b"1\n")
    file.sync()
    file.append(b"2\n")
    with monkeypatch.context() as patch:
        patch.setattr("ramprig.record.appendfile.os.fsync", no_room)
        with pytest.raises(OSError, match="No space"):
            file.sync()
    with pytest.raises(OSError, match="an earlier sync of it failed"):
        file.sync()
    file.close()
    assert (file.lines, file.synced_lines) == (2, 1)


def test_a_reserve_that_does_not_fit_leaves_nothing_behind(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    reserve = Reserve(tmp_path / "reserve.bin")
    monkeypatch.setattr("ramprig.record.appendfile.os.fsync", no_room)
    with pytest.raises(OSError, match="No space"):
        reserve.take(5000)
    assert not list(tmp_path.iterdir())
    (tmp_path / "reserve.bin").write_bytes(b"another run's")
    with pytest.raises(FileExistsError):
        reserve.take(5000)
    assert (tmp_path / "reserve.bin").read_bytes() == b"another run's"


@pytest.mark.skipif(sys.platform == "win32", reason="locks are POSIX")
def test_a_file_system_without_locks_keeps_nobody_from_going_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    AppendFile(tmp_path / "events.jsonl").close()

    def refuse(code: int) -> Callable[..., None]:
        def flock(*_: object) -> None:
            raise OSError(code, os.strerror(code))

        return flock

    monkeypatch.setattr("fcntl.flock", refuse(errno.ENOLCK))
    file, _ = AppendFile.reopen(tmp_path / "events.jsonl")
    file.close()
    monkeypatch.setattr("fcntl.flock", refuse(errno.EWOULDBLOCK))
    with pytest.raises(BlockingIOError, match="another program is writing it"):
        AppendFile.reopen(tmp_path / "events.jsonl")


@pytest.mark.parametrize("hindered", [0, 3, REPLACE_TRIES])
def test_a_file_that_is_being_read_is_replaced_a_little_later(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, hindered: int
) -> None:
    path = tmp_path / "run.json"
    replace_file(path, b"old")
    waited: list[float] = []
    real = os.replace

    def replace(part: Path, to: Path) -> None:
        if len(waited) < hindered:
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES))
        real(part, to)

    monkeypatch.setattr("ramprig.record.appendfile.os.replace", replace)
    monkeypatch.setattr("ramprig.record.appendfile.READERS_HINDER", True)
    monkeypatch.setattr("ramprig.record.appendfile.time.sleep", waited.append)
    if hindered < REPLACE_TRIES:
        replace_file(path, b"new")
        assert (path.read_bytes(), len(waited)) == (b"new", hindered)
    else:
        with pytest.raises(PermissionError):
            replace_file(path, b"new")
        assert (path.read_bytes(), len(waited)) == (b"old", REPLACE_TRIES - 1)
    assert [found.name for found in tmp_path.iterdir()] == ["run.json"]


# ---- the writer -----------------------------------------------------------------------------------------------------


class File:
    """Stands in for a file that can or cannot be synced."""

    def __init__(self, error: OSError | None = None) -> None:
        self.error = error
        self.synced = 0

    def sync(self) -> None:
        self.synced += 1
        if self.error is not None:
            raise self.error


def writer_of(files: list[File], told: list[Trouble], **more: Callable[[], object]) -> DiskWriter:
    return DiskWriter(
        files, on_trouble=told.append, after_trouble=lambda trouble: None, threaded=False, durable=True,
        **{"on_sync": lambda: None, "now": lambda: 0.0, **more},  # type: ignore[arg-type]  # either kind of callable
    )  # fmt: skip


def test_a_file_that_cannot_be_synced_keeps_no_other_from_it() -> None:
    files, told = [File(OSError(errno.EIO, "first")), File(), File(OSError(errno.EIO, "third"))], list[Trouble]()
    writer = writer_of(files, told)
    with pytest.raises(OSError, match="first"):
        writer.sync_files()
    assert [file.synced for file in files] == [1, 1, 1]


def test_what_goes_wrong_in_a_look_at_the_space_is_told_and_does_not_end_the_thread(tmp_path: Path) -> None:
    told: list[Trouble] = []
    seen = threading.Event()

    def on_trouble(trouble: Trouble) -> None:
        told.append(trouble)
        seen.set()

    def faulty() -> None:
        raise ZeroDivisionError("oh")

    writer = DiskWriter(
        [], on_trouble=on_trouble, after_trouble=lambda trouble: None, on_sync=faulty, threaded=True, sync_every_s=0.01
    )
    assert seen.wait(WAIT_S)
    assert [trouble.text for trouble in told] == ["writing the log failed: ZeroDivisionError: oh"]
    done = threading.Event()
    writer.submit(done.set, vital=True)
    assert done.wait(WAIT_S)
    assert writer.close(WAIT_S)


def test_a_vital_job_is_done_again_once_there_is_room_and_a_row_is_not() -> None:
    happened: list[str] = []

    def full(name: str) -> Callable[[], None]:
        def work() -> None:
            happened.append(name)
            if "room" not in happened:
                no_room()

        return work

    writer = writer_of([], list[Trouble](), make_room=lambda: happened.append("room"))
    writer.submit(full("event"), vital=True)
    assert happened == ["event", "room", "event"]
    happened.clear()
    writer = writer_of([], list[Trouble](), make_room=lambda: happened.append("room"))
    with pytest.raises(RecordError):
        writer.submit(full("row"))
    writer.submit(full("event"), vital=True)
    assert happened == ["row", "room", "event"]


def test_there_is_room_for_a_vital_job_that_was_handed_over_before_the_disk_was_full() -> None:
    happened: list[str] = []
    ready = threading.Event()

    def row() -> None:
        assert ready.wait(WAIT_S)
        no_room()

    writer = DiskWriter(
        [], on_trouble=lambda trouble: happened.append("stop"), after_trouble=lambda trouble: None,
        on_sync=lambda: None, threaded=True, make_room=lambda: happened.append("room"),
    )  # fmt: skip
    writer.submit(row)
    writer.submit(lambda: happened.append("cycle"), vital=True)
    ready.set()
    assert writer.close(WAIT_S)
    assert happened == ["stop", "room", "cycle"]


def test_what_takes_too_long_is_left_alone_and_what_fails_is_told() -> None:
    go_on = threading.Event()
    over = threading.Event()

    def hang() -> None:
        go_on.wait(WAIT_S)
        over.set()

    with pytest.raises(OSError, match=r"the disk took longer than 0\.01 s"):
        within(0.01, hang)
    go_on.set()
    assert over.wait(WAIT_S)
    with pytest.raises(OSError, match="No space"):
        within(WAIT_S, no_room)  # type: ignore[arg-type]  # it never returns
    with pytest.raises(ZeroDivisionError):
        within(WAIT_S, lambda: divmod(1, 0) and None)


# ---- the whole recorder ---------------------------------------------------------------------------------------------


class RoomForNothing:
    """From when it is told on, the disk takes nothing until the reserve is gone."""

    def __init__(self, folder: Path) -> None:
        self._reserve = folder / "reserve.bin"
        self._write = os.write
        self.full = False

    def __call__(self, handle: int, data: bytes) -> int:
        return no_room() if self.full and self._reserve.exists() else self._write(handle, data)


def test_the_event_and_the_cycle_that_met_the_full_disk_are_written_once_there_is_room(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for what in ("event", "cycle"):
        recorder = begin(tmp_path / what, Keeping(), on_trouble=lambda trouble: None, durable=True)
        path = recorder.folder.path
        disk = RoomForNothing(path)
        with monkeypatch.context() as patch:
            patch.setattr("ramprig.record.appendfile.os.write", disk)
            recorder.on_cycle(CycleCommanded(tick=None, number=1, block=1, name="c", part=1))
            disk.full = True
            if what == "event":
                recorder.on_event(Marked(tick=6000, name="here"))
            else:
                recorder.on_cycle(CycleCommanded(tick=None, number=2, block=1, name="c", part=1))
                assert recorder.cycles_pending() == 0
            recorder.finish(END)
        kinds = [event["kind"] for event in read_events(path / "events.jsonl")[0]]
        assert kinds.count("marked") == (what == "event")
        assert kinds.count("disk_trouble") == 1
        assert [line["number"] for line in read_cycles(path)[0]] == ([1] if what == "event" else [1, 2])
        assert read_manifest(path)["disk_troubles"][0]["kind"] == "disk_full"


def test_a_trail_that_met_the_full_disk_is_one_whole_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    recorder = begin(tmp_path, Keeping(), on_trouble=lambda trouble: None, durable=True)
    path = recorder.folder.path
    disk = RoomForNothing(path)
    real = os.write
    took: list[int] = []

    def write(handle: int, data: bytes) -> int:
        if not took:
            took.append(real(handle, bytes(data)[:1000]))
            disk.full = True
            return took[0]
        return disk(handle, data)

    with monkeypatch.context() as patch:
        patch.setattr("ramprig.record.appendfile.os.write", write)
        recorder.on_trail(blocks_of(100))
        recorder.finish(END)
    assert len(read_samples(path / "trail.csv")) == 100
    assert [entry["file"] for entry in read_manifest(path)["files"] if "trail" in entry["file"]] == ["trail.csv"]


def test_events_that_no_queue_had_room_for_are_counted_in_the_record_and_told_by_the_audit(tmp_path: Path) -> None:
    troubles: list[Trouble] = []
    recorder = threaded(tmp_path, troubles)
    recorder._writer._queue.join()
    hangs, go_on = threading.Event(), threading.Event()

    def hang() -> None:
        hangs.set()
        assert go_on.wait(WAIT_S)

    recorder._writer.submit(hang, vital=True)
    assert hangs.wait(WAIT_S)
    for _ in range(QUEUE_MAX + VITAL_MAX + 7):
        recorder.on_event(Marked(tick=6000, name="here"))
    assert [trouble.kind.value for trouble in troubles] == ["queue_full"]
    go_on.set()
    recorder._writer._queue.join()
    folder = recorder.finish(END)
    kinds = [event["kind"] for event in read_events(folder / "events.jsonl")[0]]
    assert kinds.count("marked") == QUEUE_MAX + VITAL_MAX
    assert kinds[-1] == "run_finished"
    assert read_manifest(folder)["events_unwritten"] == 7
    assert "7 events, lines of cycles or trails could not be written, or not be synced" in audit(folder).statements


def test_rows_that_waited_when_the_queue_was_full_are_written_and_a_thinned_log_ends_in_order(tmp_path: Path) -> None:
    keeping = Keeping(thinning=Thinning(every=None, before_s=0.5, after_s=0.0))
    recorder = threaded(tmp_path, [], keeping)
    hangs, go_on = threading.Event(), threading.Event()

    def hang() -> None:
        hangs.set()
        assert go_on.wait(WAIT_S)

    recorder._writer.submit(hang)
    assert hangs.wait(WAIT_S)
    blocks = blocks_of(2 * (QUEUE_MAX + 5), size=2)
    with pytest.raises(RecordError, match="the disk is too slow"):
        hand_over(recorder, blocks)
    go_on.set()
    folder = recorder.finish(END)
    last = blocks[QUEUE_MAX - 1].ticks[-1]  # but for the first, each waited: what came after the queue was full is lost
    ticks = read_samples(folder / "samples.csv").ticks.tolist()
    assert ticks[-200:] == list(range(last - 398, last + 1, 2))
    assert not held_files(folder)
    samples = read_manifest(folder)["samples"]
    assert (samples["unwritten"], samples["written"]) == (2, len(ticks))
    assert "2 samples that were received could not be written" in audit(folder).statements


def test_the_disk_holds_what_is_told_of_rows_before_the_rows(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    recorder = begin(tmp_path, Keeping(), durable=True)
    folder = recorder.folder.path
    recorder._writer.sync_files()
    hand_over(recorder, blocks_of(50))
    recorder._writer.submit(lambda: recorder._events.append(b'{"kind": "gap_found"}\n'))
    held_before: list[int] = []
    real = os.fsync

    def fsync(handle: int) -> None:
        held_before.append(recorder._events.synced_lines)
        real(handle)

    with monkeypatch.context() as patch:
        patch.setattr("ramprig.record.appendfile.os.fsync", fsync)
        recorder._writer.sync_files()
        assert recorder._events.synced_lines == 2
    assert held_before == [1, 2]  # lines of events: at the first sync one, at that of the rows both
    assert recorder._samples.synced_rows == 50
    assert recorder.finish(END) == folder


class HangingDisk:
    """Writes of more than a row hang from when it is told on, until `go_on` is set."""

    def __init__(self) -> None:
        self.hangs = False
        self.reached, self.go_on = threading.Event(), threading.Event()
        self._write = os.write

    def __call__(self, handle: int, data: bytes) -> int:
        if self.hangs and len(data) > 500:
            self.reached.set()
            assert self.go_on.wait(WAIT_S)
            return self._write(handle, bytes(data)[:300])
        return self._write(handle, data)


def threaded(root: Path, troubles: list[Trouble], keeping: Keeping | None = None) -> Recorder:
    folder = RunFolder.create(root, RunDescription(name="hangs"), started_unix_s=UTC_START_S, short_id="abc123")
    return Recorder(
        folder, vent_columns(), start=start_anchor(), tick_us=TICK_US, clock=virtual_clock(),
        on_trouble=troubles.append, free=lambda _: 10**12, keeping=keeping,
    )  # fmt: skip


def hand_over(recorder: Recorder, blocks: list[Block]) -> None:
    for block in blocks:
        recorder.on_block(block)


def test_a_disk_that_comes_back_after_the_end_changes_nothing_and_no_other_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    troubles: list[Trouble] = []
    recorder = threaded(tmp_path / "runs", troubles)
    path = recorder.folder.path
    hand_over(recorder, blocks_of(100))
    recorder._writer._queue.join()
    disk = HangingDisk()
    monkeypatch.setattr("ramprig.record.appendfile.os.write", disk)
    monkeypatch.setattr(recorder_module, "CLOSE_WAIT_S", 0.02)
    disk.hangs = True
    hand_over(recorder, blocks_of(300, first_tick=5200))
    assert disk.reached.wait(WAIT_S)
    monkeypatch.setattr(recorder_module, "within", lambda wait_s, work: work())  # only the rows hang
    recorder.finish(END)
    assert [trouble.text for trouble in troubles] == ["the disk did not finish within 0.02 s"]
    manifest = read_manifest(path)
    assert (manifest["status"], manifest["samples"]["written"]) == ("finished", 100)
    strangers = [AppendFile(tmp_path / f"stranger{number}") for number in range(8)]
    thread = recorder._writer._thread
    assert thread is not None
    disk.go_on.set()
    thread.join(WAIT_S)
    assert not thread.is_alive()
    assert read_manifest(path) == manifest
    assert [file.path.read_bytes() for file in strangers] == [b""] * 8
    for file in strangers:
        file.close()
    assert len(read_samples(path / "samples.csv")) <= 100 + 300 // 50  # what the one write that hung still brought
    file, _ = AppendFile.reopen(path / "events.jsonl")  # the thread let go of it
    file.close()


def test_a_run_json_that_hangs_too_is_not_waited_for(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    recorder = threaded(tmp_path, [])
    recorder._writer._queue.join()
    go_on, over = threading.Event(), threading.Event()
    monkeypatch.setattr(recorder_module, "CLOSE_WAIT_S", 0.02)

    def wait() -> None:
        go_on.wait(WAIT_S)

    recorder._writer.submit(wait, vital=True)
    written = recorder.folder.write_manifest

    def hang(contents: dict[str, object]) -> None:
        wait()
        written(contents)  # type: ignore[arg-type]  # JSON
        over.set()

    monkeypatch.setattr(recorder.folder, "write_manifest", hang)
    with pytest.raises(RecordError, match=r"run\.json cannot be written.*longer than 0\.02 s"):
        recorder.finish(END)
    assert read_manifest(recorder.folder.path)["status"] == "running"
    go_on.set()
    assert over.wait(WAIT_S)
    assert read_manifest(recorder.folder.path)["status"] == "finished"
    recorder._write_manifest("running", None)  # comes too late
    assert read_manifest(recorder.folder.path)["status"] == "finished"
