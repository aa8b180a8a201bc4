"""Lost motion at reversal, seen from both ends of the gear: the output clamped fast, or a second encoder on it.

With the output clamped the motor is pressed one way and the other, gently, until it stands; its encoder shows the play
and what the gear winds up by under that torque. With a second encoder the shaft runs slowly to and fro, and the play is
what the two encoders differ by between the ways. An encoder on one side alone shows neither, and is refused.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np

from ramprig.bench import Bench, Motor
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.lab import Lab
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.quality import Zero, check_moves, need_encoder
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.script import Script
from ramprig.measure.spread import spread
from ramprig.measure.tightening import tightened
from ramprig.measure.trace import Trace
from ramprig.quantity import digits, format_current, format_duty

from . import pictures

REPEATS = 5
PRESS_DUTY = 1000
"""Pressing and running to and fro ask for no more than this."""
STALL_SHARE = 0.8
"""A pressed motor stands under its duty: the duty stays this far below the stall trip."""
PRESS_MS = 700
WINDOW_MS = 150
STROKE_MS = 2500
RUN_DOWN_MS = 600
FREE_TURNS = 1.0
"""An output that is clamped lets the motor turn less than this, counted at the output."""
FOLLOW_WITHIN = 0.05
"""The second encoder must turn as the output does, within this share."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Backlash:
    """The lost motion of one motor's gear: with `clamped`, or against the encoder of the motor entry `second`."""

    motor: str
    clamped: bool = False
    second: str | None = None
    repeats: int = REPEATS

    @property
    def name(self) -> str:
        """As on the command line."""
        return "backlash"

    @property
    def subject(self) -> str:
        """The motor."""
        return self.motor

    def bench(self, bench: Bench) -> Bench:
        """A small duty and the rated current at most. Raises NotMeasurable where lost motion cannot be seen."""
        motor = bench.motor(self.motor)
        need_encoder(motor)
        if self.repeats < 2:
            raise NotMeasurable("an uncertainty from one reversal", wanted="at least 2, such as --repeats 5")
        if motor.encoder is not None and not motor.encoder.on_motor_shaft:
            raise NotMeasurable(
                f"the encoder of {self.motor} sits behind the gear and does not see what the motor does before it",
                wanted="lost motion needs an encoder on the motor's shaft as well",
            )
        if self.clamped == (self.second is not None):
            raise NotMeasurable(
                f"the encoder of {self.motor} sits before the gear and does not see what the output does",
                wanted="clamp the output shaft and say --clamped, or fit an encoder to it and say --second NAME",
            )
        if self.second is not None:
            need_encoder(bench.motor(self.second))
            if self.second == self.motor:
                raise NotMeasurable(f"{self.motor} cannot be its own second encoder", wanted="another motor's entry")
        return tightened(bench, self.motor, ceiling_duty=_press_duty(motor), trip_a=motor.rated_ma / 1000)

    def moves(self, bench: Bench) -> str:
        """What moves."""
        motor = bench.motor(self.motor)
        how = "presses against its clamped output" if self.clamped else "turns slowly to and fro"
        return f"{self.motor} {how} at {format_duty(_press_duty(motor))}"

    def carry_out(self, lab: Lab) -> Findings:
        """To and fro, and the difference."""
        motor = lab.bench.motor(self.motor)
        zero = Zero.of(lab.watch("outputs off", 0.3).motor(motor))
        trace = lab.run(self._script(lab, motor))
        if self.second is None:
            return self._clamped(motor, trace, zero)
        return self._against(motor, lab.bench.motor(self.second), trace)

    def _script(self, lab: Lab, motor: Motor) -> Script:
        """To and fro so often; the first way only takes up the play."""
        duty = lab.rig.axes[motor.name].ceiling_duty
        length_ms = PRESS_MS if self.clamped else STROKE_MS
        script = lab.script("to and fro").hold(100)
        for way in (1, *(way for _ in range(self.repeats) for way in (-1, 1))):
            script.drive(motor.name, way * duty, in_ms=200).hold(length_ms - WINDOW_MS)
            script.mark("forward" if way > 0 else "backward").hold(WINDOW_MS).mark("done")
        script.drive(motor.name, 0).coast(motor.name).hold(RUN_DOWN_MS)
        return script

    # ---- clamped -------------------------------------------------------------------------------------------------

    def _clamped(self, motor: Motor, trace: Trace, zero: Zero) -> Findings:
        """The counts at which the motor stands, pressed one way and the other."""
        found = trace.motor(motor)
        stands: dict[str, list[float]] = {"forward": [], "backward": []}
        pressed_a: list[float] = []
        for way, begin, end in _windows(trace):
            window = found.between(begin, end)
            if len(window) < 5:
                raise NotMeasurable("samples are missing while the motor pressed")
            if float(np.ptp(window.counts)) > 2.0:
                raise NotMeasurable(
                    f"{motor.name} still turned while it should have been pressed",
                    wanted="clamp the output shaft so that it cannot turn",
                )
            stands[way].append(float(window.counts.mean()))
            pressed_a.append(abs(float(window.current_a.mean()) - zero.mean_a))
        travel = float(np.ptp([*stands["forward"], *stands["backward"]]))
        if travel > FREE_TURNS * float(motor.counts_per_turn):
            raise NotMeasurable(
                f"{motor.name} turned by {digits(travel / float(motor.counts_per_turn), 3)} turns of the output",
                wanted="clamp the output shaft so that it cannot turn",
            )
        pairs = zip(stands["forward"][:-1], stands["backward"], strict=True)
        differences = [forward - backward for forward, backward in pairs]
        resolution = math.sqrt(2.0 / 12.0)  # each stand is known to a count
        lost = spread(differences, [resolution], "deg", factor=360.0 / float(motor.counts_per_turn))
        current_a = float(np.mean(pressed_a))
        return self._told(
            motor,
            lost,
            [360.0 / float(motor.counts_per_turn) * one for one in differences],
            f"pressed with {format_current(current_a)} either way; what the gear winds up by under that is in it",
            {"pressing_current_a": current_a, "how": "clamped"},
        )

    # ---- against a second encoder --------------------------------------------------------------------------------

    def _against(self, motor: Motor, second: Motor, trace: Trace) -> Findings:
        """What the output turned less than the motor did, by its gear: more on the one way than on the other."""
        first, other = trace.motor(motor), trace.motor(second)
        check_moves(motor, first.where(first.duty > 0), round(10_000 * float(first.duty.max())))
        before = 360.0 * first.counts / float(motor.counts_per_turn)
        behind = 360.0 * other.counts / float(second.counts_per_turn)
        travelled, followed = float(np.ptp(before)), float(np.ptp(behind))
        if abs(followed / travelled - 1.0) > FOLLOW_WITHIN + _share_of_play(travelled):
            raise NotMeasurable(
                f"{second.name} turned by {digits(followed, 3)} deg where {motor.name}'s output turned by "
                f"{digits(travelled, 3)} deg",
                wanted="the second encoder must sit on the output shaft, and its entry in the bench file be right",
            )
        sign = float(np.sign(np.corrcoef(before, behind)[0, 1]))
        ahead = before - sign * behind
        time_s = trace.time_s
        leads: dict[str, list[float]] = {"forward": [], "backward": []}
        for way, begin, end in _windows(trace):
            leads[way].append(float(ahead[(time_s > begin) & (time_s <= end)].mean()))
        differences = [
            forward - backward for forward, backward in zip(leads["forward"], leads["backward"], strict=False)
        ]
        resolution = 360.0 * math.hypot(1.0 / float(motor.counts_per_turn), 1.0 / float(second.counts_per_turn))
        lost = spread(differences, [resolution / math.sqrt(12.0)], "deg")
        return self._told(
            motor, lost, differences, f"against the encoder of {second.name}", {"how": f"second encoder {second.name}"}
        )

    def _told(
        self, motor: Motor, lost: Measured, each_deg: Sequence[float], how: str, facts: dict[str, object]
    ) -> Findings:
        return Findings(
            procedure="backlash",
            subject=motor.name,
            sentence=f"{motor.name}: {digits(lost.value, 3)} deg of lost motion at the output, {how}.",
            values={"lost_motion": lost},
            facts={**facts, "each_deg": list(each_deg)},
            lines=("lost motion depends on the torque and on how fast it is reversed: compare like with like",),
            pictures=(
                Picture(
                    name="backlash",
                    draw=lambda figure: pictures.repeats(
                        figure, each_deg, lost, title=f"{motor.name}: lost motion", label="deg at the output"
                    ),
                    height_in=3.5,
                ),
            ),
        )


def _share_of_play(travelled_deg: float) -> float:
    """Room for the play itself, up to 10 deg of it."""
    return 10.0 / travelled_deg if travelled_deg > 0.0 else 0.0


def _press_duty(motor: Motor) -> int:
    """The duty that presses: below the stall trip, under which a motor that stands would be stopped."""
    limits = motor.limits(1000)
    most = min(PRESS_DUTY, limits["ceiling_duty"])
    stall = limits["stall_duty"]
    return min(most, round(STALL_SHARE * stall)) if stall else most


def _windows(trace: Trace) -> Iterator[tuple[str, float, float]]:
    """Way, begin and end of each window in order."""
    begins = [(name, time) for name in ("forward", "backward") for time in trace.at(name)]
    for (name, begin), end in zip(sorted(begins, key=lambda pair: pair[1]), trace.at("done"), strict=True):
        yield name, begin, end
