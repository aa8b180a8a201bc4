"""The thread that owns the session: takes one command at a time, and pumps between them.

The terminal's thread posts commands and reads `snapshot`; a stop goes past all of this, straight to the port. When this
thread hangs, nothing renews the lease, and the board stops by itself.
"""

from __future__ import annotations

import queue
import threading
import traceback
from collections.abc import Callable
from dataclasses import dataclass, field
from functools import partial

from ramprig.errors import Bug, LinkLost, RamprigError, StoppedByUser

from . import commands as c
from .desk import Desk, RunEnded
from .live import Snapshot

COMMANDS_MAX = 1
"""Commands that wait for the one under way. None may pile up: what is typed is done now, or refused."""
ASIDES_MAX = 16
"""Marks and notes that wait while a command is under way."""
DEAD_WAIT_S = 0.05
"""How long the thread sleeps between two looks at the queue while there is no session to pump."""


@dataclass(slots=True, eq=False)
class Job:
    """A command on its way; `done` is set at its end, `error` is there where that was not in order."""

    command: c.Command
    text: str
    done: threading.Event = field(default_factory=threading.Event)
    error: RamprigError | None = None


class Worker:
    """Runs a `Desk` in a thread of its own. `make` builds the desk there, given what to do aside.

    `opened` is set when the device is known, or could not be: then `error` says why.
    """

    def __init__(self, make: Callable[[Callable[[], None]], Desk], say: Callable[[str], None]) -> None:
        self._say = say
        self._jobs: queue.Queue[Job] = queue.Queue(COMMANDS_MAX)
        self._asides: queue.Queue[Job] = queue.Queue(ASIDES_MAX)
        self._under_way: Job | None = None
        self._desk = make(self._do_asides)
        self._leave = threading.Event()
        self.opened = threading.Event()
        self.error: RamprigError | None = None
        self.off_confirmed = False
        self._thread = threading.Thread(target=self._run, name="ramprig session", daemon=True)

    # ---- for the terminal's thread -------------------------------------------------------------------------------

    def start(self) -> None:
        """Open the device and take commands."""
        self._thread.start()

    @property
    def snapshot(self) -> Snapshot:
        """The newest that is known."""
        return self._desk.snapshot

    @property
    def busy(self) -> str:
        """The command under way as it was typed, empty where there is none."""
        job = self._under_way
        return "" if job is None else job.text

    @property
    def ended(self) -> bool:
        """Whether the thread is over."""
        return self.opened.is_set() and not self._thread.is_alive()

    @property
    def failed(self) -> RamprigError | None:
        """The last stop, trip or loss of the link that came between commands."""
        return self._desk.failed

    def panic(self, category: int) -> bool:
        """Send a stop at once, from any thread and from a signal handler; whether the system took the bytes."""
        return self._desk.panic(category)

    def post(self, command: c.Command, text: str) -> Job | None:
        """Have a command carried out; None where another one is under way, or too much waits."""
        job = Job(command, text)
        aside = isinstance(command, c.AT_ANY_TIME)
        if self._under_way is not None and not aside:
            return None
        try:
            (self._asides if aside and self._under_way is not None else self._jobs).put_nowait(job)
        except queue.Full:
            return None
        return job

    def leave(self) -> None:
        """End: outputs off, log ended, port closed; `join` waits for it."""
        self._leave.set()

    def join(self, timeout_s: float | None = None) -> None:
        """Wait until the thread is over."""
        self._thread.join(timeout_s)

    # ---- the thread ----------------------------------------------------------------------------------------------

    def _run(self) -> None:
        try:
            try:
                self._desk.open()
            except RamprigError as error:
                self.error = error
                return
            finally:
                self.opened.set()
            while not self._leave.is_set():
                self._turn()
        except Exception as error:  # whatever it is, it ends in a stop below
            self.error = Bug(f"{type(error).__name__}: {error}")
            self._say(traceback.format_exc().rstrip())
        finally:
            self._end()

    def _turn(self) -> None:
        desk = self._desk
        try:
            job = self._jobs.get(timeout=DEAD_WAIT_S) if desk.dead else self._jobs.get_nowait()
        except queue.Empty:
            if not desk.dead:
                desk.idle()
            return
        self._under_way = job
        try:
            self._do(job, partial(desk.perform, job.command, doing=job.text))
        finally:
            self._under_way = None
            self._do_asides()
        if desk.leaving:
            self._leave.set()

    def _do(self, job: Job, work: Callable[[], None]) -> None:
        try:
            work()
        except (RunEnded, StoppedByUser, LinkLost) as error:  # all has been said
            job.error = error
        except RamprigError as error:
            job.error = error
            self._say(f"{error}")
        except Exception as error:
            job.error = Bug(f"{type(error).__name__}: {error}")
            raise
        finally:
            job.done.set()

    def _do_asides(self) -> None:
        """Marks and notes, also while a command is under way."""
        while True:
            try:
                job = self._asides.get_nowait()
            except queue.Empty:
                return
            self._do(job, partial(self._desk.write_down, job.command))

    def _end(self) -> None:
        try:
            self.off_confirmed = self._desk.close()
        except Exception as error:
            self.error = self.error or Bug(f"{type(error).__name__}: {error}")
            self._say(traceback.format_exc().rstrip())
        for jobs in (self._jobs, self._asides):
            while not jobs.empty():
                jobs.get_nowait().done.set()
