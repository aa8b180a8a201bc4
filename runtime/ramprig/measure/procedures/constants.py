"""A motor's constants from one measuring run each way: pulses at rest, steady levels, run-up and coast-down, one fit.

What is driven is planned here and carried out as any stage is; `identify` finds R, Ke = Kt, friction, J and, where the
sampling allows it, L, from all of it together. All constants are those of the motor's own shaft.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from ramprig.bench import Bench, Motor
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.identify import Identification, Instruments, identify
from ramprig.measure.lab import Lab
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.numbers.windows import Recording
from ramprig.measure.quality import Zero, check_moves, check_not_saturated, need_encoder
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.script import Script
from ramprig.measure.tightening import cut_at_once
from ramprig.measure.trace import Floats, MotorTrace
from ramprig.quantity import digits, format_duty

from . import constants_pictures
from .ways import WAYS, WORDS, facing

PULSES_DUTY = (200, 300, 400)
"""Pulses at rest, in 1/10000: most motors do not break away at them, so that R stands alone; where one does, it is
taken as turning."""
PULSE_MS = 60
PULSE_REST_MS = 150
LEVELS = (0.375, 0.6875, 1.0)
"""Steady levels, as shares of the ceiling."""
LEVEL_MS = 500
RUN_UP = 0.875
RUN_UP_MS = 700
RUN_DOWN_MS = 1500
STILL_WITHIN_S = 60
"""A shaft that turns for longer is not one for this measurement."""
REST_MS = 300
RAMPED_MOST = 0.05
"""A larger change of duty from sample to sample is a step at some tick between, not a ramp."""
USUAL_C = 22.0
USUAL_U_K = 3.0
"""Where the bench says no ambient temperature: a room's, within so much (standard uncertainty; ours)."""
AMBIENT_U_K = 0.5
"""Of an ambient temperature that the bench says (standard uncertainty; ours)."""
USUAL_THERMAL_S = 60.0

ORDER = ("resistance_20", "constant", "coulomb", "viscous", "inertia", "inductance", "electrical_time")
TIMES = ("mechanical_time",)


@dataclass(frozen=True, slots=True, kw_only=True)
class Constants:
    """The constants of one motor from so many measuring runs each way.

    `scale_u` is the relative standard uncertainty that the scales of current and supply may have in common in all
    readings; 0 takes the board's scales as exact.
    """

    motor: str
    repeats: int = 1
    scale_u: float = 0.0

    @property
    def name(self) -> str:
        """As on the command line."""
        return "constants"

    @property
    def subject(self) -> str:
        """The motor."""
        return self.motor

    def bench(self, bench: Bench) -> Bench:
        """The bench's limits, but that the duty may go to zero at once. Raises NotMeasurable without an encoder."""
        motor = bench.motor(self.motor)
        need_encoder(motor)
        counts_per_turn(motor)
        if self.repeats < 1:
            raise NotMeasurable("no measuring run", wanted="at least 1, such as --repeats 1")
        if not 0.0 <= self.scale_u < 0.5:
            raise NotMeasurable(f"a scale error of {100 * self.scale_u:g} %", wanted="0 % to 50 %")
        return cut_at_once(bench, self.motor)

    def moves(self, bench: Bench) -> str:
        """What moves."""
        ceiling = format_duty(bench.motor(self.motor).limits(1000)["ceiling_duty"])
        return (
            f"{self.motor} gets short pulses, turns both ways in steps up to {ceiling}, and runs down twice each way "
            "with its bridge off"
        )

    def carry_out(self, lab: Lab) -> Findings:
        """Drive, fit, tell."""
        motor = lab.bench.motor(self.motor)
        zero = Zero.of(lab.watch("outputs off", 0.5).motor(motor))
        recordings: list[Recording] = []
        traces: list[MotorTrace] = []
        for number in range(self.repeats):
            for sign in WAYS:
                trace = lab.run(self._script(lab, motor, sign, number + 1))
                found = trace.motor(motor)
                check_moves(motor, facing(found, sign), round(10_000 * float(abs(found.duty).max(initial=0.0))))
                check_not_saturated(found, noise_a=zero.noise_a)
                traces.append(found)
                recordings.append(recording_of(motor, found, lab.period_ms / 1000.0, tick_s=trace.tick_s))
        known = instruments(motor, scale_u=self.scale_u)
        first, tick_s = identify(recordings, known), lab.rig.tick_us / 1e6
        pairs = zip(recordings, traces, strict=True)
        level = [without_stairs(one, trace, first, tick_s=tick_s) for one, trace in pairs]
        return _told(motor, identify(level, known), known)

    def _script(self, lab: Lab, motor: Motor, sign: int, number: int) -> Script:
        name = motor.name
        ceiling = lab.rig.axes[name].ceiling_duty
        script = lab.script(f"constants {WORDS[sign]} {number}").hold(REST_MS)
        for pulse in PULSES_DUTY:
            script.drive(name, sign * min(pulse, ceiling)).hold(PULSE_MS).coast(name).hold(PULSE_REST_MS)
        for share in LEVELS:
            script.drive(name, sign * round(share * ceiling)).hold(LEVEL_MS)
        # never down to a lower level under drive: that would give energy back to the supply
        script.coast(name).hold(RUN_DOWN_MS)
        # nor from zero up while the shaft still turns: a duty below its speed brakes it
        script.step(f"wait: {{speed of: {name}, is: -1 rpm to 1 rpm, within: {STILL_WITHIN_S} s}}")
        script.drive(name, sign * round(RUN_UP * ceiling)).hold(RUN_UP_MS).coast(name).hold(RUN_DOWN_MS)
        return script.hold(REST_MS)


def counts_per_turn(motor: Motor) -> int:
    """Counts a turn of the motor's own shaft. Raises NotMeasurable for an encoder behind a gear."""
    assert motor.encoder is not None, "the encoder was asked for before"
    if not motor.encoder.on_motor_shaft and motor.gear_ratio != 1:
        raise NotMeasurable(
            f"the encoder of {motor.name} sits behind the gear",
            wanted="its play would count as motion of the motor; an encoder on the motor's shaft",
        )
    return 4 * motor.encoder.lines


def recording_of(motor: Motor, trace: MotorTrace, period_s: float, *, tick_s: float) -> Recording:
    """The trace as `identify` takes it. Raises NotMeasurable where samples are missing.

    The board changes the duty at its ticks, of which a sample period may have several: on a ramp the duty that acts
    until the next sample is the mean over those ticks, not the one logged. The supply, read at a tick's end, likewise.
    """
    steps = trace.time_s[1:] - trace.time_s[:-1]
    if len(steps) and float(abs(steps - period_s).max()) > period_s / 4:
        raise NotMeasurable(
            f"{motor.name}: samples are missing ({len(trace)} came)", wanted="a line that carries every sample"
        )
    ticks = max(1, round(period_s / tick_s))
    duty, supply_v = trace.duty.copy(), trace.supply_v.copy()
    duty[:-1] += ramped(trace) * (ticks - 1) / (2 * ticks)
    supply_v[1:] -= (trace.supply_v[1:] - trace.supply_v[:-1]) * (ticks - 1) / (2 * ticks)
    return Recording(
        period_s=period_s,
        duty=duty,
        supply_v=supply_v,
        current_a=trace.current_a,
        counts=trace.counts.round().astype("int64"),
        coasting=trace.duty == 0.0,
        counts_per_turn=counts_per_turn(motor),
    )


def ramped(trace: MotorTrace) -> Floats:
    """How much the duty changes from each sample to the next where it does so on a ramp, else 0; one fewer than n."""
    change = np.diff(trace.duty)
    on_ramp = (np.abs(change) <= RAMPED_MOST) & (np.abs(trace.duty[1:]) > 0.0)
    found: Floats = np.where(on_ramp, change, 0.0)
    return found


def without_stairs(recording: Recording, trace: MotorTrace, found: Identification, *, tick_s: float) -> Recording:
    """The recording with currents as they would be had each period's mean voltage acted all through it.

    On a ramp the last tick of a period has more than the mean, and the current, fast as it is, follows: with s volts a
    tick and q = e^(-tick R/L) the sample shows s/R sum over the ticks j of (j - (n - 1)/2) q^(n - 1 - j) (1 - q) more.
    """
    ticks = max(1, round(recording.period_s / tick_s))
    ohm = found.resistance_20.value + found.bridge_ohm
    still = 0.0 if found.inductance is None else math.exp(-tick_s * ohm / found.inductance.value)
    place = np.arange(ticks)
    share = float(np.sum((place - (ticks - 1) / 2) * still ** (ticks - 1 - place)) * (1.0 - still))
    step_v = ramped(trace) / ticks * recording.supply_v[1:]
    current_a = recording.current_a.copy()
    current_a[1:] -= step_v / ohm * share
    return replace(recording, current_a=current_a)


def instruments(motor: Motor, *, scale_u: float) -> Instruments:
    """What the bench file knows beside the samples."""
    model = motor.model
    ambient = None if model is None else model.ambient_c
    thermal = None if model is None else model.thermal_s
    range_ma = None if model is None else model.sensor_range_ma
    return Instruments(
        start_c=USUAL_C if ambient is None else ambient,
        start_u_k=USUAL_U_K if ambient is None else AMBIENT_U_K,
        bridge_ohm=0.0 if model is None else model.bridge_ohm,
        current_gain_u=scale_u,
        supply_gain_u=scale_u,
        thermal_time_s=USUAL_THERMAL_S if thermal is None else thermal,
        range_a=None if range_ma is None else range_ma / 1000.0,
    )


# ---- what is told --------------------------------------------------------------------------------------------------


def _told(motor: Motor, found: Identification, known: Instruments) -> Findings:
    values: dict[str, Measured] = {}
    for name in (*ORDER, *TIMES):
        value = getattr(found, name)
        if value is not None:
            values[name] = value
    if known.current_gain_u:
        scales = f"the scales of current and supply are taken as right to {100 * known.current_gain_u:g} %"
    else:
        scales = "the scales of current and supply are taken as exact; --scale-error says how wrong they may be"
    lines = [
        f"all at the motor's own shaft; R at 20 degC (IEC 60028), measured from {known.start_c:g} degC on",
        "R is the winding's alone" if known.bridge_ohm else "R includes bridge and leads, of which the bench says none",
        scales,
        f"noise found: current {1000 * found.noise.current_a:.3g} mA, angle {math.degrees(found.noise.angle_rad):.2g} "
        f"deg; winding at most {digits(found.warmest_k, 2)} K warmer than at the beginning",
        *_related(found),
        *(f"note: {warning}" for warning in found.warnings),
    ]
    return Findings(
        procedure="constants",
        subject=motor.name,
        sentence=_sentence(motor, found),
        values=values,
        facts={"identified": found.to_json(), "used_s": found.used_s, "windows": len(found.windows)},
        lines=tuple(lines),
        pictures=_pictures(motor, found),
    )


def _related(found: Identification) -> list[str]:
    """The pairs that hang together strongly: their uncertainties must not be combined as if they did not."""
    said = []
    for row, first in enumerate(found.keys):
        for column in range(row):
            share = float(found.correlations[row, column])
            if abs(share) > 0.7:
                said.append(f"{found.keys[column].replace('_', ' ')} and {first.replace('_', ' ')} {share:+.2f}")
    return [f"correlated: {', '.join(said)}"] if said else []


def _sentence(motor: Motor, found: Identification) -> str:
    weak = [
        name.replace("_", " ") for name in ORDER if (value := getattr(found, name)) is not None and value.relative > 0.5
    ]
    if weak:
        return f"{motor.name}: constants found, but {' and '.join(weak)} not well enough to build on."
    return (
        f"{motor.name}: {found.resistance_20.value:.3g} ohm and {found.constant.value:.3g} V*s/rad; it reaches its "
        f"speed with a time constant of {1000 * found.mechanical_time.value:.3g} ms."
    )


def _pictures(motor: Motor, found: Identification) -> tuple[Picture, ...]:
    return (
        Picture(
            name="residuals",
            draw=lambda figure: constants_pictures.residuals(figure, found, title=motor.name),
            height_in=6.5,
        ),
        Picture(
            name="correlations",
            draw=lambda figure: constants_pictures.correlations(figure, found, title=motor.name),
            width_in=6.0,
        ),
    )
