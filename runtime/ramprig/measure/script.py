"""Writes the sequences that procedures run: text that a person can read, keep, and run again."""

from __future__ import annotations

from fractions import Fraction

from ramprig.quantity import digits
from ramprig.sequence.rig import Rig


class Script:
    """One sequence under construction; knows the duty that each step leaves, so that ramps keep to the slew limits.

    Duties are in 1/10000, signed as the bench file means them; times in ms.
    """

    def __init__(self, rig: Rig, *, name: str, period_ms: int) -> None:
        self._rig = rig
        self._name = name
        self._period_ms = period_ms
        self._steps: list[str] = []
        self._duty: dict[str, int] = {}
        self._sign: dict[str, int] = {}

    @property
    def text(self) -> str:
        """The sequence file."""
        head = [f"sequence: {self._name}", f"log: {{period: {self._period_ms} ms}}", "steps:"]
        return "\n".join([*head, *(f"  - {step}" for step in self._steps)]) + "\n"

    def step(self, text: str) -> Script:
        """Any step, as a sequence file has it."""
        self._steps.append(text)
        return self

    def hold(self, ms: float) -> Script:
        """Wait."""
        return self.step(f"hold: {max(1, round(ms))} ms")

    def mark(self, name: str) -> Script:
        """Name this moment."""
        return self.step(f"mark: {name}")

    def drive(self, motor: str, duty: int, *, in_ms: int = 0) -> Script:
        """To a duty, in this time or as fast as the slew allows; reverses where the sign changes."""
        axis = self._rig.axes[motor]
        before, sign = self._duty.get(motor, 0), self._sign.get(motor, 0)
        if duty and sign * duty < 0:
            down = self._ms(axis.least_ticks(before, 0), in_ms)
            up = self._ms(axis.least_ticks(0, duty), in_ms)
            self.step(
                f"reverse: {{motor: {motor}, to: {percent(duty)}, in: {up} ms, down in: {down} ms, still within: 20 s}}"
            )
        else:
            ms = self._ms(axis.least_ticks(before, duty), in_ms)
            self.step(f"ramp: {{motor: {motor}, to: {percent(duty)}, in: {ms} ms}}")
        self._duty[motor] = duty
        if duty:
            self._sign[motor] = 1 if duty > 0 else -1
        return self

    def coast(self, motor: str) -> Script:
        """To zero as fast as the fall limit allows, then coast."""
        self._duty[motor] = 0
        return self.step(f"coast: {motor}")

    def brake(self, motor: str) -> Script:
        """To zero as fast as the fall limit allows, then short the winding."""
        self._duty[motor] = 0
        return self.step(f"brake: {motor}")

    def move(self, servo: str, degrees: float, *, in_ms: int = 0, from_deg: float | None = None) -> Script:
        """A servo to an angle, in this time or as fast as its slew allows from `from_deg` on."""
        channel = self._rig.channels[servo]
        if from_deg is not None:
            pulse_us, begin_us = (channel.servo.pulse_us_of(end) for end in (degrees, from_deg))
            in_ms = max(in_ms, self._ms(channel.least_ticks(begin_us, pulse_us), 0))
        return self.step(f"move: {{servo: {servo}, to: {digits(degrees, 8)} deg, in: {max(1, in_ms)} ms}}")

    def _ms(self, ticks: int, least_ms: int) -> int:
        """A time in whole ms that is a whole number of ticks and no shorter than either."""
        tick_ms = Fraction(self._rig.tick_us, 1000)
        whole = max(-(-(ticks * tick_ms) // 1), least_ms)
        while (whole / tick_ms).denominator != 1:
            whole += 1
        return int(whole)


def percent(duty: int) -> str:
    """A duty as files have it."""
    return f"{digits(Fraction(duty, 100), 6)} %"
