"""The state of a session and what each line from the device does to it.

Longer than most files here: every line of the device may change every part of this state, so all of it is in one place.
"""

from __future__ import annotations

import random
from collections import deque
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TypeVar

from ramprig.errors import Bug, LinkError, LinkLost, Refused, WrongDevice
from ramprig.port.base import Port
from ramprig.session.blocks import Block, block_from
from ramprig.session.clockfit import ClockFitter
from ramprig.session.events import (
    DeviceExchanged,
    DwellHeld,
    Event,
    GapFilled,
    GapFound,
    HostSlept,
    LateHost,
    Learned,
    LinkTrouble,
    Noticed,
    NoticesMissed,
    OrderDone,
    Restarted,
    StopAsked,
    StopBegun,
    Stopped,
    Tripped,
    Trouble,
    WallClockSet,
)
from ramprig.session.gaps import Delivery, Gap, GapReason
from ramprig.session.limits import LimitTable
from ramprig.session.pump import Pump
from ramprig.session.readings import Identity, Reading, TripRecord, known_trip, read_answer, read_notice
from ramprig.session.sampling import Sampling
from ramprig.session.ticks import TickCounter
from ramprig.session.watch import Fit, TickWatch, WallWatch
from ramprig_link import host
from ramprig_link.messages import Notice
from ramprig_link.words import REASONS, Reason, State, Trip

T = TypeVar("T")

PUMP_GAP_S = 0.1
"""A runner calls in at least this often while the outputs are enabled; later is an event and a statistic."""
IDLE_BEAT_S = 0.5
"""Between beats while the outputs are off: they fit the clocks and tell that the link is alive."""
LEASE_PARTS = 5
"""So many beats fall into one lease."""
RETURNS_KEPT = 64
"""The worst of so many round trips decides how far ahead an order is sent."""
DROPPED_SHOWN_BYTES = 60
"""So much of a line that cannot be used is shown in an event."""


@dataclass(slots=True)
class StopMarks:
    """What was heard of a stop since `Core.marks` was set anew: host times, None where not heard."""

    acknowledged_s: float | None = None
    off_s: float | None = None


@dataclass(frozen=True, slots=True)
class Latest:
    """The newest that is known, for a status line: the last `state` answer, the last samples, and when each came."""

    reading: Reading | None = None
    reading_s: float | None = None
    block: Block | None = None
    block_s: float | None = None


class Core:
    """What a session knows. One thread calls it; `on_block` and `on_event` are called from inside the pump.

    What these raise leaves the pump, but not while `stopping`: then the first of it is `deferred`, since no listener's
    trouble may keep a stop from being sent again and confirmed.
    """

    def __init__(
        self,
        port: Port,
        *,
        chance: random.Random,
        retry: host.RetryPolicy | None,
        on_block: Callable[[Block], None] | None,
        on_event: Callable[[Event], None] | None,
    ) -> None:
        self.pump = Pump(
            port,
            chance=chance,
            retry=retry,
            hear=self._hear,
            chores=self._chores,
            repeated=self._repeated,
            late=self._late,
        )
        self.clock = port.clock
        self.on_block = on_block
        self.on_event = on_event
        self.ticks = TickCounter()
        self.fitter: ClockFitter | None = None
        self.watch: TickWatch | None = None
        self.wall = WallWatch(port.clock)
        self.sampling = Sampling(0, self.deliver)
        self.known: Identity | None = None
        self.limits: LimitTable | None = None
        self.idle_ma: tuple[int, ...] = ()
        self.state: State | None = None
        self._state_word = ""
        self.lease_ms: int | None = None
        self.valid = False
        self.trip: Tripped | None = None
        self._latest_reading: tuple[Reading | None, float | None] = None, None
        self._latest_block: tuple[Block | None, float | None] = None, None
        self.marks = StopMarks()
        self.stopping = False
        self.deferred: Exception | None = None
        self.worst_late_s = 0.0
        self.repeats = 0
        self.dropped_lines = 0
        self.returns_s: deque[float] = deque(maxlen=RETURNS_KEPT)
        self._trip_told: tuple[str, int] | None = None
        self._checking_who = False
        self._checking_state = False

    @property
    def identity(self) -> Identity:
        """Who answers; Bug before it is known."""
        if self.known is None:
            raise Bug("the device is not known yet")
        return self.known

    @property
    def latest(self) -> Latest:
        """The newest reading and samples."""
        return Latest(*self._latest_reading, *self._latest_block)

    @property
    def armed(self) -> bool:
        """Whether the outputs are enabled, for all that is known."""
        return self.state is State.ARMED

    # ---- asking --------------------------------------------------------------------------------------------------

    def request(self, word: str, *args: object) -> host.Answered:
        """The `ok` answer to a request; Refused for a `no`; otherwise as `Pump.request`."""
        try:
            answered = self.pump.request(word, *args)
        except LinkLost:
            self._lost()
            raise
        if not answered.answer.ok:
            raise refusal(word, answered.answer.reason)
        return answered

    def work(self, until_s: float) -> None:
        """Pump until this time."""
        try:
            self.pump.until(until_s)
        except LinkLost:
            self._lost()
            raise

    def turn(self, until_s: float) -> None:
        """One round of the pump, until this time at the longest."""
        try:
            self.pump.turn(until_s)
        except LinkLost:
            self._lost()
            raise

    def read_state(self) -> Reading:
        """Ask for `state`."""
        return self.take_state(self.request("state"))

    def take_state(self, answered: host.Answered) -> Reading:
        """The reading in an `ok` answer to `state`, which is then the newest that is known."""
        reading = self._reading(answered)
        self._latest_reading = reading, answered.received_s
        self._set_state(reading.state)
        return reading

    def read_why(self, learned: Learned = Learned.ASKED) -> TripRecord | None:
        """Ask for the last trip since the device's start; None where there was none. A trip not yet told of is told."""
        answered = self.request("why")
        return self._take_why(answered, learned)

    def meet_trip(self, *, latched: bool) -> None:
        """At open: tell of the trip that is latched; one that is over is only remembered, not to be told later."""
        answered = self.request("why")
        word, tick = read_answer("why", answered.answer.fields)[:2]
        if latched:
            self._take_why(answered, Learned.AT_OPEN)
        self._trip_told = (str(word), int(tick))

    def _reading(self, answered: host.Answered) -> Reading:
        identity = self.identity
        tick = self.ticks.near(answered.answer.tick)
        return Reading.read(answered.answer.fields, tick=tick, axes=identity.axes, servos=identity.servos)

    def _set_state(self, state: State) -> None:
        self.state, self._state_word = state, state.word
        if state is State.ARMED and self.lease_ms is not None:
            self.pump.beat_s = self.lease_ms / 1000 / LEASE_PARTS
        else:
            self.pump.beat_s = IDLE_BEAT_S

    def enabled(self, lease_ms: int | None) -> None:
        """The outputs were armed under this lease, or, with None, are off without a trip latched."""
        self.lease_ms = lease_ms
        self._set_state(State.OFF if lease_ms is None else State.ARMED)

    def _take_why(self, answered: host.Answered, learned: Learned) -> TripRecord | None:
        word, tick, index, value, bound = read_answer("why", answered.answer.fields)
        trip = known_trip(str(word))
        if trip is Trip.NONE:
            return None
        record = TripRecord(
            trip=trip, tick=self.ticks.near(int(tick)), index=int(index), value=int(value), bound=int(bound)
        )
        self._tell_trip(record, int(tick), learned, answered.received_s)
        return record

    def _tell_trip(self, record: TripRecord, tick: int, learned: Learned, at_s: float) -> None:
        """An event for a trip, unless it is told of already: by notice and by `why` it is the same trip."""
        if self._trip_told == (record.trip.word, tick):
            return
        self._trip_told = (record.trip.word, tick)
        self.trip = Tripped(
            tick=record.tick,
            host_s=at_s,
            trip=record.trip.word,
            index=record.index,
            value=record.value,
            bound=record.bound,
            learned=learned,
        )
        self.tell(self.trip)

    # ---- events --------------------------------------------------------------------------------------------------

    def tell(self, event: Event) -> None:
        """Hand an event on."""
        if self.on_event is not None:
            self._hand(self.on_event, event)

    def _hand(self, listener: Callable[[T], None], what: T) -> None:
        try:
            listener(what)
        except Exception as error:
            if not self.stopping:
                raise
            self.deferred = self.deferred or error

    def trouble(self, kind: Trouble, detail: str, count: int, at_s: float) -> None:
        """Hand a trouble of the link on."""
        self.tell(LinkTrouble(tick=self.ticks.latest, host_s=at_s, trouble=kind, detail=detail, count=count))

    def deliver(self, delivery: Delivery) -> None:
        """Hand samples on, and what became of holes between them."""
        now_s = self.clock.now()
        match delivery:
            case Block():
                self._latest_block = delivery, now_s
                if self.on_block is not None:
                    self._hand(self.on_block, delivery)
            case Gap(first_tick, count, period_ticks, reason):
                self.tell(
                    GapFound(tick=first_tick, host_s=now_s, count=count, period_ticks=period_ticks, reason=str(reason))
                )
            case _:
                self.tell(GapFilled(tick=delivery.first_tick, host_s=now_s, count=delivery.count))

    def _repeated(self, word: str, at_s: float) -> None:
        self.repeats += 1
        self.trouble(Trouble.REPEATED, word, self.repeats, at_s)

    def _late(self, gap_s: float) -> None:
        if not self.armed:
            return
        self.worst_late_s = max(self.worst_late_s, gap_s)
        if gap_s > PUMP_GAP_S:
            self.tell(LateHost(tick=self.ticks.latest, host_s=self.clock.now(), late_s=gap_s))

    def _chores(self, now_s: float) -> None:
        pump = self.pump
        while pump.urgents:
            category, sent = pump.urgents.popleft()
            self.tell(StopAsked(tick=None, host_s=now_s, category=category, sent=sent))
        if now_s >= self.wall.look_s:
            moved_s = self.wall.moved_s(now_s)
            if moved_s is not None:
                self.tell(WallClockSet(tick=self.ticks.latest, host_s=now_s, moved_s=moved_s))
        if self.sampling.wanting and pump.idle and not pump.muted:
            number = self.sampling.to_ask(now_s)
            if number is not None:
                self.pump.post("again", number, then=self._took_again)

    def _took_again(self, answered: host.Answered) -> None:
        self.sampling.asked(int(answered.request.args[0]), kept=answered.answer.ok, now_s=answered.received_s)

    # ---- what comes ----------------------------------------------------------------------------------------------

    def _hear(self, event: host.HostEvent, now_s: float) -> None:
        match event:
            case host.Sampled():
                self._hear_samples(event, now_s)
            case host.Answered():
                self._hear_answer(event)
            case host.UrgentAnswered(answer):
                self.ticks.see(answer.tick)
                if answer.ok and answer.fields:
                    self._hear_stop_state(answer.fields[0], now_s)
            case host.Noticed(notice, missed):
                self._hear_notice(notice, missed, now_s)
            case host.Dropped(raw, why):
                self.dropped_lines += 1
                shown = raw[:DROPPED_SHOWN_BYTES].decode("ascii", "backslashreplace")
                self.trouble(Trouble.GARBLED_HERE, f"{why}: {shown}", self.dropped_lines, now_s)

    def _hear_answer(self, answered: host.Answered) -> None:
        answer = answered.answer
        if answered.repeats == 0:
            self._hear_tick(answered)
        if not answer.ok or not answer.fields:
            return
        if answered.request.word == "beat":
            self._hear_beat(answer.fields[0], answered.received_s)
        elif answered.request.word == "stop":
            self._hear_stop_state(answer.fields[0], answered.received_s)

    def _hear_tick(self, answered: host.Answered) -> None:
        if self.watch is None or self.fitter is None:
            return
        self.returns_s.append(answered.received_s - answered.sent_s)
        tick = self.ticks.near(answered.answer.tick)
        fit, off_s = self.watch.judge(tick, answered.sent_s, answered.received_s)
        if fit is not Fit.RIGHT:
            self.suspect(f"a tick that is {off_s:+.2f} s off")
            return
        self.ticks.reach(tick)
        self.watch.take(tick, answered.sent_s, answered.received_s)
        self.fitter.add(tick, answered.sent_s, answered.received_s)

    def _hear_beat(self, word: str, at_s: float) -> None:
        """A beat's answer tells the state: one that no notice announced means that something was missed."""
        if word == self._state_word:
            return
        state = State.named(word)
        if state is None or self.state is None:
            return
        self.check_state()
        if state is State.OFF and self.armed:
            self.suspect("outputs off without a notice")

    def _hear_stop_state(self, word: str, at_s: float) -> None:
        state = State.named(word)
        if state is None:
            return
        if self.marks.acknowledged_s is None:
            self.marks.acknowledged_s = at_s
        if state in (State.OFF, State.TRIPPED) and self.marks.off_s is None:
            self.marks.off_s = at_s
        self._set_state(state)

    def _hear_samples(self, event: host.Sampled, now_s: float) -> None:
        if self.known is None:
            return
        block = block_from(event.block, self.ticks.near(event.block.first_tick))
        if self.watch is not None and self.watch.judge(int(block.ticks[-1]), 0.0, now_s)[0] is Fit.AHEAD:
            self.trouble(Trouble.STRANGE_LINE, "samples of a time to come", 1, now_s)
            return
        self.sampling.line(block, event.number)

    # ---- notices -------------------------------------------------------------------------------------------------

    def _hear_notice(self, notice: Notice, missed: int, now_s: float) -> None:
        if self.known is None:
            return
        values = read_notice(notice.word, notice.fields)
        if notice.word == "boot" and values is not None:
            self._hear_boot(int(values[0]), str(values[1]), notice.tick, now_s)
            return
        tick = self.ticks.near(notice.tick)
        if self.watch is not None and self.watch.judge(tick, self.pump.since_s, now_s)[0] is not Fit.RIGHT:
            self.suspect("the tick of a notice")
        if missed:
            self.tell(NoticesMissed(tick=tick, host_s=now_s, count=missed))
            self.check_state()
        if values is None:
            self.tell(Noticed(tick=tick, host_s=now_s, word=notice.word, fields=notice.fields))
        else:
            self._hear_known(notice, values, tick, now_s)

    def _hear_known(self, notice: Notice, values: tuple[int | str, ...], tick: int, now_s: float) -> None:
        match notice.word, values:
            case "trip", (str(word), int(index), int(value), int(bound)):
                trip = Trip.named(word)
                if trip is not None:
                    record = TripRecord(trip=trip, tick=tick, index=index, value=value, bound=bound)
                    self._tell_trip(record, notice.tick, Learned.NOTICE, now_s)
            case "stop", (int(category), str(source)):
                self._set_state(State.STOPPING if category else State.OFF)
                if self.marks.acknowledged_s is None:
                    self.marks.acknowledged_s = now_s
                self.tell(StopBegun(tick=tick, host_s=now_s, category=category, source=source))
            case "off", (str(word),):
                self._hear_stop_state(word, now_s)
                self.tell(Stopped(tick=tick, host_s=now_s, state=word))
            case "done", (int(tag),):
                self.tell(OrderDone(tick=tick, host_s=now_s, tag=tag))
            case "dwell", (int(axis), int(held_ticks)):
                self.tell(DwellHeld(tick=tick, host_s=now_s, axis=axis, held_ticks=held_ticks))
            case "garbled", (int(count),):
                self.trouble(Trouble.GARBLED_THERE, "", count, now_s)
            case _:
                self.tell(Noticed(tick=tick, host_s=now_s, word=notice.word, fields=notice.fields))

    # ---- what was missed, and who is there -----------------------------------------------------------------------

    def check_state(self) -> None:
        """Ask for `state` and `why` soon, so that a trip whose notice was lost is still seen (SPEC.md NOTE-1)."""
        if self._checking_state or self.pump.muted:
            return
        self._checking_state = True
        self.pump.post("state", then=self._took_state)
        self.pump.post("why", then=self._took_why)

    def _took_state(self, answered: host.Answered) -> None:
        if answered.answer.ok:
            self.take_state(answered)

    def _took_why(self, answered: host.Answered) -> None:
        self._checking_state = False
        if answered.answer.ok:
            self._take_why(answered, Learned.ASKED)

    def suspect(self, seen_by: str) -> None:
        """Ask `who` soon: the device may have restarted, or be another one."""
        if self._checking_who or self.pump.muted or self.known is None:
            return
        self._checking_who = self.pump.post("who", then=lambda answered: self._judge_who(answered, seen_by))

    def forget_checks(self) -> None:
        """The requests that were posted are given up with all others."""
        self._checking_who = self._checking_state = False
        self.sampling.unask()

    def _judge_who(self, answered: host.Answered, seen_by: str) -> None:
        self._checking_who = False
        if not answered.answer.ok or self.watch is None:
            return
        found, before = Identity.read(answered.answer.fields), self.identity
        now_s = answered.received_s
        if found.name != before.name:
            self.invalidate()
            self.tell(DeviceExchanged(tick=None, host_s=now_s, before=before.name, after=found.name))
            raise WrongDevice(f"{found.name} answers on {self.pump.port.name}, where {before.name} was opened")
        tick = self.ticks.near(answered.answer.tick)
        fit, off_s = self.watch.judge(tick, answered.sent_s, answered.received_s)
        if found.boot != before.boot or fit is Fit.BEHIND:
            self._restarted(found.boot, "", seen_by, answered.answer.tick, now_s)
        elif fit is Fit.AHEAD:
            self.new_clocks(before.tick_s)
            self.ticks.see(answered.answer.tick)
            self.tell(HostSlept(tick=tick, host_s=now_s, slept_s=off_s))
        else:
            self.trouble(Trouble.STRANGE_TICK, seen_by, 1, now_s)

    def _hear_boot(self, boot: int, cause: str, tick: int, now_s: float) -> None:
        if boot != self.identity.boot:
            self._restarted(boot, cause, "its notice", tick, now_s)

    def _restarted(self, boot: int, cause: str, seen_by: str, tick: int, now_s: float) -> None:
        before = self.identity
        self.invalidate(GapReason.RESTARTED)
        self.known = replace(before, boot=boot)
        self.ticks.restart()
        self.new_clocks(before.tick_s)
        self.tell(
            Restarted(
                tick=self.ticks.see(tick),
                host_s=now_s,
                boot_before=before.boot,
                boot_after=boot,
                cause=cause,
                seen_by=seen_by,
            )
        )

    def invalidate(self, reason: GapReason = GapReason.LINK_LOST) -> None:
        """Nothing known of the device holds any longer: disarmed until it is opened again."""
        self.valid = False
        self.lease_ms = None
        self.state, self._state_word = None, ""
        self.pump.beat_s = IDLE_BEAT_S
        if reason is GapReason.RESTARTED:
            self.sampling.restart()
        else:
            self.sampling.abandon(reason)

    def new_clocks(self, tick_s: float) -> None:
        """Begin the fit of the clocks anew."""
        self.watch = TickWatch(tick_s)
        self.fitter = ClockFitter(tick_s)
        self.returns_s.clear()

    def _lost(self) -> None:
        """The link is lost: account for the samples, once."""
        self.sampling.resume()  # what was held back for an answer that will not come
        if self.valid or not self.sampling.settled:
            self.invalidate()


def refusal(word: str, reason: str) -> Refused:
    """The exception for a `no`, with the protocol's text for the reason."""
    known = reason in Reason.__members__.values()
    return Refused(word, reason, REASONS[Reason(reason)] if known else "a reason this program does not know")


def need_valid(core: Core) -> None:
    """Raises LinkError where the device has restarted or the link was lost since it was opened."""
    if not core.valid:
        raise LinkError("the device has restarted or was lost since it was opened; it must be opened again first")
