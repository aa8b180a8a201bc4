"""Steps that move something become parts of the plan: ramps, reversals, servo moves and sweeps."""

from __future__ import annotations

from fractions import Fraction

from ramprig.quantity import format_angle, format_duration, format_duty
from ramprig.yamlfile import Mark

from . import checking, shapes
from .plan import REST_VALUES, Kind, Motion, Part, Run, Series, Standstill, Stroke, Totals
from .rig import Axis, Channel, Rig
from .scene import MotorScene, Scene, ServoScene
from .steps import Ease, Move, Ramp, Release, Reverse, Sweep
from .steps import Shape as SweepShape

STILL_WITHIN_S = Fraction(5)
"""A shaft must stand still this soon after a ramp down, where the step says nothing else."""
REACTION_S = Fraction(1, 2)
ORDER_SPACE_S = Fraction(1, 50)
"""An order that takes no time of its own is given this much, so that orders cannot crowd."""
SINE_ERROR_DEG = Fraction(1, 4)
SINE_ERROR_DUTY = 50
"""Straight lines stay this close to a sine: a quarter of a degree, half a percent of full drive."""


class Mover:
    """Makes parts of motions, and moves the scene along."""

    def __init__(self, rig: Rig) -> None:
        self.rig = rig
        self.space = int(rig.ticks(ORDER_SPACE_S)) or 1

    # ---- motors --------------------------------------------------------------------------------------------------

    def ramp(self, step: Ramp, scene: Scene) -> Part:
        """A ramp that keeps to the ceiling, the slew limit and the sign."""
        axis = checking.axis_of(self.rig, step, step.motor)
        before = scene.motors[axis.name]
        ticks = checking.whole_ticks(self.rig, step, "in", step.length_s)
        checking.check_ceiling(step, "to", axis, step.duty)
        checking.check_direction(step, "to", axis, before, step.duty)
        checking.check_slew(self.rig, step, "in", axis, before.duty, step.duty, ticks)
        text = f"{axis.name} to {format_duty(step.duty)} in {format_duration(step.length_s)}"
        part = self._ramped(step.mark, text, axis, before, step.duty, ticks)
        scene.motors[axis.name] = _driven(before, step.duty)
        scene.ramped |= {axis.name}
        return part

    def _ramped(self, mark: Mark, text: str, axis: Axis, before: MotorScene, duty: int, ticks: int) -> Run:
        """A ramp as a part; without an order where the duty stays."""
        motions = () if duty == before.duty else (_single(Kind.RAMP, axis.index, duty, ticks),)
        totals = Totals(
            ticks,
            ticks,
            orders=len(motions),
            starts={axis.name: 1} if duty and not before.duty else {},
            peak_duty={axis.name: max(abs(duty), abs(before.duty))},
        )
        return Run(mark=mark, text=text, totals=totals, motions=motions, length=ticks, ramped=axis.name)

    def reverse(self, step: Reverse, scene: Scene) -> Part:
        """Down, dwell and standstill, up: the sign never changes at speed."""
        axis = checking.axis_of(self.rig, step, step.motor)
        before = scene.motors[axis.name]
        checking.check_ceiling(step, "to", axis, step.duty)
        if before.duty * step.duty > 0:
            found = f"{axis.name} is driven that way already, at {format_duty(before.duty)}"
            raise step.error("to", found, "a reverse goes to the other sign; use 'ramp' for the same one")
        up = checking.whole_ticks(self.rig, step, "in", step.length_s)
        parts: list[Part] = []
        if before.duty:
            key = "in" if step.down_s is None else "down in"
            down_s = step.length_s if step.down_s is None else step.down_s
            down = checking.whole_ticks(self.rig, step, key, down_s)
            checking.check_slew(self.rig, step, key, axis, before.duty, 0, down)
            parts.append(
                self._ramped(step.mark, f"{axis.name} to 0 % in {format_duration(down_s)}", axis, before, 0, down)
            )
        at_zero = MotorScene(0, before.last_sign, before.rest)
        checking.check_slew(self.rig, step, "in", axis, 0, step.duty, up)
        parts.append(self._standstill(step, axis))
        text = f"{axis.name} to {format_duty(step.duty)} in {format_duration(step.length_s)}"
        parts.append(self._ramped(step.mark, text, axis, at_zero, step.duty, up))
        scene.motors[axis.name] = _driven(before, step.duty)
        scene.ramped |= {axis.name}
        totals = Totals(reversals=1 if before.last_sign * step.duty < 0 else 0)
        for part in parts:
            totals = totals.then(part.totals)
        whole = f"reverse {axis.name} to {format_duty(step.duty)}"
        return Series(mark=step.mark, text=whole, totals=totals, parts=tuple(parts))

    def _standstill(self, step: Reverse, axis: Axis) -> Part:
        dwell = axis.dwell_ticks
        if step.dwell_s is not None:
            dwell = checking.whole_ticks(self.rig, step, "dwell", step.dwell_s)
            if dwell < axis.dwell_ticks:
                least = self.rig.show(axis.dwell_ticks)
                raise step.error(
                    "dwell",
                    f"found {format_duration(step.dwell_s)}, below {axis.name}'s dwell limit",
                    f"at least {least}",
                )
        within_s = STILL_WITHIN_S if step.still_within_s is None else step.still_within_s
        limit = checking.whole_ticks(self.rig, step, "still within", within_s)
        if axis.has_encoder and limit < axis.still_ticks:
            least = self.rig.show(axis.still_ticks)
            raise step.error("still within", f"standstill is known after {least} at rest", f"at least {least}")
        text = f"dwell {self.rig.show(dwell)}"
        most = dwell
        if axis.has_encoder:
            text += f", {axis.name} still within {format_duration(within_s)}"
            most = max(dwell, limit) + int(self.rig.ticks(REACTION_S))
        return Standstill(
            mark=step.mark,
            text=text,
            totals=Totals(dwell, most, waits=1 if axis.has_encoder else 0),
            motor=axis.name,
            axis=axis.index,
            dwell=dwell,
            still_counts=axis.still_counts,
            still_ticks=axis.still_ticks,
            limit=limit,
        )

    def ease(self, step: Ease, scene: Scene) -> Part:
        """To zero, and the bridge rests as asked."""
        axis = checking.axis_of(self.rig, step, step.motor)
        before = scene.motors[axis.name]
        least = axis.least_ticks(before.duty, 0)
        ticks = least
        if step.length_s is not None:
            ticks = checking.whole_ticks(self.rig, step, "in", step.length_s)
            checking.check_slew(self.rig, step, "in", axis, before.duty, 0, ticks)
        motions: list[Motion] = []
        if before.rest is not step.rest:
            motions.append(_single(Kind.REST, axis.index, REST_VALUES[step.rest], 0))
        if before.duty:
            motions.append(_single(Kind.RAMP, axis.index, 0, ticks))
        ticks = max(ticks, self.space) if motions else ticks
        scene.motors[axis.name] = MotorScene(0, before.last_sign, step.rest)
        scene.ramped |= {axis.name}
        totals = Totals(ticks, ticks, orders=len(motions), peak_duty={axis.name: abs(before.duty)})
        text = f"{axis.name} to zero in {self.rig.show(ticks)}, then {step.rest}"
        text = text if before.duty else f"{axis.name} at zero, {step.rest}"
        return Run(mark=step.mark, text=text, totals=totals, motions=tuple(motions), length=ticks, ramped=axis.name)

    def to_zero(self, mark: Mark, scene: Scene) -> Run:
        """Every motor that is not at zero goes there, side by side."""
        motions: list[Motion] = []
        length = 0
        for name, motor in scene.motors.items():
            if motor.duty:
                axis = self.rig.axes[name]
                ticks = axis.least_ticks(motor.duty, 0)
                motions.append(_single(Kind.RAMP, axis.index, 0, ticks))
                length = max(length, ticks)
        totals = Totals(length, length, orders=len(motions))
        return Run(mark=mark, text="all motors to zero", totals=totals, motions=tuple(motions), length=length)

    # ---- servos --------------------------------------------------------------------------------------------------

    def servo(self, step: Move, scene: Scene) -> Part:
        """A linear move inside the limits."""
        channel = checking.channel_of(self.rig, step, step.servo)
        ticks = checking.whole_ticks(self.rig, step, "in", step.length_s)
        pulse_us = checking.check_angle(step, "to", channel, step.angle_deg)
        before_us = scene.servos[channel.name].pulse_us
        checking.check_swing(
            self.rig, step, "in", channel, channel.home_us if before_us is None else before_us, pulse_us, ticks
        )
        text = f"{channel.name} to {format_angle(step.angle_deg)} in {format_duration(step.length_s)}"
        motions = () if pulse_us == before_us else (_single(Kind.SWING, channel.index, pulse_us, ticks),)
        ticks = max(ticks, self.space) if motions else ticks
        scene.servos[channel.name] = ServoScene(pulse_us)
        totals = Totals(ticks, ticks, orders=len(motions))
        return Run(mark=step.mark, text=text, totals=totals, motions=motions, length=ticks)

    def release(self, step: Release, scene: Scene) -> Part:
        """No pulses any longer."""
        channel = checking.channel_of(self.rig, step, step.servo)
        pulsing = scene.servos[channel.name].pulse_us is not None
        motions = (_single(Kind.SWING, channel.index, 0, 0),) if pulsing else ()
        ticks = self.space if motions else 0
        scene.servos[channel.name] = ServoScene(None)
        totals = Totals(ticks, ticks, orders=len(motions))
        return Run(mark=step.mark, text=f"release {channel.name}", totals=totals, motions=motions, length=ticks)

    # ---- sweeps --------------------------------------------------------------------------------------------------

    def sweep(self, step: Sweep, scene: Scene) -> Part:
        """The way to the first end, then the passes."""
        if step.motor is not None:
            return self._sweep_motor(step, checking.axis_of(self.rig, step, step.motor), scene)
        assert step.servo is not None  # a sweep has a motor or a servo
        return self._sweep_servo(step, checking.channel_of(self.rig, step, step.servo), scene)

    def _sweep_motor(self, step: Sweep, axis: Axis, scene: Scene) -> Part:
        before = scene.motors[axis.name]
        low, high = int(step.low), int(step.high)
        for key, duty in (("from", low), ("to", high)):
            checking.check_ceiling(step, key, axis, duty)
            checking.check_direction(step, key, axis, before, duty)
        if low * high < 0:
            wanted = "sweep one direction, then use 'reverse'"
            raise step.error("to", "this sweep would cross zero at speed", wanted)
        approach = axis.least_ticks(before.duty, low)
        change = axis.least_ticks(0, shapes.largest_step(low, high, step.steps or 1)) if step.steps else 0
        change = max(change, -(-shapes.largest_step(low, high, step.steps or 1) // axis.slew_down_duty))
        strokes = self._strokes(step, low, high, change, float(SINE_ERROR_DUTY))
        self._check_strokes(step, low, strokes, lambda a, b: axis.least_ticks(a, b), axis.name)
        peak = max(abs(low), abs(high), abs(before.duty))
        scene.motors[axis.name] = _driven(_driven(before, high), low)
        scene.ramped |= {axis.name}
        starts = (0 if before.duty or not low else 1) + (step.passes if not low else 0)
        ends = f"{format_duty(low)} and {format_duty(high)}"
        way = () if before.duty == low else (_single(Kind.RAMP, axis.index, low, approach),)
        extra = Totals(starts={axis.name: starts}, peak_duty={axis.name: peak})
        return self._swept(step, axis.name, ends, Kind.RAMP, axis.index, (way, approach), strokes, extra)

    def _sweep_servo(self, step: Sweep, channel: Channel, scene: Scene) -> Part:
        low, high = (
            checking.check_angle(step, key, channel, end) for key, end in (("from", step.low), ("to", step.high))
        )
        if low == high:
            raise step.error("to", "both ends of the sweep have the same pulse", "they are less than 1 us apart")
        before_us = scene.servos[channel.name].pulse_us
        begin_us = channel.home_us if before_us is None else before_us
        approach = channel.least_ticks(begin_us, low)
        change = channel.least_ticks(0, shapes.largest_step(low, high, step.steps or 1))
        error_us = float(abs(channel.servo.us_per_deg) * SINE_ERROR_DEG)
        strokes = self._strokes(step, low, high, change, max(error_us, 0.5))
        self._check_strokes(step, low, strokes, channel.least_ticks, channel.name)
        scene.servos[channel.name] = ServoScene(low)
        ends = f"{format_angle(step.low)} and {format_angle(step.high)}"
        way = () if before_us == low else (_single(Kind.SWING, channel.index, low, approach),)
        approach = max(approach, self.space) if way else approach
        return self._swept(step, channel.name, ends, Kind.SWING, channel.index, (way, approach), strokes, Totals())

    def _strokes(self, step: Sweep, low: int, high: int, change: int, error: float) -> tuple[Stroke, ...]:
        if step.shape is SweepShape.STEPS:
            assert step.steps is not None  # the reader made sure of both
            assert step.pause_s is not None
            pause = checking.whole_ticks(self.rig, step, "pause", step.pause_s)
            checking.check_rate(self.rig, step, "pause", 2, 2 * (change + pause))
            return shapes.stairs(low, high, step.steps, change, pause)
        assert step.period_s is not None  # the reader made sure of it
        period = checking.whole_ticks(self.rig, step, "period", step.period_s)
        checking.check_rate(self.rig, step, "period", 2, period)
        if step.shape is SweepShape.TRIANGLE:
            return shapes.triangle(low, high, period)
        shortest = max(1, int(self.rig.ticks(Fraction(shapes.STROKE_TICKS_MIN_S))))
        strokes = shapes.sine_strokes(low, high, period, error=error, shortest=shortest)
        checking.check_rate(self.rig, step, "period", strokes, period)
        return shapes.sine(low, high, period, strokes)

    def _check_strokes(
        self, step: Sweep, low: int, strokes: tuple[Stroke, ...], least: checking.LeastTicks, name: str
    ) -> None:
        """No stroke may be steeper than the slew limit."""
        value = low
        worst = Fraction(0)
        for stroke in strokes:
            needed = least(value, stroke.value)
            if stroke.ticks < needed:
                worst = max(worst, Fraction(needed, max(1, stroke.ticks)))
            value = stroke.value
        if worst and step.period_s is not None:
            longer = -(-(step.period_s * worst) // self.rig.tick_s) * self.rig.tick_s
            found = f"a {step.shape} of {format_duration(step.period_s)} is faster than {name}'s slew limit"
            raise step.error("period", found, f"use 'period: {format_duration(longer)}' or more")

    def _swept(
        self,
        step: Sweep,
        name: str,
        ends: str,
        kind: Kind,
        index: int,
        way: tuple[tuple[Motion, ...], int],
        strokes: tuple[Stroke, ...],
        extra: Totals,
    ) -> Part:
        """The approach and the passes as one part."""
        approach, ticks = way
        length = self._pass_ticks(step, strokes)
        motion = Motion(kind, index, strokes, length, step.passes)
        total = length * step.passes
        passes = Run(
            mark=step.mark,
            text=f"sweep {name} between {ends}, {step.shape}, x {step.passes}",
            totals=Totals(total, total, orders=motion.orders).beside(extra),
            motions=(motion,),
            length=total,
        )
        if not approach:
            return passes
        first = Run(
            mark=step.mark,
            text=f"{name} to the sweep's first end in {self.rig.show(ticks)}",
            totals=Totals(ticks, ticks, orders=len(approach)),
            motions=approach,
            length=ticks,
        )
        return Series(mark=step.mark, text=passes.text, totals=first.totals.then(passes.totals), parts=(first, passes))

    def _pass_ticks(self, step: Sweep, strokes: tuple[Stroke, ...]) -> int:
        last = strokes[-1]
        pause = 0 if step.pause_s is None else checking.whole_ticks(self.rig, step, "pause", step.pause_s)
        return last.after + last.ticks + pause


def _single(kind: Kind, index: int, value: int, ticks: int) -> Motion:
    return Motion(kind, index, (Stroke(0, ticks, value),), ticks)


def _driven(before: MotorScene, duty: int) -> MotorScene:
    """The motor after it was driven at `duty`."""
    sign = before.last_sign if duty == 0 else (1 if duty > 0 else -1)
    return MotorScene(duty, sign, before.rest)
