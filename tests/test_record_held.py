"""A thinned run that is killed has its last rows at full rate, and keeps them when it goes on."""

from __future__ import annotations

import os
import random
from pathlib import Path

import pytest

from endure_crash import Killed, Process
from ramprig.errors import RecordError
from ramprig.record.export import To, export_run
from ramprig.record.folder import RunFolder
from ramprig.record.keeping import Around, Keeping, Thinning
from ramprig.record.reading import audit, read_events, read_manifest, sample_files
from ramprig.record.recorder import Recorder
from ramprig.record.rows import Rows
from ramprig.record.volumes import HELD_NAMES, Stream, VolumeLimits, held_files, volume_files
from ramprig.sequence.happened import Marked
from ramprig.session.blocks import Block
from record_long import FIRST_TICK, PERIOD, begin, finish
from record_samples import blocks_of, start_anchor

RULE = Thinning(every=50, before_s=0.4, after_s=0.2, around=frozenset({Around.MARK}))
KEEPING = Keeping(volumes=VolumeLimits(rows=60), thinning=RULE)
SAMPLES = 1500  # 3 s
MARKED = 700
BLOCK = 25


@pytest.fixture(autouse=True)
def short_turns(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.record.held.TURN_LEAST_S", 0.1)


def live(recorder: Recorder, handed: list[int]) -> None:
    """The run, synced after every third block; `handed` has the tick up to which the disk holds everything."""
    for number, block in enumerate(blocks_of(SAMPLES, size=BLOCK)):
        recorder.on_block(block)
        if block.ticks[-1] == FIRST_TICK + PERIOD * (MARKED - 1):
            recorder.on_event(Marked(tick=int(block.ticks[-1]), name="here"))
        if number % 3 == 2:
            recorder._writer.sync_files()
            handed.append(int(block.ticks[-1]))


def hand_over(recorder: Recorder, blocks: list[Block]) -> None:
    for block in blocks:
        recorder.on_block(block)


def whole_run(root: Path, handed: list[int]) -> None:
    recorder = begin(root, KEEPING, durable=True)
    live(recorder, handed)
    finish(recorder, SAMPLES)


def kept_up_to(last: int, *, more: int = 0) -> set[int]:
    """By definition, for a run whose last row is of this tick, or up to `more` ticks later."""
    at = FIRST_TICK + PERIOD * (MARKED - 1)
    return {
        tick
        for tick in range(FIRST_TICK, last + 1, PERIOD)
        if tick // PERIOD % 50 == 0
        or tick <= start_anchor().tick + 200
        or (at <= last and at - 400 <= tick <= at + 200)
        or tick >= last - 400 + more
    }


def ticks_in(folder: Path) -> list[int]:
    part = {"samples_file": "samples.csv", **read_manifest(folder)}
    return [tick for piece in Stream(volume_files(folder, part)) for tick in piece.ticks.tolist()]


def killed(root: Path, die_at: int, chance: random.Random) -> tuple[Path, int] | None:
    """A run that dies at this operation and loses its power; its folder, and the tick up to which it was synced."""
    process = Process(die_at=die_at)
    handed: list[int] = []
    with process.alive(), pytest.raises(Killed):
        whole_run(root, handed)
    process.cut_power(chance)
    if not handed:
        return None
    (folder,) = root.iterdir()
    return folder, handed[-1]


class TurnsSeen(Process):
    """A life that notes at which operations a file of held rows was begun."""

    def __init__(self) -> None:
        super().__init__()
        self.turns: list[int] = []

    def _open(self, path: Path, flags: int, mode: int = 0o777) -> int:
        if flags & os.O_CREAT and Path(path).name in HELD_NAMES:
            self.turns.append(self.operations)
        return super()._open(path, flags, mode)


def undisturbed(root: Path) -> TurnsSeen:
    process = TurnsSeen()
    with process.alive():
        whole_run(root, [])
    return process


def check_killed(root: Path, die_at: int, chance: random.Random) -> None:
    found = killed(root, die_at, chance)
    if found is None:
        return
    folder, synced = found
    ticks = ticks_in(folder)
    assert ticks == sorted(set(ticks))
    assert kept_up_to(synced, more=3 * BLOCK * PERIOD) <= set(ticks)
    manifest = read_manifest(folder)
    audited = audit(folder)
    if manifest["status"] == "finished":
        return
    assert (audited.missing, audited.unexpected) == (0, 0)
    assert [text for text in audited.statements if "rows are missing" in text] == []
    tail = Stream(sample_files(folder)).tail(2000)
    assert tail.ticks.tolist() == ticks[-len(tail) :]
    goes_on(folder, ticks)


def goes_on(folder: Path, ticks: list[int]) -> None:
    """Going on moves the held rows to the volume for good; a second try changes nothing."""
    manifest = read_manifest(folder)
    reopened = RunFolder.reopen(folder, manifest, {"text": "a break"}, port="", identity={})
    reopened.close()
    reopened.reserve.free()
    assert not [name for name in HELD_NAMES if (folder / name).exists()]
    assert ticks_in(folder) == ticks
    assert reopened.earlier is not None
    assert reopened.earlier.parts[-1]["status"] == "broken off"  # type: ignore[index,call-overload]  # JSON as it comes


@pytest.mark.parametrize("step", range(3))
def test_a_thinned_run_that_dies_has_its_last_rows_at_full_rate(tmp_path: Path, step: int) -> None:
    """Early and late, and just after an older file of held rows has gone."""
    chance = random.Random(step)
    whole = undisturbed(tmp_path / "whole")
    points = [turn + 1 + step for turn in whole.turns[step::2]] + chance.sample(range(20, whole.operations), 3)
    for die_at in sorted(set(points)):
        check_killed(tmp_path / f"at{die_at}", die_at, chance)


@pytest.mark.soak
@pytest.mark.parametrize("seed", range(10))
def test_the_same_at_every_operation(tmp_path: Path, seed: int) -> None:
    chance = random.Random(f"held {seed}")
    for die_at in range(seed, undisturbed(tmp_path / "whole").operations, 10):
        check_killed(tmp_path / f"at{die_at}", die_at, chance)


def test_a_run_that_ends_in_order_leaves_no_held_rows(tmp_path: Path) -> None:
    recorder = begin(tmp_path, KEEPING, durable=True)
    live(recorder, [])
    assert len(held_files(recorder.folder.path)) == 2
    folder = finish(recorder, SAMPLES)
    assert held_files(folder) == []
    assert set(ticks_in(folder)) == kept_up_to(FIRST_TICK + PERIOD * (SAMPLES - 1))
    assert audit(folder).statements == ()
    assert "full_rate_begun" in [event["kind"] for event in read_events(folder / "events.jsonl")[0]]


def test_held_rows_are_few_however_long_the_run(tmp_path: Path) -> None:
    recorder = begin(tmp_path, KEEPING, durable=True)
    most = 0
    for block in blocks_of(SAMPLES, size=BLOCK):
        recorder.on_block(block)
        sizes = [path.read_bytes().count(b"\n") - 1 for path in held_files(recorder.folder.path)]
        most = max([most, sum(sizes)])
    assert most <= 2 * (400 // PERIOD + BLOCK)
    finish(recorder, SAMPLES)


def test_in_virtual_time_nothing_is_held_on_the_disk(tmp_path: Path) -> None:
    recorder = begin(tmp_path, KEEPING)
    for block in blocks_of(SAMPLES, size=BLOCK):
        recorder.on_block(block)
    assert held_files(recorder.folder.path) == []
    finish(recorder, SAMPLES)


def test_rows_that_a_full_disk_kept_from_the_volumes_are_set_aside_when_the_run_goes_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    recorder = begin(tmp_path, KEEPING, durable=True, on_trouble=lambda trouble: None)
    blocks = blocks_of(SAMPLES, size=BLOCK)
    hand_over(recorder, blocks[:40])

    def full(rows: Rows) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(recorder._samples._thinner, "_write", full)
    with pytest.raises(RecordError):
        hand_over(recorder, blocks[40:])
    folder = finish(recorder, SAMPLES)
    held = [path.read_bytes() for path in held_files(folder)]
    before = audit(folder)
    assert before.rows == read_manifest(folder)["samples"]["written"]
    RunFolder.reopen(folder, read_manifest(folder), {"text": "a break"}, port="", identity={}).close()
    assert [(folder / f"unwritten-{number}.csv").read_bytes() for number in (1, 2)] == held
    assert held_files(folder) == []


def test_an_export_of_a_killed_run_has_its_held_rows_once(tmp_path: Path) -> None:
    recorder = begin(tmp_path, KEEPING, durable=True)
    live(recorder, [])
    folder = recorder.folder.path
    (done,) = export_run(folder, To.EXCEL_CSV)
    lines = done.path.read_text("utf-16").splitlines()[1:]
    assert [int(line.split("\t")[0]) for line in lines] == ticks_in(folder)


# ---- the moment at which an older file goes -------------------------------------------------------------------------

HOLE_TICKS = 10_000
BEFORE_HOLE = 17


def with_a_hole() -> list[Block]:
    """Most of a second of samples, and after a hole a little more: much of the older turn is not decided by then."""
    before = blocks_of(BEFORE_HOLE * BLOCK, size=BLOCK)
    return before + blocks_of(75, size=BLOCK, first_tick=int(before[-1].ticks[-1]) + HOLE_TICKS)


class HoleSeen(list[Block]):
    """What was handed over, and the operation at which the first block after the hole was."""

    def __init__(self, process: Process) -> None:
        super().__init__()
        self._process = process
        self.operation = 0

    def append(self, block: Block) -> None:
        if len(self) == BEFORE_HOLE:
            self.operation = self._process.operations
        super().append(block)


def live_until_it_dies(root: Path, process: Process, handed: list[Block]) -> None:
    recorder = begin(root, KEEPING, durable=True, on_trouble=lambda trouble: None)
    for block in with_a_hole():
        handed.append(block)
        recorder.on_block(block)
    finish(recorder, sum(map(len, handed)))


def to_be_kept(handed: list[Block], newest: int) -> set[int]:
    """The ticks that an event might still claim when this is the newest, and those that are kept anyway."""
    ticks = [tick for block in handed for tick in block.ticks.tolist()]
    return {tick for tick in ticks if tick >= newest - 400 or tick // PERIOD % 50 == 0}


def operations_around_the_hole(root: Path) -> range:
    """Those of an undisturbed run from a little before the hole to a little after it."""
    whole = Process()
    handed = HoleSeen(whole)
    with whole.alive():
        live_until_it_dies(root, whole, handed)
    return range(handed.operation - 6, handed.operation + 14)


def test_a_kill_at_any_operation_around_a_hole_leaves_every_row_that_was_to_be_kept(tmp_path: Path) -> None:
    for die_at in operations_around_the_hole(tmp_path / "whole"):
        process, root = Process(die_at=die_at), tmp_path / str(die_at)
        handed: list[Block] = []
        with process.alive(), pytest.raises(Killed):
            live_until_it_dies(root, process, handed)
        (folder,) = root.iterdir()
        ticks = ticks_in(folder)
        assert ticks == sorted(set(ticks))
        assert to_be_kept(handed[:-1], int(handed[-1].ticks[-1])) <= set(ticks), die_at
        assert {tick for tick in to_be_kept(handed, ticks[-1]) if tick <= ticks[-1]} <= set(ticks), die_at


def test_a_disk_that_is_full_at_any_write_around_a_hole_leaves_the_rows_to_be_kept_somewhere(tmp_path: Path) -> None:
    for full_at in operations_around_the_hole(tmp_path / "whole"):
        process, root = Process(full_at=full_at), tmp_path / str(full_at)
        handed: list[Block] = []
        with process.alive():
            try:
                live_until_it_dies(root, process, handed)
            except RecordError:
                assert handed or not (root / "run.json").exists()
        (folder,) = root.iterdir()
        part = {"samples_file": "samples.csv", **read_manifest(folder)}
        paths = [*volume_files(folder, part), *held_files(folder)]
        ticks = {tick for path in paths for piece in Stream([path]) for tick in piece.ticks.tolist()}
        assert to_be_kept(handed[:-1], int(handed[-1].ticks[-1])) <= ticks, full_at  # the last one is what failed


def test_a_held_file_that_is_being_read_goes_a_little_later(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    waited: list[float] = []
    real = Path.unlink

    def unlink(path: Path, *, missing_ok: bool = False) -> None:
        if path.name in HELD_NAMES and len(waited) < 3:
            raise PermissionError(13, "in use")
        real(path, missing_ok=missing_ok)

    monkeypatch.setattr(Path, "unlink", unlink)
    monkeypatch.setattr("ramprig.record.appendfile.READERS_HINDER", True)
    monkeypatch.setattr("ramprig.record.appendfile.time.sleep", waited.append)
    recorder = begin(tmp_path, KEEPING, durable=True)
    hand_over(recorder, blocks_of(SAMPLES, size=BLOCK))
    finish(recorder, SAMPLES)
    assert len(waited) == 3
    assert held_files(recorder.folder.path) == []


# ---- what the events tell -------------------------------------------------------------------------------------------

OFTEN = Thinning(every=50, before_s=0.05, after_s=0.05, around=frozenset({Around.MARK}))


def marked_often(root: Path) -> None:
    """Full rate begins and ends many times, and the disk is synced by itself only where a volume is full."""
    recorder = begin(root, Keeping(volumes=VolumeLimits(rows=60), thinning=OFTEN), durable=True)
    for number, block in enumerate(blocks_of(900, size=BLOCK)):
        recorder.on_block(block)
        if number % 8 == 5:
            recorder.on_event(Marked(tick=int(block.ticks[-1]), name="here"))
    finish(recorder, 900)


def test_a_loss_of_power_leaves_no_row_without_the_event_that_tells_why_it_is_there(tmp_path: Path) -> None:
    whole = Process()
    with whole.alive():
        marked_often(tmp_path / "whole")
    chance = random.Random(5)
    for die_at in chance.sample(range(whole.operations - 50, whole.operations - 12), 8):
        process, root = Process(die_at=die_at), tmp_path / str(die_at)
        with process.alive(), pytest.raises(Killed):
            marked_often(root)
        process.cut_power(chance)
        (folder,) = root.iterdir()
        assert not [text for text in audit(folder).statements if "are missing" in text], die_at
