"""A motor of a bench: its axis, encoder, gear, ratings and limits, and the conversions that follow from them."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from fractions import Fraction

from ramprig_link.words import AXES_MAX, LIMITS

from ..errors import UsageError
from ..quantity import COUNTS, CURRENT, DURATION, DUTY, DUTY_RATE, SPEED, Quantity
from ..yamlfile import CountShape, Fields, Key, Mark, OrWord, QuantityShape, RatioShape, Record, WordShape
from .limits import Setting, setting, speed_setting
from .model import MOTOR_MODEL, MotorModel

EDGES_PER_LINE = 4
"""The board counts every edge of both channels: four counts for each line (x4)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Encoder:
    """A quadrature encoder: `lines` per turn of the shaft it sits on, on the motor's side of the gear or behind it.

    `sense` is +1 where the counts rise with positive duty, -1 where they fall.
    """

    lines: int
    on_motor_shaft: bool
    sense: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Motor:
    """One motor. Positions and speeds are those of the output shaft, positive in the direction of positive duty.

    `settings` are the limits that the file says, by the protocol's names; the others have their defaults.
    """

    name: str
    axis: int
    gear_ratio: Fraction
    encoder: Encoder | None
    rated_ma: int
    rated_rpm: float | None
    settings: Mapping[str, Setting] = field(repr=False)
    model: MotorModel | None = None
    mark: Mark = field(compare=False, repr=False)

    @property
    def counts_per_turn(self) -> Fraction:
        """Counts in one turn of the output shaft, exact; 0 without an encoder."""
        if self.encoder is None:
            return Fraction(0)
        gear = self.gear_ratio if self.encoder.on_motor_shaft else Fraction(1)
        return EDGES_PER_LINE * self.encoder.lines * gear

    @property
    def sense(self) -> int:
        """+1 or -1 as the encoder's direction, 0 without one: the protocol's `sense`."""
        return 0 if self.encoder is None else self.encoder.sense

    def turns_of(self, counts: float) -> float:
        """Turns of the output shaft for a difference of counts. Raises `UsageError` without an encoder."""
        return float(counts * self.sense / self._counts_per_turn())

    def degrees_of(self, counts: float) -> float:
        """Degrees of the output shaft for a difference of counts. Raises `UsageError` without an encoder."""
        return 360.0 * self.turns_of(counts)

    def rpm_of(self, counts_per_s: float) -> float:
        """Speed of the output shaft for a rate of counts. Raises `UsageError` without an encoder."""
        return 60.0 * self.turns_of(counts_per_s)

    def counts_of_turns(self, turns: float | Fraction) -> float:
        """The difference of counts for turns of the output shaft. Raises `UsageError` without an encoder."""
        return float(turns * self.sense * self._counts_per_turn())

    def counts_of_degrees(self, degrees: float | Fraction) -> float:
        """The difference of counts for an angle of the output shaft. Raises `UsageError` without an encoder."""
        return self.counts_of_turns(degrees / 360)

    def counts_per_s_of(self, rpm: float | Fraction) -> float:
        """The rate of counts for a speed of the output shaft. Raises `UsageError` without an encoder."""
        return self.counts_of_turns(rpm / 60)

    def limits(self, tick_us: int) -> dict[str, int]:
        """Every limit of this axis in protocol units. Raises `FileError` at a value that the board cannot keep."""
        numbers = {name: limit.default for name, limit in LIMITS.items() if limit.per.name == "AXIS"}
        numbers["sense"] = self.sense
        numbers |= {name: setting.in_units(tick_us) for name, setting in self.settings.items()}
        if "stall_duty" not in self.settings:
            numbers["stall_duty"] = min(numbers["stall_duty"], numbers["ceiling_duty"]) if self.encoder else 0
        return numbers

    def _counts_per_turn(self) -> Fraction:
        if self.encoder is None:
            raise UsageError(f"'{self.name}' has no encoder: its position and speed are not measured")
        return self.counts_per_turn


def duty_parts(duty: Quantity) -> int:
    """A duty in 1/10000; raises `QuantityError` for one finer than 0.01 %."""
    return duty.parts(Fraction(1, 100), "0.01 %")


_LINES = Key("lines", CountShape(1, 100_000), "per turn and channel: cycles of one channel, not edges", required=True)
_DECODING = Key(
    "decoding",
    WordShape(("x1", "x2", "x4")),
    "how many counts the board makes of a line; a board of this protocol counts every edge, x4",
    required=True,
)
_ON = Key("on", WordShape(("motor shaft", "output shaft")), "the shaft that the encoder sits on", required=True)
_DIRECTION = Key(
    "direction",
    WordShape(("same", "opposite")),
    "whether the counts rise (same) or fall (opposite) with positive duty",
    required=True,
)


def _encoder(fields: Fields) -> Encoder:
    if fields[_DECODING] != "x4":
        wanted = "the board counts every edge: write x4, and the lines of one channel"
        raise fields.error(_DECODING, f"found '{fields[_DECODING]}'", wanted)
    return Encoder(
        lines=fields[_LINES],
        on_motor_shaft=fields[_ON] == "motor shaft",
        sense=1 if fields[_DIRECTION] == "same" else -1,
    )


_SHORT = QuantityShape(DURATION, least="0 s")
_POSITIVE_DUTY = QuantityShape(DUTY, least="0 %", most="100 %")
_COUNT_BAND = QuantityShape(COUNTS, least="0 counts")

_RATED_CURRENT = Key(
    "current", QuantityShape(CURRENT, least="1 mA"), "may flow for ever; the overload trip's limit", required=True
)
_RATED_SPEED = Key("speed", QuantityShape(SPEED, least="0 rpm"), "of the output shaft, without load")
_TIME_CONSTANT = Key("time constant", QuantityShape(DURATION, least="1 s"), "of the winding, for the overload trip")

_SLEW = Key("slew", QuantityShape(DUTY_RATE), "the fastest the duty grows away from zero")
_FALL = Key("fall", QuantityShape(DUTY_RATE), "the fastest the duty falls towards zero")
_DUTY = Key("duty", _POSITIVE_DUTY, "ceiling of the duty, either direction", required=True)
_DWELL = Key("dwell", _SHORT, "least time at zero before the other direction")
_CURRENT_MOST = Key("at most", QuantityShape(CURRENT, least="1 mA"), "trips above this current", required=True)
_CURRENT_FOR = Key("for", _SHORT, "this long in a row")
_STILL_WITHIN = Key("within", _COUNT_BAND, "the counts stay in a band of this width", required=True)
_STILL_FOR = Key("for", _SHORT, "for this long", required=True)
_STALL_DUTY = Key("duty", _POSITIVE_DUTY, "motion is expected from this duty on", required=True)
_STALL_MOTION = Key("motion", QuantityShape(COUNTS, least="1 counts"), "this much motion is enough")
_STALL_WITHIN = Key("within", _SHORT, "trips when there is none for this long", required=True)


@dataclass(frozen=True, slots=True)
class _Limits:
    """What a limits section says: settings by the protocol's names; the overspeed limit waits for the encoder."""

    settings: Mapping[str, Setting]
    speed: Quantity | None
    marks: Mapping[str, Mark]


def _part(*pairs: tuple[str, Key[Quantity]]) -> Record[dict[str, Setting]]:
    """A section whose keys each set one limit."""

    def build(fields: Fields) -> dict[str, Setting]:
        return _settings(fields, pairs)

    return Record(tuple(key for _, key in pairs), build)


def _settings(fields: Fields, pairs: tuple[tuple[str, Key[Quantity]], ...]) -> dict[str, Setting]:
    said = ((item, key, fields.get(key)) for item, key in pairs)
    return {item: setting(item, value, fields.at(key)) for item, key, value in said if value is not None}


_CURRENT = Key("current", _part(("trip_ma", _CURRENT_MOST), ("trip_ticks", _CURRENT_FOR)), "overcurrent", required=True)
_STANDSTILL = Key(
    "standstill", _part(("still_counts", _STILL_WITHIN), ("still_ticks", _STILL_FOR)), "what counts as standing still"
)
_STALL = Key(
    "stall",
    OrWord("off", _part(("stall_duty", _STALL_DUTY), ("stall_counts", _STALL_MOTION), ("stall_ticks", _STALL_WITHIN))),
    "duty and no motion; `off` ends the wrong way trip too",
)
_WRONG_WAY = Key("wrong way", QuantityShape(COUNTS, least="1 counts"), "trips after so many counts against the duty")
_SPEED = Key("speed", QuantityShape(SPEED, least="0 rpm"), "trips above this speed of the output shaft")


def _limits(fields: Fields) -> _Limits:
    direct = (("ceiling_duty", _DUTY), ("slew_up_duty", _SLEW), ("slew_down_duty", _FALL), ("dwell_ticks", _DWELL))
    settings = _settings(fields, (*direct, ("wrong_counts", _WRONG_WAY)))
    standstill, stalled = fields.get(_STANDSTILL), fields.get(_STALL)
    settings |= fields[_CURRENT] | (standstill or {}) | (stalled or {})
    if fields.said(_STALL) and stalled is None:
        settings["stall_duty"] = setting("stall_duty", Quantity(DUTY, Fraction(0), "off"), fields.at(_STALL))
    elif stalled is not None and stalled["stall_duty"].value == 0:
        raise stalled["stall_duty"].mark.error("a stall duty of 0 % is no limit at all", "write 'stall: off' for none")
    speed = fields.get(_SPEED)
    if speed is not None and speed.value == 0:
        raise fields.error(_SPEED, f"a speed limit of {speed} is no limit at all", "remove it for none")
    stall, ceiling = settings.get("stall_duty"), settings["ceiling_duty"]
    if stall is not None and stall.value > ceiling.value:
        raise stall.mark.error(f"found '{stall.text}', above the ceiling of the duty", f"at most {ceiling.text}")
    return _Limits(settings, speed, {key.name: fields.at(key) for key in (_STALL, _WRONG_WAY, _SPEED)})


_AXIS = Key("axis", CountShape(0, AXES_MAX - 1), "the board's number of the motor output", required=True)
_GEAR = Key(
    "gear", RatioShape(), "motor turns per turn of the output shaft, such as 90 or 3249/196", default=Fraction(1)
)
_ENCODER = Key(
    "encoder",
    OrWord("none", Record((_LINES, _DECODING, _ON, _DIRECTION), _encoder)),
    "the quadrature encoder, or `none`",
    required=True,
)
_RATED = Key(
    "rated",
    Record((_RATED_CURRENT, _RATED_SPEED, _TIME_CONSTANT), lambda fields: fields),
    "what the motor bears for ever",
    required=True,
)
_LIMITS = Key(
    "limits",
    Record((_DUTY, _SLEW, _FALL, _DWELL, _STANDSTILL, _CURRENT, _STALL, _WRONG_WAY, _SPEED), _limits),
    "where the board stops the motor by itself",
    required=True,
)
_ZERO = Key("current zero", QuantityShape(CURRENT), "subtracted from every current reading")
_MODEL = Key("model", MOTOR_MODEL, "figures for predictions and for the mock")


def _motor(fields: Fields) -> Motor:
    rated = fields[_RATED]
    limits = fields[_LIMITS]
    encoder = fields.get(_ENCODER)
    settings = dict(limits.settings)
    for item, key in (("rated_ma", _RATED_CURRENT), ("thermal_s", _TIME_CONSTANT)):
        settings |= _settings(rated, ((item, key),))
    settings |= _settings(fields, (("offset_ma", _ZERO),))
    if settings["trip_ma"].value < settings["rated_ma"].value:
        trip, bound = settings["trip_ma"], settings["rated_ma"]
        raise trip.mark.error(f"found '{trip.text}', below the rated current", f"at least {bound.text}")
    if encoder is None:
        _without_encoder(fields, limits)
    speed = rated.get(_RATED_SPEED)
    motor = Motor(
        name="",
        axis=fields[_AXIS],
        gear_ratio=fields[_GEAR],
        encoder=encoder,
        rated_ma=settings["rated_ma"].in_units(1000),
        rated_rpm=None if speed is None else speed.to("rpm"),
        settings=settings,
        model=fields.get(_MODEL),
        mark=fields.mark,
    )
    if limits.speed is None:
        return motor
    overspeed = speed_setting(limits.speed, motor.counts_per_turn, limits.marks["speed"])
    return replace(motor, settings=settings | {overspeed.item: overspeed})


def _without_encoder(fields: Fields, limits: _Limits) -> None:
    """Refuse what needs an encoder, and a reversal that neither measurement nor a dwell of the user's guards."""
    if limits.speed is not None:
        raise limits.marks["speed"].error("a speed limit needs an encoder", "remove it")
    if "wrong_counts" in limits.settings:
        raise limits.marks["wrong way"].error("a wrong way limit needs an encoder", "remove it")
    stall = limits.settings.get("stall_duty")
    if stall is not None and stall.value > 0:
        raise limits.marks["stall"].error("a stall limit needs an encoder", "write 'stall: off' or remove it")
    if "dwell_ticks" not in limits.settings:
        wanted = "without an encoder nothing else guards a reversal: say how long the motor takes to stand still"
        raise fields.error(_LIMITS, "'dwell' is missing in 'limits'", wanted)


MOTOR = Record((_AXIS, _GEAR, _ENCODER, _RATED, _LIMITS, _ZERO, _MODEL), _motor)
"""One motor, its name still empty."""
