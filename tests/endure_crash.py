"""A host that dies at a chosen moment and loses what was not synced, a board that lives on, and a witness of both.

`Host` runs a sequence with cycles in virtual time. Every write, sync and port call is one operation; at the operation
`die_at` the process is gone: nothing it does afterwards has any effect. A power cut then leaves of each file what was
synced and, of the rest, any beginning, torn anywhere; a replaced file is the old or the new one, and a new file may be
gone where its folder was not synced after it was made.
"""

from __future__ import annotations

import os
import random
import stat
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from types import SimpleNamespace

import pytest

from ramprig.bench import load_bench
from ramprig.endure.cycles import CycleRecord, read_cycle_record
from ramprig.endure.resume import Surroundings, read_broken, run_enduring, wish_to_carry_on
from ramprig.errors import LinkLost
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.port.base import ClosesItself
from ramprig.port.clock import Clock, VirtualClock
from ramprig.record import appendfile
from ramprig.sequence.reading import read_sequence
from ramprig.sequence.running import RunResult, RunWish
from sequence_rig import BENCH

START_UNIX_S = 1_800_000_000.0
TRAVEL_DEG = 60
CYCLES = 3
SEQUENCE = f"""
sequence: crash test
bench: bench.yaml
log: {{period: 10 ms}}
POLICY
steps:
  - hold: 100 ms
  - cycle:
      name: open
      times: {CYCLES}
      rest: 300 ms
      before: [{{move: {{servo: latch, to: 5 deg, in: 200 ms}}}}]
      check every: 2
      check:
        - hold: 200 ms
        - expect: {{current of: vent, is: at most 1 A, over: 100 ms}}
      steps:
        - ramp: {{motor: vent, to: 60 %, in: 600 ms}}
        - hold: 200 ms
        - confirm: {{position of: vent, is: at least {TRAVEL_DEG} deg}}
        - coast: {{motor: vent, in: 300 ms}}
  - hold: 100 ms
"""
LOGS = (
    "{period: 10 ms}",
    "{period: 10 ms, new file: {after rows: 100}}",
    "{period: 10 ms, new file: {after rows: 100}, "
    "thin: {keep every: 5, ranges every: 1 s, before: 400 ms, after: 200 ms, around: [cycle, failure]}}",
)
"""How the samples are kept: in one file, in several, and thinned."""
COUNTS_PER_DEG = 64 * 90 / 360
WITNESS_TICKS = 10


class Killed(BaseException):
    """The process is gone; no handler of the program may bring it back."""


@dataclass
class Witness:
    """Counts the cycles that were truly done: drives of the motor in which the shaft travelled far enough."""

    device: MockDevice
    done: int = 0
    _begin: int | None = None
    _reached: bool = False

    def look(self) -> None:
        """What the plant says now; to be called often."""
        controller = self.device.controller
        driven = controller is not None and controller.drives[0].duty != 0
        counts = self.device.plant.read_counts(0)
        if not driven:
            self._begin = None
        elif self._begin is None:
            self._begin, self._reached = counts, False
        if self._begin is not None and not self._reached:
            self._reached = abs(counts - self._begin) >= TRAVEL_DEG * COUNTS_PER_DEG
            self.done += self._reached


@dataclass
class Process:
    """One life of the host program: counts its operations and ends at `die_at`.

    `full_at` is the operation from which on the disk takes no more.
    """

    die_at: int | None = None
    full_at: int | None = None
    operations: int = 0
    dead: bool = False
    paths: dict[int, Path] = field(default_factory=dict)
    synced: dict[Path, int] = field(default_factory=dict)
    replaced: dict[Path, bytes] = field(default_factory=dict)
    unnamed: list[Path] = field(default_factory=list)

    def operation(self) -> None:
        """One more; raises Killed where it is the last, and in every one after that."""
        self.operations += 1
        if self.dead or (self.die_at is not None and self.operations > self.die_at):
            self.dead = True
            raise Killed

    def _write(self, handle: int, data: bytes) -> int:
        self.operation()
        if self.full_at is not None and self.operations >= self.full_at:
            raise OSError(28, os.strerror(28))
        return os.write(handle, data)

    def _fsync(self, handle: int) -> None:
        self.operation()
        os.fsync(handle)
        path = self.paths.get(handle)
        if path is not None:
            self.synced[path] = os.fstat(handle).st_size
        else:
            self.replaced.clear()  # a folder, or a new file: what was renamed before is now certain
        if stat.S_ISDIR(os.fstat(handle).st_mode):
            self.unnamed.clear()

    def _open(self, path: Path, flags: int, mode: int = 0o777) -> int:
        handle = os.open(path, flags, mode)
        if flags & os.O_APPEND:
            self.paths[handle] = Path(path)
            if flags & os.O_CREAT:
                self.synced[Path(path)] = 0
                self.unnamed.append(Path(path))
            self.synced.setdefault(Path(path), os.fstat(handle).st_size)
        return handle

    def _close(self, handle: int) -> None:
        self.paths.pop(handle, None)
        os.close(handle)

    def _replace(self, part: Path, path: Path) -> None:
        self.operation()
        if Path(path).exists():
            self.replaced[Path(path)] = Path(path).read_bytes()
        os.replace(part, path)

    def _ftruncate(self, handle: int, size: int) -> None:
        self.operation()
        os.ftruncate(handle, size)

    @contextmanager
    def alive(self) -> Iterator[None]:
        """While it lives, the recorder's calls of the system go through it."""
        shim = SimpleNamespace(**{name: getattr(os, name) for name in dir(os)})
        shim.write, shim.fsync, shim.open = self._write, self._fsync, self._open
        shim.close, shim.replace, shim.ftruncate = self._close, self._replace, self._ftruncate
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(appendfile, "os", shim)
            try:
                yield
            finally:
                for handle in list(self.paths):
                    self._close(handle)

    def cut_power(self, chance: random.Random) -> dict[Path, int]:
        """Lose what was not synced, or any part of it; returns what was synced of each file, in bytes."""
        for path in self.unnamed:
            if chance.random() < 0.5:
                path.unlink(missing_ok=True)
        self.synced = {path: size for path, size in self.synced.items() if path.exists()}
        for path, size in self.synced.items():
            left = chance.randint(size, path.stat().st_size)
            os.truncate(path, left)
        for path, before in self.replaced.items():
            if chance.random() < 0.5:
                path.write_bytes(before)
        return dict(self.synced)


class MortalPort(ClosesItself):
    """A port of one life; the witness looks on at every read."""

    def __init__(self, port: MockPort, process: Process, witness: Witness) -> None:
        self.name = port.name
        self.clock: Clock = port.clock
        self._port, self._process, self._witness = port, process, witness

    def read(self, timeout_s: float) -> bytes:
        self._process.operation()
        data = self._port.read(timeout_s)
        self._witness.look()
        return data

    def write(self, data: bytes) -> None:
        self._process.operation()
        self._port.write(data)

    def urgent(self, data: bytes) -> bool:
        return not self._process.dead and self._port.urgent(data)

    def send_break(self) -> bool:
        self._process.operation()
        return self._port.send_break()

    def close(self) -> None:
        self._port.close()


class Host:
    """A bench on a board that lives on, and lives of the host program one after another."""

    def __init__(
        self, folder: Path, *, seed: int = 1, policy: str = "on interruption: stop", log: str = LOGS[0]
    ) -> None:
        self.folder = folder
        (folder / "bench.yaml").write_text(BENCH, "utf-8")
        (folder / "crash.yaml").write_text(SEQUENCE.replace("POLICY", policy).replace("LOG", log), "utf-8")
        self.bench = load_bench(folder / "bench.yaml")
        self.device = MockDevice(setup_of_bench(self.bench), seed=seed)
        self.witness = Witness(self.device)
        self.unix_s = START_UNIX_S
        self.seed = seed
        self.opened = 0
        self.meddle: Callable[[Host], None] = lambda host: None
        self.said: list[str] = []
        self.away_until_s = 0.0
        self.latest_end_unix_s: float | None = None
        self._clock: VirtualClock | None = None

    @property
    def run_folder(self) -> Path:
        (only,) = (self.folder / "runs").iterdir()
        return only

    def record_exists(self) -> bool:
        """Whether the run has begun to count."""
        runs = self.folder / "runs"
        return runs.exists() and any((path / "cycles.jsonl").exists() for path in runs.iterdir())

    def record(self) -> CycleRecord:
        return read_cycle_record(self.run_folder)

    def _open(self, process: Process) -> MortalPort:
        """A port to the same board under another name, with a monotonic clock that began anew."""
        if self.unix_s < self.away_until_s:
            raise LinkLost("nothing is plugged in")
        self.opened += 1
        self._clock = VirtualClock(wall_s=self.unix_s)
        port = MockPort(self.device, seed=self.seed, name=f"port{self.opened}", clock=self._clock)
        return MortalPort(port, process, self.witness)

    def now_unix_s(self) -> float:
        if self._clock is not None:
            self.unix_s = max(self.unix_s, self._clock.wall())
        return self.unix_s

    def now_s(self) -> float:
        """A clock that nobody sets: the board's."""
        return self.device.ticks * self.device.board.tick_us / 1e6

    def forget_clock(self) -> None:
        """The wall clock is what `unix_s` says from now on."""
        self._clock = None

    def pause(self, seconds: float) -> None:
        """Time passes for the board, while no host is there."""
        self.now_unix_s()
        for _ in range(round(seconds * 1000) // WITNESS_TICKS):
            self.device.advance(WITNESS_TICKS)
            self.device.transmit()
            self.witness.look()
        self.unix_s += seconds

    def run(self, process: Process, *, resume: bool = False, after_trip: bool = False) -> RunResult:
        """One life, to its end. Raises Killed where it dies before."""
        sequence = read_sequence(self.folder / "crash.yaml")
        wish = RunWish(
            sequence=sequence,
            bench=self.bench,
            runs=self.folder / "runs",
            seed=self.seed,
            virtual=True,
            durable=True,
            latest_end_unix_s=self.latest_end_unix_s,
        )
        around = Surroundings(
            open_port=lambda: self._open(process),
            pause=self.pause,
            wall=self.now_unix_s,
            now=self.now_s,
            tell=self.said.append,
            progress=lambda progress: self.meddle(self),
        )
        with process.alive():
            if resume:
                now_s = self.now_unix_s()
                broken = read_broken(self.run_folder, now_unix_s=now_s)
                wish = wish_to_carry_on(broken, wish, by="command", now_unix_s=now_s, after_trip=after_trip)
            return run_enduring(wish, around)
