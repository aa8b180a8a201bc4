"""Keeps one session: opens and ends it, pumps it between commands, tells what happens, and brings all to rest.

A `Keeper` makes no thread of its own; whoever has it calls it from one. Whatever happens in it, afterwards the outputs
are off, or armed under a lease that only this thread renews.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from ramprig.bench import Bench
from ramprig.errors import LinkError, LinkLost, RamprigError, RecordError, StoppedByUser, Tripped, UsageError
from ramprig.port.base import Port
from ramprig.quantity import format_duration
from ramprig.sequence.broken import broken_by
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.rig import Rig
from ramprig.sequence.tripsay import explain_trip
from ramprig.session import Block, Session, StopReport, Wanted
from ramprig.session import events as e
from ramprig_link.host import HostLink

from .aftermath import Aftermath
from .live import Live, Snapshot
from .logbook import LOGGED, Logbook
from .motions import Motions
from .outbox import Outbox
from .wording import Teller

SLICE_S = 0.02
"""Longest it works without looking for something new to do."""
LOOK_S = 0.2
"""How often the device's state is asked for, for the status line."""
LOOK_ROUND_TRIPS = 10
"""On a slow link it is asked for once in so many round trips, so that the link is left for other things."""
TRAIL_TRIES = 10
"""So often the trail is asked for after a trip; the board goes on recording for a while."""
TRAIL_WAIT_S = 5.0
"""Longest the end waits for a trail: TRAIL_TRIES on a link of which each answer takes long."""

NO_LINK = "no link"
"""The state's word after the link was lost."""

Reopener = Callable[[], Port]
"""Opens the port anew, after the link was lost."""


class Keeper:
    """One bench at one port. `aside` is called while something is under way, to do what may be done at any time.

    `failed` is the last error that a stop, a trip or the link brought, whether a command was under way or not; `clear`
    and `reopen` take it away.
    """

    def __init__(
        self,
        bench: Bench,
        port: Port,
        outbox: Outbox,
        *,
        runs: Path,
        open_again: Reopener | None = None,
        seed: int | None = None,
        aside: Callable[[], None] = lambda: None,
    ) -> None:
        self.bench = bench
        self.port = port
        self.snapshot = Snapshot()
        self.leaving = False
        self.failed: RamprigError | None = None
        self._clock = port.clock
        self._say = outbox.say
        self._open_again = open_again
        self._seed = seed
        self._aside = aside
        self._session: Session | None = None
        self._motions: Motions | None = None
        self._rig = Rig.of(bench)
        self._listeners = Listeners()
        self._listeners.add(on_event=self._on_event)
        self._runs = runs
        self._log = Logbook(bench, runs, self._listeners, port.clock, demand_stop=self._disk_trouble)
        self._teller = Teller(bench)
        self._live = Live(bench)
        self._aftermath = Aftermath(bench, port.clock)
        self._state = "opening"
        self._doing = ""
        self._last_trip = ""
        self._asked_category = 1
        self._unconfirmed = False
        self._lost = False
        self._cautioned = False
        self._closing = False
        self._trail_tries = 0
        self._unexplained: e.Tripped | e.Restarted | None = None
        self.likely: list[str] = []
        """What was said of the cause of the last trip that was seen to come."""
        self._looked_s = 0.0

    # ---- stopping, from any thread -------------------------------------------------------------------------------

    def panic(self, category: int) -> bool:
        """Send a stop at once, past everything; from any thread and from a signal handler. Never raises, never waits.

        Before the device is known the port is told all the same. Whether the system took the bytes.
        """
        self._asked_category = category
        session = self._session
        if session is None:
            return self.port.urgent(HostLink.urgent_stop(category))
        return session.panic(category)

    def _disk_trouble(self, text: str) -> None:
        self._say(f"stopping: {text}")
        self.panic(1)

    # ---- opening and ending --------------------------------------------------------------------------------------

    def open(self) -> None:
        """Know the device: outputs verified off, board and limits as the bench file says. Raises as `Session.open`."""
        self._state = "opening"
        session = Session.open(
            self.port,
            wanted=Wanted.of(self.bench),
            seed=self._seed,
            on_block=self._listeners.on_block,
            on_event=self._listeners.on_event,
        )
        self._session = session
        self._know(session)
        self._say(f"{session.identity.name} answers on {self.port.name}; its outputs are off. 'help' tells the words.")

    def _know(self, session: Session) -> None:
        self._rig = Rig.of(self.bench, tick_us=session.identity.tick_us)
        self._teller.rig = self._rig
        self._motions = Motions(self._rig, session, now=self._clock.now, breathe=self._breathe_armed, say=self._say)
        self._live.forget()
        self._aftermath.forget()
        self._unexplained = None
        self.likely = []
        self._trail_tries = 0
        self._lost = self._unconfirmed = False
        self.failed = None
        self._state = "tripped" if session.trip is not None else "off"
        self._look()

    def close(self) -> bool:
        """Outputs off, log ended, port closed. Whether the outputs are known to be off.

        Where no device answered, at first or when it was opened anew, nothing is known of them.
        """
        session = self._session
        if session is None:
            self.port.close()
            return False
        if not self._lost and (self._state in ("armed", "stopping") or self._unconfirmed):
            self._stop(1)
        if self._trail_tries and not self._lost:
            self._wait_for_trail(session)
        self._explain_restart()
        if self._log.open:
            self._end_log("the shell was left")
        self._closing = True
        session.close()
        return not (self._lost or self._unconfirmed)

    def _wait_for_trail(self, session: Session) -> None:
        """The board records on for a moment after a trip; the log is to have that too. A restart has emptied it."""
        until_s = self._clock.now() + TRAIL_WAIT_S
        try:
            while self._trail_tries and session.valid and self._clock.now() < until_s:
                self._breathe(LOOK_S)
        except RamprigError as error:
            self._say(f"the trail could not be read: {error}")

    # ---- between commands ----------------------------------------------------------------------------------------

    def idle(self) -> None:
        """Keep the session alive for SLICE_S; what it brings is said and kept in `failed`, nothing is raised."""
        try:
            self._breathe(SLICE_S)
        except RamprigError as error:
            self._suffer(error)

    @property
    def dead(self) -> bool:
        """Whether there is no session to keep alive: not opened, or its link is lost."""
        return self._session is None or self._lost

    def _breathe(self, seconds: float) -> None:
        session = self._need()
        until_s = self._clock.now() + seconds
        while True:
            session.pump(min(until_s, self._clock.now() + SLICE_S))
            self._attend(session)
            if self._clock.now() >= until_s:
                return

    def _breathe_armed(self, seconds: float) -> None:
        self._breathe(seconds)
        self._need_armed()

    def _attend(self, session: Session) -> None:
        """What is due by time: the status, troubles of the link, the trail of a trip, a disk that hangs."""
        now_s = self._clock.now()
        self._aside()
        troubles = self._teller.troubles(now_s)
        if troubles:
            self._say(troubles)
        if self._log.stuck and session.armed:
            self._log.tell_stuck()
        pace_s = max(LOOK_S, LOOK_ROUND_TRIPS * session.health.round_trip_median_s)
        if now_s - self._looked_s >= pace_s:
            self._looked_s = now_s
            self._explain_restart()
            if session.valid and not self._unconfirmed:
                reading = session.state()
                self._state = reading.state.word
                self._aftermath.take_reading(reading)
                self._look_at_trail(session)
            self._look()

    def _look(self) -> None:
        """Make the snapshot anew."""
        session = self._session
        if session is None or self._lost:
            self.snapshot = replace(self.snapshot, state=self._state_word(), known=False, doing=self._doing)
            return
        self.snapshot = self._live.snapshot(
            session,
            state=self._state_word(),
            log=self._log.short,
            last_trip=self._last_trip,
            doing=self._doing,
        )

    def _state_word(self) -> str:
        if self._lost:
            return NO_LINK
        if self._unconfirmed:
            return "NOT CONFIRMED"
        session = self._session
        return "restarted" if session is not None and not session.valid else self._state

    def _look_at_trail(self, session: Session) -> None:
        """After a trip, once the board has its fast record whole: put it into the open log, say the likely cause."""
        if self._trail_tries == 0:
            return
        self._trail_tries -= 1
        if session.trip is None or self._state != "tripped":
            self._trail_tries = 0  # it was cleared, and its trail may be gone
            return
        block = session.trail(min(session.trip.index, session.identity.axes - 1))
        if block is None and self._trail_tries:
            return
        self._trail_tries = 0
        if isinstance(self._unexplained, e.Tripped):
            self._explain("tripped", explain_trip(self._unexplained, self._rig), trail=block)
            self._unexplained = None
        if block is not None and self._log.open:
            self._log.trail(block)
            self._say(f"the trail of the trip is in the log ({len(block)} records)")

    def _explain_restart(self) -> None:
        """Say the likely cause of a restart, once all that it brings has been said; its trail is gone."""
        if isinstance(self._unexplained, e.Restarted):
            self._unexplained = None
            self._explain("tripped", "the device has restarted")

    def _explain(self, verdict: str, reason: str, *, trail: Block | None = None) -> None:
        if self._session is not None:
            self.likely = self._aftermath.lines(self._session, self._rig, verdict=verdict, reason=reason, trail=trail)
            self._say_all(self.likely)

    def _on_event(self, event: e.Event) -> None:
        """From inside the pump: must not call the session."""
        self._aftermath.take_event(event)
        match event:
            case e.Armed():
                self._state = "armed"
            case e.StopBegun(category=1):
                self._state = "stopping"
            case e.Stopped(state=state):
                self._state = state
                self._forget_motion()
            case e.Tripped():
                self._last_trip = event.trip
                self._trail_tries = TRAIL_TRIES if self._log.open else 0
                if event.learned is not e.Learned.AT_OPEN:
                    self.failed = Tripped(event.trip, event.tick or 0, explain_trip(event, self._rig))
                    if not isinstance(self._unexplained, e.Restarted):  # else this trip is what the restart brings
                        self._trail_tries, self._unexplained = TRAIL_TRIES, event
            case e.Restarted():
                self._trail_tries, self._unexplained = 0, event
                self.failed = Tripped("restarted", event.tick or 0, "the device has restarted")
                self._forget_motion()
        line = self._teller.tell(event)
        if line is not None and not self._closing:
            self._say(line)

    def _forget_motion(self) -> None:
        if self._motions is not None:
            self._motions.forget()

    # ---- when something goes wrong -------------------------------------------------------------------------------

    def _suffer(self, error: RamprigError) -> None:
        """Something ended what was under way: bring all to rest, say it, keep it."""
        self.failed = error
        match error:
            case StoppedByUser():
                self._stop(self._asked_category)
            case LinkLost():
                self._lost = True
                self._say(f"LINK LOST: {error}")
                self._explain("link lost", str(error))
                self._say("The board stops by itself when its lease is over. 'reopen' opens the device anew.")
                if self._log.open:
                    self._break_log(error, sampling=False)
            case _:
                self._say(f"error: {error}")
                if self._state == "armed" or self._log.open:
                    self._stop(1)
                if self._log.open:
                    self._break_log(error)
        self._look()

    def _stop(self, category: int) -> StopReport:
        session = self._need()
        self.snapshot = replace(self.snapshot, state="stopping", motors=(), servos=(), doing="confirming the stop")
        report = self._stopped(session, category)
        self._asked_category = 1
        self._unconfirmed = not report.confirmed
        self._forget_motion()
        if report.confirmed:
            rest = f"; not measured by this board: {', '.join(report.unmeasured)}" if report.unmeasured else ""
            off = "" if report.off_s is None else f" after {format_duration(round(report.off_s, 3))}"
            self._say(f"stop confirmed: outputs off{off}{rest}")
        else:
            self._say(f"*** {report.verdict} ***")
            self._say("Nothing more is sent, so that the lease ends what still runs. 'reopen' opens the device anew.")
        self._look()
        return report

    def _stopped(self, session: Session, category: int) -> StopReport:
        """Stop. A log that cannot be written is said, and the stop is what counts."""
        try:
            return session.stop(category)
        except RecordError as error:
            self._say(f"error: {error}")
            if session.last_stop is None:
                raise
            return session.last_stop

    def _break_log(self, error: RamprigError, *, sampling: bool = True) -> None:
        end = broken_by(error)
        self._end_log(end.stop_reason, sampling=sampling, verdict=end.verdict)

    def _end_log(self, reason: str, *, sampling: bool = True, verdict: str = LOGGED) -> None:
        session = self._session  # also one whose link is lost: what came before that is to be whole
        if session is None:
            raise LinkError("the device is not open")
        try:
            self._say(self._log.stop(session, reason=reason, sampling=sampling, verdict=verdict))
        except RamprigError as error:
            self._say(f"the log could not be ended in order: {error}")

    # ---- small things --------------------------------------------------------------------------------------------

    def _need(self) -> Session:
        if self._lost:
            raise LinkError("the link is lost; 'reopen' opens the device anew")
        if self._session is None:
            raise LinkError("the device is not open")
        return self._session

    def _need_armed(self) -> None:
        session = self._need()
        if session.armed:
            return
        if session.trip is not None:
            trip = session.trip
            raise Tripped(trip.trip, trip.tick or 0, f"tripped: {explain_trip(trip, self._rig)}")
        if not session.valid:
            raise LinkError("the device has restarted; 'reopen' opens it anew")
        raise UsageError("the outputs are off; 'arm' enables them")

    def _say_all(self, lines: list[str]) -> None:
        for line in lines:
            self._say(line)
