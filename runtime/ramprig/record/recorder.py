"""Writes one run down as it happens: takes sample blocks and events, and ends with the account of all of them."""

from __future__ import annotations

import contextlib
import threading
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path

from ..errors import RecordError
from ..port.clock import Clock
from ..session.blocks import Block
from .appendfile import AppendFile, sync_folder
from .columns import Columns
from .events import Json, RunTime, encode_line, event_object, jsonable, rfc3339
from .folder import CYCLES_FILE, EVENTS_FILE, TRAIL_FILE, RunFolder, software
from .keeping import Keeping
from .manifest import Anchor, RunEnd, clocks, sample_account, speed_account
from .parts import PART_KEYS, Earlier, whole_account
from .ranges import SpanPrinter
from .rows import RowPrinter
from .samplelog import SampleLog
from .space import SpacePolicy, SpaceWatch, disk_free
from .speed import SpeedMethod
from .volumes import SAMPLES_FIRST
from .writer import CLOSE_WAIT_S, SYNC_EVERY_S, DiskWriter, Trouble, within

BATCH_ROWS = 2048
"""In virtual time so many rows are printed together; a log that must be durable takes every block as it comes."""

EDGES_AHEAD_MAX = 16
"""So many edges of cycles are told of ahead of the rows of a batch at most: the ranges keep some more than that."""

PERIODS_MAX = 16
"""Different sample periods whose speed resolution `run.json` lists."""


@dataclass(frozen=True, slots=True, kw_only=True)
class RunStarted:
    """The run folder was made and the clocks tied together."""

    tick: int
    host_s: float
    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RunFinished:
    """The run came to its end in order."""

    tick: int | None
    verdict: str
    stop_reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class DiskTrouble:
    """The disk is in trouble; whoever runs the motor has been told before this was written."""

    trouble: str
    text: str


@dataclass(frozen=True, slots=True, kw_only=True)
class RunResumed:
    """A run that was interrupted goes on: `part` begins, with a samples file of its own.

    `torn_bytes` were cut off from lines of events and cycles that the interruption had left unfinished.
    """

    tick: int
    host_s: float
    part: int
    samples_file: str
    torn_bytes: int


@dataclass(frozen=True, slots=True, kw_only=True)
class VolumeBegun:
    """The samples from this tick on are in `samples_file`; the one before has `rows` rows and is closed."""

    tick: int
    samples_file: str
    rows_before: int


class Recorder:
    """The one who writes a run down. Blocks and events come from one thread; the disk is written by another one.

    `start` ties the clocks together and is where `time_s` begins. `on_trouble` is called before anything else when
    the disk is in trouble, from any thread; it stops the motor where `trouble.kind.demands_stop`, and must not block
    or raise. `threaded` false is for virtual time: everything is written in the caller's thread, and the same input
    gives the same bytes; synced only where it is to be `durable` (None: where it is threaded). `limits_digest` is that
    of the limits in force, for the record.

    In a folder that was reopened it writes the next part of the run; `time_s` goes on from the start of the first.
    """

    def __init__(
        self,
        folder: RunFolder,
        columns: Columns,
        *,
        start: Anchor,
        tick_us: int,
        clock: Clock,
        on_trouble: Callable[[Trouble], None],
        threaded: bool = True,
        durable: bool | None = None,
        limits_digest: str = "",
        method: SpeedMethod | None = None,
        keeping: Keeping | None = None,
        space: SpacePolicy | None = None,
        free: Callable[[Path], int] = disk_free,
        sync_every_s: float = SYNC_EVERY_S,
    ) -> None:
        self.folder = folder
        self.columns = columns
        self._start = start
        self._clock = clock
        self._method = method or SpeedMethod()
        since_s = 0.0
        if folder.earlier is not None:
            since_s = max(start.unix_s - folder.started_unix_s, folder.earlier.last_time_s)
        self._when = RunTime(tick_us, start.tick - round(since_s * 1e6 / tick_us), start.host_s, start.unix_s)
        self._limits_digest = limits_digest
        self._user_on_trouble = on_trouble
        self._printer = self._new_printer(columns)
        self._batch: list[Block] = []
        self._batch_rows = self._edges_ahead = 0
        self._received_rows = 0
        self._periods_ticks: list[int] = []
        self._troubles: list[Json] = []
        self._counting = threading.Lock()  # events come from the disk's thread too
        self._vital_given = self._vital_kept = 0
        self._manifest_lock = threading.Lock()
        self._finished = self._sealed = False
        self._cycles = folder.go_on(CYCLES_FILE)
        self._cycles_given = self._cycles_kept = 0
        self._samples_names: list[str] = []
        self._trails: list[AppendFile] = []
        self._keeping = keeping or Keeping()
        durable = threaded if durable is None else durable
        self._events, self._samples = self._begin_files(durable=durable)
        cycles = [] if self._cycles is None else [self._cycles]
        self._writer = DiskWriter(
            [self._events, self._samples, *cycles],  # what is told of rows, such as a gap, before the rows themselves
            on_trouble=self._on_trouble,
            after_trouble=self._after_trouble,
            on_sync=self._on_sync,
            make_room=folder.reserve.free,
            threaded=threaded,
            durable=durable,
            now=clock.now,
            sync_every_s=sync_every_s,
        )
        self._watch = SpaceWatch(folder.path, space or SpacePolicy(), tell=self._writer.tell, free=free)
        if folder.earlier is None:
            self.on_event(RunStarted(tick=start.tick, host_s=start.host_s, name=folder.description.name))
        else:
            self._tell_resumed(folder.earlier.number)

    def _new_printer(self, columns: Columns) -> RowPrinter:
        return RowPrinter(columns, tick_us=self._when.tick_us, tick_zero=self._when.tick_zero, method=self._method)

    def _begin_files(self, *, durable: bool) -> tuple[AppendFile, SampleLog]:
        try:
            events = self.folder.go_on(EVENTS_FILE) or self.folder.new_file(EVENTS_FILE)
            events.hold_alone()
            self._samples_names = [self.folder.free_name(SAMPLES_FIRST)]
            self._write_manifest("running", None)
            part = 1 if self.folder.earlier is None else self.folder.earlier.number
            when = self._when
            samples = SampleLog(
                self.folder,
                self._printer,
                self._keeping,
                spans=SpanPrinter(self.columns, part=part, tick_us=when.tick_us, tick_zero=when.tick_zero),
                tick_us=when.tick_us,
                durable=durable,
                tell=self._tell_synced if durable else self._tell_at_once,
                on_volume=self._on_volume,
            )
            self._samples_names = samples.names
            return events, samples
        except OSError as error:
            self.folder.abandon()
            raise RecordError(f"the run folder {self.folder.path} cannot be written: {error.strerror}") from error

    def _tell_at_once(self, event: object) -> None:
        """Write an event down from where the disk is written. Raises OSError."""
        self._events.append(encode_line(self._told(event)))

    def _tell_synced(self, event: object) -> None:
        """The same, on the disk itself before the rows that it is about are written. Raises OSError.

        Else a loss of power might leave those rows without it, and what was thinned would look like missing.
        """
        self._tell_at_once(event)
        self._events.sync()

    def _on_volume(self, tick: int, rows_before: int) -> None:
        """A further volume has begun: told in the events, and the hash of the one before kept in `run.json`."""
        self._tell_at_once(VolumeBegun(tick=tick, samples_file=self._samples.names[-1], rows_before=rows_before))
        self._write_manifest("running", None)

    def _tell_resumed(self, part: int) -> None:
        start = self._start
        self.on_event(
            RunResumed(
                tick=start.tick,
                host_s=start.host_s,
                part=part,
                samples_file=self._samples.names[0],
                torn_bytes=self.folder.torn_bytes,
            )
        )

    def _open_cycles(self) -> AppendFile:
        if self._cycles is None:
            self._cycles = self.folder.new_file(CYCLES_FILE)
            self._writer.add_file(self._cycles)
        return self._cycles

    # ---- while the run is on ------------------------------------------------------------------------------------

    def on_block(self, block: Block) -> None:
        """Write the samples of a block; raises RecordError where that is no longer possible, after `on_trouble`."""
        self._received_rows += len(block)
        period_ticks = block.layout.period_ticks
        if period_ticks not in self._periods_ticks and len(self._periods_ticks) < PERIODS_MAX:
            self._periods_ticks.append(period_ticks)
        self._batch.append(block)
        self._batch_rows += len(block)
        if self._writer.durable or self._batch_rows >= BATCH_ROWS:
            self._submit_batch()

    def _submit_batch(self) -> None:
        batch, self._batch = self._batch, []
        self._batch_rows = self._edges_ahead = 0
        if batch:
            self._writer.submit(lambda: self._samples.write(batch))

    def _told(self, event: object) -> dict[str, Json]:
        return event_object(event, when=self._when, host_s=self._clock.now())

    def _mind(self, told: dict[str, Json]) -> None:
        """Have the samples log know of an event, after the rows that came before it where it does not wait for them
        itself; never raises RecordError."""
        if self._writer.failure is not None or not self._samples.concerns(told):
            return
        with contextlib.suppress(RecordError):  # told through on_trouble
            if self._edges_ahead >= EDGES_AHEAD_MAX or not self._samples.waits_for_rows(told):
                self._submit_batch()
            self._edges_ahead += 1
            self._writer.submit(lambda: self._samples.happened(told))

    def on_event(self, event: object) -> None:
        """Write down an event (a dataclass, see `events.py`), synced to the disk soon; never raises RecordError."""
        told = self._told(event)
        line = encode_line(told)
        self._submit_vital(lambda: self._events.append(line), sync=True)
        self._mind(told)

    def _submit_vital(self, work: Callable[[], None], *, sync: bool = False) -> None:
        """Hand over what is tried even on a disk in trouble; `run.json` tells how much of it was lost all the same."""
        with self._counting:
            self._vital_given += 1

        def counted() -> None:
            work()
            self._vital_kept += 1

        self._writer.submit(counted, vital=True, sync=sync)

    def on_cycle(self, event: object) -> None:
        """Write an event down in the count of cycles and have the disk hold it; never raises RecordError.

        `cycles_pending` tells when that is done. The disk holds all rows and events handed over before it first.
        """
        told = self._told(event)
        line = encode_line(told)
        self._cycles_given += 1
        self._mind(told)

        written = False

        def write() -> None:
            nonlocal written
            file = self._open_cycles()
            if self._writer.durable:
                self._writer.sync_files()
            if not written:  # on a full disk this is done twice
                file.append(line)
                written = True
            if self._writer.durable:
                file.sync()
                if file.lines == 1:
                    sync_folder(self.folder.path)
            self._cycles_kept += 1

        self._submit_vital(write)

    def cycles_pending(self) -> int:
        """How many events given to `on_cycle` are not yet known to be on the disk."""
        return self._cycles_given - self._cycles_kept

    def on_trail(self, blocks: Sequence[Block]) -> None:
        """Write the fast record around a trip into `trail.csv` (a second one of the run into `trail-2.csv`)."""
        if not blocks:
            return
        channels = {(channel.kind, channel.index) for channel in blocks[0].layout.channels}
        printer = self._new_printer(self.columns.only(channels))
        data = printer.header() + printer.rows(blocks)

        begun: list[AppendFile] = []

        def write() -> None:
            if not begun:
                begun.append(self.folder.new_file(TRAIL_FILE))
                self._trails += begun
            file = begun[0]
            file.append(data[file.size_bytes :])  # on a full disk this is done twice: what is there stays
            file.sync()
            sync_folder(self.folder.path)
            file.close()

        self._submit_vital(write)

    def liveness_s(self) -> float:
        """How long the disk has made no progress; while that is long, the lease must not be renewed."""
        return self._writer.liveness_s()

    def check(self) -> None:
        """Raise RecordError where rows can no longer be written."""
        self._writer.check()

    # ---- trouble ------------------------------------------------------------------------------------------------

    def tell(self, trouble: Trouble) -> None:
        """Take note of a trouble with the disk that somebody else saw, and pass it on to `on_trouble`; never raises."""
        self._writer.tell(trouble)

    def _on_sync(self) -> None:
        self._watch.look()

    def _on_trouble(self, trouble: Trouble) -> None:
        self._user_on_trouble(trouble)  # first of all: this is what stops the motor
        self._troubles.append({"kind": trouble.kind.value, "text": trouble.text})
        if not trouble.kind.loses_rows:
            self.on_event(DiskTrouble(trouble=trouble.kind.value, text=trouble.text))

    def _after_trouble(self, trouble: Trouble) -> None:
        def write_reason() -> None:
            self.folder.reserve.free()
            self._tell_at_once(DiskTrouble(trouble=trouble.kind.value, text=trouble.text))
            self._write_manifest("running", None)

        self._writer.submit(write_reason, vital=True, sync=True)

    # ---- the end ------------------------------------------------------------------------------------------------

    def finish(self, end: RunEnd) -> Path:
        """Write what is waiting and the end of the run; returns the run folder. A second call does nothing.

        A disk that hangs is waited for CLOSE_WAIT_S, and as long again for `run.json`; one that is slow for longer, see
        DiskWriter. Raises RecordError where not even that could be written; a full disk that was told of before is
        stated in it.
        """
        if self._finished:
            return self.folder.path
        self._finished = True
        tick = None if end.end is None else end.end.tick
        self.on_event(RunFinished(tick=tick, verdict=end.verdict, stop_reason=end.stop_reason))
        with contextlib.suppress(RecordError):  # told through on_trouble, and in the account as unwritten rows
            self._submit_batch()
        ended = self._writer.close(CLOSE_WAIT_S, rows_end=self._samples.end, at_last=self._close_files)

        def write_end() -> None:
            self.folder.reserve.free()
            self._write_manifest("finished", end)

        try:
            if ended:
                write_end()
            else:
                self._let_go()
                within(CLOSE_WAIT_S, write_end)
        except OSError as error:
            raise RecordError(f"run.json cannot be written in {self.folder.path}: {error.strerror}") from error
        return self.folder.path

    def _files(self) -> list[AppendFile | SampleLog]:
        return [self._samples, self._events, *([] if self._cycles is None else [self._cycles]), *self._trails]

    def _close_files(self) -> None:
        for file in self._files():
            with contextlib.suppress(OSError):
                file.close()

    def _let_go(self) -> None:
        """The disk hangs: what comes back from it late must find nothing to write to."""
        for file in self._files():
            file.let_go()

    def _write_manifest(self, status: str, end: RunEnd | None) -> None:
        contents = self.folder.head()
        contents["status"] = status
        contents["samples_files"] = list(self._samples_names)
        contents["keeping"] = jsonable(self._keeping)
        contents["started"] = rfc3339(self.folder.started_unix_s)
        contents["ended"] = rfc3339(self._clock.wall()) if end else None
        contents["verdict"] = end.verdict if end else None
        contents["stop_reason"] = end.stop_reason if end else None
        contents["disk_troubles"] = list(self._troubles)
        contents["limits_digest"] = self._limits_digest
        contents["columns"] = list(self.columns.names)
        contents["clocks"] = clocks(
            self._start, end.end if end else None, when=self._when, drift_ppm=end.drift_ppm if end else None
        )
        contents["speed"] = speed_account(
            self.columns, self._method, tick_us=self._when.tick_us, periods_ticks=sorted(self._periods_ticks)
        )
        contents["files"] = self.folder.closed_files() if end is None else self.folder.files()
        if end is not None:
            contents |= self._end_of(end)
        if self.folder.earlier is not None:
            self._add_parts(contents, self.folder.earlier)
        with self._manifest_lock:
            if self._sealed:  # a write that comes late must not say that the run goes on
                return
            self._sealed = status == "finished"
            self.folder.write_manifest(contents)

    def _add_parts(self, contents: dict[str, Json], earlier: Earlier) -> None:
        """All parts of the run with what each has of its own, and the account over all of them."""
        about = self.folder.description
        part: dict[str, Json] = {
            "part": earlier.number,
            "samples_file": self._samples_names[0],
            "samples_files": list(self._samples_names),
            "status": contents["status"],
            "started": rfc3339(self._start.unix_s),
            "ended": contents["ended"],
            "port": about.port,
            "device": jsonable(about.identity),
            "software": software(),
        }
        part |= {key: contents.get(key) for key in PART_KEYS}
        parts: list[Json] = [*earlier.parts, part]
        contents["parts"] = parts
        contents["interruptions"] = list(earlier.interruptions)
        if contents["status"] == "finished":
            contents["samples"] = whole_account([entry for entry in parts if isinstance(entry, dict)])

    def _end_of(self, end: RunEnd) -> dict[str, Json]:
        account = sample_account(
            end.accounts,
            received_rows=self._received_rows,
            written_rows=self._samples.written_rows,
            thinned_rows=self._samples.thinned_rows,
        )
        return {
            "samples": account,
            "events_unwritten": self._vital_given - self._vital_kept,
            "link": jsonable(end.link),
            "results": jsonable(end.results),
        }
