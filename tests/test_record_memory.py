"""Recording a run and reading it back take the memory of a piece of it, however long it is."""

from __future__ import annotations

import json
import tracemalloc
from pathlib import Path

import pytest

from ramprig.errors import RecordError
from ramprig.record.keeping import Keeping, Thinning
from ramprig.record.reading import EventLines, audit, read_events
from ramprig.record.recorder import Recorder
from ramprig.record.volumes import VolumeLimits
from ramprig.sequence.happened import PassBegun
from record_long import begin, finish
from record_samples import blocks_of

SHORT, LONG = 40_000, 80_000


def made(root: Path, samples: int, keeping: Keeping) -> Path:
    """A run with many events."""
    recorder = begin(root, keeping)
    for number, block in enumerate(blocks_of(samples, size=500)):
        recorder.on_block(block)
        if number % 2:
            many_events(recorder, int(block.ticks[-1]))
    return finish(recorder, samples)


def many_events(recorder: Recorder, tick: int) -> None:
    for number in range(30):
        recorder.on_event(PassBegun(tick=tick, place="made_up.yaml:1:1", number=number, of=10**6))


def peak_of_audit(folder: Path) -> int:
    """The greatest memory that Python allocated for it, in bytes."""
    tracemalloc.start()
    try:
        assert audit(folder).statements == ()
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


@pytest.mark.parametrize(
    "keeping",
    [Keeping(volumes=VolumeLimits(rows=25_000)), Keeping(thinning=Thinning(every=2, before_s=0.1, after_s=0.1))],
    ids=["whole", "thinned"],
)
def test_the_audit_of_a_longer_run_takes_no_more_memory(
    tmp_path: Path, keeping: Keeping, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("ramprig.record.expected.WINDOW_SAMPLES", 5000)
    monkeypatch.setattr("ramprig.record.reading.CHUNK_BYTES", 64 * 1024)
    folders = [made(tmp_path / str(samples), samples, keeping) for samples in (SHORT, LONG)]
    peak_of_audit(folders[0])  # what is loaded and remembered at the first time
    short, long = map(peak_of_audit, folders)
    assert long < 1.15 * short
    whole = sum(path.stat().st_size for path in folders[1].iterdir())
    assert whole > sum(path.stat().st_size for path in folders[0].iterdir()) * 1.8


def test_events_come_one_after_another_and_a_torn_last_line_is_told(tmp_path: Path) -> None:
    path = tmp_path / "events.jsonl"
    path.write_bytes(b"".join(json.dumps({"kind": "a", "n": n}).encode() + b"\n" for n in range(5)) + b'{"kind"')
    lines = EventLines(path)
    assert [event["n"] for event in lines] == [0, 1, 2, 3, 4]
    assert lines.torn_bytes == 7
    assert read_events(path) == ([{"kind": "a", "n": n} for n in range(5)], 7)
    path.write_bytes(b"{}\nnonsense\n{}\n")
    with pytest.raises(RecordError, match=r"events\.jsonl cannot be read as an event log"):
        list(EventLines(path))


@pytest.mark.parametrize("every", [None, 50], ids=["whole", "thinned"])
def test_recording_longer_takes_no_more_memory(tmp_path: Path, every: int | None) -> None:
    thinning = None if every is None else Thinning(every=every, ranges_s=1.0, before_s=1.0, after_s=1.0)
    recorder = begin(tmp_path, Keeping(volumes=VolumeLimits(rows=10_000), thinning=thinning, cycle_ranges=True))
    blocks = blocks_of(30_000, size=500)
    tracemalloc.start()
    try:
        held = []
        for number, block in enumerate(blocks):
            recorder.on_block(block)
            if number in (14, 59):
                held.append(tracemalloc.get_traced_memory()[0])
    finally:
        tracemalloc.stop()
    assert held[1] - held[0] < 60_000  # of 1.7 MB that these rows take as text
    finish(recorder, 30_000)
