"""Quantities printed as an engineer reads them: `1.25 A`, `350 ms`, `1 h 30 min`, in ASCII."""

from __future__ import annotations

import math
from fractions import Fraction

from . import kinds
from .kinds import Kind, Unit

Number = int | float | Fraction

LONG_S = Fraction("59.995")
"""From here on a duration is shown in minutes and hours; below it rounds to less than 60 s."""


def digits(value: Number, figures: int = 4) -> str:
    """`value` rounded to `figures` significant figures, whole digits kept, no trailing zeros; `1e-6` when tiny."""
    if isinstance(value, float) and not math.isfinite(value):
        return "nan" if math.isnan(value) else ("inf" if value > 0 else "-inf")
    if value == 0:
        return "0"
    magnitude = math.floor(math.log10(abs(float(value)))) if float(value) else -400
    if magnitude < -4:
        mantissa, _, exponent = f"{float(value):.{figures - 1}e}".partition("e")
        return f"{mantissa.rstrip('0').rstrip('.')}e{int(exponent)}"
    places = max(0, figures - 1 - magnitude)
    text = f"{float(round(Fraction(value), places)):.{places}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text == "-0" else text


def show(value: Number, kind: Kind, *, figures: int = 4) -> str:
    """`value`, in the base unit of `kind`, with the unit that suits its size; durations from a minute on in parts."""
    if isinstance(value, float) and not math.isfinite(value):
        return f"{digits(value)} {kind.base.symbol}"
    if kind is kinds.DURATION and abs(Fraction(value)) >= LONG_S:
        return _long_duration(Fraction(value))
    shown = sorted((unit for unit in kind.units if unit.shown), key=lambda unit: -unit.factor) or [kind.base]
    if value == 0:
        return f"0 {(kind.base if kind.base in shown else shown[0]).symbol}"
    return _in_unit(Fraction(value), shown, figures)


def _in_unit(value: Fraction, units: list[Unit], figures: int) -> str:
    """The largest unit in which the rounded number is at least 1; the smallest where there is none."""
    for unit in units:
        text = digits(value / unit.factor, figures)
        if unit is units[-1] or abs(float(text)) >= 1:
            break
    return f"{text} {unit.symbol}"


def _long_duration(seconds: Fraction) -> str:
    sign = "-" if seconds < 0 else ""
    tenths = round(abs(seconds) * 10)
    if tenths >= 36_000:
        minutes = round(abs(seconds) / 60)
        hours, minutes = divmod(minutes, 60)
        return f"{sign}{hours} h" + (f" {minutes} min" if minutes else "")
    minutes, rest = divmod(tenths, 600)
    return f"{sign}{minutes} min" + (f" {digits(Fraction(rest, 10))} s" if rest else "")


def format_duration(seconds: Number) -> str:
    """Such as `350 ms`, `12.5 s`, `1 min 30 s`, `8 h 20 min`; hours to the minute, minutes to 0.1 s."""
    return show(seconds, kinds.DURATION)


def format_duty(parts: int) -> str:
    """Such as `-20 %`, from the protocol's 1/10000."""
    return show(Fraction(parts, 100), kinds.DUTY, figures=5)


def format_current(amperes: Number) -> str:
    """Such as `1.25 A` or `350 mA`."""
    return show(amperes, kinds.CURRENT)


def format_voltage(volts: Number) -> str:
    """Such as `12.1 V`."""
    return show(volts, kinds.VOLTAGE)


def format_speed(rpm: Number) -> str:
    """Such as `45.2 rpm`."""
    return show(rpm, kinds.SPEED)


def format_angle(degrees: Number) -> str:
    """Such as `30 deg`."""
    return show(degrees, kinds.ANGLE)


def format_pulse(microseconds: Number) -> str:
    """Such as `1500 us`."""
    return show(microseconds, kinds.PULSE)


def format_temperature(celsius: Number) -> str:
    """Such as `41.5 degC`."""
    return show(celsius, kinds.TEMPERATURE)


def format_bytes(count: int) -> str:
    """Such as `640 bytes`, `12.4 kB`, `3.1 MB`; powers of ten."""
    if count < 1000:
        return f"{count} bytes"
    for unit, size in (("kB", 10**3), ("MB", 10**6), ("GB", 10**9)):
        text = digits(Fraction(count, size), 3)
        if float(text) < 1000 or unit == "GB":
            break
    return f"{text} {unit}"
