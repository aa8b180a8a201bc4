"""Random faults of the disk over whole runs: whatever fails, no row is wrong or twice, and the account says what is
missing."""

from __future__ import annotations

import errno
import os
import random
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory
from types import SimpleNamespace

import pytest

from ramprig.errors import RecordError
from ramprig.record import appendfile
from ramprig.record.appendfile import whole_length
from ramprig.record.folder import RunFolder
from ramprig.record.keeping import Around, Keeping, Thinning
from ramprig.record.parts import Document, parts_of
from ramprig.record.reading import audit, read_cycles, read_events, read_manifest
from ramprig.record.volumes import HELD_NAMES, VolumeLimits, held_files, volume_files
from ramprig.record.writer import Trouble
from ramprig.sequence.happened import CycleCommanded, Marked
from record_long import begin, finish
from record_samples import blocks_of

SAMPLES = 900
SEEDS_QUICK = 12
SEEDS_ALL = 612
MARKS = frozenset({Around.MARK})
KEEPINGS = (
    Keeping(volumes=VolumeLimits(rows=170), cycle_ranges=True),
    Keeping(
        volumes=VolumeLimits(rows=90),
        thinning=Thinning(every=50, before_s=0.3, after_s=0.2, ranges_s=0.5, around=MARKS),
        cycle_ranges=True,
    ),
    Keeping(volumes=VolumeLimits(rows=90), thinning=Thinning(every=None, before_s=0.1, after_s=0.1, around=MARKS)),
)
CALLS = (("write", "fsync", "open", "ftruncate", "replace"), ("write",), ("fsync",), ("write", "ftruncate"))
CODES = ((errno.ENOSPC,), (errno.EIO,), (errno.ENOSPC, errno.EIO))
FOR_EVER = 10**9


@pytest.fixture(autouse=True)
def short_turns(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.record.held.TURN_LEAST_S", 0.1)


@dataclass
class FaultyDisk:
    """From operation `at` on `length` operations fail, where they are of these `calls`; of a write a piece may go."""

    chance: random.Random
    at: int = FOR_EVER
    length: int = 0
    calls: tuple[str, ...] = ()
    codes: tuple[int, ...] = (errno.EIO,)
    operations: int = 0
    failed: list[str] = field(default_factory=list)

    def _is_bad(self, call: str) -> bool:
        self.operations += 1
        return self.at <= self.operations < self.at + self.length and call in self.calls

    def _look(self, call: str) -> None:
        if self._is_bad(call):
            self._fail(call)

    def _fail(self, call: str) -> None:
        self.failed.append(call)
        code = self.chance.choice(self.codes)
        raise OSError(code, os.strerror(code))

    def _write(self, handle: int, data: bytes) -> int:
        if self._is_bad("write"):
            if len(data) < 2 or self.chance.random() < 0.5:
                self._fail("write")
            data = bytes(data)[: self.chance.randrange(1, len(data))]
        return os.write(handle, data)

    def _fsync(self, handle: int) -> None:
        self._look("fsync")

    def _open(self, path: Path, flags: int, mode: int = 0o777) -> int:
        self._look("open")
        return os.open(path, flags, mode)

    def _ftruncate(self, handle: int, size: int) -> None:
        self._look("ftruncate")
        os.ftruncate(handle, size)

    def _replace(self, part: Path, path: Path) -> None:
        self._look("replace")
        os.replace(part, path)

    @contextmanager
    def at_work(self) -> Iterator[None]:
        """While it is, the recorder's calls of the system go through it."""
        shim = SimpleNamespace(**{name: getattr(os, name) for name in dir(os)})
        shim.write, shim.fsync, shim.open = self._write, self._fsync, self._open
        shim.ftruncate, shim.replace = self._ftruncate, self._replace
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(appendfile, "os", shim)
            yield


@dataclass
class Lived:
    """A run on such a disk, and how many events and cycles it was given."""

    folder: Path
    given: int = 2  # its begin and its end
    troubles: list[Trouble] = field(default_factory=list)
    raised: RecordError | None = None


def live(root: Path, keeping: Keeping, disk: FaultyDisk) -> Lived:
    troubles: list[Trouble] = []
    recorder = begin(root, keeping, durable=True, on_trouble=troubles.append)
    lived = Lived(recorder.folder.path, troubles=troubles)
    with disk.at_work():
        for number, block in enumerate(blocks_of(SAMPLES, size=25)):
            with suppress(RecordError):
                recorder.on_block(block)
            tick = int(block.ticks[-1])
            if number % 9 == 4:
                recorder.on_event(Marked(tick=tick, name="here"))
                lived.given += 1
            if number % 12 == 7:
                recorder.on_cycle(CycleCommanded(tick=tick, number=number // 12 + 1, block=1, name="c", part=1))
                lived.given += 1
            if number % 5 == 0:
                recorder._writer._attempt(recorder._writer.sync_files)
        try:
            finish(recorder, SAMPLES)
        except RecordError as error:
            lived.raised = error
    return lived


@cache
def operations_of(keeping: int) -> int:
    """How many operations a run without faults takes."""
    disk = FaultyDisk(random.Random(0))
    with TemporaryDirectory() as root:
        assert audit(live(Path(root), KEEPINGS[keeping], disk).folder).exact
    return disk.operations


@cache
def rows_by_tick() -> dict[int, bytes]:
    """Every row as it must be."""
    with TemporaryDirectory() as root:
        folder = live(Path(root), Keeping(), FaultyDisk(random.Random(0))).folder
        return rows_in([folder / "samples.csv"])


def rows_in(paths: list[Path]) -> dict[int, bytes]:
    """The whole rows of these files; none may be there twice, nor before one of an earlier tick."""
    found: dict[int, bytes] = {}
    last = -1
    for path in paths:
        data = path.read_bytes()
        for row in data[: whole_length(data)].splitlines(keepends=True)[1:]:
            tick = int(row.partition(b",")[0])
            assert tick > last
            found[tick], last = row, tick
    return found


def volumes_of(folder: Path, part: Document) -> list[Path]:
    return [path for path in volume_files(folder, part) if path.name not in HELD_NAMES]


def check(lived: Lived, disk: FaultyDisk) -> None:
    folder = lived.folder
    manifest = read_manifest(folder)
    rows = rows_in(volumes_of(folder, manifest))
    assert rows.items() <= rows_by_tick().items()
    found = audit(folder)
    if manifest["status"] != "finished":
        assert lived.raised
        assert not [text for text in found.statements if "missing" in text]
        return
    assert bool(manifest["disk_troubles"] or lived.raised) == bool(disk.failed)
    account = manifest["samples"]
    assert account["written"] == len(rows)
    assert found.unexpected == 0
    assert found.missing <= account["unwritten"]
    if not manifest["keeping"]["thinning"]:
        assert found.missing == account["unwritten"]
    told = [text for text in found.statements if "could not be written" in text or "are missing that" in text]
    assert bool(told) >= bool(account["unwritten"])
    assert not [text for text in found.statements if "was changed" in text]
    events, _ = read_events(folder / "events.jsonl")
    there = sum(event["kind"] in ("run_started", "marked", "run_finished") for event in events)
    there += len(read_cycles(folder)[0])
    assert there <= lived.given <= there + manifest["events_unwritten"]


def check_going_on(folder: Path) -> None:
    """Whoever goes on loses nothing, and nothing that is held."""
    part = parts_of(read_manifest(folder))[-1]
    before, held = rows_in(volumes_of(folder, part)), rows_in(held_files(folder))
    reopened = RunFolder.reopen(folder, read_manifest(folder), {"text": "a break"}, port="", identity={})
    reopened.abandon()
    after = rows_in(volumes_of(folder, part))
    assert before.items() <= after.items()
    if part["status"] == "finished":
        assert before == after
        assert held == rows_in(sorted(folder.glob("unwritten-*.csv")))
    else:
        last = max(before, default=-1)
        assert {tick for tick in held if tick > last} <= set(after)


def fail_somewhere(root: Path, seed: int) -> None:
    chance = random.Random(f"faults {seed}")
    keeping = seed % len(KEEPINGS)
    disk = FaultyDisk(
        chance,
        at=chance.randrange(1, operations_of(keeping)),
        length=chance.choice((1, 1, 2, 3, 8, FOR_EVER)),
        calls=chance.choice(CALLS),
        codes=chance.choice(CODES),
    )
    lived = live(root, KEEPINGS[keeping], disk)
    check(lived, disk)
    check_going_on(lived.folder)


@pytest.mark.parametrize("seed", range(SEEDS_QUICK))
def test_a_disk_that_fails_anywhere_makes_no_row_wrong_and_nothing_untold(tmp_path: Path, seed: int) -> None:
    fail_somewhere(tmp_path, seed)


@pytest.mark.soak
@pytest.mark.parametrize("begin_at", range(SEEDS_QUICK, SEEDS_ALL, 100))
def test_the_same_many_times(tmp_path: Path, begin_at: int) -> None:
    for seed in range(begin_at, min(begin_at + 100, SEEDS_ALL)):
        fail_somewhere(tmp_path / str(seed), seed)
