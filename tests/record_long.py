"""Runs written by a recorder in virtual time, for the tests of volumes, ranges and thinning."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from ramprig.record.folder import InputFile, RunDescription, RunFolder
from ramprig.record.keeping import Keeping
from ramprig.record.manifest import RunEnd
from ramprig.record.reading import sample_files
from ramprig.record.recorder import Recorder
from ramprig.record.writer import Trouble
from ramprig.session.gaps import Accounting, Gap
from record_samples import TICK_US, UTC_START_S, start_anchor, vent_columns, virtual_clock

FIRST_TICK, PERIOD = 5000, 2


def account_of(samples: int, gaps: tuple[Gap, ...] = ()) -> Accounting:
    """Of a logging that made so many samples."""
    lost = sum(gap.count for gap in gaps)
    return Accounting(
        first_tick=FIRST_TICK, period_ticks=PERIOD, expected=samples, received=samples - lost, lost=lost, gaps=gaps,
        gaps_unlisted=0, made=samples, asked_again=0, recovered=0, duplicates=0, strange_lines=0,
    )  # fmt: skip


def begin(
    root: Path, keeping: Keeping, *, on_trouble: Callable[[Trouble], None] = print, durable: bool = False
) -> Recorder:
    """A recorder whose run has begun; one of its inputs is called like a volume."""
    description = RunDescription(name="long", inputs=(InputFile("bench", "samples.csv", b"motors: {}\n"),))
    folder = RunFolder.create(root, description, started_unix_s=UTC_START_S, short_id="abc123")
    return Recorder(
        folder, vent_columns(), start=start_anchor(), tick_us=TICK_US, clock=virtual_clock(), on_trouble=on_trouble,
        threaded=False, durable=durable, keeping=keeping, free=lambda _: 10**12,
    )  # fmt: skip


def finish(recorder: Recorder, samples: int, gaps: tuple[Gap, ...] = ()) -> Path:
    """End the run in order."""
    return recorder.finish(RunEnd(verdict="passed", stop_reason="over", accounts=(account_of(samples, gaps),)))


def rows_of(folder: Path) -> list[bytes]:
    """The rows of all volumes without their headers, each of which must be the same."""
    found: list[bytes] = []
    headers = set()
    for path in sample_files(folder):
        header, *rows = path.read_bytes().splitlines(keepends=True)
        headers.add(header)
        found += rows
    assert len(headers) == 1
    return found
