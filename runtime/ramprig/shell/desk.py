"""Carries commands out on one session, in the one thread that owns it.

`worker` gives it a thread, and a test calls it directly in virtual time.
"""

from __future__ import annotations

from ramprig.cautions import REMINDER
from ramprig.errors import FileError, LinkError, LinkLost, RamprigError, Refused, StoppedByUser, Tripped, UsageError
from ramprig.quantity import format_duration, format_duty
from ramprig.sequence.executive import Progress
from ramprig.sequence.tripsay import explain_trip
from ramprig.session import Session
from ramprig.session import events as e

from . import commands as c
from . import replies, running
from .hold import Hold
from .keeper import LOOK_S, Keeper
from .words import help_lines


class RunEnded(RamprigError):
    """A sequence did not end as passed; all has been said, `exit_code` is the run's."""

    def __init__(self, exit_code: int, sentence: str) -> None:
        self.exit_code = exit_code
        super().__init__(sentence)


class Desk(Keeper):
    """The keeper of a session that also does what is asked for."""

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
                self._aftermath.forget()  # what comes next has a cause of its own
                self._state = "off"
                self.failed = None
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
        self._say_all(self.likely)

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
