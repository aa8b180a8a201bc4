"""A hobby servo of a bench: its channel, the pulse for an angle, and its limits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from ramprig_link.words import LIMITS, SERVOS_MAX

from ..quantity import ANGLE, ANGLE_RATE, PULSE, PULSE_SCALE, Quantity, show
from ..yamlfile import BandShape, CountShape, Fields, Key, Mark, QuantityShape, Record
from .limits import Setting, pulse_setting
from .model import SERVO_MODEL, ServoModel


@dataclass(frozen=True, slots=True, kw_only=True)
class Servo:
    """One servo. The angle 0 deg is at `neutral_us`; each degree takes `us_per_deg`, negative if mounted reversed.

    A servo does not tell where it is: every angle is the commanded one.
    """

    name: str
    channel: int
    neutral_us: Fraction
    us_per_deg: Fraction
    low_deg: float
    high_deg: float
    home_deg: float
    slew_deg_s: float
    settings: Mapping[str, Setting] = field(repr=False)
    model: ServoModel | None = None
    mark: Mark = field(compare=False, repr=False)

    def pulse_us_of(self, degrees: float | Fraction) -> int:
        """The pulse for an angle, to the nearest us; half a us goes to the even one."""
        return round(self.neutral_us + Fraction(degrees) * self.us_per_deg)

    def degrees_of(self, pulse_us: float) -> float:
        """The angle that a pulse commands."""
        return float((pulse_us - self.neutral_us) / self.us_per_deg)

    def limits(self, tick_us: int) -> dict[str, int]:
        """Every limit of this servo in protocol units. Raises `FileError` at a value that the board cannot keep."""
        numbers = {name: limit.default for name, limit in LIMITS.items() if limit.per.name == "SERVO"}
        return numbers | {name: setting.in_units(tick_us) for name, setting in self.settings.items()}


_LOWEST, _HIGHEST = LIMITS["pulse_min_us"].lowest, LIMITS["pulse_max_us"].highest

_CHANNEL = Key("servo", CountShape(0, SERVOS_MAX - 1), "the board's number of the servo output", required=True)
_NEUTRAL = Key(
    "neutral",
    QuantityShape(PULSE, least=f"{_LOWEST} us", most=f"{_HIGHEST} us"),
    "the pulse at 0 deg; 1500 us is common practice",
    required=True,
)
_SCALE = Key(
    "scale", QuantityShape(PULSE_SCALE), "pulse for one degree; negative if a longer pulse turns back", required=True
)
_ANGLES = Key("angle", BandShape(ANGLE, ranges_only=True), "how far it may turn, such as -40 deg to 40 deg")
_PULSES = Key("pulse", BandShape(PULSE, ranges_only=True), "shortest and longest pulse, such as 1100 us to 1900 us")
_SLEW = Key("slew", QuantityShape(ANGLE_RATE), "the fastest it may be led", required=True)
_LIMITS = Key(
    "limits",
    Record((_ANGLES, _PULSES, _SLEW), lambda fields: fields),
    "what the board keeps it to: `angle` or `pulse`, and `slew`",
    required=True,
)
_HOME = Key("home", QuantityShape(ANGLE), "where its first pulse sends it; 0 deg if not said")
_MODEL = Key("model", SERVO_MODEL, "figures for predictions and for the mock")


def _servo(fields: Fields) -> Servo:
    neutral, scale = fields[_NEUTRAL].value, fields[_SCALE].value
    if scale == 0:
        raise fields.error(_SCALE, f"found '{fields[_SCALE]}'", "it must differ from 0, such as 10 us/deg")
    limits = fields[_LIMITS]
    low_us, high_us, mark, text = _pulse_range(limits, neutral, scale)
    home = fields.get(_HOME) or Quantity(ANGLE, Fraction(0))
    home_us = neutral + home.value * scale
    if not low_us <= home_us <= high_us:
        found = f"home, {home}, lies outside the limits"
        raise fields.error(_HOME, found, f"its pulse is {show(home_us, PULSE)}, the limits are {text}")
    slew = limits[_SLEW]
    if slew.value <= 0:
        raise limits.error(_SLEW, f"found '{slew}'", "it must be greater than 0")
    settings = {
        "pulse_min_us": pulse_setting("pulse_min_us", low_us, text, mark),
        "pulse_max_us": pulse_setting("pulse_max_us", high_us, text, mark),
        "pulse_slew_ns": pulse_setting("pulse_slew_ns", slew.value * abs(scale), str(slew), limits.at(_SLEW)),
        "pulse_home_us": pulse_setting("pulse_home_us", Fraction(round(home_us)), str(home), fields.at(_HOME)),
    }
    ends = sorted((float((low_us - neutral) / scale), float((high_us - neutral) / scale)))
    return Servo(
        name="",
        channel=fields[_CHANNEL],
        neutral_us=neutral,
        us_per_deg=scale,
        low_deg=ends[0],
        high_deg=ends[1],
        home_deg=float(home.value),
        slew_deg_s=float(slew.value),
        settings=settings,
        model=fields.get(_MODEL),
        mark=fields.mark,
    )


def _pulse_range(limits: Fields, neutral: Fraction, scale: Fraction) -> tuple[Fraction, Fraction, Mark, str]:
    """The limits as pulses, where they stand and how they are written."""
    angles, pulses = limits.get(_ANGLES), limits.get(_PULSES)
    if (angles is None) == (pulses is None):
        raise limits.mark.error("the limits need either 'angle' or 'pulse'", "as in 'angle: -40 deg to 40 deg'")
    if pulses is not None:
        low, high = pulses.low or Fraction(0), pulses.high or Fraction(0)
        return low, high, limits.at(_PULSES), str(pulses)
    assert angles is not None  # one of the two is there
    ends = sorted(neutral + (end or Fraction(0)) * scale for end in (angles.low, angles.high))
    for end in ends:
        if not _LOWEST <= end <= _HIGHEST:
            found = f"'{angles}' asks for a pulse of {show(end, PULSE)}"
            raise limits.error(
                _ANGLES, found, f"pulses lie in {_LOWEST} us to {_HIGHEST} us: see 'neutral' and 'scale'"
            )
    return ends[0], ends[1], limits.at(_ANGLES), str(angles)


SERVO = Record((_CHANNEL, _NEUTRAL, _SCALE, _LIMITS, _HOME, _MODEL), _servo)
"""One servo, its name still empty."""
