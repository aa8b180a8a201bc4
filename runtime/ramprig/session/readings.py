"""What the device tells about itself, typed: identity, state, trip and counters, read from the fields of answers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from ramprig.errors import LinkError
from ramprig_link.faults import FieldError
from ramprig_link.fields import Value, read_fields, read_i32, read_u32
from ramprig_link.words import NOTICES, WORDS, Cap, State, Trip


def read_answer(word: str, texts: Sequence[str]) -> tuple[Value, ...]:
    """The values of an `ok` answer to `word`, a group at its end left out; raises LinkError where it cannot be read."""
    try:
        return read_fields(WORDS[word].fields, texts)
    except FieldError as error:
        raise LinkError(f"the device's answer to `{word}` cannot be read: {error}") from error


def read_notice(word: str, texts: Sequence[str]) -> tuple[Value, ...] | None:
    """The values of a notice; None where this version does not know it or it cannot be read."""
    if word not in NOTICES:
        return None
    try:
        return read_fields(NOTICES[word].fields, texts)
    except FieldError:
        return None


@dataclass(frozen=True, slots=True, kw_only=True)
class Identity:
    """The answer to `who` (SPEC.md WHO-1)."""

    version: int
    firmware: str
    board: str
    serial: str
    boot: int
    tick_us: int
    axes: int
    servos: int
    max_duty: int
    queue: int
    trail: int
    keep: int
    caps: Cap

    @classmethod
    def read(cls, texts: Sequence[str]) -> Identity:
        """From the fields of an answer or notice `who`; raises LinkError where they cannot be read."""
        values = read_answer("who", texts)
        numbers = [value for value in values if isinstance(value, int)]
        firmware, board, serial = (str(value) for value in values[1:4])
        version, boot, tick_us, axes, servos, max_duty, queue, trail, keep, caps = numbers
        if tick_us == 0:
            raise LinkError("the device says that its tick is 0 us long")
        return cls(
            version=version, firmware=firmware, board=board, serial=serial, boot=boot, tick_us=tick_us, axes=axes,
            servos=servos, max_duty=max_duty, queue=queue, trail=trail, keep=keep, caps=Cap(caps),
        )  # fmt: skip

    @property
    def tick_s(self) -> float:
        """The nominal length of a tick, in s."""
        return self.tick_us / 1e6

    @property
    def name(self) -> str:
        """Board and serial together, which name one board and no other."""
        return f"{self.board} {self.serial}"


@dataclass(frozen=True, slots=True)
class AxisReading:
    """One axis in a tick: duty at the bridge in 1/10000, quadrature counts (32 bits, wrapping), current in mA."""

    duty: int
    counts: int
    current_ma: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Reading:
    """The answer to `state`: what the device did and measured in the last tick ended, `tick` unwrapped.

    `supply_mv` and `temperature_dc` are 0 where not measured; `pulses_us` has 0 for a servo without pulses.
    """

    tick: int
    state: State
    trip: Trip
    queued: int
    supply_mv: int
    temperature_dc: int
    axes: tuple[AxisReading, ...]
    pulses_us: tuple[int, ...]

    @classmethod
    def read(cls, texts: Sequence[str], *, tick: int, axes: int, servos: int) -> Reading:
        """From the fields of an answer; raises LinkError where they cannot be read."""
        state, trip, queued, supply_mv, temperature_dc = read_answer("state", texts)
        groups = texts[5:]
        if len(groups) < 3 * axes + servos:
            raise LinkError(f"the device's answer to `state` has {len(groups)} fields for {axes} axes, {servos} servos")
        try:
            values = [read_i32(text) for text in groups[: 3 * axes]]
            pulses = [read_u32(text) for text in groups[3 * axes : 3 * axes + servos]]
        except FieldError as error:
            raise LinkError(f"the device's answer to `state` cannot be read: {error}") from error
        return cls(
            tick=tick,
            state=known_state(str(state)),
            trip=known_trip(str(trip)),
            queued=int(queued),
            supply_mv=int(supply_mv),
            temperature_dc=int(temperature_dc),
            axes=tuple(AxisReading(*values[at : at + 3]) for at in range(0, 3 * axes, 3)),
            pulses_us=tuple(pulses),
        )

    @property
    def outputs_off(self) -> bool:
        """Whether nothing is switched on: state `off` or `tripped`, every duty and every pulse zero."""
        resting = self.state in (State.OFF, State.TRIPPED)
        return resting and not any(axis.duty for axis in self.axes) and not any(self.pulses_us)


def known_state(word: str) -> State:
    """The state of this name; raises LinkError for one that version 1 does not have."""
    state = State.named(word)
    if state is None:
        raise LinkError(f"the device is in a state this program does not know: {word!r}")
    return state


def known_trip(word: str) -> Trip:
    """The trip of this name; raises LinkError for one that version 1 does not have."""
    trip = Trip.named(word)
    if trip is None:
        raise LinkError(f"the device has a trip this program does not know: {word!r}")
    return trip


@dataclass(frozen=True, slots=True, kw_only=True)
class TripRecord:
    """The last trip since the device's start: `tick` unwrapped, `index` the axis, value and bound as in SPEC.md 11."""

    trip: Trip
    tick: int
    index: int
    value: int
    bound: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Counters:
    """The answer to `counters`, since the device's start (SPEC.md COUNT-1)."""

    lines: int
    garbled: int
    overlong: int
    overrun: int
    repeats: int
    worst_us: int
    made: int
    dropped: int
    illegal_edges: int

    @classmethod
    def read(cls, texts: Sequence[str]) -> Counters:
        """From the fields of an answer; raises LinkError where they cannot be read."""
        return cls(**dict(zip(cls.__slots__, map(int, read_answer("counters", texts)), strict=False)))
