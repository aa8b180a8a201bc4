"""What a check is and what it works with: the board's line, its limits as they were, and a place for what it finds."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from enum import Enum
from typing import NoReturn

from ramprig.accept.invariants import Key, Row, Witness, digest_of
from ramprig.accept.lines import Fault
from ramprig.accept.talk import Talk
from ramprig.session.limits import limit_keys
from ramprig.session.readings import Identity, Reading
from ramprig_link.faults import FieldError
from ramprig_link.fields import read_i32
from ramprig_link.messages import Answer, Notice
from ramprig_link.words import Cap, State, Trip

LEAD_TICKS = 60
"""An order starts so long after the tick that was last heard, and later on a slow link."""
SETTLE_TICKS = 130
"""FLUSH_TICKS and some: after so long the samples of a tick have come."""
OFF_TRIES = 30
COOL_S = 6.0
"""Six times the least time constant of the thermal model: e^-6 of the heat is left."""
DUTY_LEAST = 200
"""Below 2 % no brushed motor turns, and nothing can be judged."""


class Power(Enum):
    """What a check switches on."""

    NONE = "nothing is switched on"
    ARMED = "outputs enabled, bridge at zero"
    MOTOR = "the motor runs"
    SERVO = "the servo moves"


@dataclass(frozen=True, slots=True, kw_only=True)
class Check:
    """One check: the clauses it covers, what it does in a sentence, what it switches on; `current`: it samples that."""

    name: str
    clauses: tuple[str, ...]
    text: str
    power: Power
    current: bool = False
    run: Callable[[Trial], None]


@dataclass(slots=True)
class Result:
    """What became of a check: what failed by which clauses, or why it was not made; `notes` are said beside it."""

    check: Check
    faults: list[Fault] = field(default_factory=list)
    untested: str = ""
    notes: list[str] = field(default_factory=list)
    seconds: float = 0.0

    @property
    def word(self) -> str:
        """`passed`, `FAILED` or `not tested`."""
        if self.faults:
            return "FAILED"
        return "not tested" if self.untested else "passed"


class Untested(Exception):
    """A check cannot be made on this board; the text says why."""


class Missing(Untested):
    """Samples that a check judges by were dropped on a slow link; another try may have them."""


class Broken(Exception):
    """A check cannot go on: what failed has been noted."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Wish:
    """What to accept: the axis and servo that may move (None: none), the greatest duty, in 1/10000.

    `energise` answers whether power may be switched on; `restart` starts the board anew and answers whether it could.
    """

    axis: int = 0
    servo: int = 0
    duty: int = 3000
    energise: Callable[[Trial], bool]
    restart: Callable[[], bool] | None = None
    only: str = ""


class Trial:
    """The board under test as checks see it. `limits` has what is in force, `original` what was at the beginning."""

    def __init__(self, talk: Talk, wish: Wish) -> None:
        self.talk = talk
        self.wish = wish
        self.known: Identity | None = None
        self.limits: dict[Key, int] = {}
        self.original: dict[Key, int] = {}
        self.result: Result | None = None
        self.witness: Witness | None = None
        self.saw_start = False
        """The board's start was heard, and nothing has been driven since."""

    # ---- what is found ---------------------------------------------------------------------------------------------

    def fail(self, clauses: str, text: str) -> None:
        """Note that clauses are broken."""
        assert self.result is not None
        self.result.faults.append(Fault(tuple(clauses.split()), text))

    def require(self, right: bool, clauses: str, text: str) -> bool:
        """Note that clauses are broken where it is not right; returns whether it is."""
        if not right:
            self.fail(clauses, text)
        return right

    def need(self, right: bool, clauses: str, text: str) -> None:
        """As `require`, and the check ends where it is not right."""
        if not self.require(right, clauses, text):
            raise Broken

    def note(self, text: str) -> None:
        """Something the report tells beside the result."""
        assert self.result is not None
        self.result.notes.append(text)

    @property
    def last_fault(self) -> str:
        """What was noted last, in words."""
        return self.result.faults[-1].text if self.result is not None and self.result.faults else "no reason was noted"

    # ---- requests --------------------------------------------------------------------------------------------------

    @property
    def identity(self) -> Identity:
        """Who answers."""
        assert self.known is not None
        return self.known

    def ok(self, body: str, clauses: str) -> Answer:
        """The answer `ok`; any other breaks the clauses and ends the check."""
        answer = self.talk.ask(body)
        self.need(answer.ok, clauses, f"`{body}` was refused: {answer.reason}")
        return answer

    def number(self, body: str, clauses: str) -> int:
        """The one number of the answer `ok`; anything else breaks the clauses and ends the check."""
        fields = self.ok(body, clauses).fields
        try:
            return read_i32(fields[0])
        except (FieldError, IndexError):
            self._broken(clauses, f"`{body}` was answered `ok` with '{' '.join(fields)}', which is no number")

    def refused(self, body: str, reason: str, clauses: str) -> Answer:
        """The answer to a request that must be refused for this reason."""
        answer = self.talk.ask(body)
        found = f"refused: {answer.reason}" if not answer.ok else f"answered ok {' '.join(answer.fields)}".strip()
        right = not answer.ok and answer.reason == reason
        self.require(right, clauses, f"`{body}` was {found}; it must be refused: {reason}")
        return answer

    def state(self) -> Reading:
        """The answer to `state`; LinkError where it cannot be read."""
        answer = self.ok("state", "STATE-1")
        tick = self.talk.ticks.near(answer.tick)
        return Reading.read(answer.fields, tick=tick, axes=self.identity.axes, servos=self.identity.servos)

    def counters(self) -> tuple[int, ...]:
        """The nine fields of `counters`."""
        return tuple(map(int, self.ok("counters", "COUNT-1").fields))

    def tick_of(self, answer: Answer | Notice) -> int:
        """The unwrapped tick."""
        return self.talk.ticks.near(answer.tick)

    # ---- limits ----------------------------------------------------------------------------------------------------

    @property
    def digest(self) -> str:
        """The digest of the limits as they are known to be."""
        return digest_of(self.limits)

    def read_limits(self) -> None:
        """Read every limit of the board."""
        for item, index in limit_keys(self.identity):
            self.limits[item, index] = self.number(f"limit {item} {index}", "LIMIT-1")

    def set_limit(self, item: str, index: int, value: int, clauses: str = "LIMIT-1") -> Answer:
        """Set a limit and note what is in force; the check ends where it is refused."""
        answer = self.ok(f"limit {item} {index} {value}", clauses)
        in_force = int(answer.fields[0])
        self.limits[item, index] = in_force
        self.need(in_force == value, clauses, f"limit {item} {index} was set to {value} and is answered as {in_force}")
        return answer

    def put_back(self) -> list[str]:
        """Set the limits to what they were at the beginning; what could not be, in sentences. The state must be `off`.

        Those that bound each other are tried again after the others.
        """
        left = {key: value for key, value in self.original.items() if self.limits.get(key) != value}
        for _ in range(2):
            for (item, index), value in list(left.items()):
                answer = self.talk.ask(f"limit {item} {index} {value}")
                if answer.ok and answer.fields[:1] == (str(value),):
                    self.limits[item, index] = value
                    del left[item, index]
        return [f"limit {item} {index} is not what it was: {value}" for (item, index), value in left.items()]

    # ---- states ----------------------------------------------------------------------------------------------------

    def settle(self) -> list[str]:
        """Bring the board to `off` with its own limits; what could not be done, in sentences."""
        self.talk.beat_s = None
        for attempt in range(OFF_TRIES):
            self.talk.ask("stop 0")
            reading = self.state()
            if reading.state is State.OFF:
                return self.put_back()
            if reading.state is State.TRIPPED:
                self.put_back()
                if reading.trip is Trip.OVERLOAD:
                    self._cool()
                self.talk.ask("clear")
                if attempt > 3:
                    self.talk.listen(0.2)
        return [f"the board does not come to `off`: {reading.state.word}, trip {reading.trip.word}"]

    def _cool(self) -> None:
        """Let the heat that a shifted reading has left in the thermal models go, as fast as these can."""
        for axis in range(self.identity.axes):
            for item, value in (("rated_ma", 0), ("thermal_s", 1)):
                if self.talk.ask(f"limit {item} {axis} {value}").ok:
                    self.limits[item, axis] = value
        self.talk.listen(COOL_S)

    def arm(self, lease_ms: int | None = None) -> Answer:
        """Arm, with beats from now on."""
        lease_ms = min(self.limits["lease_ms", 0], 500) if lease_ms is None else lease_ms
        answer = self.ok(f"arm {lease_ms} {self.digest}", "ARM-1 ARM-2 LIMIT-5")
        self.talk.beat_s = lease_ms / 5000
        return answer

    def lead_ticks(self) -> int:
        """So far ahead of the last tick heard an order is sure to come in time."""
        return LEAD_TICKS + round(3 * self.talk.worst_answer_s / self.talk.tick_s)

    def start_tick(self) -> int:
        """A tick soon to come, unwrapped."""
        return self.tick_of(self.talk.ask("beat")) + self.lead_ticks()

    def ramp(self, duty: int, ticks: int = 0, *, start: int | None = None, clauses: str = "ORDER-1") -> int:
        """Order a ramp of the axis under test; returns the unwrapped start tick."""
        start = self.start_tick() if start is None else start
        self.ok(f"ramp {self.axis} {duty} {ticks} {start % (1 << 32)}", clauses)
        return start

    # ---- samples ---------------------------------------------------------------------------------------------------

    def come(self) -> None:
        """Wait until the samples of the present tick have come."""
        self.talk.listen_ticks(SETTLE_TICKS)

    def row(self, tick: int) -> Row | None:
        """The sample of a tick, None where it is missing."""
        return None if self.witness is None else self.witness.history.get(tick)

    def rows(self, first: int, last: int) -> list[Row]:
        """The samples of these ticks; Missing where one is missing."""
        rows = [self.row(tick) for tick in range(first, last + 1)]
        missing = sum(row is None for row in rows)
        if missing:
            raise Missing(f"{missing} of {len(rows)} samples are missing: this link cannot carry one sample a tick")
        return [row for row in rows if row is not None]

    def duties(self, first: int, last: int) -> list[int]:
        """The duty of the axis under test in these ticks."""
        return [row.duty[self.axis] for row in self.rows(first, last)]

    def tripped(self, since: int, trip: Trip, clauses: str, *, timeout_s: float = 2.0) -> tuple[int, Notice]:
        """The notice of this trip with its tick; the check ends where it does not come, or another one does."""
        heard = self.talk.notice("trip", since, timeout_s)
        if heard is None or not isinstance(heard.message, Notice):
            self._broken(clauses, f"no trip {trip.word} came")
        word = heard.message.fields[0]
        self.need(word == trip.word, clauses, f"the trip {word} came in place of {trip.word}")
        return self.tick_of(heard.message), heard.message

    def _broken(self, clauses: str, text: str) -> NoReturn:
        self.fail(clauses, text)
        raise Broken

    # ---- what a check needs ----------------------------------------------------------------------------------------

    @property
    def axis(self) -> int:
        """The axis whose motor runs; Untested where the board has none."""
        if not self.identity.axes:
            raise Untested("the board has no axis, so that no motor can run")
        return self.wish.axis

    @property
    def duty(self) -> int:
        """The duty that the axis under test is driven with; Untested where its limits leave none."""
        duty = min(self.wish.duty, self.original["ceiling_duty", self.axis], self.identity.max_duty)
        if duty < DUTY_LEAST:
            raise Untested(f"the ceiling of axis {self.axis} leaves a duty of {duty}, with which nothing turns")
        return duty

    def needs(self, cap: Cap) -> None:
        """Untested where the board says it cannot do this."""
        if cap not in self.identity.caps:
            name = str(cap.name).lower()
            raise Untested(f"the board has no capability `{name}`")


_ALL: list[Check] = []


def check(
    clauses: str, power: Power = Power.NONE, *, current: bool = False
) -> Callable[[Callable[[Trial], None]], Callable[[Trial], None]]:
    """Declare a function as a check: its name is the function's, its text the docstring's first sentence."""

    def declare(run: Callable[[Trial], None]) -> Callable[[Trial], None]:
        text = re.split(r"(?<=[.])\s|\n\n", (run.__doc__ or "").strip())[0].replace("\n", " ")
        text = re.sub(r" +", " ", text)
        name = run.__name__.replace("_", "-")
        _ALL.append(Check(name=name, clauses=tuple(clauses.split()), text=text, power=power, current=current, run=run))
        return run

    return declare


def declared() -> Sequence[Check]:
    """Every check of the modules loaded so far, in the order of their declaration."""
    return tuple(_ALL)
