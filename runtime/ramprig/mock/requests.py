"""What each request does: the ranges and states it asks for, then the deed (SPEC section 8).

`ramprig_link` has already refused unknown words and wrong spellings. Refusals come in the order of BAD-5: index,
range, state, and then the reasons of the word itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

from ramprig_link.fields import Value
from ramprig_link.messages import Request
from ramprig_link.samples import PERIOD_MAX
from ramprig_link.words import HORIZON_TICKS, LIMITS, WORDS, Form, Kind, Reason, Rest, Source, State, Trip

from .servos import NS_PER_US

if TYPE_CHECKING:
    from .controller import Controller

Fields = tuple[object, ...]
LEASE_MIN_MS = LIMITS["lease_ms"].lowest
NUMBER_MAX = 0xFF
"""Data lines are numbered by two hex digits."""


@dataclass(frozen=True, slots=True)
class Call:
    """A request being carried out: who by, and its arguments in order."""

    board: Controller
    tag: int
    args: tuple[Value, ...]

    def number(self, at: int) -> int:
        """The argument `at`, a number."""
        value = self.args[at]
        assert isinstance(value, int)
        return value

    def text(self, at: int) -> str:
        """The argument `at`, a word."""
        return str(self.args[at])


def carry_out(board: Controller, request: Request) -> Fields | Reason:
    """Do what is asked and return the fields of `ok`, or return why not and do nothing."""
    word = WORDS[request.word]
    call = Call(board, request.tag, request.values())
    for field, value in zip(word.args, call.args, strict=False):
        fitted = {Kind.AXIS: board.board.axes, Kind.SERVO: board.board.servos}.get(field.kind)
        if fitted is not None and isinstance(value, int) and value >= fitted:
            return Reason.INDEX
        if field.kind is Kind.TICKS and isinstance(value, int) and value > HORIZON_TICKS:
            return Reason.RANGE
    check = CHECKS.get(request.word)
    refusal = check(call) if check else None
    if refusal is not None:
        return refusal
    if board.state not in word.states:
        return Reason.STATE
    return DEEDS[request.word](call)


# ---- indexes and ranges --------------------------------------------------------------------------------------------


def _check_arm(call: Call) -> Reason | None:
    return None if LEASE_MIN_MS <= call.number(0) <= call.board.limits["lease_ms", 0] else Reason.RANGE


def _check_ramp(call: Call) -> Reason | None:
    ceiling = min(call.board.limits["ceiling_duty", call.number(0)], call.board.board.max_duty)
    return None if abs(call.number(1)) <= ceiling else Reason.RANGE


def _check_swing(call: Call) -> Reason | None:
    servo, pulse_us, ticks = call.number(0), call.number(1), call.number(2)
    if pulse_us == 0:
        return Reason.RANGE if ticks else None
    limits = call.board.limits
    inside = limits["pulse_min_us", servo] <= pulse_us <= limits["pulse_max_us", servo]
    return None if inside else Reason.RANGE


def _check_stop(call: Call) -> Reason | None:
    return None if call.number(0) in (0, 1) else Reason.RANGE


def _check_limit(call: Call) -> Reason | None:
    name, index = call.text(0), call.number(1)
    if (name, index) not in call.board.limits:
        return Reason.INDEX
    if len(call.args) == 2:
        return None
    # `armed` is the word's own reason and comes after `state`; as every state allows `limit`, both are judged here.
    return call.board.limits.refusal(name, index, call.number(2), armed=call.board.live)


def _check_log(call: Call) -> Reason | None:
    period, mask, form = call.number(0), call.number(1), call.text(2)
    if period == 0:
        return None if mask == 0 and form == Form.PACKED.word else Reason.RANGE
    known = call.board.board.mask
    return Reason.RANGE if period > PERIOD_MAX or mask == 0 or mask & ~known else None


def _check_again(call: Call) -> Reason | None:
    return None if call.number(0) <= NUMBER_MAX else Reason.RANGE


CHECKS: dict[str, Callable[[Call], Reason | None]] = {
    "arm": _check_arm,
    "ramp": _check_ramp,
    "swing": _check_swing,
    "stop": _check_stop,
    "limit": _check_limit,
    "log": _check_log,
    "again": _check_again,
}


# ---- deeds ---------------------------------------------------------------------------------------------------------


def _who(call: Call) -> Fields | Reason:
    return call.board.identity()


def _beat(call: Call) -> Fields | Reason:
    return (call.board.state,)


def _state(call: Call) -> Fields | Reason:
    board = call.board
    fields: list[object] = [
        board.state, board.latched.trip, len(board.orders), board.supply.supply_mv, board.temperature_dc,
    ]  # fmt: skip
    for drive, watch in zip(board.drives, board.watches, strict=True):
        fields += (drive.duty, watch.counts, watch.current_ma)
    fields += (pulse.pulse_us for pulse in board.pulses)
    return tuple(fields)


def _arm(call: Call) -> Fields | Reason:
    if call.text(1) != call.board.limits.digest():
        return Reason.DIGEST
    call.board.arm(call.number(0))
    return (call.board.lease_ms,)


def _disarm(call: Call) -> Fields | Reason:
    board = call.board
    if board.state is State.ARMED:
        if any(drive.moving for drive in board.drives):
            return Reason.MOVING
        board.cut(Source.DISARM)
    return ()


def _queue(call: Call, word: str, *, goal: int | Rest, ticks: int, start_tick: int) -> Fields | Reason:
    """Give an order a place, or trip for its being late (ORDER-1, ORDER-2)."""
    board = call.board
    ahead = (start_tick - board.age + 0x80000000 & 0xFFFFFFFF) - 0x80000000
    if ahead <= 0:
        board.late_order(-ahead)
        return Reason.LATE
    if ahead > HORIZON_TICKS:
        return Reason.FAR
    if not board.orders.free:
        return Reason.FULL
    board.orders.add(word, call.number(0), goal=goal, ticks=ticks, start=board.age + ahead, tag=call.tag)
    return (board.orders.free,)


def _ramp(call: Call) -> Fields | Reason:
    return _queue(call, "ramp", goal=call.number(1), ticks=call.number(2), start_tick=call.number(3))


def _swing(call: Call) -> Fields | Reason:
    goal_ns = call.number(1) * NS_PER_US
    return _queue(call, "swing", goal=goal_ns, ticks=call.number(2), start_tick=call.number(3))


def _rest(call: Call) -> Fields | Reason:
    mode = Rest.named(call.text(1))
    assert mode is not None
    return _queue(call, "rest", goal=mode, ticks=0, start_tick=call.number(2))


def _stop(call: Call) -> Fields | Reason:
    board = call.board
    if board.live:
        if call.number(0) == 0:
            board.cut(Source.HOST)
        elif board.state is State.ARMED:
            board.begin_stop(Source.HOST)
    return (board.state,)


def _clear(call: Call) -> Fields | Reason:
    if call.board.persists():
        return Reason.CAUSE
    call.board.clear()
    return ()


def _why(call: Call) -> Fields | Reason:
    last, board = call.board.last_trip, call.board
    tick = board.last_trip_age & 0xFFFFFFFF if last.trip is not Trip.NONE else 0
    return last.trip, tick, last.index, last.value, last.bound


def _limit(call: Call) -> Fields | Reason:
    name, index = call.text(0), call.number(1)
    if len(call.args) > 2:
        call.board.limits.set(name, index, call.number(2))
        call.board.limits_set = True
    return (call.board.limits[name, index],)


def _log(call: Call) -> Fields | Reason:
    period, mask = call.number(0), call.number(1)
    board = call.board
    made = board.sampling.end()
    board.transmitter.promote_data()
    first = board.age + 1
    if period == 0:
        return 0, made
    form = Form.named(call.text(2))
    assert form is not None
    board.sampling.begin(period=period, mask=mask, form=form, age=first, values=board.channel_values(mask))
    return first & 0xFFFFFFFF, made


def _again(call: Call) -> Fields | Reason:
    line = call.board.sampling.kept(call.number(0))
    if line is None:
        return Reason.GONE
    call.board.encore = line
    return ()


def _trail(call: Call) -> Fields | Reason:
    payload = call.board.trail.read(call.number(0), call.number(1))
    return Reason.GONE if payload is None else (len(call.board.trail), payload)


def _counters(call: Call) -> Fields | Reason:
    board = call.board
    counts = board.link.counts
    return (
        counts.lines, counts.garbled, counts.overlong, board.overrun, counts.repeats, 0,
        board.sampling.made, board.sampling.dropped, board.inputs.read_illegal_edges(),
    )  # fmt: skip


DEEDS: dict[str, Callable[[Call], Fields | Reason]] = {
    "who": _who,
    "beat": _beat,
    "state": _state,
    "arm": _arm,
    "disarm": _disarm,
    "ramp": _ramp,
    "swing": _swing,
    "rest": _rest,
    "stop": _stop,
    "clear": _clear,
    "why": _why,
    "limit": _limit,
    "log": _log,
    "again": _again,
    "trail": _trail,
    "counters": _counters,
}
