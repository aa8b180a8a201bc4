"""What moves: typed commands become orders with start ticks, checked against the limits before anything is sent.

Every order keeps to the slew limits, so the board never has to hold one back; a direction changes only at zero, and the
board's dwell lock stands behind that. A jog for a time sends its end together with its begin, so that it ends on the
board's own clock.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator

from ramprig.bench import Motor, Servo
from ramprig.errors import Refused, UsageError
from ramprig.quantity import format_duration, format_duty, format_pulse
from ramprig.sequence.rig import Axis, Channel, Rig
from ramprig.session import Session
from ramprig_link.words import Rest

from .hold import Hold
from .slope import REST, Slope

LEAD_S = 0.2
"""The usual lead of an order: a lost one is repeated before its start."""
JOG_LEAD_S = 0.05
"""The lead while a key is held: letting go must act soon. The session makes it longer where the link needs it."""
JOG_LOOK_S = 0.01
"""How often a held key is looked at."""
JOG_MOST_S = 3600.0
"""Longest jog for a time; longer motion belongs in a sequence."""
REACH_WAIT_S = 3.0
"""So much later than planned an order may come to its end (the dwell lock may hold it), then that is said."""
WAIT_MOST_S = 3600.0
"""Longest wait."""

Breathe = Callable[[float], None]
"""Lets so many seconds pass with the session at work; raises where the outputs are no longer armed."""


class Motions:
    """The orders of one session. `now` is the port's clock, `breathe` how time passes, `say` where sentences go."""

    def __init__(
        self,
        rig: Rig,
        session: Session,
        *,
        now: Callable[[], float],
        breathe: Breathe,
        say: Callable[[str], None],
    ) -> None:
        self._session = session
        self._rig = rig
        self._now = now
        self._tick_s = session.identity.tick_s
        self._breathe = breathe
        self._say = say
        self._duties: dict[str, Slope] = {}
        self._pulses: dict[str, Slope] = {}

    def forget(self) -> None:
        """All outputs are off: no demand, no pulse."""
        self._duties.clear()
        self._pulses.clear()

    # ---- motors --------------------------------------------------------------------------------------------------

    def jog_for(self, motor: Motor, duty: int, for_s: float) -> None:
        """Up by the slew limit, `for_s` after the begin down by the fall limit; returns when the bridge is at zero."""
        axis = self._checked(motor, duty)
        if duty == 0:
            raise UsageError("a jog at 0 % is none")
        length = round(for_s / self._tick_s)
        if not (length >= 1 and for_s <= JOG_MOST_S):
            raise UsageError(f"a jog lasts from 1 tick to {format_duration(JOG_MOST_S)}, not {format_duration(for_s)}")
        start = self._session.start_in(LEAD_S)
        if self._slope(motor).at(start) != 0:
            raise UsageError(f"{motor.name} is driven already; 'coast {motor.name}' first")
        end = start + length
        up = Slope(start, axis.least_ticks(0, duty), 0, duty)
        reached = up.at(end)
        down = Slope(end, axis.least_ticks(reached, 0), reached, 0)
        self._session.ramp(axis.index, duty, up.ticks, start)
        with self._or_stop():  # a begin without an end must not stay
            self._session.ramp(axis.index, 0, down.ticks, end)
        self._duties[motor.name] = down
        less = f", which reaches {format_duty(reached)} by its slew limit" if reached != duty else ""
        self._say(f"{motor.name}: {format_duty(duty)} for {format_duration(for_s)}{less}")
        self._until_tick(down.end_tick)
        self._until_zero(axis)

    def ramp_to(self, motor: Motor, duty: int, in_s: float | None) -> None:
        """Lead the duty to a value; returns once it is ordered."""
        axis = self._checked(motor, duty)
        start = self._session.start_in(LEAD_S)
        before = self._slope(motor).at(start)
        if before * duty < 0:
            raise UsageError(
                f"{motor.name} is led at {format_duty(before)}; bring it to 0 % first ('coast {motor.name}')"
            )
        ticks = self._time(in_s, axis.least_ticks(before, duty), f"the slew limit of {motor.name}")
        self._ramp(motor, axis, duty, ticks, start)
        self._say(f"{motor.name}: to {format_duty(duty)} in {self._rig.show(ticks)}")

    def release(self, motor: Motor, *, brake: bool) -> None:
        """To zero by the fall limit, then rest coasting or braked; returns once it is ordered."""
        axis = self._rig.axes[motor.name]
        start = self._session.start_in(LEAD_S)
        ticks = axis.least_ticks(self._slope(motor).at(start), 0)
        self._session.rest(axis.index, Rest.BRAKE if brake else Rest.COAST, start)
        self._ramp(motor, axis, 0, ticks, start)
        self._say(f"{motor.name}: to 0 % in {self._rig.show(ticks)}, then {'brakes' if brake else 'coasts'}")

    def jog_hold(self, motor: Motor, hold: Hold) -> None:
        """Follow the keys until they leave; the other direction waits until the duty is zero."""
        axis = self._checked(motor, 0)
        ordered = self._slope(motor)
        if ordered.end_value != 0:
            raise UsageError(f"{motor.name} is driven already; 'coast {motor.name}' first")
        while True:
            now_s = self._now()
            wanted = 0 if hold.left else max(-axis.ceiling_duty, min(axis.ceiling_duty, hold.wanted(now_s)))
            start = self._session.start_in(JOG_LEAD_S)
            before = ordered.at(start)
            if before * wanted < 0:
                wanted = 0
            if wanted != ordered.end_value:
                with self._or_stop():  # what turns must follow the keys
                    ordered = self._ramp(motor, axis, wanted, axis.least_ticks(before, wanted), start)
            elif hold.left and before == 0:
                break
            self._breathe(JOG_LOOK_S)
        self._until_tick(ordered.end_tick)
        self._until_zero(axis)

    @contextlib.contextmanager
    def _or_stop(self) -> Iterator[None]:
        """Have all stopped where the device refuses an order in here, as for a full queue; the refusal is raised."""
        try:
            yield
        except Refused:
            self._session.panic(1)
            raise

    def _ramp(self, motor: Motor, axis: Axis, duty: int, ticks: int, start: int) -> Slope:
        before = self._slope(motor).at(start)
        self._session.ramp(axis.index, duty, ticks, start)
        slope = Slope(start, ticks, before, duty)
        self._duties[motor.name] = slope
        return slope

    def _slope(self, motor: Motor) -> Slope:
        return self._duties.get(motor.name, REST)

    def _checked(self, motor: Motor, duty: int) -> Axis:
        """The axis, where it may be driven at this duty."""
        axis = self._rig.axes[motor.name]
        most = min(axis.ceiling_duty, self._session.identity.max_duty)
        if abs(duty) > most:
            raise UsageError(f"{format_duty(duty)} is above the ceiling of {motor.name}, {format_duty(most)}")
        return axis

    def _time(self, in_s: float | None, least: int, limit: str) -> int:
        """The ticks that a motion takes."""
        if in_s is None:
            return least
        ticks = round(in_s / self._tick_s)
        if ticks < least:
            raise UsageError(f"that is faster than {limit} allows; write 'in {self._rig.show(least)}' or more")
        if in_s > JOG_MOST_S:
            raise UsageError(f"a motion takes at most {format_duration(JOG_MOST_S)} here")
        return ticks

    def _until_tick(self, tick: int) -> None:
        while (left := tick - self._session.tick_now()) > 0:
            self._breathe(min(left * self._tick_s + 0.001, 0.1))

    def _until_zero(self, axis: Axis) -> None:
        """Until the bridge of an axis is at zero; a dwell lock may have held the motion back."""
        bound = self._session.tick_now() + round(REACH_WAIT_S / self._tick_s)
        while self._session.state().axes[axis.index].duty != 0:
            if self._session.tick_now() > bound:
                self._say(f"{axis.name}: the bridge is not at zero {format_duration(REACH_WAIT_S)} after it should be")
                return
            self._breathe(0.02)

    # ---- servos --------------------------------------------------------------------------------------------------

    def move(self, servo: Servo, angle_deg: float, in_s: float | None) -> None:
        """Lead a servo to an angle; returns once it is ordered."""
        channel = self._rig.channels[servo.name]
        pulse_us = self._pulse(servo, channel, angle_deg)
        start = self._session.start_in(LEAD_S)
        before = self._pulses.get(servo.name, REST).at(start)
        least = channel.least_ticks(before or channel.home_us, pulse_us)
        ticks = self._time(in_s, least, f"the slew limit of {servo.name}")
        self._session.swing(channel.index, pulse_us, ticks, start)
        if before == 0:
            self._say(f"{servo.name}: its first pulse sends it to its home, {servo.home_deg:g} deg, at its own speed")
        self._pulses[servo.name] = Slope(start, ticks, before or channel.home_us, pulse_us)
        self._say(
            f"{servo.name}: to {servo.degrees_of(pulse_us):g} deg ({format_pulse(pulse_us)}) in {self._rig.show(ticks)}"
        )

    def move_off(self, servo: Servo) -> None:
        """Take a servo's pulses away; returns once it is ordered."""
        channel = self._rig.channels[servo.name]
        start = self._session.start_in(LEAD_S)
        self._session.swing(channel.index, 0, 0, start)
        self._pulses[servo.name] = Slope(start, 0, 0, 0)
        self._say(f"{servo.name}: pulses off; it holds no longer")

    @staticmethod
    def _pulse(servo: Servo, channel: Channel, angle_deg: float) -> int:
        pulse_us = servo.pulse_us_of(angle_deg)
        if not channel.pulse_min_us <= pulse_us <= channel.pulse_max_us:
            raise UsageError(
                f"{angle_deg:g} deg lies outside the limits of {servo.name}, "
                f"{servo.low_deg:g} deg to {servo.high_deg:g} deg"
            )
        return pulse_us

    # ---- time ----------------------------------------------------------------------------------------------------

    def wait(self, for_s: float) -> None:
        """Let time pass, with the session at work."""
        if for_s > WAIT_MOST_S:
            raise UsageError(f"a wait lasts at most {format_duration(WAIT_MOST_S)}, not {format_duration(for_s)}")
        self._until_tick(self._session.tick_now() + round(for_s / self._tick_s))
