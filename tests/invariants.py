"""The invariants S1 to S7 of SPEC.md, checked over what a host sees: lines sent, lines received, samples of each tick.

Nothing here looks into the device. `Witness` is fed with the requests sent and the bytes received, in order, while the
device samples all its channels at every tick; `violations` tells each broken invariant with the tick it broke in.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass, field

from ramprig_link.check import digest
from ramprig_link.messages import Answer, Data, Notice, Request, parse_device_line
from ramprig_link.samples import channels_of, decode_data
from ramprig_link.words import LIMITS, STATE_BITS, TRIPS, State, Tighter, Trip

Key = tuple[str, int]
ZERO_IS_OFF = ("under_mv", "rated_ma", "stall_duty", "speed_counts")


@dataclass(slots=True)
class Row:
    """One tick as sampled."""

    tick: int
    duty: list[int]
    counts: list[int]
    pulse_us: list[int]
    state: State


@dataclass(slots=True)
class Witness:
    """What a host has seen of one device of `axes` axes and `servos` servos, whose limits were `limits` at the start.

    The device has just started, and before its first sample its motors stood at 0 counts. The requests' effects are
    taken from their answers. Ticks must not wrap while it looks.
    """

    limits: dict[Key, int]
    axes: int = 1
    servos: int = 1
    max_duty: int = 10000
    tick_us: int = 1000
    rows: list[Row] = field(default_factory=list)
    violations: list[str] = field(default_factory=list)
    _requests: dict[int, Request] = field(default_factory=dict)
    _answered: set[tuple[int, str]] = field(default_factory=set)
    _buffer: bytes = b""
    _events: list[tuple[int, str, tuple[str, ...]]] = field(default_factory=list)
    _limits_at: list[tuple[int, Key, int]] = field(default_factory=list)

    # ---- what is seen ----------------------------------------------------------------------------------------------

    def sent(self, request: Request) -> None:
        """A request that goes to the device for the first time; repeats need not be told."""
        self._requests[request.tag] = request
        self._answered.discard((request.tag, request.body))

    def received(self, data: bytes) -> None:
        """Bytes from the device."""
        *lines, self._buffer = (self._buffer + data).split(b"\n")
        for line in lines:
            message = parse_device_line(line)
            if isinstance(message, Data):
                self._samples(message)
            elif isinstance(message, Notice):
                self._events.append((message.tick, message.word, message.fields))
            elif isinstance(message, Answer):
                self._answer(message)

    def _samples(self, message: Data) -> None:
        block = decode_data(message.body)
        refs = channels_of(block.mask)
        for i in range(block.rows):
            row = Row(block.first_tick + i * block.period, [], [], [], State.OFF)
            for ref, column in zip(refs, block.columns, strict=True):
                if ref.kind in ("duty", "counts", "pulse_us"):
                    getattr(row, ref.kind).append(column[i])
                elif ref.kind == "state":
                    row.state = State(STATE_BITS["state"].of(column[i]))
            self.rows.append(row)

    def _answer(self, answer: Answer) -> None:
        request = self._requests.get(answer.tag)
        if request is None or answer.reason == "tag" or (answer.tag, request.body) in self._answered:
            return
        self._answered.add((answer.tag, request.body))
        self._events.append((answer.tick, "renewal", ()))
        if not answer.ok:
            return
        if request.word == "limit" and len(request.args) == 3:
            self._limits_at.append((answer.tick, (request.args[0], int(request.args[1])), int(answer.fields[0])))
        elif request.word in ("arm", "clear", "disarm"):
            self._events.append((answer.tick, request.word + " ok", request.args))

    # ---- the judgement ---------------------------------------------------------------------------------------------

    def check(self) -> list[str]:
        """All violations, in words; call once, after the last sample has been received."""
        self.rows.sort(key=lambda row: row.tick)
        for before, after in zip(self.rows, self.rows[1:], strict=False):
            if after.tick != before.tick + 1:
                self.violations.append(f"tick {after.tick}: the samples before it are missing")
        for index in range(self.axes):
            self._check_axis(index)
        for index in range(self.servos):
            self._check_servo(index)
        self._check_lease_and_trips()
        self._check_limits()
        return self.violations

    def _in_force(self) -> Iterator[tuple[Row, Mapping[Key, int], bool]]:
        """Each row with the limits in force in it and whether one was tightened in this very tick (LIMIT-4)."""
        limits = dict(self.limits)
        changes = sorted(self._limits_at, key=lambda change: change[0])
        at = 0
        for row in self.rows:
            changed = False
            while at < len(changes) and changes[at][0] < row.tick:
                _, key, value = changes[at]
                changed = changed or limits[key] != value
                limits[key] = value
                at += 1
            yield row, limits, changed

    def _say(self, row: Row, name: str, what: str) -> None:
        self.violations.append(f"{name} at tick {row.tick}: {what}")

    def _check_axis(self, index: int) -> None:
        duty = last_sign = mark = 0
        zero_ticks = still_ticks = self.rows[0].tick if self.rows else 0
        for row, limits, _ in self._in_force():
            now = row.duty[index]

            def limit(name: str, limits: Mapping[Key, int] = limits) -> int:
                return limits[name, index]

            ceiling = min(limit("ceiling_duty"), self.max_duty)
            if abs(row.counts[index] - mark) > limit("still_counts"):
                mark, still_ticks = row.counts[index], 0
            else:
                still_ticks += 1
            if abs(now) > ceiling:
                self._say(row, "S1", f"duty {now} with a ceiling of {ceiling}")
            self._check_slew(row, index, duty, now, limit)
            sign = (now > 0) - (now < 0)
            if sign and sign != last_sign:
                still = limit("sense") == 0 or still_ticks >= limit("still_ticks")
                if duty or zero_ticks < limit("dwell_ticks") or not still:
                    self._say(row, "S3", f"duty {duty} to {now} after {zero_ticks} ticks at zero, {still_ticks} still")
            if now and row.state not in (State.ARMED, State.STOPPING):
                self._say(row, "S5", f"duty {now} in state {row.state.word}")
            last_sign = sign or last_sign
            zero_ticks = 0 if now else zero_ticks + 1
            duty = now

    def _check_slew(self, row: Row, index: int, before: int, now: int, limit: Callable[[str], int]) -> None:
        ceiling = min(limit("ceiling_duty"), self.max_duty)
        held = max(-ceiling, min(ceiling, before))  # a tightened ceiling may cut
        if abs(now) > abs(before):
            if abs(now) - abs(before) > limit("slew_up_duty"):
                self._say(row, "S2", f"duty {before} to {now}, away from zero")
        elif abs(held) - abs(now) > limit("slew_down_duty"):
            switched_off = now == 0 and (
                row.state in (State.OFF, State.TRIPPED) or any(t == row.tick and w == "off" for t, w, _ in self._events)
            )
            if not switched_off:
                self._say(row, "S2", f"duty {before} to {now}, towards zero")

    def _check_servo(self, index: int) -> None:
        before = 0
        for row, limits, changed in self._in_force():
            now = row.pulse_us[index]
            lowest, highest = limits["pulse_min_us", index], limits["pulse_max_us", index]
            home = max(lowest, min(highest, limits["pulse_home_us", index]))
            if now and not lowest <= now <= highest:
                self._say(row, "S7", f"pulse {now} us outside {lowest} to {highest}")
            if now and not before and now != home:
                self._say(row, "S7", f"the first pulse is {now} us, home is {home}")
            most_us = limits["pulse_slew_ns", index] // 1000 + 1
            if now and before and abs(now - before) > most_us and not (changed and now in (lowest, highest)):
                self._say(row, "S7", f"pulse {before} to {now} us in a tick")
            if now and row.state not in (State.ARMED, State.STOPPING):
                self._say(row, "S7", f"pulse {now} us in state {row.state.word}")
            before = now

    def _check_lease_and_trips(self) -> None:
        events = sorted(self._events, key=lambda event: event[0])
        at = 0
        renewed = lease = None
        barred_from: int | None = None  # duty must be zero from this tick on
        cleared = False
        for row, limits, _ in self._in_force():
            stop_ticks = limits["stop_ticks", 0]
            while at < len(events) and events[at][0] <= row.tick:
                tick, word, fields = events[at]
                at += 1
                if word == "renewal":
                    renewed = tick
                elif word == "trip":
                    category = TRIPS[Trip[fields[0].upper()]].category
                    begin = tick + (stop_ticks if category else 0)
                    barred_from = begin if barred_from is None else min(barred_from, begin)
                    cleared = False
                elif word == "clear ok":
                    cleared = True
                elif word == "arm ok":
                    if barred_from is not None and not cleared:
                        self.violations.append(f"S5 at tick {tick}: armed though not cleared")
                    barred_from = None
                    lease = -(-int(fields[0]) * 1000 // self.tick_us)
            if not any(row.duty):
                continue
            if barred_from is not None and row.tick >= barred_from:
                self._say(row, "S5", f"duty {row.duty} after a trip")
            if renewed is None or lease is None or row.tick - renewed > lease + stop_ticks + 1:
                self._say(row, "S4", f"duty {row.duty}, the last renewal was at {renewed}")

    def _check_limits(self) -> None:
        states = {row.tick: row.state for row in self.rows}
        limits = dict(self.limits)
        changes = sorted(self._limits_at, key=lambda change: change[0])
        arms = [(tick, fields) for tick, word, fields in self._events if word == "arm ok"]
        for tick, key, value in changes:
            before = limits[key]
            live = {State.ARMED, State.STOPPING}
            if states.get(tick - 1) in live and states.get(tick) in live and _loosened(key[0], before, value):
                self.violations.append(f"S6 at tick {tick}: {key} loosened from {before} to {value} while armed")
            limits[key] = value
        for tick, fields in arms:
            limits = dict(self.limits)
            for changed_at, key, value in changes:
                if changed_at <= tick:
                    limits[key] = value
            if fields[1] != digest_of(limits):
                self.violations.append(f"S6 at tick {tick}: armed with another digest")


def _loosened(name: str, before: int, after: int) -> bool:
    if before == after:
        return False
    if name in ZERO_IS_OFF and (before == 0 or after == 0):
        return after == 0
    tighter = LIMITS[name].tighter
    return tighter is Tighter.NONE or (after > before) == (tighter is Tighter.LOWER)


def digest_of(limits: Mapping[Key, int]) -> str:
    """The digest of LIMIT-5, computed from the table's order rather than by the device."""
    return digest(limits[key] for key in sorted(limits, key=lambda key: (LIMITS[key[0]].number, key[1])))
