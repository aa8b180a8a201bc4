"""The invariants S1 to S7 of SPEC.md, checked over what a host sees: lines sent, lines received, samples of each tick.

Nothing here looks into the device. `Witness` is told of requests and of what the device says, in order, while the
device samples its channels at every tick; `judge` gives each broken invariant with the tick it broke in. What it cannot
know (which way a bridge was driven before it looked, the mark of a standstill, a tick whose sample was lost) it takes
in the device's favour.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field

from ramprig.session.ticks import TickCounter
from ramprig_link.check import digest
from ramprig_link.faults import FieldError, SampleFault
from ramprig_link.fields import read_i32
from ramprig_link.messages import Answer, Data, FromDevice, Notice, Request, parse_device_line
from ramprig_link.samples import Columns, channels_of, decode_data
from ramprig_link.words import LIMITS, STATE_BITS, TRIPS, State, Tighter, Trip

Key = tuple[str, int]
ZERO_IS_OFF = ("under_mv", "rated_ma", "stall_duty", "speed_counts")
LIVE = (State.ARMED, State.STOPPING)
LONG_AGO = 1 << 40
"""Ticks at rest before it looked, where nothing is known."""


@dataclass(frozen=True, slots=True)
class Violation:
    """One broken invariant: its clause, the tick, and what happened."""

    clause: str
    tick: int
    what: str

    def __str__(self) -> str:
        return f"{self.clause} at tick {self.tick}: {self.what}"


@dataclass(slots=True)
class Row:
    """One tick as sampled; a list is empty where its channel is not in the log's mask."""

    tick: int
    duty: list[int] = field(default_factory=list)
    counts: list[int] = field(default_factory=list)
    current_ma: list[int] = field(default_factory=list)
    pulse_us: list[int] = field(default_factory=list)
    supply_mv: list[int] = field(default_factory=list)
    temperature_dc: list[int] = field(default_factory=list)
    state: State = State.OFF
    bits: int = 0


def rows_of(block_ticks: int, period: int, mask: int, columns: Columns) -> Iterator[Row]:
    """The rows of a block whose first sample was taken at the unwrapped tick `block_ticks`."""
    refs = channels_of(mask)
    for i in range(len(columns[0])):
        row = Row(block_ticks + i * period)
        for ref, column in zip(refs, columns, strict=True):
            if ref.kind == "state":
                row.bits = column[i]
                row.state = State(STATE_BITS["state"].of(column[i]))
            else:
                getattr(row, ref.kind).append(column[i])
        yield row


class AxisWitness:
    """S1, S2, S3 and a part of S5 for one axis, row by row."""

    def __init__(self, index: int, max_duty: int, *, fresh: bool) -> None:
        """`fresh`: the bridge has not left zero since the device's start."""
        self._index = index
        self._max_duty = max_duty
        self._fresh = fresh
        self._last: Row | None = None
        self._last_sign: int | None = 0 if fresh else None
        self._zero_ticks = LONG_AGO
        self._still: dict[int, int] = {}  # every mark the device may have, with the ticks it may have held

    def see(self, row: Row, limits: Mapping[Key, int], *, off_told: bool) -> Iterator[Violation]:
        """What this row breaks; `off_told`: a notice `off` bears its tick."""
        now, counts = row.duty[self._index], row.counts[self._index] if row.counts else 0
        if self._last is None:
            self._zero_ticks = row.tick if self._fresh else LONG_AGO
            around = range(-limits["still_counts", self._index], limits["still_counts", self._index] + 1)
            self._still = {counts + away: self._zero_ticks - 1 for away in around}
        gap = 1 if self._last is None else row.tick - self._last.tick
        before = 0 if self._last is None else self._last.duty[self._index]
        self._watch(counts, gap, limits["still_counts", self._index])
        ceiling = min(limits["ceiling_duty", self._index], self._max_duty)
        if abs(now) > ceiling:
            yield Violation("S1", row.tick, f"duty {now} with a ceiling of {ceiling}")
        if self._last is not None or self._fresh:
            yield from self._slew(row, before, now, gap, limits, off_told=off_told)
        if before and gap > 1 and now * before <= 0:
            self._zero_ticks = gap - 1  # it may have been at zero in all the ticks that were not seen
        elif gap > 1:
            self._zero_ticks += gap - 1
        yield from self._dwell(row, before if gap == 1 else 0, now, limits)
        if now and row.state not in LIVE:
            yield Violation("S5", row.tick, f"duty {now} in state {row.state.word}")
        self._zero_ticks = 0 if now else self._zero_ticks + 1
        self._last = row

    def _watch(self, counts: int, gap: int, band: int) -> None:
        moved: dict[int, int] = {}
        for mark, ticks in self._still.items():
            away = abs((counts - mark + (1 << 31)) % (1 << 32) - (1 << 31))
            key, held = (counts, 0) if away > band else (mark, ticks + gap)
            moved[key] = max(held, moved.get(key, 0))
        self._still = moved

    def _slew(
        self, row: Row, before: int, now: int, gap: int, limits: Mapping[Key, int], *, off_told: bool
    ) -> Iterator[Violation]:
        ceiling = min(limits["ceiling_duty", self._index], self._max_duty)
        held = max(-ceiling, min(ceiling, before))  # a tightened ceiling may cut
        if abs(now) > abs(before):
            if abs(now) - abs(before) > gap * limits["slew_up_duty", self._index]:
                yield Violation("S2", row.tick, f"duty {before} to {now}, away from zero")
            return
        switched_off = not now and (off_told or row.state not in LIVE)
        if gap == 1 and not switched_off and abs(held) - abs(now) > limits["slew_down_duty", self._index]:
            yield Violation("S2", row.tick, f"duty {before} to {now}, towards zero")

    def _dwell(self, row: Row, before: int, now: int, limits: Mapping[Key, int]) -> Iterator[Violation]:
        sign = (now > 0) - (now < 0)
        if sign and self._last_sign is not None and sign != self._last_sign:
            longest = max(self._still.values(), default=LONG_AGO)
            still = limits["sense", self._index] == 0 or longest >= limits["still_ticks", self._index]
            if before or self._zero_ticks < limits["dwell_ticks", self._index] or not still:
                rested = f"{min(self._zero_ticks, LONG_AGO)} ticks at zero, {longest} still"
                yield Violation("S3", row.tick, f"duty {before} to {now} after {rested}")
        self._last_sign = sign or self._last_sign


class ServoWitness:
    """S7 for one servo, row by row."""

    def __init__(self, index: int, *, fresh: bool) -> None:
        self._index = index
        self._before: int | None = 0 if fresh else None
        self._tick = -1

    def see(self, row: Row, limits: Mapping[Key, int], *, changed: bool) -> Iterator[Violation]:
        """What this row breaks; `changed`: a limit was set anew for it."""
        now, before = row.pulse_us[self._index], self._before
        lowest, highest = limits["pulse_min_us", self._index], limits["pulse_max_us", self._index]
        home = max(lowest, min(highest, limits["pulse_home_us", self._index]))
        seen = row.tick - self._tick == 1 or self._tick < 0
        if now and not lowest <= now <= highest:
            yield Violation("S7", row.tick, f"pulse {now} us outside {lowest} to {highest}")
        if now and before == 0 and seen and now != home:
            yield Violation("S7", row.tick, f"the first pulse is {now} us, home is {home}")
        most_us = limits["pulse_slew_ns", self._index] // 1000 + 1
        if now and before and seen and abs(now - before) > most_us and not (changed and now in (lowest, highest)):
            yield Violation("S7", row.tick, f"pulse {before} to {now} us in a tick")
        if now and row.state not in LIVE:
            yield Violation("S7", row.tick, f"pulse {now} us in state {row.state.word}")
        self._before, self._tick = now, row.tick


@dataclass(slots=True)
class Witness:
    """What a host has seen of one device of `axes` axes and `servos` servos, whose limits were `limits` at the start.

    `fresh`: nothing has been driven since the device's start. `whole`: every tick has a sample, a missing one is told.
    The requests' effects are taken from their answers. `history` has every row by its tick.
    """

    limits: dict[Key, int]
    axes: int = 1
    servos: int = 1
    max_duty: int = 10000
    tick_us: int = 1000
    fresh: bool = True
    whole: bool = True
    history: dict[int, Row] = field(default_factory=dict)
    ticks: TickCounter = field(default_factory=TickCounter)
    _rows: list[Row] = field(default_factory=list)
    _requests: dict[int, Request] = field(default_factory=dict)
    _answered: set[tuple[int, str]] = field(default_factory=set)
    _buffer: bytes = b""
    _events: list[tuple[int, str, tuple[str, ...]]] = field(default_factory=list)
    _changes: list[tuple[int, Key, int]] = field(default_factory=list)
    _offs: set[int] = field(default_factory=set)
    _axes: list[AxisWitness] = field(default_factory=list)
    _servos: list[ServoWitness] = field(default_factory=list)
    _last_tick: int | None = None
    _renewed: int | None = None
    _lease: int | None = None
    _barred_from: int | None = None
    _cleared: bool = False

    def __post_init__(self) -> None:
        self._axes = [AxisWitness(i, self.max_duty, fresh=self.fresh) for i in range(self.axes)]
        self._servos = [ServoWitness(i, fresh=self.fresh) for i in range(self.servos)]

    # ---- what is seen ----------------------------------------------------------------------------------------------

    def sent(self, request: Request) -> None:
        """A request that goes to the device for the first time; repeats need not be told."""
        self._requests[request.tag] = request
        self._answered.discard((request.tag, request.body))

    def received(self, data: bytes) -> None:
        """Bytes from the device."""
        *lines, self._buffer = (self._buffer + data).split(b"\n")
        for line in lines:
            self.hear(parse_device_line(line))

    def hear(self, message: FromDevice) -> None:
        """A line from the device."""
        if isinstance(message, Data):
            self._sampled(message)
        elif isinstance(message, Notice):
            tick = self.ticks.see(message.tick)
            self._events.append((tick, message.word, message.fields))
            if message.word == "off":
                self._offs.add(tick)
        elif isinstance(message, Answer):
            self._answer(message)

    def _sampled(self, message: Data) -> None:
        try:
            block = decode_data(message.body)
        except SampleFault:
            return
        for row in rows_of(self.ticks.near(block.first_tick), block.period, block.mask, block.columns):
            self.history[row.tick] = row
            self._rows.append(row)

    def _answer(self, answer: Answer) -> None:
        request = self._requests.get(answer.tag)
        if request is None or answer.reason == "tag" or (answer.tag, request.body) in self._answered:
            return
        tick = self.ticks.see(answer.tick)
        self._answered.add((answer.tag, request.body))
        self._events.append((tick, "renewal", ()))
        if not answer.ok:
            return
        if request.word == "limit" and len(request.args) == 3 and answer.fields:
            value = _whole(answer.fields[0])
            if value is not None:  # one that is no number is told of by the line's own rules
                self._changes.append((tick, (request.args[0], int(request.args[1])), value))
        elif request.word in ("arm", "clear", "disarm"):
            self._events.append((tick, request.word + " ok", request.args))

    # ---- the judgement ---------------------------------------------------------------------------------------------

    def judge(self) -> list[Violation]:
        """What the rows that have come since the last call break; call it once their ticks' other lines have come."""
        found: list[Violation] = []
        rows, self._rows = sorted(self._rows, key=lambda row: row.tick), []
        self._events.sort(key=lambda event: event[0])
        self._changes.sort(key=lambda change: change[0])
        for row in rows:
            if self._last_tick is not None and row.tick <= self._last_tick:
                continue
            if self.whole and self._last_tick is not None and row.tick != self._last_tick + 1:
                found.append(Violation("samples", row.tick, "the samples before it are missing"))
            changed = self._apply_changes(row, found)
            found += self._meet_events(row)
            for axis in self._axes if row.duty else ():
                found += axis.see(row, self.limits, off_told=row.tick in self._offs)
            for servo in self._servos if row.pulse_us else ():
                found += servo.see(row, self.limits, changed=changed)
            found += self._lease_and_trips(row)
            self._last_tick = row.tick
        return found

    def _apply_changes(self, row: Row, found: list[Violation]) -> bool:
        """Take over the limits set before this row's tick (LIMIT-4); True where one has another value in it."""
        changed = False
        while self._changes and self._changes[0][0] < row.tick:
            tick, key, value = self._changes.pop(0)
            before = self.limits[key]
            states = [self.history[t].state for t in (tick - 1, tick) if t in self.history]
            if len(states) == 2 and all(state in LIVE for state in states) and loosened(key[0], before, value):
                found.append(Violation("S6", tick, f"{key} loosened from {before} to {value} while armed"))
            changed = changed or before != value
            self.limits[key] = value
        return changed

    def _meet_events(self, row: Row) -> Iterator[Violation]:
        while self._events and self._events[0][0] <= row.tick:
            tick, word, fields = self._events.pop(0)
            if word == "renewal":
                self._renewed = tick
            elif word == "trip":
                trip = Trip.named(fields[0]) if fields else None
                category = TRIPS[trip].category if trip is not None else 0  # of one unknown the strictest is asked
                begin = tick + (self.limits["stop_ticks", 0] if category else 0)
                self._barred_from = begin if self._barred_from is None else min(self._barred_from, begin)
                self._cleared = False
            elif word == "clear ok":
                self._cleared = True
            elif word == "arm ok":
                if self._barred_from is not None and not self._cleared:
                    yield Violation("S5", tick, "armed though not cleared")
                self._barred_from = None
                self._lease = -(-int(fields[0]) * 1000 // self.tick_us)
                yield from self._digest(tick, fields[1])

    def _digest(self, tick: int, told: str) -> Iterator[Violation]:
        limits = dict(self.limits)
        limits.update({key: value for at, key, value in self._changes if at <= tick})
        if told != digest_of(limits):
            yield Violation("S6", tick, "armed with another digest")

    def _lease_and_trips(self, row: Row) -> Iterator[Violation]:
        if not any(row.duty):
            return
        if self._barred_from is not None and row.tick >= self._barred_from:
            yield Violation("S5", row.tick, f"duty {row.duty} after a trip")
        longest = (self._lease or 0) + self.limits["stop_ticks", 0] + 1
        unknown = not self.fresh and self._lease is None
        if not unknown and (self._renewed is None or self._lease is None or row.tick - self._renewed > longest):
            yield Violation("S4", row.tick, f"duty {row.duty}, the last renewal was at {self._renewed}")


def _whole(text: str) -> int | None:
    try:
        return read_i32(text)
    except FieldError:
        return None


def loosened(name: str, before: int, after: int) -> bool:
    """Whether this change of a limit is one that an armed device must refuse (LIMIT-3)."""
    if before == after:
        return False
    if name in ZERO_IS_OFF and (before == 0 or after == 0):
        return after == 0
    tighter = LIMITS[name].tighter
    return tighter is Tighter.NONE or (after > before) == (tighter is Tighter.LOWER)


def digest_of(limits: Mapping[Key, int]) -> str:
    """The digest of LIMIT-5, computed from the table's order rather than by the device."""
    return digest(limits[key] for key in sorted(limits, key=lambda key: (LIMITS[key[0]].number, key[1])))
