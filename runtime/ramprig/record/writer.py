"""The one who writes to the disk: a thread of its own behind a bounded queue, or at once in virtual time.

What fails is told at once, first to `on_trouble` (so that the motor is stopped before anything else), then by
RecordError to whoever hands over more. `liveness_s` tells how long the disk has made no progress; the lease is
renewed only while it is small.
"""

from __future__ import annotations

import contextlib
import errno
import queue
import threading
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Protocol

from ..errors import RecordError

QUEUE_MAX = 512
"""Jobs that may wait for the disk: at one data line each 20 ms some ten seconds; then the run ends with `queue
full`."""

VITAL_MAX = 64
"""Places beyond that for events, so that the reason of a failure can still be handed over."""

SYNC_EVERY_S = 1.0
"""A run that loses its power loses the rows since the last sync, at most this old."""

SYNC_REST_S = 0.1
"""Least time between two syncs that jobs ask for; a flood of events must not keep the disk busy."""

CLOSE_WAIT_S = 10.0
"""How long the end of a run waits for a disk that gets nothing done."""

CLOSE_WAITS_MAX = 6
"""So many times as long it waits for one that does."""

FULL_ERRNOS = frozenset({errno.ENOSPC, errno.EFBIG, getattr(errno, "EDQUOT", errno.ENOSPC)})


class TroubleKind(StrEnum):
    """What is the matter with the disk."""

    SPACE_WARNING = "space_warning"
    SPACE_LOW = "space_low"
    DISK_FULL = "disk_full"
    DISK_ERROR = "disk_error"
    DISK_STALLED = "disk_stalled"
    QUEUE_FULL = "queue_full"
    FAULT = "fault"

    @property
    def demands_stop(self) -> bool:
        """Whether the motor must be stopped for it; `space_low` leaves time to stop in order."""
        return self is not TroubleKind.SPACE_WARNING

    @property
    def loses_rows(self) -> bool:
        """Whether no more rows are taken from here on."""
        return self not in (TroubleKind.SPACE_WARNING, TroubleKind.SPACE_LOW, TroubleKind.DISK_STALLED)


@dataclass(frozen=True, slots=True)
class Trouble:
    """One trouble with the disk, in words for the user."""

    kind: TroubleKind
    text: str


def trouble_of(error: OSError) -> Trouble:
    """The trouble that an error of the operating system means."""
    where = f" ({error.filename})" if error.filename else ""
    if error.errno in FULL_ERRNOS:
        return Trouble(TroubleKind.DISK_FULL, f"the disk is full: {error.strerror}{where}")
    return Trouble(TroubleKind.DISK_ERROR, f"the disk cannot be written: {error.strerror or error}{where}")


class Syncable(Protocol):
    """Something on the disk that is written piece by piece."""

    def sync(self) -> None:
        """Have the disk itself hold what was written. Raises OSError."""


@dataclass(frozen=True, slots=True)
class _Job:
    work: Callable[[], None]
    vital: bool
    sync: bool


class DiskWriter:
    """Carries out jobs that write to `files`, one after another, in the order in which they were handed over.

    `threaded`: in a thread of its own, synced every `sync_every_s` and with each job that asks for it; else at once
    in the caller's thread and, unless `durable`, synced at the end only (virtual time, where nothing is lost that
    cannot be made again).
    `on_trouble` is called at most once for each kind of trouble, from whichever thread meets it, and must not raise.
    `after_trouble` is called next, for a trouble that loses rows: from then on only vital jobs are taken, and of those
    that wait only vital ones carried out, unless it was the queue that was full: then all are, in their order. Once a
    job has found the disk full, `make_room` is called; if it is a vital one it is done again then, so it must not do
    twice what it has done. `on_sync` is called after each timed sync (free space is looked at
    there); it may call `tell`.
    """

    def __init__(
        self,
        files: Sequence[Syncable],
        *,
        on_trouble: Callable[[Trouble], None],
        after_trouble: Callable[[Trouble], None],
        on_sync: Callable[[], None],
        threaded: bool,
        make_room: Callable[[], object] = lambda: None,
        durable: bool | None = None,
        now: Callable[[], float] = time.monotonic,
        sync_every_s: float = SYNC_EVERY_S,
        queue_max: int = QUEUE_MAX,
    ) -> None:
        self._files = list(files)
        self._on_trouble = on_trouble
        self._after_trouble = after_trouble
        self._on_sync = on_sync
        self._make_room = make_room
        self._now = now
        self._sync_every_s = sync_every_s
        self.durable = threaded if durable is None else durable
        self._last_sync_s = self._last_progress_s = now()
        self._told: set[TroubleKind] = set()
        self._telling = threading.Lock()
        self.failure: Trouble | None = None
        self._rows_over = False  # no row is written any more, not even one that was handed over before
        self._jobs_done = 0
        self._queue_max = queue_max
        self._queue: queue.Queue[_Job | None] = queue.Queue(queue_max + VITAL_MAX)
        self._open = True
        self._given_up = self._room_made = False
        self._at_last: Callable[[], None] = lambda: None
        self._thread: threading.Thread | None = None
        if threaded:
            self._thread = threading.Thread(target=self._run, name="ramprig-disk", daemon=True)
            self._thread.start()

    def submit(self, work: Callable[[], None], *, vital: bool = False, sync: bool = False) -> None:
        """Hand over a job; `vital` ones are tried even after a failure, and never raise.

        Raises RecordError where rows can no longer be written: `on_trouble` has been called by then.
        """
        job = _Job(work, vital, sync)
        if not vital:
            self.check()
        if self._thread is None:
            self._carry_out(job)
            self._look_at_space()
            if not vital:
                self.check()
            return
        if self._queue.unfinished_tasks == 0:
            self._last_progress_s = self._now()  # the writer has been idle: its time runs from here
        try:
            if not vital and self._queue.qsize() >= self._queue_max:
                raise queue.Full
            self._queue.put_nowait(job)
        except queue.Full:
            self.tell(Trouble(TroubleKind.QUEUE_FULL, f"the disk is too slow: {self._queue_max} writes are waiting"))
            if not vital:
                self.check()

    def check(self) -> None:
        """Raise RecordError where rows can no longer be written."""
        if self.failure is not None:
            raise RecordError(self.failure.text)

    def liveness_s(self) -> float:
        """How long the writer has had work without finishing a piece of it; 0 while it has none."""
        if self._thread is None or self._queue.unfinished_tasks == 0:
            return 0.0
        return max(0.0, self._now() - self._last_progress_s)

    def tell(self, trouble: Trouble) -> None:
        """Pass a trouble on, the first of its kind only; one that loses rows ends the writing of rows."""
        with self._telling:
            if trouble.kind in self._told:
                return
            self._told.add(trouble.kind)
            self._rows_over |= trouble.kind.loses_rows and trouble.kind is not TroubleKind.QUEUE_FULL
            if trouble.kind.loses_rows and self.failure is None:
                self.failure = trouble
                ends_rows = True
            else:
                ends_rows = False
        self._on_trouble(trouble)
        if ends_rows:
            self._after_trouble(trouble)

    def close(
        self,
        wait_s: float = CLOSE_WAIT_S,
        *,
        rows_end: Callable[[], None] = lambda: None,
        at_last: Callable[[], None] = lambda: None,
    ) -> bool:
        """Carry out what is waiting, then `rows_end` where rows are still written, sync, and do `at_last`.

        False where the disk got nothing done for `wait_s`, or did not come to an end in CLOSE_WAITS_MAX times as long.
        That is a trouble, and what is still waiting then is not carried out; `at_last` is done when the job that hangs
        is over. Never raises.
        """
        if not self._open:
            return not self._given_up
        self._at_last = at_last
        last = _Job(rows_end, vital=False, sync=False)
        if self._thread is None:
            self._open = False
            self._carry_out(last)
            self._attempt(self.sync_files)
            at_last()
            return True
        with contextlib.suppress(queue.Full):  # nobody else hands over any more: it is full where the disk hangs
            self._queue.put(last, timeout=wait_s)
        self._open = False
        with contextlib.suppress(queue.Full):  # a full queue needs no nudge
            self._queue.put_nowait(None)
        waited_s = self._wait_for_end(self._thread, wait_s)
        if self._given_up:
            self.tell(Trouble(TroubleKind.DISK_ERROR, f"the disk did not finish within {waited_s:g} s"))
        return not self._given_up

    def _wait_for_end(self, thread: threading.Thread, wait_s: float) -> float:
        """Wait while the disk gets something done, or give it up; how long that was at most."""
        waited_s, done = 0.0, -1
        while thread.is_alive() and self._jobs_done != done and waited_s < CLOSE_WAITS_MAX * wait_s:
            done = self._jobs_done
            thread.join(wait_s)
            waited_s += wait_s
        self._given_up = thread.is_alive()
        return waited_s

    def _run(self) -> None:
        try:
            while not self._given_up:
                job = self._next_job()
                if job is not None:
                    self._carry_out(job)
                    self._jobs_done += 1
                    self._last_progress_s = self._now()
                    self._queue.task_done()
                if not self._open and self._queue.empty():
                    self._attempt(self.sync_files)
                    return
                if self._now() - self._last_sync_s >= self._sync_every_s:
                    self._attempt(self.sync_files)
                    self._attempt(self._on_sync)
        finally:
            self._at_last()

    def _next_job(self) -> _Job | None:
        """The next job, or None when it is time to look whether to sync or to end."""
        try:
            job = self._queue.get(timeout=self._sync_every_s)
        except queue.Empty:
            return None
        if job is None:
            self._queue.task_done()
        return job

    def _look_at_space(self) -> None:
        if self._now() - self._last_sync_s >= self._sync_every_s:
            if self.durable:
                self._attempt(self.sync_files)
            self._last_sync_s = self._now()
            self._attempt(self._on_sync)

    def _carry_out(self, job: _Job) -> None:
        if self._given_up or (self._rows_over and not job.vital):
            return
        room_made = self._room_made
        done = self._attempt(job.work)
        if not done and not room_made and self._is_full():
            self._room_made = True
            self._make_room()
            done = job.vital and self._attempt(job.work)
        if done and job.sync and self.durable and self._now() - self._last_sync_s >= SYNC_REST_S:
            self._attempt(self.sync_files)

    def _is_full(self) -> bool:
        return TroubleKind.DISK_FULL in self._told

    def _attempt(self, work: Callable[[], None]) -> bool:
        """Do it; whether it was done. What fails is told: a fault of ours must stop the motor as a full disk does, and
        not end the thread in silence."""
        try:
            work()
        except OSError as error:
            self.tell(trouble_of(error))
            return False
        except Exception as error:
            self.tell(Trouble(TroubleKind.FAULT, f"writing the log failed: {type(error).__name__}: {error}"))
            return False
        return True

    def sync_files(self) -> None:
        """Have the disk hold all files as they are now; to be called from a job.

        Raises OSError where it does not hold one of them, after all of them were tried.
        """
        failed: OSError | None = None
        for file in self._files:
            try:
                file.sync()
            except OSError as error:
                failed = failed or error
        self._last_sync_s = self._now()
        if failed is not None:
            raise failed

    def add_file(self, file: Syncable) -> None:
        """Sync this file too from now on; to be called from a job."""
        self._files.append(file)


def within(wait_s: float, work: Callable[[], None]) -> None:
    """Do it in a thread that is left alone where it does not come to an end in time.

    Raises what `work` does, or OSError that it took too long; it may still come to its end then.
    """
    failed: list[Exception] = []

    def attempt() -> None:
        try:
            work()
        except Exception as error:  # whichever it is, it is raised where it is waited for
            failed.append(error)

    thread = threading.Thread(target=attempt, name="ramprig-disk-end", daemon=True)
    thread.start()
    thread.join(wait_s)
    if thread.is_alive():
        raise OSError(errno.ETIMEDOUT, f"the disk took longer than {wait_s:g} s")
    if failed:
        raise failed[0]
