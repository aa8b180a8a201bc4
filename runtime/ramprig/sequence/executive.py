"""Runs a plan on a session: one loop in one thread that pumps, sends orders ahead, looks at samples, and ends.

Orders leave AHEAD_S before their start, so that a pause of the host never shows in the motion. Expectations and waits
are looked at when the samples they need have come. However it ends, `ending.run_plan` has the outputs off, and
confirmed off, before it returns. The same loop runs in real and in virtual time.

Longer than most files here: what a strand may ask for is answered in one place, by one view of ticks and samples.
"""

from __future__ import annotations

import heapq
from collections.abc import Callable
from dataclasses import dataclass, field
from itertools import count

from ramprig.errors import Place
from ramprig.port.clock import Clock, VirtualClock
from ramprig.session.blocks import Block
from ramprig.session.events import Event, OrderDone, Restarted, StopBegun, Tripped
from ramprig.session.session import Session
from ramprig.session.watch import TICK_SLACK_S

from .cycle_run import CycleBook, Due, RunSoFar
from .dispatch import Dispatch
from .expect import LEAD_IN_S, Bearings, Eye, Finding
from .happened import Marked, PassBegun, WaitEnded
from .names import CYCLE_BEGIN
from .outcome import Ended, Judged, Tally, Verdict
from .plan import Await, Judge, Moment, Part, Plan, Standstill
from .rig import Axis, Rig
from .ring import Ring
from .steps import Measure
from .strands import Ask, Begin, Fork, Hang, Look, NextTurn, Note, Pass, Reach, Resumed, Send, Turn, Walk, walk

AHEAD_S = 0.8
"""Orders are sent, and the plan is walked, so long ahead of their tick."""
POLL_S = 0.05
"""How often samples are looked at while something waits for them."""
IDLE_S = 0.25
"""How often the loop comes round while nothing is due."""
QUIET_POLLS_MAX = 20
"""Most polls in a row without coming round, while the next turn of a block is not due."""
RESTING = "rest until the next cycle"
TRIP_SEEN_S = 0.5
"""After a refusal, or outputs that are off, a trip that caused it becomes known within this time."""
SAMPLES_LATE_S = 3.0
"""Samples that have not come so long after their tick are judged as missing."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Progress:
    """How far a run is: times in s, `fraction` 0 to 1 of the known length, `doing` the step in words.

    `left_s` does not know how long the waits to come will take. `cycle` is the cycle under way, 0 where none is.
    """

    elapsed_s: float
    left_s: float
    fraction: float
    doing: str
    place: Place | None
    passes: int
    held: int
    failed: int
    cycle: int = 0
    cycles_done: int = 0


@dataclass(frozen=True, slots=True)
class TurnBegun:
    """A cycle or a check that was commanded begins at this tick: an item of the agenda."""

    tick: int


@dataclass(slots=True, eq=False)
class _Strand:
    """A walk with what it waits for; `parent` is the fork it belongs to.

    `looked` is what there was to see when a wait was looked at last and did not hold: see `_news`.
    """

    walk: Walk
    ask: Ask
    parent: _Join | None
    looked: tuple[int, int] | None = None


@dataclass(slots=True, eq=False)
class _Join:
    """A fork under way: how many branches are not over, and the latest end so far."""

    strand: _Strand
    left: int
    latest: int


@dataclass(slots=True)
class Executive:
    """One run of a plan. `tell` takes the events of the run, `progress` is called each time the loop comes round.

    `book` counts the cycles. `until_s` of the port's clock is when the run must end, whatever is left to do, with the
    sentence `until_text`. `begun` is told of each step that begins, with its tick.
    """

    session: Session
    clock: Clock
    plan: Plan
    rig: Rig
    tell: Callable[[object], None]
    progress: Callable[[Progress], None] | None = None
    book: CycleBook | None = None
    until_s: float | None = None
    until_text: str = ""
    begun: Callable[[int, Part], None] | None = None
    tally: Tally = field(default_factory=Tally)
    passes: int = 0
    part: Part | None = None
    first_failure_place: Place | None = None
    start: int = 0
    now: int = 0
    trip: Tripped | None = None
    restarted: Restarted | None = None
    stop: StopBegun | None = None
    _tick_s: float = field(init=False)
    _ring: Ring = field(init=False)
    _bearings: Bearings = field(default_factory=Bearings)
    _strands: list[_Strand] = field(default_factory=list)
    _agenda: list[tuple[int, int, Note | Begin | Pass | TurnBegun]] = field(default_factory=list)
    _number: count[int] = field(default_factory=count)
    _dispatch: Dispatch = field(init=False)
    _commanded: Due | None = None
    _turn_due: int | None = None
    _resting: bool = False
    _waited: int = 0
    _end: int = 0
    _attended: int = 0

    def __post_init__(self) -> None:
        self._tick_s = self.plan.tick_us / 1e6
        self._dispatch = Dispatch(self.session, tick_s=self._tick_s, tell=self.tell)
        longest = max([self.plan.longest_window, *(axis.still_ticks for axis in self.rig.axes.values())])
        self._ring = Ring(longest + round((LEAD_IN_S + SAMPLES_LATE_S) / self._tick_s))
        if self.book is None:
            self.book = CycleBook(RunSoFar(), tick_s=self._tick_s, write=self.tell, pending=lambda: 0)

    # ---- what is heard -------------------------------------------------------------------------------------------

    def on_block(self, block: Block) -> None:
        """Samples have come."""
        first = self._ring.newest is None
        self._ring.add(block)
        if first:
            self._bearings.note("", self._ring, self.rig.axes, int(block.ticks[0]))

    def on_event(self, event: Event) -> None:
        """Something has happened."""
        match event:
            case Tripped():
                self.trip = event
            case Restarted():
                self.restarted = event
            case StopBegun():
                self.stop = event
            case OrderDone(tag=tag):
                self._dispatch.done(tag)

    # ---- the loop ------------------------------------------------------------------------------------------------

    def run(self) -> None:
        """Carry the plan out to its end. Raises `Ended` where it ends before, and what the session raises."""
        self._wait_for_samples()
        self.start = self.session.start_in()
        self._begin(walk(self.plan.root, self.start), None)
        while self._strands or self._agenda or self.now < self._end:
            self._check()
            self.now = self.session.tick_now()
            self._advance()
            self._label()
            self._attend()
            self._dispatch.note_overdue(self.now)
            if self.progress is not None:
                self.progress(self.where())
            self._pump_for(self._idle_s())
            self._rest(self._quiet_polls())
        self._finish_orders()

    def _wait_for_samples(self) -> None:
        """The first samples, so that counts have something to be counted from."""
        bound = self.session.tick_now() + round(SAMPLES_LATE_S / self._tick_s)
        while self._ring.newest is None and self.session.tick_now() < bound:
            self._check()
            self._pump_for(POLL_S)

    def _finish_orders(self) -> None:
        """Until the device has told the end of the last orders, or should have."""
        while self._dispatch.waiting:
            self.now = self.session.tick_now()
            self._check()
            self._dispatch.note_overdue(self.now)
            if self._dispatch.waiting:
                self._pump_for(POLL_S)

    def _pump_for(self, seconds: float) -> None:
        self.session.pump(self.clock.now() + seconds)

    @property
    def overdue(self) -> int:
        """How many orders' ends were not told in time."""
        return self._dispatch.overdue

    def _check(self) -> None:
        """End where the device is no longer with us."""
        self._check_events()
        if not self.session.armed:
            self.wait_for_trip()
            self._check_events()
            by = "" if self.stop is None else f" ({self.stop.source} stop)"
            raise Ended(Verdict.STOPPED, f"the board switched its outputs off, and not for this run{by}", self.place)
        if self.until_s is not None and self.clock.now() >= self.until_s:
            raise Ended(Verdict.STOPPED, self.until_text, self.place)

    def _check_events(self) -> None:
        if self.restarted is not None:
            cause = self.restarted.cause or "it did not tell why"
            raise Ended(Verdict.TRIPPED, f"the device restarted ({cause})", self.place)
        if self.trip is not None:
            raise Ended(Verdict.TRIPPED, "", self.place)  # whoever brings the run down asks the device why

    def wait_for_trip(self) -> None:
        """Pump until a trip is told of, for TRIP_SEEN_S at the longest: its notice may be late, or lost and asked for.

        Raises what the session raises, first of all StoppedByUser.
        """
        bound_s = self.clock.now() + TRIP_SEEN_S
        while self.trip is None and self.restarted is None and self.clock.now() < bound_s:
            self._pump_for(POLL_S)

    @property
    def place(self) -> Place | None:
        """The step that is under way."""
        return None if self.part is None else self.part.mark.place

    def where(self) -> Progress:
        """How far the run is."""
        elapsed = max(0, self.now - self.start)
        known = self.plan.totals.least
        done = min(known, max(0, elapsed - self._waited))
        return Progress(
            elapsed_s=elapsed * self._tick_s,
            left_s=(known - done) * self._tick_s,
            fraction=done / known if known else 1.0,
            doing=RESTING if self._resting else "" if self.part is None else self.part.text,
            place=self.place,
            passes=self.passes,
            held=self.tally.held,
            failed=self.tally.failed,
            cycle=0 if self.book is None else self.book.number,
            cycles_done=0 if self.book is None else self.book.counted.done,
        )

    def _idle_s(self) -> float:
        """How long nothing is due."""
        ahead = round(AHEAD_S / self._tick_s)
        wait_s = IDLE_S
        if not self._strands:
            wait_s = min(wait_s, (self._end - self.now) * self._tick_s)
        if self._agenda:
            wait_s = min(wait_s, max(POLL_S, (self._agenda[0][0] - self.now) * self._tick_s))
        for strand in self._strands:
            match strand.ask:
                case Reach(tick=tick):
                    wait_s = min(wait_s, (tick - ahead - self.now) * self._tick_s)
                case Send(order=order):
                    wait_s = min(wait_s, max((order.start - ahead - self.now) * self._tick_s, self._tick_s * 5))
                case Hang() | Look() | NextTurn():
                    wait_s = min(wait_s, POLL_S)
        return max(wait_s, self._tick_s)

    def _quiet_polls(self) -> int:
        """How many further polls come before the next turn's time where nothing but that is waited for: coming round
        in each of them would find nothing.
        """
        due, self._turn_due = self._turn_due, None
        others = len(self._strands) > 1 or self._agenda or self._dispatch.waiting or self.until_s is not None
        if due is None or others:
            return 0
        wait_s = (due - self.now) * self._tick_s - AHEAD_S - TICK_SLACK_S
        return max(0, min(QUIET_POLLS_MAX, int(wait_s / POLL_S) - 1))

    def _rest(self, polls: int) -> None:
        """Pump for as long as so many polls take; in virtual time, where nothing is late, all at once."""
        if polls and isinstance(self.clock, VirtualClock):
            self._check()
            self.session.pump(self.clock.end_of_waits_s(POLL_S, polls))
            return
        for _ in range(polls):
            self._check()
            self._pump_for(POLL_S)

    # ---- strands -------------------------------------------------------------------------------------------------

    def _begin(self, new_walk: Walk, parent: _Join | None) -> None:
        try:
            ask = next(new_walk)
        except StopIteration as over:
            self._over(parent, over.value)
            return
        self._strands.append(_Strand(new_walk, ask, parent))

    def _resume(self, strand: _Strand, resumed: Resumed) -> None:
        try:
            strand.ask = strand.walk.send(resumed)
        except StopIteration as over:
            self._strands.remove(strand)
            self._over(strand.parent, over.value)

    def _over(self, join: _Join | None, tick: int) -> None:
        """A branch is over; the last one of a fork lets its strand go on."""
        if join is None:
            self._end = tick
            return
        join.left -= 1
        join.latest = max(join.latest, tick)
        if join.left == 0:
            self._strands.append(join.strand)
            self._resume(join.strand, Resumed(join.latest))

    def _advance(self) -> None:
        """Resume every strand that can go on, until none can."""
        ahead = self.now + round(AHEAD_S / self._tick_s)
        moved = True
        while moved:
            moved = self._send_first(ahead)
            for strand in tuple(self._strands):
                if not isinstance(strand.ask, Send):
                    moved |= self._go_on(strand, ahead)

    def _go_on(self, strand: _Strand, ahead: int) -> bool:
        """Resume a strand if what it asks for is there; whether it was."""
        match strand.ask:
            case Reach(tick=tick):
                if tick > ahead:
                    return False
                self._resume(strand, Resumed(tick))
            case Note(tick=tick) | Begin(tick=tick) | Pass(tick=tick):
                heapq.heappush(self._agenda, (tick, next(self._number), strand.ask))
                self._resume(strand, Resumed(tick))
            case Fork(tick=tick, parts=parts):
                self._strands.remove(strand)
                join = _Join(strand, len(parts), tick)
                for part in parts:
                    self._begin(walk(part, tick), join)
            case Hang():
                return self._hang(strand, strand.ask)
            case Look():
                return self._look(strand, strand.ask)
            case NextTurn():
                return self._next_turn(strand, strand.ask, ahead)
        return True

    # ---- orders --------------------------------------------------------------------------------------------------

    def _send_first(self, ahead: int) -> bool:
        """Send the order that starts first among those that wait, if it is time and the queue has room."""
        waiting = [strand for strand in self._strands if isinstance(strand.ask, Send)]
        if not waiting:
            return False
        strand = min(waiting, key=_start_of)
        assert isinstance(strand.ask, Send)
        order = strand.ask.order
        if order.start > ahead or not self._dispatch.has_room(order, self.now):
            return False
        self._dispatch.give(order)
        self.now = self.session.tick_now()
        self._resume(strand, Resumed(order.start))
        return True

    # ---- samples: agenda, waits ----------------------------------------------------------------------------------

    def _have(self, tick: int) -> bool:
        """Whether all samples up to the tick have come, or will not come any more."""
        return self._ring.covers(tick) or self.now > tick + round(SAMPLES_LATE_S / self._tick_s)

    def _label(self) -> None:
        """The step that is under way is the one that began last, whether its samples have come or not."""
        begun = [
            (tick, number, item.part)
            for tick, number, item in self._agenda
            if tick <= self.now and isinstance(item, Begin)
        ]
        if begun:
            self.part = max(begun)[2]

    def _attend(self) -> None:
        """Do what is due on the agenda, in order of tick."""
        while self._agenda and self._agenda[0][0] <= self.now:
            tick, _, item = self._agenda[0]
            if not self._have(tick):
                return
            heapq.heappop(self._agenda)
            self._attended += 1
            match item:
                case Begin(part=part, ends=ends, ramped=ramped):
                    if self.begun is not None:
                        self.begun(tick, part)
                    if ends is not None:
                        self._bearings.ramp_ends[ramped] = ends
                case Pass(number=number, part=part):
                    self.passes += 1
                    self.tell(PassBegun(tick=tick, place=str(part.mark.place), number=number, of=part.times))
                case TurnBegun():
                    self._bearings.note(CYCLE_BEGIN, self._ring, self.rig.axes, tick)
                    if self.book is not None:
                        self.tell(self.book.begin(tick))
                case Note(part=Judge() as judge):
                    self._judge(judge, tick)
                case Note(part=Moment(name=name)):
                    self._bearings.note(name, self._ring, self.rig.axes, tick)
                    self.tell(Marked(tick=tick, name=name))

    def _eye(self, motor: str) -> tuple[Eye, Axis]:
        axis = self.rig.axes[motor]
        return Eye(self._ring, axis, self._tick_s), axis

    def _find(self, measure: Measure, tick: int) -> Finding:
        return self._eye(measure.motor)[0].finding(measure, tick, self._bearings)

    def _judge(self, judge: Judge, tick: int) -> None:
        judged = Judged.of(judge, tick, self._find(judge.measure, tick))
        self.tally.take(judged)
        if self.book is not None:
            self.book.take(judged, confirms=judge.confirms)
        if not judged.held and self.first_failure_place is None:
            self.first_failure_place = judge.mark.place
        self.tell(judged)
        if not judged.held and judge.stop_on_failure:
            raise Ended(Verdict.FAILED, judged.sentence, judge.mark.place)

    def _hang(self, strand: _Strand, ask: Hang) -> bool:
        """A wait: go on where it has come true, end where its time is over."""
        part = ask.part
        within = self.now <= ask.tick + part.limit
        if within and strand.looked == self._news and not self._ends_by_time(part):
            return False
        strand.looked = self._news
        holds, found = self._standing(part, ask.tick) if isinstance(part, Standstill) else self._true(part, ask.tick)
        if not holds:
            if self.now > ask.tick + part.limit and self._have(ask.tick + part.limit):
                what = "the shaft still turned" if isinstance(part, Standstill) else f"found {found}"
                limit = self.rig.show(part.limit)
                raise Ended(Verdict.FAILED, f"{part.text}: {what} after {limit}", part.mark.place)
            return False
        at = max(ask.tick, self.session.start_in())
        planned = ask.tick
        if isinstance(part, Standstill):
            at = max(at, ask.tick + part.dwell)
            planned += part.dwell
        if strand.parent is None:
            self._waited += at - planned
        strand.looked = None
        self.tell(WaitEnded(tick=at, place=str(part.mark.place), waited_ticks=at - ask.tick, found=found))
        self._resume(strand, Resumed(at))
        return True

    @property
    def _news(self) -> tuple[int, int]:
        """Blocks of samples that have come, and items of the agenda that are done: a wait that does not hold goes on
        at least until one of these has changed, so it is not looked at again before."""
        return self._ring.added, self._attended

    @staticmethod
    def _ends_by_time(part: Standstill | Await) -> bool:
        """Whether a wait needs no samples to hold."""
        return isinstance(part, Standstill) and part.still_ticks == 0

    def _standing(self, part: Standstill, since: int) -> tuple[bool, str]:
        if part.still_ticks == 0:
            return self.now >= since, "no encoder"
        return self._eye(part.motor)[0].stands_still(since), "standstill"

    def _true(self, part: Await, since: int) -> tuple[bool, str]:
        newest = self._ring.newest
        if newest is None or newest < since:
            return False, "no samples"
        newest = min(newest, since + part.limit)
        finding = self._find(part.measure, newest)
        return finding.holds, finding.text

    def _look(self, strand: _Strand, ask: Look) -> bool:
        """The measurement that ends a loop, at the end of a pass."""
        if self.now < ask.tick or not self._have(ask.tick):
            return False
        finding = self._find(ask.measure, ask.tick)
        at = max(ask.tick, self.session.start_in())
        if strand.parent is None:
            self._waited += at - ask.tick
        if ask.last and not finding.holds:
            raise Ended(
                Verdict.FAILED, f"{ask.part.text}: found {finding.text} after the last pass", ask.part.mark.place
            )
        self._resume(strand, Resumed(at, finding.holds))
        return True

    def _next_turn(self, strand: _Strand, ask: NextTurn, ahead: int) -> bool:
        """Between two turns of a block of cycles: count the one that is over, and let the next one begin in time."""
        book = self.book
        assert book is not None  # made with the executive
        book.enter(ask.part, ask.tick)
        if self._commanded is None:
            if book.under_way and not self._close_turn(book, ask):
                return False
            self.check_wear()
            due = book.due(ask.tick)
            if due.turn is not Turn.OVER:
                self._resting = due.tick > ahead
                if self._resting:
                    self._turn_due = due.tick
                    return False
                book.command(due.turn)
            self._commanded = due
        if book.pending():
            return False
        due, self._commanded = self._commanded, None
        at = max(due.tick, self.session.start_in())
        if due.turn is Turn.OVER:
            book.finish_block(ask.tick)
        else:
            heapq.heappush(self._agenda, (at, next(self._number), TurnBegun(at)))
        self._waited += at - ask.tick - (book.pause if due.tick > ask.tick else 0)
        self._resume(strand, Resumed(at, turn=due.turn))
        return True

    def _close_turn(self, book: CycleBook, ask: NextTurn) -> bool:
        """Count the turn that is over, once everything in it has been looked at."""
        if not self._judged_up_to(ask.tick):
            return False
        for found in book.look(ask.tick):  # on the disk before the cycle that shows it
            self.tell(found)
        book.close(ask.tick)
        too_many = book.too_many_failed()
        if too_many:
            raise Ended(Verdict.FAILED, too_many, ask.part.mark.place)
        return True

    def check_wear(self) -> None:
        """End where the cycles so far, those of earlier parts of the run among them, show too much wear, or where
        nobody can tell any more and the file has limits for it."""
        watch = None if self.book is None else self.book.watch
        if watch is None:
            return
        why, place = watch.too_worn()
        if why:
            raise Ended(Verdict.FAILED, why, place)
        unjudged = watch.unjudged()
        if unjudged.ends_run:
            raise Ended(Verdict.STOPPED, f"stopped because {unjudged.text}", None)

    def _judged_up_to(self, tick: int) -> bool:
        """Whether everything up to the tick has happened and been looked at."""
        return self.now >= tick and self._have(tick) and not (self._agenda and self._agenda[0][0] <= tick)


def _start_of(strand: _Strand) -> int:
    assert isinstance(strand.ask, Send)
    return strand.ask.order.start
