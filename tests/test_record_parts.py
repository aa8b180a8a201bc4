"""A run that is gone on with: each part has its own rows, once, whatever broke off and whatever failed between."""

from __future__ import annotations

import errno
import os
from collections.abc import Sequence
from pathlib import Path

import pytest

from ramprig.errors import RecordError
from ramprig.record.appendfile import AppendFile
from ramprig.record.export import To, export_run
from ramprig.record.folder import RunFolder
from ramprig.record.keeping import Around, Keeping, Thinning
from ramprig.record.manifest import Anchor
from ramprig.record.parts import parts_of
from ramprig.record.reading import audit, files_by_part, read_manifest, sample_files
from ramprig.record.recorder import Recorder
from ramprig.record.volumes import HELD_NAMES, Stream, VolumeLimits, held_files
from ramprig.record.volumewriter import VolumeWriter
from record_long import begin, finish
from record_samples import TICK_US, UTC_START_S, blocks_of, vent_columns, virtual_clock

THINNED = Keeping(
    volumes=VolumeLimits(rows=60),
    thinning=Thinning(every=50, before_s=0.4, after_s=0.2, around=frozenset({Around.MARK})),
)
WHOLE = Keeping(volumes=VolumeLimits(rows=100))


def killed(root: Path, keeping: Keeping, samples: int) -> Path:
    """A run whose program is gone after so many samples; its folder."""
    recorder = begin(root, keeping, durable=True)
    for block in blocks_of(samples, size=25):
        recorder.on_block(block)
    recorder.folder.abandon()  # the system closes what a killed program held
    return recorder.folder.path


def gone_on_with(path: Path, keeping: Keeping) -> Recorder:
    """The recorder of the next part."""
    folder = RunFolder.reopen(path, read_manifest(path), {"text": "a break"}, port="port2", identity={})
    return Recorder(
        folder, vent_columns(), start=Anchor(4000, 100.0, UTC_START_S + 60.0), tick_us=TICK_US, clock=virtual_clock(),
        on_trouble=print, threaded=False, durable=True, keeping=keeping, free=lambda _: 10**12,
    )  # fmt: skip


def ticks_in(paths: Sequence[Path]) -> list[int]:
    return [tick for piece in Stream(paths) for tick in piece.ticks.tolist()]


def test_a_part_under_way_is_read_with_the_rows_it_holds_and_the_earlier_one_without(tmp_path: Path) -> None:
    path = killed(tmp_path, THINNED, 1000)
    recorder = gone_on_with(path, THINNED)
    before = ticks_in(files_by_part(read_manifest(path), path)[1])
    for block in blocks_of(300, size=25):
        recorder.on_block(block)
    by_part = files_by_part(read_manifest(path), path)
    assert ticks_in(by_part[1]) == before == sorted(set(before))
    assert set(held_files(path)) <= set(by_part[2])
    assert ticks_in(by_part[2])[-1] == 5000 + 2 * 299
    assert len(sample_files(path)) == len(set(sample_files(path)))
    finish(recorder, 300)
    assert audit(path).statements == ()


def fails(*_: object) -> AppendFile:
    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))


def test_a_part_that_broke_off_before_its_file_keeps_its_name_to_itself(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = killed(tmp_path, WHOLE, 300)
    with monkeypatch.context() as patch:
        patch.setattr(VolumeWriter, "_begin", fails)
        with pytest.raises(RecordError, match="cannot be written"):
            gone_on_with(path, WHOLE)
    recorder = gone_on_with(path, WHOLE)
    for block in blocks_of(150, size=25):
        recorder.on_block(block)
    finish(recorder, 150)
    parts = parts_of(read_manifest(path))
    assert [part["samples_file"] for part in parts] == ["samples.csv", "samples-2.csv", "samples-3.csv"]
    assert [len(ticks_in(paths)) for paths in files_by_part(read_manifest(path), path).values()] == [300, 0, 150]
    assert audit(path).statements == ()
    exported = export_run(path, To.EXCEL_CSV, out=tmp_path / "out")
    assert [(one.path.name, one.rows) for one in exported] == [("samples-excel.csv", 300), ("samples-3-excel.csv", 150)]


def test_a_volume_that_is_gone_is_missed_though_the_part_broke_off(tmp_path: Path) -> None:
    path = killed(tmp_path, WHOLE, 300)
    (path / "samples.0002.csv").unlink()
    gone_on_with(path, WHOLE).folder.abandon()
    with pytest.raises(RecordError, match=r"samples\.0002\.csv is missing"):
        export_run(path, To.EXCEL_CSV, out=tmp_path / "out")


def test_a_recorder_that_cannot_begin_lets_go_of_the_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(VolumeWriter, "_begin", fails)
    with pytest.raises(RecordError, match="No space left"):
        begin(tmp_path, WHOLE)
    (path,) = tmp_path.iterdir()
    assert not (path / "reserve.bin").exists()
    file, _ = AppendFile.reopen(path / "events.jsonl")  # nobody holds it
    file.close()


def test_held_rows_that_cannot_be_read_keep_nobody_from_a_second_try(tmp_path: Path) -> None:
    path = killed(tmp_path, THINNED, 1000)
    held = path / HELD_NAMES[0]
    whole = held.read_bytes()
    held.write_bytes(b"tick,a\r\n1,2\r\n")
    with pytest.raises(RecordError, match=r"held-1\.csv has not the columns"):
        gone_on_with(path, THINNED)
    held.write_bytes(whole)
    recorder = gone_on_with(path, THINNED)
    assert held_files(path) == []
    finish(recorder, 0)


@pytest.mark.parametrize("empty", [b"", bytes(4096), bytes(4096) + b"7,7\r\n"], ids=["torn", "empty", "empty amid"])
def test_held_rows_that_a_loss_of_power_left_torn_or_empty_are_moved_as_far_as_they_are_whole(
    tmp_path: Path, empty: bytes
) -> None:
    path = killed(tmp_path, THINNED, 1000)
    before = ticks_in(sample_files(path))
    newest = held_files(path)[-1]
    whole = newest.read_bytes()
    end = whole.rindex(b"\n", 0, -1) + 1
    newest.write_bytes(whole[: end + 9] + empty)
    assert ticks_in(sample_files(path)) == before[:-1]
    recorder = gone_on_with(path, THINNED)
    finish(recorder, 0)
    assert ticks_in(files_by_part(read_manifest(path), path)[1]) == before[:-1]
    assert audit(path).statements == ()


def test_a_held_file_that_a_loss_of_power_left_empty_has_no_rows(tmp_path: Path) -> None:
    path = killed(tmp_path, THINNED, 1000)
    newest = held_files(path)[-1]
    header = newest.read_bytes().partition(b"\n")[0] + b"\n"
    newest.write_bytes(header + bytes(500) + b",1\r\n")
    assert newest not in held_files(path)
    finish(gone_on_with(path, THINNED), 0)
    assert held_files(path) == []


def test_a_volume_whose_name_is_taken_is_listed_by_the_name_it_has(tmp_path: Path) -> None:
    recorder = begin(tmp_path, WHOLE, durable=True)
    path = recorder.folder.path
    (path / "samples.0002.csv").write_bytes(b"something else\r\n")
    for block in blocks_of(250, size=25):
        recorder.on_block(block)
    finish(recorder, 250)
    listed = read_manifest(path)["samples_files"]
    assert listed == ["samples.csv", "samples.0002-2.csv", "samples.0003.csv"]
    assert len(ticks_in([path / name for name in listed])) == 250
    assert audit(path).statements == ()
