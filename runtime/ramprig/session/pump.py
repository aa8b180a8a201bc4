"""The one place where a session waits: reads the port, repeats what is due, beats, and hands on what was heard.

Everything happens in the thread that calls. Nothing is sent from the background, so a runner that hangs sends no beats
and the device stops the motor by its lease. Only `urgent_stop` may be called from elsewhere: it goes past the queue.
"""

from __future__ import annotations

import random
import threading
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass

from ramprig.errors import Bug, LinkError, LinkLost, StoppedByUser, UsageError
from ramprig.port.base import PatientPort, Port, at_port
from ramprig.port.clock import VirtualClock
from ramprig_link.faults import FieldError, LinkFault, LinkSilent
from ramprig_link.host import Answered, DataReader, HostEvent, HostLink, RetryPolicy

TURN_MAX_S = 0.05
"""Longest single read, so that a panic from another thread is seen soon."""
VIRTUAL_TURN_MAX_S = 1.0
"""The same in virtual time, where a read takes no time of anybody's."""
TIME_GRAIN_S = 1e-6
"""No wait is shorter, so that one that is due in a rounding error's time does not spin on a clock of nanoseconds."""
JOBS_MAX = 32
"""Most requests that wait to be sent."""
URGENTS_KEPT = 32
"""So many urgent stops are remembered until they are told of."""
TAG_COUNT = 255
"""Tags a host may begin with."""


@dataclass(frozen=True, slots=True)
class Job:
    """A request to be sent when none is outstanding; `then` is called with its answer, `ok` or `no`."""

    word: str
    args: tuple[object, ...]
    then: Callable[[Answered], None]


def _data_reader() -> DataReader | None:
    """The quick reader of data lines; a real line, which moves motors, relies on no C compiler."""
    from ramprig.mock.core.dataline import data_reader

    return data_reader()


BEAT = Job("beat", (), lambda answered: None)


class Pump:
    """One port and one link, driven by whoever calls `until` or `request`.

    `hear` is called for everything that came, with the host time of its reception; `chores` once a turn, to do what is
    due by time; both from inside the pump, so they must not call it again (Bug). `late` is called with the seconds
    between two calls of the pump, or two turns, or by which a read took longer than it should, and does the judging.
    What `hear` is given arrived after `since_s`.
    """

    def __init__(
        self,
        port: Port,
        *,
        chance: random.Random,
        retry: RetryPolicy | None,
        hear: Callable[[HostEvent, float], None],
        chores: Callable[[float], None],
        repeated: Callable[[str, float], None],
        late: Callable[[float], None],
    ) -> None:
        self.port = port
        self.clock = port.clock
        in_virtual_time = isinstance(port.clock, VirtualClock)
        self._patient = port if isinstance(port, PatientPort) and in_virtual_time else None
        self._read_until = self._read_for if self._patient is None else self._patient.read_until
        self._turn_max_s = VIRTUAL_TURN_MAX_S if in_virtual_time else TURN_MAX_S
        self.link = HostLink(chance.randrange(TAG_COUNT), retry, read_data=_data_reader() if in_virtual_time else None)
        self.beat_s: float | None = None
        self.muted = False
        self.panic_category: int | None = None
        self.panic_taken = False
        self.urgents: deque[tuple[int, bool]] = deque(maxlen=URGENTS_KEPT)
        self.lost: LinkLost | None = None
        self._hear = hear
        self._chores = chores
        self._repeated = repeated
        self._late = late
        self._jobs: deque[Job] = deque()
        self._job: Job | None = None
        self._sent_s = self.clock.now()
        self.since_s = self._sent_s
        self.bytes_in = 0
        self._turned_s: float | None = None
        self._inside = False
        self._owner = threading.get_ident()

    # ---- for everybody -------------------------------------------------------------------------------------------

    def urgent_stop(self, category: int) -> bool:
        """Send a stop past every queue, from any thread or signal handler; beats cease at once.

        Returns whether the system took the bytes. Unless `panic_taken` is set, the pump raises StoppedByUser at its
        next turn; if it is, a stop is being confirmed, and what confirms it must go on.
        """
        if not self.panic_taken:
            self.muted = True
        known = self.panic_category
        self.panic_category = category if known is None else min(known, category)
        sent = self.port.urgent(HostLink.urgent_stop(category))
        self.urgents.append((category, sent))
        return sent

    # ---- for the owner -------------------------------------------------------------------------------------------

    def until(self, until_s: float) -> None:
        """Work until this time of the port's clock, with one turn at least.

        Raises LinkLost, and StoppedByUser after a panic until the stop is taken up.
        """
        self._enter()
        try:
            self._turn(until_s)
            while self.clock.now() < until_s:
                self._turn(until_s)
        except LinkLost as error:
            self.lost = error
            raise
        finally:
            self._leave()

    def request(self, word: str, *args: object) -> Answered:
        """Send a request before all that wait and work until it is answered, with `ok` or `no`.

        Raises UsageError for wrong arguments, LinkLost on silence, LinkError while a stop is not confirmed.
        """
        if self.muted:
            self._check_panic()
            raise LinkError(f"'{word}' is not sent: a stop was asked for and is not confirmed. Cut the power, reopen.")
        box: list[Answered] = []
        job = Job(word, args, box.append)
        self._jobs.appendleft(job)
        try:
            while not box:
                self.turn(self.clock.now() + self._turn_max_s)
        finally:
            if job in self._jobs:
                self._jobs.remove(job)
        return box[0]

    def post(self, word: str, *args: object, then: Callable[[Answered], None]) -> bool:
        """Send a request when its turn comes, without waiting; False where too many wait already."""
        if len(self._jobs) >= JOBS_MAX:
            return False
        self._jobs.append(Job(word, args, then))
        return True

    def hush(self) -> None:
        """Send nothing more that could keep the outputs alive: no beat, no repeat, nothing that waits."""
        self.muted = True
        self._jobs.clear()
        self._job = None
        if self.link.outstanding is not None:
            self.link.abandon()

    def speak(self) -> None:
        """Allow requests again, after a stop is acknowledged or at a new start."""
        self.muted = False
        self.panic_category = None

    @property
    def idle(self) -> bool:
        """Whether nothing is outstanding and nothing waits to be sent."""
        return not self._jobs and self.link.outstanding is None

    def turn(self, until_s: float) -> None:
        """One round: send what is due, read once until `until_s` at the longest, hand on what came."""
        self._enter()
        try:
            self._turn(until_s)
        except LinkLost as error:
            self.lost = error
            raise
        finally:
            self._leave()

    def _enter(self) -> None:
        if self._inside:
            raise Bug("the session was called from inside one of its own callbacks")
        if threading.get_ident() != self._owner:
            raise Bug("the session was called from another thread than the one that opened it")
        if self.lost is not None:
            raise self.lost
        self._inside = True

    def _leave(self) -> None:
        """Hand on the samples that have waited, whatever has happened: they were received."""
        try:
            self._take_all(self.link.samples(), self.clock.now())
        finally:
            self._inside = False

    def _turn(self, until_s: float) -> None:
        """As `turn`; some tens of turns pass in a second of the device's time, so that this is short."""
        now_s, link = self.clock.now(), self.link
        turned_s = self._turned_s
        if turned_s is not None and now_s > turned_s:
            self._late(now_s - turned_s)
        if self.panic_category is not None:
            self._check_panic()
        beat_s, may_send = self.beat_s, link.due_at_s is None and not self.muted
        if may_send and (self._jobs or (beat_s is not None and now_s >= self._sent_s + beat_s)):  # as `_wait_until`
            self._send_new(now_s)
        wait_until_s = self._wait_until(until_s, now_s)
        data = self._read_until(wait_until_s)
        now_s = self.clock.now()
        if now_s > wait_until_s + TIME_GRAIN_S:  # held up within the read, as by a computer that sleeps
            self._late(now_s - wait_until_s)
        self.since_s, self._turned_s = turned_s or now_s, now_s
        if data:
            self.bytes_in += len(data)
            patient = self._patient
            waits = patient is not None and patient.is_sound
            self._take_all(link.receive(data, now_s, samples_wait=waits), now_s)
        due_s = link.due_at_s
        if due_s is not None and now_s >= due_s and not self.muted:
            self._repeat(now_s)
        self._chores(now_s)

    def _read_for(self, until_s: float) -> bytes:
        """What comes by `until_s`, on any port."""
        wait_s = until_s - self.clock.now()
        return self.port.read(max(wait_s, TIME_GRAIN_S) if wait_s > 0.0 else 0.0)

    def _check_panic(self) -> None:
        if self.panic_category is not None and not self.panic_taken:
            raise StoppedByUser(f"stopped by the user (category {self.panic_category})")

    def _wait_until(self, until_s: float, now_s: float) -> float:
        latest_s = now_s + self._turn_max_s
        if latest_s < until_s:
            until_s = latest_s
        if self.muted:
            return until_s
        due_s = self.link.due_at_s
        if due_s is None:
            if self.beat_s is None:
                return until_s
            due_s = self._sent_s + self.beat_s
        return due_s if due_s < until_s else until_s

    def _send_new(self, now_s: float) -> None:
        """Send the job that waits longest, else the beat that is due."""
        self._job = self._jobs.popleft() if self._jobs else BEAT
        try:
            line = self.link.ask(self._job.word, *self._job.args, now_s=now_s)
        except FieldError as error:
            raise UsageError(f"'{self._job.word}' cannot be sent: {error}") from error
        except LinkFault as error:
            raise Bug(f"'{self._job.word}' cannot be sent: {error}") from error
        if self.muted:  # a signal handler has sent a stop meanwhile
            self.hush()
            return
        self._sent_s = now_s
        self.port.write(line)

    def _repeat(self, now_s: float) -> None:
        try:
            line = self.link.due(now_s)
        except LinkSilent as silent:
            raise LinkLost(f"{at_port(self.port.name)}{silent}") from silent
        if line is not None and self._job is not None:
            self._repeated(self._job.word, now_s)
            self.port.write(line)

    def _take_all(self, events: list[HostEvent], now_s: float) -> None:
        """Take what came together, whatever a listener raises at a part of it: a full disk must not cost the notice of
        a trip. The first error is raised behind the last event."""
        first: Exception | None = None
        for event in events:
            try:
                self._take(event, now_s)
            except Exception as error:  # raised below
                first = first or error
        if first is not None:
            raise first

    def _take(self, event: HostEvent, now_s: float) -> None:
        if not isinstance(event, Answered):
            self._hear(event, now_s)
            return
        job, self._job = self._job, None
        self._hear(event, now_s)
        if job is not None:
            job.then(event)
