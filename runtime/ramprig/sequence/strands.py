"""Walks a plan: each strand is one line of action that says, step by step, what it needs before it can go on.

A strand never waits itself. It yields an `Ask` and is resumed by the executive with the tick at which to go on; so any
number of branches run in one thread, in the order of their ticks. A plan of 100,000 passes is walked, not unrolled.
"""

from __future__ import annotations

import heapq
from collections.abc import Generator, Iterator
from dataclasses import dataclass
from enum import Enum, auto

from .plan import Await, Branches, Cycles, Judge, Loop, Moment, Order, Part, Run, Series, Standstill
from .steps import Measure


@dataclass(frozen=True, slots=True)
class Reach:
    """Go on when the device has nearly reached this tick, so that nobody runs far ahead of it."""

    tick: int


@dataclass(frozen=True, slots=True)
class Send:
    """Send this order, then go on."""

    order: Order
    part: Part


@dataclass(frozen=True, slots=True)
class Note:
    """Do this at its tick, once the samples up to it have come; goes on at once."""

    tick: int
    part: Judge | Moment


@dataclass(frozen=True, slots=True)
class Begin:
    """A part begins at this tick; goes on at once. `ends` is where a ramp of motor `ramped` ends, else None."""

    tick: int
    part: Part
    ends: int | None = None
    ramped: str = ""


@dataclass(frozen=True, slots=True)
class Pass:
    """Pass `number` of a loop begins at this tick; goes on at once."""

    tick: int
    number: int
    part: Loop


@dataclass(frozen=True, slots=True)
class Hang:
    """Go on once this wait, begun at `tick`, has come true."""

    tick: int
    part: Standstill | Await


@dataclass(frozen=True, slots=True)
class Look:
    """Tell whether this measurement holds at the tick, once its samples have come; `last`: no pass is left."""

    tick: int
    measure: Measure
    part: Loop
    last: bool


@dataclass(frozen=True, slots=True)
class Fork:
    """Begin these parts side by side at this tick; go on at the tick at which the last one is over."""

    tick: int
    parts: tuple[Part, ...]


class Turn(Enum):
    """What a block of cycles does next."""

    CYCLE = auto()
    CHECK = auto()
    OVER = auto()


@dataclass(frozen=True, slots=True)
class NextTurn:
    """What went before is over at this tick: count it once its samples have come, and tell what is next, and when."""

    tick: int
    part: Cycles


@dataclass(frozen=True, slots=True)
class Resumed:
    """What a strand is resumed with: the tick to go on at, and the answer to a `Look` or a `NextTurn`."""

    tick: int
    holds: bool = False
    turn: Turn = Turn.OVER


Ask = Reach | Send | Note | Begin | Pass | Hang | Look | Fork | NextTurn
Walk = Generator[Ask, Resumed, int]


def walk(part: Part, at: int) -> Walk:
    """Carry out a part from the tick `at` on; returns the tick at which it is over."""
    match part:
        case Series(parts=parts):
            for inner in parts:
                at = yield from walk(inner, at)
            return at
        case Run():
            return (yield from _run(part, at))
        case Judge() | Moment():
            yield Reach(at)
            yield Note(at, part)
            return at
        case Branches(parts=parts):
            yield Reach(at)
            return (yield Fork(at, parts)).tick
        case Loop():
            return (yield from _loop(part, at))
        case Cycles():
            return (yield from _cycles(part, at))
        case Standstill() | Await():
            yield Reach(at)
            yield Begin(at, part)
            return (yield Hang(at, part)).tick
        case _:
            raise TypeError(f"a {type(part).__name__} cannot be carried out")


def _run(part: Run, at: int) -> Walk:
    yield Reach(at)
    yield Begin(at, part, at + part.length if part.ramped else None, part.ramped)
    orders: Iterator[Order] = heapq.merge(*(motion.at(at) for motion in part.motions), key=lambda order: order.start)
    for order in orders:
        yield Send(order, part)
    return at + part.length


def _loop(part: Loop, begin: int) -> Walk:
    at = begin
    for number in range(part.times):
        if number and part.for_ticks is not None and at - begin >= part.for_ticks:
            break
        yield Reach(at)
        yield Pass(at, number + 1, part)
        at = yield from walk(part.first if number == 0 else part.later, at)
        if part.until is not None:
            answer = yield Look(at, part.until, part, number + 1 == part.times)
            at = answer.tick
            if answer.holds:
                break
    return at


def _cycles(part: Cycles, at: int) -> Walk:
    """Turns until the book says that it is over; every turn begins when the one before has been written down."""
    if part.before is not None:
        at = yield from walk(part.before, at)
    following: Part = part.first
    check = part.first_check
    while True:
        answer = yield NextTurn(at, part)
        match answer.turn:
            case Turn.OVER:
                return answer.tick
            case Turn.CHECK:
                assert check is not None  # a check is due only where the plan has one
                at = yield from walk(check, answer.tick)
                following = part.first if check is part.first_check else part.checked
            case Turn.CYCLE:
                at = yield from walk(following, answer.tick)
                following, check = part.later, part.check
