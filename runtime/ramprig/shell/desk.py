"""Carries commands out on one session, in the one thread that owns it, and keeps the session alive between them.

A `Desk` makes no thread of its own: `worker` gives it one, and a test calls it directly in virtual time. Whatever
happens in it, afterwards the outputs are off or armed under a lease that only this thread renews.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from ramprig.bench import Bench
from ramprig.cautions import REMINDER
from ramprig.errors import FileError, LinkError, LinkLost, RamprigError, Refused, StoppedByUser, Tripped, UsageError
from ramprig.port.base import Port
from ramprig.quantity import format_duration, format_duty
from ramprig.sequence.executive import Progress
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.rig import Rig
from ramprig.sequence.tripsay import explain_trip
from ramprig.session import Session, StopReport, Wanted
from ramprig.session import events as e
from ramprig_link.host import HostLink

from . import commands as c
from . import replies, running
from .hold import Hold
from .live import Live, Snapshot
from .logbook import Logbook
from .motions import Motions
from .outbox import Outbox
from .wording import Teller
from .words import help_lines

SLICE_S = 0.02
"""Longest the desk works without looking for something new to do."""
LOOK_S = 0.2
"""How often the device's state is asked for, for the status line."""
LOOK_ROUND_TRIPS = 10
"""On a slow link it is asked for once in so many round trips, so that the link is left for other things."""
TRAIL_TRIES = 10
"""So often the trail is asked for after a trip; the board goes on recording for a while."""


class RunEnded(RamprigError):
    """A sequence did not end as passed; all has been said, `exit_code` is the run's."""

    def __init__(self, exit_code: int, sentence: str) -> None:
        self.exit_code = exit_code
        super().__init__(sentence)


Reopener = Callable[[], Port]
"""Opens the port anew, after the link was lost."""


class Desk:
    """One bench at one port. `aside` is called while something is under way, to do what may be done at any time.

    `failed` is the last error that a stop, a trip or the link brought while no command was under way.
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
        self._state = "opening"
        self._doing = ""
        self._last_trip = ""
        self._asked_category = 1
        self._unconfirmed = False
        self._lost = False
        self._cautioned = False
        self._closing = False
        self._trail_tries = 0
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
        self._lost = self._unconfirmed = False
        self._state = "tripped" if session.trip is not None else "off"
        self._look()

    def close(self) -> bool:
        """Outputs off, log ended, port closed. Whether the outputs are known to be off."""
        session = self._session
        if session is None:
            self.port.close()
            return True
        if not self._lost and (self._state in ("armed", "stopping") or self._unconfirmed):
            self._stop(1)
        if self._log.open and not self._lost:
            self._wait_for_trail()
        if self._log.open:
            self._end_log("the shell was left")
        self._closing = True
        session.close()
        return not (self._lost or self._unconfirmed)

    def _wait_for_trail(self) -> None:
        """The board records on for a moment after a trip; the log is to have that too."""
        try:
            while self._trail_tries:
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
            self._disk_trouble("the disk makes no progress")
        pace_s = max(LOOK_S, LOOK_ROUND_TRIPS * session.health.round_trip_median_s)
        if now_s - self._looked_s >= pace_s:
            self._looked_s = now_s
            if session.valid and not self._unconfirmed:
                self._state = session.state().state.word
                self._save_trail(session)
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
            return "no link"
        if self._unconfirmed:
            return "NOT CONFIRMED"
        session = self._session
        return "restarted" if session is not None and not session.valid else self._state

    def _save_trail(self, session: Session) -> None:
        """After a trip, once the board has it whole, put its fast record into the open log."""
        if self._trail_tries == 0:
            return
        self._trail_tries -= 1
        if session.trip is None or self._state != "tripped":
            return
        block = session.trail(min(session.trip.index, session.identity.axes - 1))
        if block is not None:
            self._trail_tries = 0
            self._log.trail(block)
            self._say(f"the trail of the trip is in the log ({len(block)} records)")

    def _on_event(self, event: e.Event) -> None:
        """From inside the pump: must not call the session."""
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
            case e.Restarted():
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
                self._say("The board stops by itself when its lease is over. 'reopen' opens the device anew.")
                if self._log.open:
                    self._end_log("the link was lost", sampling=False)
            case _:
                self._say(f"error: {error}")
                if self._state == "armed" or self._log.open:
                    self._stop(1)
                if self._log.open:
                    self._end_log(str(error))
        self._look()

    def _stop(self, category: int) -> StopReport:
        session = self._need()
        self.snapshot = replace(self.snapshot, state="stopping", motors=(), servos=(), doing="confirming the stop")
        report = session.stop(category)
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

    def _end_log(self, reason: str, *, sampling: bool = True) -> None:
        try:
            self._say(self._log.stop(self._need(), reason=reason, sampling=sampling))
        except RamprigError as error:
            self._say(f"the log could not be ended in order: {error}")

    # ---- commands ------------------------------------------------------------------------------------------------

    def perform(self, command: c.Command, *, doing: str = "") -> None:
        """Carry a command out to its end. Raises `RamprigError` where it was refused, stopped or overtaken by a trip;
        then everything is at rest, or as it was before.
        """
        self._doing = doing
        try:
            self._carry_out(command)
        except (StoppedByUser, LinkLost) as error:
            self._suffer(error)
            raise
        except (UsageError, FileError, Refused, Tripped, RunEnded, LinkError):
            raise
        except RamprigError as error:
            self._suffer(error)
            raise
        finally:
            self._doing = ""
            self._look()

    def _carry_out(self, command: c.Command) -> None:
        match command:
            case c.Help(word=word):
                self._say_all(help_lines(word, self.bench))
            case c.Leave():
                self.leaving = True
            case c.Reopen():
                self._reopen()
            case c.StopAll(category=category):
                self._stop(category)
            case c.Mark() | c.Note():
                self.write_down(command)
            case c.CheckFile(file=file):
                running.check_file(file, self.bench, self._rig.tick_us, self._say)
            case c.JogHold() | c.JogFor() | c.RampTo() | c.Release() | c.Move() | c.MoveOff() | c.Wait():
                self._move(command)
            case _:
                self._tell_or_set(command, self._need())

    def _tell_or_set(self, command: c.Command, session: Session) -> None:
        match command:
            case c.Arm():
                self._arm(session)
            case c.Disarm():
                session.disarm()
                self._state = "off"
                self._forget_motion()
                self._say("disarmed")
            case c.Clear():
                session.clear()
                self._state = "off"
                self._say("the trip is cleared; the outputs stay off until 'arm'")
            case c.Who():
                self._say_all(replies.who_lines(session.identity))
            case c.Why():
                self._why(session)
            case c.State():
                self._state = session.state().state.word
                self._look()
                self._say_all(replies.state_lines(self.snapshot))
            case c.Limits(name=name):
                self._say_all(replies.limit_lines(self.bench, session.limits, session.identity.tick_s, name))
            case c.Counts():
                self._say_all(replies.counter_lines(session.counters(), session.health))
            case c.LogStart(name=name):
                self._say(f"logging into {self._log.start(session, self._rig, name, self.port.name)}")
            case c.LogStop():
                self._say(self._log.stop(session, reason="the log was stopped by the user"))
            case c.Trail(motor=motor):
                block = session.trail(motor.axis)
                if block is None:
                    raise UsageError("the board keeps no trail: it is frozen by a trip and emptied by 'arm'")
                self._say_all(replies.trail_lines(block, motor.axis, motor.name, session.identity.tick_s))
            case c.RunFile(file=file):
                self._run(file, session)

    def _arm(self, session: Session) -> None:
        if session.armed:
            raise UsageError("the outputs are armed already")
        if session.trip is not None:
            raise UsageError("a trip is latched: 'why' tells of it, 'clear' ends it once its cause is gone")
        if not self._cautioned:
            self._cautioned = True
            self._say(REMINDER)
        session.arm(min(self.bench.link.lease_ms, session.limits["lease_ms", 0]))
        self._forget_motion()
        ceilings = [f"{axis.name} up to {format_duty(axis.ceiling_duty)}" for axis in self._rig.axes.values()]
        angles = [f"{servo.name} {servo.low_deg:g} to {servo.high_deg:g} deg" for servo in self.bench.servos]
        self._say(f"ARMED: {', '.join(ceilings + angles)}")
        self._say(
            f"The board stops by itself after {format_duration(self.bench.link.lease_ms / 1000)} of silence. "
            "Ctrl-C stops, twice cuts."
        )

    def _why(self, session: Session) -> None:
        record = session.why()
        if record is None:
            self._say("the board has not tripped since its start")
            return
        trip = e.Tripped(
            tick=record.tick,
            host_s=self._clock.now(),
            trip=record.trip.word,
            index=record.index,
            value=record.value,
            bound=record.bound,
            learned=e.Learned.ASKED,
        )
        over = "" if session.trip is not None else " (cleared since)"
        self._say(f"last trip, at tick {record.tick}: {explain_trip(trip, self._rig)}{over}")

    def _move(self, command: c.Command) -> None:
        motions = self._motions
        self._need()
        if motions is None:
            raise LinkError("the device is not open")
        if isinstance(command, c.Wait):
            motions.wait(command.for_s) if self._state == "armed" else self._breathe(command.for_s)
            return
        self._need_armed()
        match command:
            case c.JogHold(motor=motor, hold=hold):
                motions.jog_hold(motor, self._keys(hold))
            case c.JogFor(motor=motor, duty=duty, for_s=for_s):
                motions.jog_for(motor, duty, for_s)
            case c.RampTo(motor=motor, duty=duty, in_s=in_s):
                motions.ramp_to(motor, duty, in_s)
            case c.Release(motor=motor, brake=brake):
                motions.release(motor, brake=brake)
            case c.Move(servo=servo, angle_deg=angle_deg, in_s=in_s):
                motions.move(servo, angle_deg, in_s)
            case c.MoveOff(servo=servo):
                motions.move_off(servo)

    @staticmethod
    def _keys(hold: Hold | None) -> Hold:
        if hold is None:
            raise UsageError("jog by keys needs a terminal; write 'jog MOTOR DUTY for TIME'")
        return hold

    def write_down(self, command: c.Command) -> None:
        """Mark or note into the log; also while another command is under way."""
        match command:
            case c.Mark(text=text):
                tick = self._need().tick_now()
                self._log.mark(tick, text)
                self._say(f"marked tick {tick}: {text}")
            case c.Note(text=text):
                self._log.note(text)
                self._say(f"noted: {text}")

    def _reopen(self) -> None:
        if self._log.open:
            self._end_log("the device was opened anew", sampling=False)
        if not self._lost and self._session is not None:
            self._session.reopen()
            self._know(self._session)
        else:
            if self._open_again is None:
                raise UsageError("the port cannot be opened anew from here; leave, and start again")
            self.port.close()
            self._session = None
            self.port = self._open_again()
            self.open()
            return
        self._say("opened anew; the outputs are off")

    def _run(self, file: str, session: Session) -> None:
        if self._log.open:
            raise UsageError("a log is being written; 'log stop' first: a run has a log of its own")
        if session.armed:
            session.disarm()
        stage = running.Stage(
            bench=self.bench,
            session=session,
            listeners=self._listeners,
            clock=self._clock,
            port_name=self.port.name,
            runs=self._runs,
        )
        outcome = running.run_file(file, stage, say=self._say, progress=self._progress)
        self._forget_motion()
        self._unconfirmed = not outcome.stop_confirmed
        if outcome.exit_code:
            raise RunEnded(outcome.exit_code, str(outcome))

    def _progress(self, progress: Progress) -> None:
        self._aside()
        self._doing = running.progress_text(progress)
        now_s = self._clock.now()
        if now_s - self._looked_s >= LOOK_S:
            self._looked_s = now_s
            self._look()

    # ---- small things --------------------------------------------------------------------------------------------

    def _need(self) -> Session:
        if self._session is None:
            raise LinkError("the device is not open")
        if self._lost:
            raise LinkError("the link is lost; 'reopen' opens the device anew")
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
