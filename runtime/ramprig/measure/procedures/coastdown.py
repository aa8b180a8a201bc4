"""How a shaft runs down with the bridge off: its friction over its inertia, from the counts of each run-down.

J dw/dt = -(b w + Tc) from the speed w0 gives the angle  w0 t p1(b t/J) - Tc/J t^2 p2(b t/J)  with
p1(x) = (1 - e^-x)/x and p2(x) = (x - 1 + e^-x)/x^2. Only ratios follow from running down: an inertia that is known
from elsewhere turns them into torques.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.bench import Bench, Motor
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.lab import Lab
from ramprig.measure.numbers.fit import Fit, fit_curve
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.quality import check_moves, need_encoder
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.spread import spread
from ramprig.measure.tightening import cut_at_once
from ramprig.measure.trace import Floats, MotorTrace
from ramprig.quantity import digits, format_duty

from . import pictures
from .ways import WAYS, WORDS, RunDown, facing

REPEATS = 3
SHARE = 0.75
"""Run-downs begin at this share of the ceiling."""
HOLD_MS = 800
REST_MS = 300
RUN_DOWN_MS = 6000
"""A shaft that turns for longer is not followed to its end, and need not be."""
KEEP_SHARE = 0.97
"""The fit takes this share of the angle: at the very end friction is no longer the running one."""
COUNTS_LEAST = 100
NAMES = ("start", "speed", "coulomb", "viscous")


@dataclass(frozen=True, slots=True, kw_only=True)
class CoastDown:
    """The run-downs of one motor, so many each way."""

    motor: str
    repeats: int = REPEATS

    @property
    def name(self) -> str:
        """As on the command line."""
        return "coastdown"

    @property
    def subject(self) -> str:
        """The motor."""
        return self.motor

    def bench(self, bench: Bench) -> Bench:
        """The bench's limits, but that the duty may go to zero at once. Raises NotMeasurable without an encoder."""
        need_encoder(bench.motor(self.motor))
        if self.repeats < 2:
            raise NotMeasurable("an uncertainty from one run-down", wanted="at least 2, such as --repeats 3")
        return cut_at_once(bench, self.motor)

    def moves(self, bench: Bench) -> str:
        """What moves."""
        duty = round(SHARE * bench.motor(self.motor).limits(1000)["ceiling_duty"])
        return f"{self.motor} turns both ways at {format_duty(duty)}; its bridge is then switched off, and it runs down"

    def carry_out(self, lab: Lab) -> Findings:
        """Spin up, cut, fit."""
        motor = lab.bench.motor(self.motor)
        runs = tuple(run for sign in WAYS for run in self._way(lab, motor, sign))
        return _told(motor, runs)

    def _way(self, lab: Lab, motor: Motor, sign: int) -> list[RunDown]:
        name = motor.name
        duty = round(SHARE * lab.rig.axes[name].ceiling_duty)
        script = lab.script(f"run down {WORDS[sign]}").hold(100)
        for _ in range(self.repeats):
            script.drive(name, sign * duty).hold(HOLD_MS).mark("cut").coast(name).hold(RUN_DOWN_MS).mark("end")
            script.hold(REST_MS)
        trace = lab.run(script)
        whole = facing(trace.motor(motor), sign)
        check_moves(motor, whole, duty)
        found = [
            run_down(sign, whole.between(cut - 0.01, end))
            for cut, end in zip(trace.at("cut"), trace.at("end"), strict=True)
        ]
        kept = [one for one in found if one is not None]
        if len(kept) < 2:
            raise NotMeasurable(
                f"{name} ran on for fewer than {COUNTS_LEAST} counts in {len(found) - len(kept)} of {len(found)} "
                "run-downs",
                wanted="a finer encoder, or more inertia",
            )
        return kept


def run_down(sign: int, trace: MotorTrace) -> RunDown | None:
    """The run-down after the duty has gone to zero; None where too little of it was seen."""
    driven = np.flatnonzero(np.abs(trace.duty) > 1e-9)
    begin = int(driven[-1]) + 1 if len(driven) else 0
    time_s, counts = trace.time_s[begin:], trace.counts[begin:]
    if len(time_s) < 10:
        return None
    time_s, counts = time_s - time_s[0], counts - counts[0]
    total = float(counts[-1])
    if total < COUNTS_LEAST:
        return None
    last = int(np.argmax(counts >= total))
    until = int(np.argmax(counts >= KEEP_SHARE * total))
    fit = fit_angle(time_s[: until + 1], counts[: until + 1])
    gap_s = float(time_s[last] - time_s[int(np.argmax(counts >= total - 1.0))]) or float(np.diff(time_s).max())
    return RunDown(
        sign=sign,
        trace=MotorTrace(
            time_s=time_s,
            duty=trace.duty[begin:],
            counts=counts,
            current_a=trace.current_a[begin:],
            supply_v=trace.supply_v[begin:],
        ),
        fit=fit,
        kept_s=float(time_s[until]),
        length_s=float(time_s[last]) + gap_s / 2,
        length_u_s=max(gap_s, float(np.median(np.diff(time_s)))) / math.sqrt(12.0),
        counts=total,
    )


Complexes = NDArray[np.complex128]


def _p1(x: Complexes) -> Complexes:
    """(1 - e^-x)/x, its series where the difference would lose digits."""
    small = np.abs(x) < 1e-3
    safe = np.where(small, 1.0, x)
    found: Complexes = np.where(small, 1.0 - x / 2.0 + x * x / 6.0, (1.0 - np.exp(-safe)) / safe)
    return found


def _p2(x: Complexes) -> Complexes:
    """(x - 1 + e^-x)/x^2, its series where the difference would lose digits."""
    small = np.abs(x) < 1e-2
    safe = np.where(small, 1.0, x)
    series = 0.5 - x / 6.0 + x * x / 24.0 - x**3 / 120.0
    found: Complexes = np.where(small, series, (safe - 1.0 + np.exp(-safe)) / safe**2)
    return found


def angle(values: Complexes, time_s: Floats) -> Complexes:
    """The angle of a run-down; `values` are (start, speed, Tc/J, b/J)."""
    x = values[3] * time_s
    found: Complexes = values[0] + values[1] * time_s * _p1(x) - values[2] * time_s**2 * _p2(x)
    return found


def fit_angle(time_s: Floats, counts: Floats) -> Fit:
    """The run-down through counts, each known to a count; parameters `start`, `speed`, `coulomb`, `viscous`."""
    curve, slope, start = np.polyfit(time_s, counts, 2)
    begin = np.array([start, slope, max(-2 * curve, 1.0), 0.05 / float(time_s[-1])])
    return fit_curve(lambda values: angle(values, time_s), counts, begin, names=NAMES, sigma=1.0 / math.sqrt(12.0))


def _told(motor: Motor, runs: Sequence[RunDown]) -> Findings:
    per_turn = float(motor.counts_per_turn)
    gear = float(motor.gear_ratio)
    rad_per_count = math.tau / per_turn * gear
    values: dict[str, Measured] = {}
    for sign in WAYS:
        way = [run for run in runs if run.sign == sign]
        word = WORDS[sign]
        values[f"run_down_{word}"] = spread([run.length_s for run in way], [run.length_u_s for run in way], "s")
        values[f"coulomb_{word}"] = _spread_of(way, "coulomb", "rad/s2", rad_per_count)
        values[f"viscous_{word}"] = _spread_of(way, "viscous", "1/s", 1.0)
    turns = float(np.mean([run.counts for run in runs])) / per_turn
    length = float(np.mean([run.length_s for run in runs]))
    # Where a run-down starts, in counts, is nobody's result.
    told = {warning for run in runs for warning in run.fit.warnings if not warning.startswith("start ")}
    warnings = sorted(told)
    return Findings(
        procedure="coastdown",
        subject=motor.name,
        sentence=f"{motor.name}: runs on for {digits(length, 3)} s and {digits(turns, 3)} turns of the output shaft.",
        values=values,
        facts={
            "run_downs": [
                {
                    "forward": run.sign > 0,
                    "length_s": run.length_s,
                    "counts": run.counts,
                    "speed_rad_s": float(run.fit.values[1]) * rad_per_count,
                    "residual_counts": float(np.std(run.fit.residuals)),
                }
                for run in runs
            ]
        },
        lines=(
            "coulomb is the running friction over the inertia, viscous the friction per speed over the inertia, both "
            "at the motor's shaft",
            *(f"note: {warning}" for warning in warnings),
        ),
        pictures=(
            Picture(name="coastdown", draw=lambda figure: pictures.coastdown(figure, runs, per_turn, title=motor.name)),
        ),
    )


def _spread_of(way: Sequence[RunDown], name: str, unit: str, factor: float) -> Measured:
    place = NAMES.index(name)
    return spread(
        [float(run.fit.values[place]) for run in way],
        [float(run.fit.standard_uncertainties[place]) for run in way],
        unit,
        factor=factor,
    )
