"""What a plan must not ask for: each check raises a `FileError` at the step's value and says what would be right."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

from ramprig.quantity import format_angle, format_duration, format_duty, format_speed, show
from ramprig.quantity.kinds import DUTY_RATE
from ramprig.yamlfile import suggestion

from .names import CYCLE_BEGIN
from .rig import Axis, Channel, Rig
from .scene import MotorScene, Scene
from .steps import Expect, Measure, Step, Sweep, Together, Wait, What

SPEED_MARGIN = Fraction(5, 4)
"""A speed this much above the rated no-load speed at the ceiling will not be reached: supplies and motors scatter."""
LeastTicks = Callable[[int, int], int]
"""The shortest time in ticks between two values that a slew limit allows."""
ORDERS_PER_S_MAX = 40
"""What a line of 115200 baud carries beside samples, with room to repeat: an order and its answer take about 10 ms."""


def whole_ticks(rig: Rig, step: Step, key: str, seconds: Fraction) -> int:
    """The time in ticks; refuses one that is no whole number of them."""
    ticks = rig.ticks(seconds)
    if ticks.denominator != 1:
        tick = format_duration(rig.tick_s)
        raise step.error(
            key, f"{format_duration(seconds)} is no whole number of ticks", f"a multiple of {tick} is wanted"
        )
    return int(ticks)


def axis_of(rig: Rig, step: Step | Measure, name: str, key: str = "motor") -> Axis:
    """The motor of this name on the bench."""
    if name in rig.axes:
        return rig.axes[name]
    mark = step.marks.get(key, step.mark)
    if name in rig.channels:
        raise mark.error(f"'{name}' is a servo", f"a motor is wanted: {suggestion(name, rig.axes, 'motors')}")
    raise mark.error(f"this bench has no motor named '{name}'", suggestion(name, rig.axes, "motors"))


def channel_of(rig: Rig, step: Step, name: str) -> Channel:
    """The servo of this name on the bench."""
    if name in rig.channels:
        return rig.channels[name]
    if name in rig.axes:
        raise step.error(
            "servo", f"'{name}' is a motor", f"a servo is wanted: {suggestion(name, rig.channels, 'servos')}"
        )
    raise step.error("servo", f"this bench has no servo named '{name}'", suggestion(name, rig.channels, "servos"))


def check_ceiling(step: Step, key: str, axis: Axis, duty: int) -> None:
    """The duty must be within the motor's ceiling."""
    if abs(duty) > axis.ceiling_duty:
        ceiling = format_duty(axis.ceiling_duty)
        raise step.error(
            key, f"found {format_duty(duty)}, above {axis.name}'s ceiling", f"at most {ceiling} either way"
        )


def check_direction(step: Step, key: str, axis: Axis, scene: MotorScene, duty: int) -> None:
    """The sign of the duty changes by `reverse` only."""
    if duty == 0:
        return
    sign = 1 if duty > 0 else -1
    wanted = f"use 'reverse: {{motor: {axis.name}, to: {format_duty(duty)}, ...}}'"
    if scene.duty * sign < 0:
        raise step.error(
            key, f"{axis.name} is at {format_duty(scene.duty)} here, so this would cross zero at speed", wanted
        )
    if scene.duty == 0 and scene.last_sign * sign < 0:
        raise step.error(key, f"{axis.name} was last driven the other way, and may still turn", wanted)


def check_slew(rig: Rig, step: Step, key: str, axis: Axis, duty: int, to_duty: int, ticks: int) -> None:
    """A ramp must not be steeper than the motor's slew limit."""
    least = axis.least_ticks(duty, to_duty)
    if ticks >= least:
        return
    slew = axis.slew_up_duty if abs(to_duty) > abs(duty) else axis.slew_down_duty
    which = "slew" if abs(to_duty) > abs(duty) else "fall"
    allowed = _duty_rate(rig, slew)
    asked = _duty_rate(rig, Fraction(abs(to_duty - duty), ticks)) if ticks else "a jump"
    raise step.error(
        key,
        f"from {format_duty(duty)} to {format_duty(to_duty)} this asks for {asked}; "
        f"{axis.name}'s {which} limit is {allowed}",
        f"use '{key}: {rig.show(least)}' or more",
    )


def _duty_rate(rig: Rig, duty_a_tick: int | Fraction) -> str:
    return show(Fraction(duty_a_tick) / 100 / rig.tick_s, DUTY_RATE)


def check_angle(step: Step, key: str, channel: Channel, angle_deg: Fraction) -> int:
    """The pulse of an angle, which must be inside the servo's limits."""
    pulse_us = channel.servo.pulse_us_of(angle_deg)
    if not channel.pulse_min_us <= pulse_us <= channel.pulse_max_us:
        low, high = format_angle(channel.servo.low_deg), format_angle(channel.servo.high_deg)
        raise step.error(key, f"found {format_angle(angle_deg)}, outside {channel.name}'s limits", f"{low} to {high}")
    return pulse_us


def check_swing(rig: Rig, step: Step, key: str, channel: Channel, from_us: int, to_us: int, ticks: int) -> None:
    """A servo must not be led faster than its slew limit."""
    least = channel.least_ticks(from_us, to_us)
    if ticks < least:
        begin, end = (format_angle(channel.servo.degrees_of(pulse)) for pulse in (from_us, to_us))
        raise step.error(
            key,
            f"from {begin} to {end} in {rig.show(ticks)} is faster than {channel.name}'s slew of "
            f"{channel.servo.slew_deg_s:g} deg/s",
            f"use '{key}: {rig.show(least)}' or more",
        )


def check_measure(rig: Rig, scene: Scene, measure: Measure) -> None:
    """A measurement must be possible here: motor, encoder, mark, ramp and window."""
    axis = axis_of(rig, measure, measure.motor, measure.what.value)
    if measure.what is not What.CURRENT and not axis.has_encoder:
        mark = measure.marks[measure.what.value]
        raise mark.error(f"{axis.name} has no encoder", f"its {measure.what.noun} cannot be measured")
    if measure.since and measure.since not in scene.marks:
        wanted = suggestion(measure.since, sorted(scene.marks), "marks set before this step")
        raise measure.marks["since"].error(f"no mark '{measure.since}' is set before this step", wanted)
    if measure.what is What.SETTLING and axis.name not in scene.ramped:
        raise measure.mark.error(
            f"{axis.name} was not ramped before this step", "settling is counted from a ramp's end"
        )
    if measure.what in (What.SPEED, What.CURRENT):
        over = rig.ticks(measure.over_s)
        if over > scene.elapsed:
            mark = measure.marks.get("over", measure.mark)
            found = f"the window of {format_duration(measure.over_s)} is longer than what has gone by here"
            raise mark.error(found, f"at most {rig.show(scene.elapsed)}, or hold before it")


def check_confirm(step: Step, scene: Scene) -> None:
    """A travel is confirmed within a cycle only."""
    if CYCLE_BEGIN not in scene.marks:
        raise step.mark.error("a 'confirm' stands outside a cycle", "use 'expect', or put it among a cycle's steps")


def check_at_zero(step: Step, scene: Scene, key: str, what: str) -> None:
    """A run can go on at any cycle, so each begins and ends with all motors at zero."""
    for name, motor in scene.motors.items():
        if motor.duty:
            found = f"{what} with {name} at {format_duty(motor.duty)}"
            raise step.error(key, found, f"bring it to zero, as by 'coast: {name}'")


def check_reachable(rig: Rig, scene: Scene, measure: Measure) -> None:
    """A wait for a speed that the motor cannot have, as far as the bench tells, is refused."""
    if measure.what is not What.SPEED:
        return
    axis = axis_of(rig, measure, measure.motor, measure.what.value)
    low, high = measure.band.low, measure.band.high
    mark = measure.marks["is"]
    rated_rpm = axis.motor.rated_rpm
    slowest = max((bound for bound in (low, None if high is None else -high) if bound is not None), default=Fraction(0))
    if rated_rpm is not None:
        most = Fraction(rated_rpm) * axis.ceiling_duty / 10_000
        if slowest > most * SPEED_MARGIN:
            found = f"{axis.name} never reaches '{measure.band}'"
            about = (
                f"{format_speed(rated_rpm)} rated, {format_duty(axis.ceiling_duty)} ceiling: about {format_speed(most)}"
            )
            raise mark.error(found, about)
    duty = 0 if axis.name in scene.elsewhere else scene.motors[axis.name].duty
    if (low is not None and low > 0 and duty < 0) or (high is not None and high < 0 and duty > 0):
        found = f"{axis.name} is driven at {format_duty(duty)} here and turns the other way than '{measure.band}'"
        raise mark.error(found, "speeds have the sign of the duty that drives them")


def moved_names(steps: tuple[Step, ...]) -> dict[str, Step]:
    """Motors and servos that these steps move, each with the first step that does."""
    found: dict[str, Step] = {}
    for step in steps:
        match step:
            case Together(branches=branches):
                inner = [moved_names(branch) for branch in branches]
            case Expect() | Wait():
                inner = []
            case _:
                inner = [moved_names(getattr(step, "steps", ()) if not isinstance(step, Sweep) else ())]
                name = getattr(step, "motor", None) or getattr(step, "servo", None)
                if name is not None:
                    found.setdefault(name, step)
        for names in inner:
            for name, first in names.items():
                found.setdefault(name, first)
    return found


def check_branches(step: Together) -> list[frozenset[str]]:
    """No motor or servo may be moved in two branches; returns what each branch moves."""
    names = [moved_names(branch) for branch in step.branches]
    for number, later in enumerate(names):
        for earlier in names[:number]:
            for name in later.keys() & earlier.keys():
                other = earlier[name].mark
                found = f"'{name}' is moved in two branches at once"
                raise later[name].mark.error(found, f"the other is in line {other.line}: move it in one branch only")
    return [frozenset(found) for found in names]


def check_rate(rig: Rig, step: Step, key: str, orders: int, ticks: int) -> None:
    """The link must be able to carry the orders."""
    if orders <= 1 or ticks <= 0:
        return
    rate = orders / float(ticks * rig.tick_s)
    if rate > ORDERS_PER_S_MAX:
        found = f"this asks for {rate:.0f} orders a second"
        raise step.error(key, found, f"the link carries {ORDERS_PER_S_MAX}: take longer over it")
