"""Runs a plan and brings it to an end: whatever happens, the outputs are off and the reason is known afterwards."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from typing import Protocol

from ramprig.errors import LinkError, Place, RecordError, Refused, StoppedByUser, WrongDevice
from ramprig.port.clock import Clock
from ramprig.quantity import format_duration
from ramprig.session.blocks import Block
from ramprig.session.events import Event, Tripped
from ramprig.session.session import Session
from ramprig.session.stop import StopReport
from ramprig_link.words import State

from .absence import Absence
from .cycle_run import CycleBook
from .executive import Executive, Progress
from .listeners import Listeners
from .outcome import Ended, Outcome, Tally, Verdict
from .plan import Part, Plan
from .rig import Rig
from .tripsay import explain_trip

TAIL_S = 0.3
"""Logging goes on for so long after the outputs are off, so that the log shows the end."""
OFF_SEEN_S = 6.0
"""After a trip the outputs are off within this time: the longest stop that a device may take, and some."""
TRAIL_WAIT_S = 1.0
"""The trail is frozen within this time of a trip."""
POLL_S = 0.05
BY_USER = "stopped by the user"
"""Or by whoever else asked the session to stop: who that was is known above."""
STOPS_MAX = 3
"""So often a stop that is asked for while the run is ended is confirmed, and the ending gone on with."""


class Keeper(Protocol):
    """Who writes a run down, as far as the end of a run needs it."""

    def on_event(self, event: object) -> None:
        """Take an event."""
        ...

    def on_trail(self, blocks: Sequence[Block]) -> None:
        """Take the fast record around a trip."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class Bounds:
    """When a run must end, whatever is left to do: `until_s` on the port's clock, and the sentence that says why."""

    until_s: float
    text: str


@dataclass(frozen=True, slots=True)
class _End:
    verdict: Verdict
    sentence: str
    place: Place | None
    carried_out: bool = False


def run_plan(
    session: Session,
    plan: Plan,
    rig: Rig,
    *,
    clock: Clock,
    listeners: Listeners,
    keeper: Keeper | None = None,
    progress: Callable[[Progress], None] | None = None,
    book: CycleBook | None = None,
    tally: Tally | None = None,
    bounds: Bounds | None = None,
    begun: Callable[[int, Part], None] | None = None,
) -> Outcome:
    """Log, arm, carry the plan out, and end with the outputs off; tells how it ended.

    `clock` is the port's, `listeners` are those of the session. `book` counts the cycles and `tally` the expectations,
    from what earlier parts of the run have done; `begun` is told of each step that begins. Raises nothing for what
    device, link, disk or user do: that is the outcome. Any other exception stops the motors first.
    """
    run = _Run(session, plan, rig, clock, keeper, listeners, progress)
    run.begin_with(book, tally, bounds)
    run.executive.begun = begun
    try:
        return run.whole()
    finally:
        run.leave()


class _Run:
    """One run from arming to its outcome."""

    def __init__(
        self,
        session: Session,
        plan: Plan,
        rig: Rig,
        clock: Clock,
        keeper: Keeper | None,
        listeners: Listeners,
        progress: Callable[[Progress], None] | None,
    ) -> None:
        self.session = session
        self.plan = plan
        self.rig = rig
        self.clock = clock
        self.keeper = keeper
        self.listeners = listeners
        tell = _nothing if keeper is None else keeper.on_event
        self.executive = Executive(session, clock, plan, rig, tell, progress)
        self.confirmed = True
        self.trip_told = False
        self.absence = Absence(clock)
        self.unrecorded: RecordError | None = None
        listeners.add(on_block=self.executive.on_block, on_event=self._on_event)

    def begin_with(self, book: CycleBook | None, tally: Tally | None, bounds: Bounds | None) -> None:
        """What is counted already, and how long it may take."""
        if book is not None:
            self.executive.book = book
        if tally is not None:
            self.executive.tally = tally
        if bounds is not None:
            self.executive.until_s, self.executive.until_text = bounds.until_s, bounds.text

    def _on_event(self, event: Event) -> None:
        self.absence.on_event(event)
        self.executive.on_event(event)

    def leave(self) -> None:
        """Listen no longer."""
        self.listeners.remove(on_block=self.executive.on_block, on_event=self._on_event)

    def whole(self) -> Outcome:
        """The run and its end."""
        try:
            end = self._carry_out()
        except BaseException:
            self._stop()
            raise
        end = self._bring_down(end)
        if self.executive.book is not None:
            self.executive.book.abandon(end.sentence)
        return self._outcome(end)

    # ---- while it lasts ------------------------------------------------------------------------------------------

    def _carry_out(self) -> _End:
        """The plan from begin to end, and every known way to end before."""
        executive, session = self.executive, self.session
        try:
            self._begin()
            executive.run()
            session.disarm()
            return self._judged()
        except Ended as ended:
            return _End(ended.verdict, ended.sentence, ended.place)
        except StoppedByUser:
            return _End(Verdict.STOPPED, BY_USER, executive.place)
        except Refused as refused:
            return self._refused(refused)
        except RecordError as error:
            return _End(Verdict.NOT_RECORDED, f"the log could not be written: {error}", executive.place)
        except LinkError as error:
            return _End(Verdict.LINK_LOST, str(error), executive.place)

    def _begin(self) -> None:
        session, plan = self.session, self.plan
        if session.identity.tick_us != plan.tick_us:
            found = f"the board's tick is {session.identity.tick_us} us"
            raise WrongDevice(f"{found}, and the plan was made for {plan.tick_us} us")
        if session.trip is not None:
            # A latch that stands from before is somebody else's finding: it is shown, not cleared away.
            trip = explain_trip(session.trip, self.rig)
            raise Ended(Verdict.TRIPPED, f"the device is still tripped from before ({trip}): clear it first", None)
        self.executive.check_wear()  # of a run that is gone on with; then nothing is to move any more
        self.executive.trip = self.executive.stop = None  # whatever was told of before is over
        session.log(plan.period_ticks, plan.mask)
        session.arm(self.rig.bench.link.lease_ms)

    def _judged(self) -> _End:
        tally = self.executive.tally
        if not tally.failed:
            text = "all steps carried out"
            if tally.held:
                text += f", {_count(tally.held, 'expectation')} held"
            return _End(Verdict.PASSED, text, None, carried_out=True)
        place = self.executive.first_failure_place
        more = f" (and {tally.failed - 1} more)" if tally.failed > 1 else ""
        return _End(Verdict.FAILED, f"{tally.first}{more}", place, carried_out=True)

    def _refused(self, refused: Refused) -> _End:
        """A refusal is often the first sign of a trip, whose notice is on its way."""
        executive = self.executive
        try:
            executive.wait_for_trip()
        except StoppedByUser:
            return _End(Verdict.STOPPED, BY_USER, executive.place)
        except LinkError as error:
            return _End(Verdict.LINK_LOST, str(error), executive.place)
        if executive.trip is not None:
            return _End(Verdict.TRIPPED, "", executive.place)
        return _End(Verdict.REFUSED, str(refused), executive.place)

    # ---- the end -------------------------------------------------------------------------------------------------

    def _bring_down(self, end: _End) -> _End:
        """Outputs off and confirmed, the trip explained and its trail kept, the log ended.

        A stop that the user asks for meanwhile is confirmed before anything else goes on.
        """
        try:
            end = self._with_trip(end)
            for _ in range(STOPS_MAX):
                end = self._take_off(end)
                if self._log_ended():
                    break
            else:
                self.confirmed = self._stop().confirmed
        except (LinkError, Refused) as error:
            self.confirmed = False
            if end.verdict is not Verdict.LINK_LOST:
                end = replace(end, sentence=f"{end.sentence}; afterwards: {error}")
        except RecordError as error:
            self.unrecorded = error
            self.confirmed = self._stop().confirmed
        if self.unrecorded is not None and end.verdict is not Verdict.NOT_RECORDED:
            text = f"{end.sentence}; the log could not be written: {self.unrecorded}"
            end = replace(end, verdict=Verdict.NOT_RECORDED, sentence=text)
        return end

    def _with_trip(self, end: _End) -> _End:
        """The end by a trip, in words."""
        trip = self.executive.trip
        return end if trip is None or end.sentence else replace(end, sentence=self._told(trip))

    def _told(self, trip: Tripped) -> str:
        """The trip in words, with what the device can be asked; whatever comes between, the trip itself is told."""
        self.trip_told = True
        sentence, after = explain_trip(trip, self.rig), ""
        for _ in range(STOPS_MAX):
            try:
                sentence = self._take_trip(trip, sentence)
            except StoppedByUser:
                self.confirmed = self._stop().confirmed
                continue
            except RecordError as error:
                self.unrecorded = error
            except (LinkError, Refused) as error:
                after = f"; afterwards: {error}"
            break
        if not self.executive.start:
            return sentence + after
        seconds = (0 if trip.tick is None else max(0, trip.tick - self.executive.start)) * self.plan.tick_us / 1e6
        return f"{sentence}, {seconds:.2f} s into the run{after}"

    def _take_off(self, end: _End) -> _End:
        """Stop, unless the outputs are off and nobody has asked for a stop; tell a trip that is not told of yet."""
        if not self._known_off():
            report = self._stop()
            self.confirmed = report.confirmed
            if not report.confirmed:
                verdict = report.verdict.replace(f"; {end.sentence}", "")  # a lost link need not be told twice
                end = replace(end, sentence=f"{end.sentence}; stop {verdict}")
        trip = self.executive.trip
        if trip is not None and not self.trip_told and end.verdict is not Verdict.TRIPPED:
            end = replace(end, sentence=f"{end.sentence}; while stopping, the device tripped: {self._told(trip)}")
        return end

    def _stop(self) -> StopReport:
        """Stop, confirmed or not. Whoever records may fail in the middle of it, once: then it is made once more."""
        try:
            return self.session.stop(1)
        except RecordError as error:
            self.unrecorded = error
            return self.session.stop(1)

    def _known_off(self) -> bool:
        """Whether the device says, asked now, that its outputs are off."""
        if not self.session.valid:
            return False
        try:
            return self.session.state().outputs_off
        except (LinkError, Refused, StoppedByUser):  # a stop that was asked for is to be confirmed, whatever is known
            return False

    def _take_trip(self, trip: Tripped, sentence: str) -> str:
        """Wait until the outputs are off, ask why, keep the trail; the sentence, with what is learnt."""
        session = self.session
        if not (session.valid and self.confirmed):  # after a stop that is not confirmed nothing is asked
            return sentence
        bound_s = self.clock.now() + OFF_SEEN_S
        while session.state().state is not State.TRIPPED and self.clock.now() < bound_s:
            session.pump(self.clock.now() + POLL_S)
        record = session.why()
        if record is not None and record.tick != trip.tick and self.executive.trip is not None:
            sentence = f"{sentence}; then {explain_trip(self.executive.trip, self.rig)}"
        if self.keeper is not None:
            axes = sorted(self.rig.axes.values(), key=lambda axis: (axis.index != trip.index, axis.index))
            for axis in axes:
                block = self._trail(axis.index)
                if block is not None:
                    self.keeper.on_trail([block])
        return sentence

    def _trail(self, axis: int) -> Block | None:
        bound_s = self.clock.now() + TRAIL_WAIT_S
        while True:
            block = self.session.trail(axis)
            if block is not None or self.clock.now() >= bound_s:
                return block
            self.session.pump(self.clock.now() + POLL_S)

    def _log_ended(self) -> bool:
        """End the log, with its tail; False where the user asked for a stop meanwhile."""
        try:
            if self.session.valid and self.session.logging and self.confirmed:
                self.session.pump(self.clock.now() + TAIL_S)
                self.session.stop_log()
        except StoppedByUser:
            return False
        return True

    def _outcome(self, end: _End) -> Outcome:
        executive = self.executive
        tally, trip, book = executive.tally, executive.trip, executive.book
        elapsed_s = max(0, executive.now - executive.start) * self.plan.tick_us / 1e6 if executive.start else 0.0
        return Outcome(
            verdict=end.verdict,
            sentence=end.sentence + self._beside(),
            place=end.place,
            carried_out=end.carried_out,
            start_tick=executive.start or None,
            held=tally.held,
            failed=tally.failed,
            failures=tuple(tally.failures),
            passes=executive.passes,
            elapsed_s=elapsed_s,
            stop_confirmed=self.confirmed,
            overdue=executive.overdue,
            trip="" if trip is None else trip.trip,
            restarted=executive.restarted is not None,
            cycles=book.counted if book is not None and self.plan.counts_cycles else None,
            slept_s=tuple(self.absence.slept_s),
            away_s=round(self.absence.longest_s(), 1),
        )

    def _beside(self) -> str:
        """What else must be known of the run, for the end of its sentence."""
        book = self.executive.book
        text = ""
        if book is not None and self.plan.counts_cycles:
            text += f"; cycles: {book.counted}"
        if book is not None and book.watch is not None and self.plan.counts_cycles:
            to_watch, unjudged = book.watch.to_watch(), book.watch.unjudged()
            text += f"; to watch: {to_watch}" if to_watch else ""
            text += f"; {unjudged.text}" if unjudged.text and not unjudged.ends_run else ""
        slept_s = self.absence.slept_s
        if slept_s:
            text += f"; the host slept {_count(len(slept_s), 'time')}, {format_duration(sum(slept_s))} in all"
        return text


def _nothing(event: object) -> None:
    """Nobody writes this run down."""


def _count(number: int, what: str) -> str:
    return f"{number} {what}" if number == 1 else f"{number} {what}s"
