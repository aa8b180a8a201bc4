"""A log in several volumes is one stream: nothing is lost or doubled where one ends and the next begins, whatever
happens there."""

from __future__ import annotations

import errno
import hashlib
import os
import random
from collections.abc import Callable
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from endure_crash import Killed, Process
from ramprig.errors import RecordError
from ramprig.record import appendfile
from ramprig.record.export import To, export_run
from ramprig.record.keeping import Keeping
from ramprig.record.reading import audit, read_events, read_manifest, read_samples, sample_files
from ramprig.record.recorder import Recorder
from ramprig.record.scan import Scan
from ramprig.record.volumes import VOLUMES_MAX, Stream, VolumeLimits, volume_name
from ramprig.record.writer import Trouble
from record_long import begin, finish, rows_of
from record_samples import blocks_of

SAMPLES = 400


def run(root: Path, limits: VolumeLimits | None, *, size: int = 50, samples: int = SAMPLES) -> Path:
    recorder = begin(root, Keeping(volumes=limits or VolumeLimits()))
    for block in blocks_of(samples, size=size):
        recorder.on_block(block)
    return finish(recorder, samples)


@settings(max_examples=12, deadline=None)
@given(size=st.integers(1, 120), rows=st.integers(30, 150), span_ms=st.none() | st.integers(60, 400))
def test_the_volumes_of_a_log_hold_the_rows_of_the_uncut_one(
    tmp_path_factory: pytest.TempPathFactory, size: int, rows: int, span_ms: int | None
) -> None:
    root = tmp_path_factory.mktemp("volumes")
    whole = run(root / "whole", None, size=size)
    cut = run(root / "cut", VolumeLimits(rows=rows, span_s=None if span_ms is None else span_ms / 1000), size=size)
    assert rows_of(cut) == rows_of(whole)
    assert audit(cut).statements == ()
    for path in sample_files(cut):
        ticks = read_samples(path).ticks
        assert 1 <= len(ticks) <= rows
        assert span_ms is None or ticks[-1] - ticks[0] < span_ms  # a tick is 1 ms


def test_a_volume_ends_exactly_at_its_rows_and_at_its_span(tmp_path: Path) -> None:
    by_rows = run(tmp_path / "rows", VolumeLimits(rows=150))
    assert [path.name for path in sample_files(by_rows)] == ["samples.csv", "samples.0002.csv", "samples.0003.csv"]
    assert [len(read_samples(path)) for path in sample_files(by_rows)] == [150, 150, 100]
    by_span = run(tmp_path / "span", VolumeLimits(span_s=0.3))
    assert [len(read_samples(path)) for path in sample_files(by_span)] == [150, 150, 100]
    assert [read_samples(path).ticks[0] for path in sample_files(by_span)] == [5000, 5300, 5600]


def test_the_first_million_rows_stay_in_one_file_where_nothing_is_said(tmp_path: Path) -> None:
    assert VolumeLimits().rows == 1_000_000
    assert [path.name for path in sample_files(run(tmp_path, None))] == ["samples.csv"]


def test_each_volume_is_hashed_in_the_manifest_and_told_in_the_events(tmp_path: Path) -> None:
    folder = run(tmp_path, VolumeLimits(rows=150))
    manifest = read_manifest(folder)
    assert manifest["samples_files"] == ["samples.csv", "samples.0002.csv", "samples.0003.csv"]
    hashes = {entry["file"]: (entry["lines"], entry["sha256"]) for entry in manifest["files"]}
    for path in sample_files(folder):
        data = path.read_bytes()
        assert hashes[path.name] == (data.count(b"\n"), hashlib.sha256(data).hexdigest())
    begun = [event for event in read_events(folder / "events.jsonl")[0] if event["kind"] == "volume_begun"]
    assert [(event["samples_file"], event["tick"], event["rows_before"]) for event in begun] == [
        ("samples.0002.csv", 5300, 150),
        ("samples.0003.csv", 5600, 150),
    ]


def test_a_closed_volume_is_in_the_manifest_while_the_run_is_still_on(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(volumes=VolumeLimits(rows=150)), durable=True)
    for block in blocks_of(500, size=50):
        recorder.on_block(block)
    manifest = read_manifest(recorder.folder.path)
    assert manifest["status"] == "running"
    assert [entry["file"] for entry in manifest["files"]] == manifest["samples_files"][:-1]
    assert len(manifest["files"]) == 3  # the fourth is under way
    finish(recorder, 500)


def test_a_changed_missing_or_torn_volume_is_found(tmp_path: Path) -> None:
    folder = run(tmp_path / "missing", VolumeLimits(rows=150))
    (folder / "samples.0002.csv").unlink()
    found = audit(folder)
    assert found.missing == 150
    assert "samples.0002.csv is missing" in found.statements
    with pytest.raises(RecordError, match=r"samples\.0002\.csv is missing"):
        export_run(folder, To.EXCEL_CSV)
    folder = run(tmp_path / "changed", VolumeLimits(rows=150))
    path = folder / "samples.0002.csv"
    path.write_bytes(path.read_bytes().replace(b"armed", b"amred", 1))
    assert audit(folder).statements == ("samples.0002.csv was changed after the run",)


def test_a_closed_volume_that_was_changed_is_found_though_the_run_never_came_to_its_end(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(volumes=VolumeLimits(rows=150)), durable=True)
    for block in blocks_of(500, size=50):
        recorder.on_block(block)
    folder = recorder.folder.path
    assert len(audit(folder).statements) == 1  # it did not end in order
    path = folder / "samples.0002.csv"
    path.write_bytes(path.read_bytes().replace(b"armed", b"amred", 1))
    assert audit(folder).statements[1:] == ("samples.0002.csv was changed after the run",)


def test_an_input_that_is_called_like_a_volume_gets_another_name(tmp_path: Path) -> None:
    folder = run(tmp_path, VolumeLimits(rows=150))
    assert (folder / "bench-samples.csv").read_bytes() == b"motors: {}\n"


def test_a_stream_of_volumes_reads_and_ends_like_one_file(tmp_path: Path) -> None:
    whole = Scan(run(tmp_path / "whole", None) / "samples.csv")
    stream = Stream(sample_files(run(tmp_path / "cut", VolumeLimits(rows=70))))
    assert stream.names == whole.names
    pieces = list(stream)
    assert np.concatenate([piece.ticks for piece in pieces]).tolist() == next(iter(whole)).ticks.tolist()
    current = np.concatenate([piece.numbers["vent.current_a"] for piece in pieces])
    assert np.array_equal(current, next(iter(whole)).numbers["vent.current_a"])
    for size in (1000, 10_000, 10**6):
        tail = stream.tail(size)
        assert len(tail) >= len(whole.tail(size)) - 1 - len(pieces)  # each header takes some of the bytes
        assert tail.ticks.tolist() == list(range(5000, 5000 + 2 * SAMPLES, 2))[-len(tail) :]
        assert len(tail.words["state"]) == len(tail)


def test_volumes_that_do_not_belong_together_are_refused(tmp_path: Path) -> None:
    (tmp_path / "samples.csv").write_bytes(b"tick,a\r\n1,2\r\n")
    (tmp_path / "samples.0002.csv").write_bytes(b"tick,b\r\n2,2\r\n")
    with pytest.raises(RecordError, match=r"samples\.0002\.csv has not the columns of samples\.csv"):
        Stream([tmp_path / "samples.csv", tmp_path / "samples.0002.csv"])


def test_an_export_has_the_rows_of_all_volumes(tmp_path: Path) -> None:
    (one,) = export_run(run(tmp_path / "whole", None), To.EXCEL_CSV)
    (other,) = export_run(run(tmp_path / "cut", VolumeLimits(rows=70)), To.EXCEL_CSV)
    assert (other.rows, other.path.name) == (SAMPLES, "samples-excel.csv")
    assert other.path.read_bytes() == one.path.read_bytes()


@pytest.mark.filterwarnings("ignore::DeprecationWarning:asammdf", "ignore::DeprecationWarning:pandas")
def test_other_programs_get_all_volumes_as_one(tmp_path: Path) -> None:
    folder = run(tmp_path, VolumeLimits(rows=70))
    expected = list(range(5000, 5000 + 2 * SAMPLES, 2))
    parquet = pytest.importorskip("pyarrow.parquet", reason="needs the package pyarrow")
    (done,) = export_run(folder, To.PARQUET)
    assert (done.rows, parquet.read_table(done.path)["tick"].to_pylist()) == (SAMPLES, expected)
    asammdf = pytest.importorskip("asammdf", reason="needs the package asammdf")
    (done,) = export_run(folder, To.MDF4)
    with asammdf.MDF(done.path) as file:
        assert file.get("tick").samples.tolist() == expected


def test_a_run_that_broke_off_amid_a_change_is_exported_as_far_as_it_came(tmp_path: Path) -> None:
    recorder = begin(tmp_path, Keeping(volumes=VolumeLimits(rows=70)), durable=True)
    for block in blocks_of(140, size=10):
        recorder.on_block(block)
    (recorder.folder.path / "samples.0003.csv").write_bytes(b"tick,ti")  # its header was torn
    (done,) = export_run(recorder.folder.path, To.EXCEL_CSV)
    assert done.rows == 140


def test_the_last_volume_there_can_be_only_grows(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.record.volumewriter.VOLUMES_MAX", 2)
    folder = run(tmp_path, VolumeLimits(rows=100))
    assert [len(read_samples(path)) for path in sample_files(folder)] == [100, 300]
    assert audit(folder).statements == ()
    assert volume_name("samples-2.csv", VOLUMES_MAX) == "samples-2.9999.csv"


# ---- trouble at the change ------------------------------------------------------------------------------------------


def operations_of_a_run(root: Path) -> int:
    process = Process()
    with process.alive():
        live(root, process)
    return process.operations


def live(root: Path, process: Process, *, made: Callable[[Recorder], None] = lambda recorder: None) -> None:
    """A run that begins a volume every 20 rows, synced after every third block of 5: some are full before that."""
    recorder = begin(root, Keeping(volumes=VolumeLimits(rows=20)), durable=True)
    made(recorder)
    for number, block in enumerate(blocks_of(60, size=5)):
        recorder.on_block(block)
        if number % 3 == 2:
            recorder._writer.sync_files()
    finish(recorder, 60)
    assert not process.dead


def dies_at(root: Path, die_at: int, chance: random.Random) -> None:
    """Killed at this operation, with the power gone too: what was synced is there, in order, nothing twice."""
    process = Process(die_at=die_at)
    recorder: list[Recorder] = []
    with process.alive(), pytest.raises(Killed):
        live(root, process, made=recorder.append)
    synced = recorder[0]._samples.synced_rows if recorder else 0
    process.cut_power(chance)
    folders = list(root.iterdir()) if root.exists() else []
    if not folders or not (folders[0] / "run.json").exists():
        assert synced == 0
        return
    ticks = [tick for path in sample_files(folders[0]) for tick in read_samples(path).ticks.tolist()]
    assert len(ticks) >= synced
    assert ticks == list(range(5000, 5000 + 2 * len(ticks), 2))
    found = audit(folders[0])
    assert (found.missing, found.unexpected, found.rows) == (0, 0, len(ticks))
    manifest = read_manifest(folders[0])
    if manifest["status"] == "running":
        for entry in manifest["files"]:  # what is said to be closed is whole and right
            assert hashlib.sha256((folders[0] / entry["file"]).read_bytes()).hexdigest() == entry["sha256"]


@pytest.mark.parametrize("step", range(10))
def test_a_death_anywhere_around_a_change_of_volumes_loses_nothing_that_was_synced(tmp_path: Path, step: int) -> None:
    chance = random.Random(step)
    count = operations_of_a_run(tmp_path / "whole")
    for die_at in range(step, count, 10):
        dies_at(tmp_path / f"at{die_at}", die_at, chance)


@pytest.mark.soak
@pytest.mark.parametrize("seed", range(20))
def test_the_same_with_many_losses_of_power_at_each_operation(tmp_path: Path, seed: int) -> None:
    chance = random.Random(f"volumes {seed}")
    for die_at in range(operations_of_a_run(tmp_path / "whole")):
        dies_at(tmp_path / f"at{die_at}", die_at, chance)


class FullDisk:
    """From its `full_at`-th operation on, the disk takes `left` bytes and no more, until the reserve is given up."""

    def __init__(self, full_at: int, left: int) -> None:
        self.full_at, self.left = full_at, left
        self.operations = 0
        self.freed = False

    def write(self, handle: int, data: bytes) -> int:
        self.operations += 1
        if self.operations < self.full_at or self.freed:
            return os.write(handle, data)
        if self.left <= 0:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        done = os.write(handle, bytes(data)[: self.left])
        self.left -= done
        return done

    def open(self, path: Path, flags: int, mode: int = 0o777) -> int:
        self.operations += bool(flags & os.O_CREAT)
        if self.operations >= self.full_at and flags & os.O_CREAT and self.left <= 0 and not self.freed:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC), str(path))
        return os.open(path, flags, mode)


@pytest.mark.parametrize("left", [0, 1, 300])
def test_a_disk_that_is_full_at_any_moment_of_a_change_leaves_exact_counts(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, left: int
) -> None:
    kinds = set()
    for full_at in range(4, 34, 3):
        disk = FullDisk(full_at, left)
        troubles: list[Trouble] = []

        def note(trouble: Trouble, disk: FullDisk = disk, troubles: list[Trouble] = troubles) -> None:
            troubles.append(trouble)
            disk.freed = True  # the reserve is given up after this call

        with monkeypatch.context() as patch:
            shim = SimpleNamespace(**{name: getattr(os, name) for name in dir(os)})
            shim.write, shim.open = disk.write, disk.open
            recorder = begin(
                tmp_path / str(full_at), Keeping(volumes=VolumeLimits(rows=20)), on_trouble=note, durable=True
            )
            patch.setattr(appendfile, "os", shim)
            try:
                for block in blocks_of(100, size=5):
                    recorder.on_block(block)
            except RecordError:
                assert troubles
            folder = finish(recorder, 100)
        manifest = read_manifest(folder)
        kinds |= {trouble.kind.value for trouble in troubles}
        rows = sum(len(read_samples(path)) for path in sample_files(folder))
        assert manifest["samples"]["written"] == rows
        assert manifest["samples"]["unwritten"] == 100 - rows
        ticks = [tick for path in sample_files(folder) for tick in read_samples(path).ticks.tolist()]
        assert ticks == list(range(5000, 5000 + 2 * rows, 2))
        assert not [text for text in audit(folder).statements if "changed" in text or "is missing" in text]
    assert kinds == {"disk_full"}
