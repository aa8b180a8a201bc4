"""A procedure's own limits: the bench as its file says it, with some limits tighter."""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from ramprig.bench import Bench, Motor, Setting
from ramprig.bench.limits import Scale, setting, speed_setting
from ramprig.errors import FileError
from ramprig.quantity import CURRENT, DUTY, DUTY_RATE, SPEED, Quantity, format_current, format_duty, format_speed


def tightened(
    bench: Bench,
    motor: str,
    *,
    ceiling_duty: int | None = None,
    trip_a: float | None = None,
    speed_rpm: float | None = None,
) -> Bench:
    """The bench with this motor's ceiling (1/10000), overcurrent trip and overspeed trip no higher than these.

    A limit that is tighter already stays. The speed needs an encoder, and is passed over without one.
    """
    found = bench.motor(motor)
    tighter: dict[str, Setting] = {}
    if ceiling_duty is not None:
        duty = Quantity(DUTY, Fraction(ceiling_duty, 100), format_duty(ceiling_duty))
        tighter["ceiling_duty"] = setting("ceiling_duty", duty, found.mark)
    if trip_a is not None:
        amperes = Quantity(CURRENT, Fraction(round(trip_a * 1000), 1000), format_current(trip_a))
        tighter["trip_ma"] = setting("trip_ma", amperes, found.mark)
    if speed_rpm is not None and found.encoder is not None:
        speed = Quantity(SPEED, Fraction(speed_rpm), format_speed(speed_rpm))
        tighter["speed_counts"] = speed_setting(speed, found.counts_per_turn, found.mark)
    kept = {item: limit for item, limit in tighter.items() if _is_tighter(limit, found)}
    changed = replace(found, settings={**found.settings, **kept})
    return replace(bench, motors=tuple(changed if one.name == motor else one for one in bench.motors))


def cut_at_once(bench: Bench, motor: str) -> Bench:
    """The bench with this motor's duty free to fall to zero in one tick, so that a coasting bridge is off at once.

    The one limit that a procedure loosens: for running down without drive. The duty must be taken to zero alone, and
    with the bridge coasting: then nothing brakes, and nothing is given back to the supply.
    """
    found = bench.motor(motor)
    at_once = Setting(
        item="slew_down_duty",
        value=Fraction(10_000),
        kind=DUTY_RATE,
        units=Fraction(1),
        scale=Scale.PLAIN,
        text="at once",
        mark=found.mark,
    )
    changed = replace(found, settings={**found.settings, "slew_down_duty": at_once})
    return replace(bench, motors=tuple(changed if one.name == motor else one for one in bench.motors))


def _is_tighter(limit: Setting, motor: Motor) -> bool:
    """Whether a limit, lower being tighter, is below the motor's own; 0 is no limit at all for the speed, and one that
    the board could not hold, such as a speed of less than a count a window, is none either."""
    own = motor.limits(1000)[limit.item]
    try:
        number = limit.in_units(1000)
    except FileError:
        return False
    return number < own or (limit.item == "speed_counts" and own == 0)
