"""Runs that end badly: killed, without power, or with no more room on the disk; what was written before is all
there."""

from __future__ import annotations

import hashlib
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.record.appendfile import AppendFile, whole_length
from ramprig.record.reading import audit, read_events, read_manifest, read_samples, sample_files
from ramprig.record.rows import RowPrinter
from ramprig.record.scan import Scan
from ramprig.record.volumes import Stream
from record_samples import TICK_US, blocks_of, vent_columns

VICTIM = Path(__file__).with_name("record_victim.py")
WAIT_S = 60.0

posix_only = pytest.mark.skipif(sys.platform == "win32", reason="kill -9 and size limits are POSIX")


@pytest.fixture(scope="module")
def printed() -> tuple[bytes, list[bytes]]:
    """The header and the rows of 400 samples, one by one."""
    printer = RowPrinter(vent_columns(), tick_us=TICK_US, tick_zero=0)
    rows = printer.rows(blocks_of(400)).splitlines(keepends=True)
    return printer.header(), rows


@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_every_row_that_was_synced_is_there_after_a_loss_of_power(
    tmp_path_factory: pytest.TempPathFactory, printed: tuple[bytes, list[bytes]], data: st.DataObject
) -> None:
    """A power cut leaves at least what was synced, and of the rest any beginning, torn anywhere."""
    header, rows = printed
    path = tmp_path_factory.mktemp("power") / "samples.csv"
    file = AppendFile(path)
    file.append(header)
    done = 0
    for size in data.draw(st.lists(st.integers(1, 60), max_size=6), label="batches"):
        file.append(b"".join(rows[done : done + size]))
        done += size
        if data.draw(st.booleans(), label="sync"):
            file.sync()
    synced_bytes, synced_rows = file.synced_bytes, max(0, file.synced_lines - 1)
    file.close()
    whole = path.read_bytes()
    left = data.draw(st.integers(synced_bytes, len(whole)), label="left")
    path.write_bytes(whole[:left])
    samples = read_samples(path)
    assert len(samples) >= synced_rows
    assert len(samples) == max(0, whole[:left].count(b"\n") - 1)
    assert samples.ticks.tolist() == list(range(5000, 5000 + 2 * len(samples), 2))


WHOLE = [
    (b"", 0), (b"1,2", 0), (b"1,2\r\n3", 5), (b"1\r\n2\r\n", 6), (b"1\r", 0), (b"\0", 0), (b"1\n\0\0", 2),
    (b"1\n2\0\n3\n", 2),
]  # fmt: skip


@pytest.mark.parametrize(("data", "whole"), WHOLE)
def test_whole_lines_end_at_the_last_line_end_before_what_a_loss_of_power_left_empty(data: bytes, whole: int) -> None:
    assert whole_length(data) == whole


@pytest.mark.parametrize("chunk", [7, 64, 1024 * 1024])
def test_what_a_loss_of_power_left_empty_and_what_follows_it_is_torn(
    tmp_path: Path, printed: tuple[bytes, list[bytes]], monkeypatch: pytest.MonkeyPatch, chunk: int
) -> None:
    """A file system may have made the file longer, and even written later pages, before the data of these came."""
    monkeypatch.setattr("ramprig.record.appendfile.CHUNK_BYTES", chunk)
    header, rows = printed
    data = header + b"".join(rows[:20])
    torn = rows[20][:9] + bytes(200) + b"".join(rows[30:40])
    path = tmp_path / "samples.csv"
    path.write_bytes(data + torn)
    for found in (Scan(path, piece_bytes=chunk), Stream([path])):
        assert [tick for piece in found for tick in piece.ticks.tolist()] == list(range(5000, 5040, 2))
        assert found.torn_bytes == len(torn)
    for size in (len(torn) - 5, len(torn) + 300, 10**6):
        assert Scan(path).tail(size).ticks.tolist()[-1] == 5038
    assert (len(read_samples(path)), read_samples(path).torn_bytes) == (20, len(torn))
    file, cut_bytes = AppendFile.reopen(path)
    file.close()
    assert (cut_bytes, file.lines, file.size_bytes) == (len(torn), 21, len(data))
    assert file.sha256 == hashlib.sha256(data).hexdigest()
    assert path.read_bytes() == data


@pytest.mark.process
@posix_only
@pytest.mark.parametrize(
    ("kill_after_rows", "volume_rows"),
    [(1, 0), (2, 0), (50, 0), (500, 0), (1777, 0), (4000, 0), (500, 30), (2000, 130)],
)
def test_a_killed_run_leaves_every_row_that_it_had_written(
    tmp_path: Path, kill_after_rows: int, volume_rows: int
) -> None:
    command = [sys.executable, str(VICTIM), str(tmp_path), "100000"]
    command += ["0", str(volume_rows)] if volume_rows else []
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as victim:
        assert victim.stdout is not None
        folder = Path(victim.stdout.readline().split(maxsplit=1)[1].strip())
        for line in victim.stdout:
            if int(line.split()[2]) >= kill_after_rows:
                break
        victim.kill()
        lines = [line, *victim.stdout]
    said = [list(map(int, line.split()[1:])) for line in lines if line.startswith("rows ") and line.endswith("\n")]
    _handed, written, synced = said[-1]
    paths = sample_files(folder)
    assert len(paths) > 3 if volume_rows else len(paths) == 1
    stream = Stream(paths)
    ticks = [tick for piece in stream for tick in piece.ticks.tolist()]
    assert len(ticks) >= max(written, synced, kill_after_rows)
    assert ticks == list(range(5000, 5000 + 2 * len(ticks), 2))
    assert stream.torn_bytes < 200  # at most one row: the system may break a write off between two pages
    found = audit(folder)
    assert not found.finished
    assert "did not end in order" in found.statements[0]
    events, _torn_bytes = read_events(folder / "events.jsonl")
    assert events[0]["kind"] == "run_started"


@pytest.mark.process
@posix_only
@pytest.mark.parametrize("limit_bytes", [300 * 1024, 301_001])
def test_a_file_size_limit_stops_the_motor_first_and_the_run_ends_with_the_reason(
    tmp_path: Path, limit_bytes: int
) -> None:
    command = [sys.executable, str(VICTIM), str(tmp_path), "200", str(limit_bytes)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=WAIT_S, check=True)
    lines = [line for line in done.stdout.splitlines() if not line.startswith("rows ")]
    folder = Path(lines[0].split(maxsplit=1)[1])
    assert lines[1:] == ["stop disk_full", "raised", "end"]
    manifest = read_manifest(folder)
    assert (manifest["status"], manifest["verdict"]) == ("finished", "failed")
    assert manifest["disk_troubles"][0]["kind"] == "disk_full"
    samples = read_samples(folder / "samples.csv")
    assert limit_bytes - 200 < (folder / "samples.csv").stat().st_size <= limit_bytes
    assert samples.torn_bytes == 0
    assert manifest["samples"]["written"] == len(samples)
    assert "disk_trouble" in [event["kind"] for event in read_events(folder / "events.jsonl")[0]]
    assert audit(folder).statements[0].startswith("trouble with the disk: the disk is full")
