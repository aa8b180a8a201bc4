"""Which columns a samples file has, and how each follows from the channels of the device.

The set is fixed by the motors and servos that the caller describes and does not depend on what happens to be logged,
so that the files of one bench can be compared; the caller asks the device for `Columns.needed`, and a channel that is
not logged leaves its fields empty. The order is `tick, time_s`, the motors, the servos, `supply_v` and last `state`.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Collection, Sequence
from dataclasses import dataclass
from typing import TypeAlias

from ramprig_link.words import STATE_BITS, State, Trip

ChannelKey: TypeAlias = tuple[str, int]
"""A channel as the device names it: its kind and the number of its axis or servo (0 for the device's own)."""


@dataclass(frozen=True, slots=True)
class MotorColumns:
    """What the columns of one motor need to know.

    `counts_per_rev` counts the x4 quadrature counts of one turn of the output shaft, positive, not always whole.
    `duty_sign` is -1 where the user's forward is the device's backward, and turns duty and current over. `count_sign`
    is -1 where the counts fall while the motor turns in the user's forward direction, and turns position and speed
    over. The counts themselves are always logged as the device tells them, so that a wrong constant can be mended
    afterwards. `on_output` says that the encoder sits on the output shaft, behind the play of the gear. Without
    `has_encoder` there are no counts, no position and no speed: an open input counts anything.
    """

    name: str
    axis: int
    counts_per_rev: float
    duty_sign: int = 1
    count_sign: int = 1
    on_output: bool = False
    has_encoder: bool = True


@dataclass(frozen=True, slots=True)
class ServoColumns:
    """What the columns of one servo need to know: angle = (pulse - `neutral_us`) / `us_per_deg`, which may be
    negative."""

    name: str
    servo: int
    neutral_us: float
    us_per_deg: float


@dataclass(frozen=True, slots=True)
class TickField:
    """The device's unwrapped tick."""

    name: str


@dataclass(frozen=True, slots=True)
class TimeField:
    """Seconds since the tick that the run counts from, by the device's clock."""

    name: str
    tick_us: int

    @property
    def decimals(self) -> int:
        """Enough for every tick to be told exactly."""
        return 3 if self.tick_us % 1000 == 0 else 6


@dataclass(frozen=True, slots=True)
class ScaledField:
    """(value + `offset`) * `factor` with `decimals`; empty where the value is `blank_at`."""

    name: str
    channel: ChannelKey
    factor: float
    decimals: int
    offset: float = 0.0
    blank_at: int | None = None


@dataclass(frozen=True, slots=True)
class CountsField:
    """The counts as the device tells them, going on past the wrap of its 32 bits."""

    name: str
    channel: ChannelKey


@dataclass(frozen=True, slots=True)
class TurnsField:
    """Turns of the output shaft: `sign` * counts / `counts_per_rev`."""

    name: str
    channel: ChannelKey
    counts_per_rev: float
    sign: int
    decimals: int


@dataclass(frozen=True, slots=True)
class SpeedField:
    """Speed of the output shaft, estimated from the counts; empty while it is not known.

    `on_output` says where the encoder sits: it does not change the estimate, but what can be told from it.
    """

    name: str
    channel: ChannelKey
    counts_per_rev: float
    sign: int
    decimals: int = 3
    on_output: bool = False


@dataclass(frozen=True, slots=True)
class LabelField:
    """A number that is told as a word or a few, ASCII, separated by blanks."""

    name: str
    channel: ChannelKey
    label: Callable[[int], str]


Field: TypeAlias = TickField | TimeField | ScaledField | CountsField | TurnsField | SpeedField | LabelField


@dataclass(frozen=True, slots=True)
class Columns:
    """The columns of a samples file in their order."""

    fields: tuple[Field, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """The header."""
        return tuple(field.name for field in self.fields)

    @property
    def needed(self) -> tuple[ChannelKey, ...]:
        """The channels that must be logged for every column to be filled, each once."""
        keys = (field.channel for field in self.fields if not isinstance(field, TickField | TimeField))
        return tuple(dict.fromkeys(keys))

    @property
    def speeds(self) -> tuple[SpeedField, ...]:
        """The columns that need a speed estimator."""
        return tuple(field for field in self.fields if isinstance(field, SpeedField))

    @property
    def on_output(self) -> frozenset[str]:
        """The motors whose encoder sits on the output shaft."""
        return frozenset(field.name.rpartition(".")[0] for field in self.speeds if field.on_output)

    def only(self, channels: Collection[ChannelKey]) -> Columns:
        """The columns that these channels fill, tick and time among them."""
        return Columns(
            tuple(
                field for field in self.fields if isinstance(field, TickField | TimeField) or field.channel in channels
            )
        )


def state_label(bits: int) -> str:
    """The `state` channel in words: the state, then the bits that are set, then the latched trip, such as `armed
    at_slew`.

    Bits this version knows nothing of are told by their place, such as `bit6`, so that nothing is lost.
    """
    words = [State(STATE_BITS["state"].of(bits)).word]
    known = 0
    for part in STATE_BITS.values():
        mask = (1 << part.width) - 1 << part.low
        known |= mask
        if part.width == 1 and bits & mask:
            words.append(part.name)
    trip = STATE_BITS["trip"].of(bits)
    if trip:
        words.append(Trip(trip).word if trip in set(Trip) else f"trip{trip}")
    words += [f"bit{place}" for place in range(16) if bits & ~known & 1 << place]
    return " ".join(words)


def turns_decimals(counts_per_rev: float) -> int:
    """Decimals that tell one count from the next when turns are printed: 5 up to 10,000 counts a turn, then more, 7
    at most."""
    return min(7, max(5, math.ceil(math.log10(counts_per_rev)) + 1))


def _motor_fields(motor: MotorColumns) -> list[Field]:
    name, axis = motor.name, motor.axis
    per_rev, sign = motor.counts_per_rev, motor.count_sign
    counts = ("counts", axis)
    of_encoder: list[Field] = [
        CountsField(f"{name}.counts", counts),
        TurnsField(f"{name}.position_rev", counts, per_rev, sign, turns_decimals(per_rev)),
        SpeedField(f"{name}.speed_rpm", counts, per_rev, sign, on_output=motor.on_output),
    ]
    return [
        ScaledField(f"{name}.duty_pct", ("duty", axis), motor.duty_sign / 100, 2),
        *(of_encoder if motor.has_encoder else []),
        ScaledField(f"{name}.current_a", ("current_ma", axis), motor.duty_sign / 1000, 3),
    ]


def _servo_fields(servo: ServoColumns) -> list[Field]:
    pulse = ("pulse_us", servo.servo)
    return [
        ScaledField(f"{servo.name}.pulse_us", pulse, 1.0, 0),
        ScaledField(f"{servo.name}.angle_deg", pulse, 1 / servo.us_per_deg, 2, offset=-servo.neutral_us, blank_at=0),
    ]


def columns_of(
    motors: Sequence[MotorColumns],
    servos: Sequence[ServoColumns],
    *,
    tick_us: int,
    temperature: bool = False,
    label: Callable[[int], str] = state_label,
) -> Columns:
    """The columns of a bench with these motors and servos, in the order in which they are given.

    A servo without pulses (0 us) has no angle. `temperature` adds `temperature_degc` before `state`. Raises
    ValueError where two columns would have the same name or a constant is not usable.
    """
    fields: list[Field] = [TickField("tick"), TimeField("time_s", tick_us)]
    for motor in motors:
        if not (motor.counts_per_rev > 0 and {motor.duty_sign, motor.count_sign} <= {-1, 1}):
            raise ValueError(f"motor {motor.name}: counts_per_rev must be positive and the signs 1 or -1")
        fields += _motor_fields(motor)
    for servo in servos:
        if servo.us_per_deg == 0:
            raise ValueError(f"servo {servo.name}: us_per_deg must not be 0")
        fields += _servo_fields(servo)
    fields.append(ScaledField("supply_v", ("supply_mv", 0), 1 / 1000, 3))
    if temperature:
        fields.append(ScaledField("temperature_degc", ("temperature_dc", 0), 1 / 10, 1))
    fields.append(LabelField("state", ("state", 0), label))
    columns = Columns(tuple(fields))
    twice = [name for name in columns.names if columns.names.count(name) > 1]
    if twice:
        raise ValueError(f"two columns would be named {twice[0]}")
    return columns


def _typical_characters(field: Field, ticks: int) -> int:
    """What a value of this column usually takes, as a motor at half speed and load would show it."""
    digits = len(str(max(1, ticks)))
    match field:
        case TickField():
            return digits
        case TimeField():
            seconds = max(1, ticks * field.tick_us // 1_000_000)
            return len(str(seconds)) + 1 + field.decimals
        case ScaledField():
            return 4 if field.decimals == 0 else 2 + 1 + field.decimals
        case CountsField():
            return 6
        case TurnsField():
            return 2 + 1 + field.decimals
        case SpeedField():
            return 2 + 1 + field.decimals
        case LabelField():
            return 5


def predicted_bytes(columns: Columns, samples: int, *, period_ticks: int = 1) -> int:
    """About how large the samples file of `samples` rows becomes, for a forecast of disk space; within a third as a
    rule."""
    ticks = samples * period_ticks
    row = sum(_typical_characters(field, ticks) + 1 for field in columns.fields) + 1  # commas, and CRLF
    return len(",".join(columns.names)) + 2 + row * samples
