"""The kinds of quantity a bench has and the units each may be written in.

A kind's base unit is the first of its units (factor 1). Factors are exact fractions; those of radians, which cannot
be, are the nearest double.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from fractions import Fraction


@dataclass(frozen=True, slots=True)
class Unit:
    """One way to write a quantity: `factor` base units make one of it; `inverse` ones are factor / number.

    `aliases` are further spellings that are read; only `symbol` is printed. `shown` units are the ones that printing
    chooses from.
    """

    symbol: str
    factor: Fraction = Fraction(1)
    aliases: tuple[str, ...] = ()
    shown: bool = False
    inverse: bool = False


@dataclass(frozen=True, slots=True)
class Kind:
    """A kind of quantity: `name` with its article, units (the base unit first), whether it may be negative, an example.

    `relative` says whether a tolerance of such a quantity may be a percentage of it.
    """

    name: str
    units: tuple[Unit, ...]
    example: str
    signed: bool = True
    relative: bool = True

    @property
    def base(self) -> Unit:
        """The unit that values are kept in."""
        return self.units[0]

    @property
    def symbols(self) -> tuple[str, ...]:
        """The units as printed, the base unit first."""
        return tuple(unit.symbol for unit in self.units)

    def unit(self, symbol: str) -> Unit | None:
        """The unit of this spelling, or None."""
        for unit in self.units:
            if symbol == unit.symbol or symbol in unit.aliases:
                return unit
        return None


def _unit(
    symbol: str,
    factor: int | float | str | Fraction = 1,
    *aliases: str,
    shown: bool = False,
    inverse: bool = False,
) -> Unit:
    return Unit(symbol, Fraction(factor), aliases, shown, inverse)


_RAD_DEG = 180 / math.pi
_RAD_S_RPM = 30 / math.pi

DURATION = Kind(
    "a duration",
    (
        _unit("s", 1, "sec", shown=True),
        _unit("ms", "1/1000", shown=True),
        _unit("us", "1/1000000", shown=True),
        _unit("min", 60),
        _unit("h", 3600),
    ),
    "350 ms",
    signed=False,
)
DUTY = Kind("a duty", (_unit("%", shown=True),), "20 %", relative=False)
DUTY_RATE = Kind("a duty slew", (_unit("%/s", shown=True), _unit("%/ms", 1000)), "100 %/s", signed=False)
SHARE = Kind("a share", (_unit("%", shown=True),), "5 %", signed=False, relative=False)
CURRENT = Kind("a current", (_unit("A", shown=True), _unit("mA", "1/1000", shown=True)), "1.2 A")
VOLTAGE = Kind("a voltage", (_unit("V", shown=True), _unit("mV", "1/1000", shown=True)), "12 V")
SPEED = Kind(
    "a speed",
    (
        _unit("rpm", 1, "rev/min", shown=True),
        _unit("rev/s", 60, "turns/s", "turn/s"),
        _unit("deg/s", "1/6"),
        _unit("rad/s", _RAD_S_RPM),
    ),
    "45 rpm",
)
ANGLE = Kind(
    "an angle",
    (
        _unit("deg", shown=True),
        _unit("rev", 360, "turn", "turns"),
        _unit("rad", _RAD_DEG),
    ),
    "30 deg",
)
ANGLE_RATE = Kind("a servo's slew", (_unit("deg/s", shown=True), _unit("rad/s", _RAD_DEG), _unit("rpm", 6)), "60 deg/s")
PULSE = Kind("a pulse width", (_unit("us", shown=True), _unit("ms", 1000)), "1500 us", signed=False)
PULSE_SCALE = Kind(
    "a pulse scale", (_unit("us/deg", shown=True), _unit("us/rad", Fraction(1) / Fraction(_RAD_DEG))), "10 us/deg"
)
TEMPERATURE = Kind("a temperature", (_unit("degC", shown=True),), "40 degC", relative=False)
TEMPERATURE_STEP = Kind("a difference of temperature", (_unit("K", 1, "degC", shown=True),), "5 K", relative=False)
FREQUENCY = Kind("a frequency", (_unit("Hz", shown=True), _unit("kHz", 1000, shown=True)), "20 kHz", signed=False)
COUNTS = Kind("a number of counts", (_unit("counts", 1, "count", shown=True),), "24 counts")

RESISTANCE = Kind(
    "a resistance",
    (_unit("ohm", shown=True), _unit("mohm", "1/1000", shown=True), _unit("kohm", 1000)),
    "2.4 ohm",
    signed=False,
)
INDUCTANCE = Kind(
    "an inductance",
    (_unit("H"), _unit("mH", "1/1000", shown=True), _unit("uH", "1/1000000", shown=True)),
    "1.2 mH",
    signed=False,
)
CAPACITANCE = Kind(
    "a capacitance",
    (_unit("F"), _unit("mF", "1/1000"), _unit("uF", "1/1000000", shown=True)),
    "1000 uF",
    signed=False,
)
MOTOR_CONSTANT = Kind(
    "a motor constant",
    (
        _unit("V s/rad", 1, "V*s/rad", "Vs/rad", "N m/A", "N*m/A", "Nm/A", shown=True),
        _unit("mN m/A", "1/1000", "mN*m/A", "mNm/A"),
        _unit("mV/rpm", Fraction(_RAD_S_RPM) / 1000),
        _unit("rpm/V", Fraction(_RAD_S_RPM), inverse=True),
    ),
    "0.0195 V s/rad",
    signed=False,
)
INERTIA = Kind(
    "an inertia",
    (_unit("kg m2", 1, "kg*m2", "kgm2", "kg m^2", shown=True), _unit("g cm2", "1/10000000", "g*cm2", "gcm2", "g cm^2")),
    "60 g cm2",
    signed=False,
)
TORQUE = Kind(
    "a torque",
    (
        _unit("N m", 1, "N*m", "Nm", shown=True),
        _unit("mN m", "1/1000", "mN*m", "mNm", shown=True),
        _unit("N cm", "1/100", "N*cm", "Ncm"),
    ),
    "1.5 mN m",
    signed=False,
)
ENERGY = Kind("an energy", (_unit("J", 1, "W s", "W*s", shown=True), _unit("Wh", 3600)), "25 J", signed=False)
VISCOUS = Kind(
    "a viscous friction", (_unit("N m s/rad", 1, "N*m*s/rad", "Nms/rad", shown=True),), "8e-7 N m s/rad", signed=False
)
THERMAL_RESISTANCE = Kind("a thermal resistance", (_unit("K/W", 1, "degC/W", shown=True),), "14 K/W", signed=False)

ALL_KINDS = (
    *(DURATION, DUTY, DUTY_RATE, SHARE, CURRENT, VOLTAGE, SPEED, ANGLE, ANGLE_RATE, PULSE, PULSE_SCALE, TEMPERATURE),
    *(TEMPERATURE_STEP, FREQUENCY, COUNTS, RESISTANCE, INDUCTANCE, CAPACITANCE, MOTOR_CONSTANT, INERTIA, TORQUE),
    *(VISCOUS, THERMAL_RESISTANCE, ENERGY),
)
"""Every kind there is."""
