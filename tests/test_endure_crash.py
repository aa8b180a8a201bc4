"""Crashes and resumptions at random moments: no synced row is lost, no cycle counted twice, at most one too few.

Model-based: the board's own plant is the witness of what was truly done; the host dies at any write, sync or read, and
a power cut then takes what was not synced.
"""

from __future__ import annotations

import random
from contextlib import suppress
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest

from endure_crash import CYCLES, LOGS, Host, Killed, Process
from ramprig.endure.cycles import read_cycle_record
from ramprig.errors import RecordError, UsageError
from ramprig.record.reading import audit, read_manifest, read_samples, sample_files
from ramprig.record.volumes import HELD_NAMES
from ramprig.sequence.outcome import Verdict

POINTS_QUICK = 9
POINTS_ALL = 300
SECOND_DEATH = 0.4
"""Share of the points at which the resumed run dies too."""
DOWN_S = (0.05, 40.0)


@cache
def operations_of_a_whole_run(log: str) -> int:
    """How many operations an undisturbed run takes."""
    with TemporaryDirectory() as folder:
        process = Process()
        assert Host(Path(folder), log=log).run(process).outcome.verdict is Verdict.PASSED
    return process.operations


@dataclass
class Life:
    """What is checked between two lives of the host."""

    host: Host
    chance: random.Random
    kept: dict[Path, bytes]
    deaths: int = 0

    def die(self, die_at: int, *, resume: bool) -> bool:
        """A life that is to end at this operation; False where the run was over, or had not begun, before."""
        process = Process(die_at=die_at)
        try:
            self.host.run(process, resume=resume)
        except Killed:
            pass
        else:
            return False
        self.deaths += 1
        synced = process.cut_power(self.chance)
        self.check(synced)
        self.host.pause(self.chance.uniform(*DOWN_S))
        return True

    def check(self, synced: dict[Path, int]) -> None:
        """What was synced is there, and stays there; the count is right to one."""
        for path, size in synced.items():
            if path.name not in HELD_NAMES:  # what they hold goes to the volumes, which test_record_held.py looks at
                self.kept[path] = path.read_bytes()[:size]
        for path, data in self.kept.items():
            assert path.read_bytes().startswith(data), f"{path.name} lost what was synced"
        if not (self.host.folder / "runs").exists() or not any((self.host.folder / "runs").iterdir()):
            assert self.host.witness.done == 0
            return
        counted = self.host.record().counted
        confirmed, done = counted.confirmed, self.host.witness.done
        assert confirmed <= done, f"{confirmed} confirmed, {done} truly done"
        assert done <= confirmed + self.deaths, f"{confirmed} confirmed, {done} truly done, {self.deaths} deaths"
        assert done <= counted.commanded


def live_through(folder: Path, point: int) -> None:
    """One run that dies at a random operation, at times twice, and is resumed to its end."""
    chance = random.Random(f"crash {point}")
    log = LOGS[point % len(LOGS)]
    operations = operations_of_a_whole_run(log)
    host = Host(folder, seed=point, log=log)
    life = Life(host, chance, {})
    assert life.die(chance.randrange(operations), resume=False)
    if not (folder / "runs").exists():
        return  # it died before there was anything to write down
    with suppress(UsageError):  # it was over already, which is checked next
        try:
            if chance.random() < SECOND_DEATH:
                life.die(chance.randrange(operations), resume=True)
            result = host.run(Process(), resume=True)
        except RecordError as error:
            if host.witness.done:
                raise AssertionError("a run that has moved something cannot be resumed") from error
            return
        assert result.outcome.verdict is Verdict.PASSED, result.outcome
    check_end(host, life)


def check_end(host: Host, life: Life) -> None:
    """The whole run after its last part: every cycle once, every sample accounted for, every break told."""
    folder = host.run_folder
    counted = read_cycle_record(folder).counted
    assert counted.confirmed == CYCLES
    assert counted.commanded == CYCLES + counted.interrupted
    assert counted.confirmed <= host.witness.done <= counted.confirmed + counted.interrupted
    found = audit(folder)
    assert (found.missing, found.unexpected) == (0, 0), found.statements
    assert found.exact, found.statements
    manifest = read_manifest(folder)
    assert len(found.interruptions) == len(manifest.get("interruptions", [])) == found.parts - 1 <= life.deaths
    for path, data in life.kept.items():
        if path.name.startswith("samples"):
            assert path.read_bytes().startswith(data)
    files = sample_files(folder)
    begins = [float(read_samples(path).numbers["time_s"][0]) for path in files if len(read_samples(path))]
    assert begins == sorted(begins)


@pytest.mark.parametrize("point", range(POINTS_QUICK))
def test_a_run_dies_at_a_random_moment_and_is_resumed(tmp_path: Path, point: int) -> None:
    live_through(tmp_path, point)


@pytest.mark.soak
@pytest.mark.parametrize("point", range(POINTS_QUICK, POINTS_ALL))
def test_the_same_at_three_hundred_moments(tmp_path: Path, point: int) -> None:
    live_through(tmp_path, point)
