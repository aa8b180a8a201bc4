"""Duty to speed, both ways, up and down: dead band, hysteresis, linear range, no-load current."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from ramprig.bench import Bench, Motor
from ramprig.measure.deadband import Excursion, excursion
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.lab import Lab
from ramprig.measure.numbers.fit import Fit, fit_linear
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.quality import Zero, check_moves, check_not_saturated, need_encoder
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.spread import spread
from ramprig.measure.trace import MotorTrace
from ramprig.quantity import digits, format_duty, format_speed

from . import pictures
from .ways import WAYS, WORDS, Level, Way, facing

REPEATS = 5
SEARCH_DUTY = 3000
"""The shaft must turn below this duty, or the ceiling where that is lower."""
SEARCH_PER_S = 1000
"""How fast the search for the first motion goes, in 1/10000 a second."""
RAMP_MS = 4000
"""A slow ramp through the dead band, each way."""
REST_MS = 400
LEVELS = 10
SETTLE_MS = 600
WINDOW_MS = 400
RUN_DOWN_MS = 1500
CHANGE_MS = 300
GENTLE_MS = 2000
"""Down to zero takes this long at least: a motor that is led down fast lifts a supply that cannot sink."""
LINEAR_WITHIN = 0.02
"""The linear range is where the speed is this near the line, as a share of the highest speed."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Curve:
    """The curve of one motor, with so many ramps through the dead band each way."""

    motor: str
    repeats: int = REPEATS

    @property
    def name(self) -> str:
        """As on the command line."""
        return "curve"

    @property
    def subject(self) -> str:
        """The motor."""
        return self.motor

    def bench(self, bench: Bench) -> Bench:
        """The bench's own limits: the curve is that of its whole range. Raises NotMeasurable without an encoder."""
        need_encoder(bench.motor(self.motor))
        if self.repeats < 2:
            raise NotMeasurable("a distribution over one repeat", wanted="at least 2, such as --repeats 5")
        return bench

    def moves(self, bench: Bench) -> str:
        """What moves."""
        ceiling = format_duty(bench.motor(self.motor).limits(1000)["ceiling_duty"])
        return f"{self.motor} turns both ways, slowly through the dead band and in steps up to {ceiling}"

    def carry_out(self, lab: Lab) -> Findings:
        """Ramps, levels, fits."""
        motor = lab.bench.motor(self.motor)
        rest = lab.watch("outputs off", 0.5).motor(motor)
        zero = Zero.of(rest)
        ways = tuple(self._way(lab, motor, sign, zero) for sign in WAYS)
        return _told(motor, ways)

    def _way(self, lab: Lab, motor: Motor, sign: int, zero: Zero) -> Way:
        top = self._search(lab, motor, sign)
        excursions = self._dead_band(lab, motor, sign, top)
        levels = _levels(lab, motor, sign, zero)
        line, linear = _line(levels)
        return Way(
            sign=sign,
            excursions=excursions,
            levels=levels,
            line=line,
            linear=linear,
            hysteresis_rpm=_hysteresis(levels),
        )

    def _search(self, lab: Lab, motor: Motor, sign: int) -> int:
        """The duty, in 1/10000, to which the slow ramps go: well above the one at which the shaft first turns."""
        most = min(SEARCH_DUTY, lab.rig.axes[motor.name].ceiling_duty)
        script = lab.script(f"search {WORDS[sign]}")
        script.hold(100).drive(motor.name, sign * most, in_ms=most * 1000 // SEARCH_PER_S).hold(100)
        script.drive(motor.name, 0, in_ms=GENTLE_MS).coast(motor.name).hold(RUN_DOWN_MS)
        found = facing(lab.run(script).motor(motor), sign)
        check_moves(motor, found, most)
        moving = np.flatnonzero(found.counts > 12)
        first = float(found.duty[moving[0]]) if len(moving) else 1.0
        return min(most, round(10_000 * (1.6 * first + 0.01)))

    def _dead_band(self, lab: Lab, motor: Motor, sign: int, top: int) -> tuple[Excursion, ...]:
        script = lab.script(f"dead band {WORDS[sign]}")
        for _ in range(self.repeats):
            script.hold(REST_MS).mark("up").drive(motor.name, sign * top, in_ms=RAMP_MS).mark("top")
            script.drive(motor.name, 0, in_ms=RAMP_MS).hold(REST_MS).mark("end")
        trace = lab.run(script)
        whole = facing(trace.motor(motor), sign)
        found = [
            excursion(whole.between(begin, top_s), whole.between(top_s, end))
            for begin, top_s, end in zip(trace.at("up"), trace.at("top"), trace.at("end"), strict=True)
        ]
        kept = tuple(one for one in found if one is not None)
        if len(kept) < 2:
            raise NotMeasurable(
                f"the shaft ran in {len(kept)} of {self.repeats} ramps up to {format_duty(top)}",
                wanted="a shaft that turns freely",
            )
        return kept


# ---- the levels ----------------------------------------------------------------------------------------------------


def _levels(lab: Lab, motor: Motor, sign: int, zero: Zero) -> tuple[Level, ...]:
    """The staircase up to the ceiling and down again."""
    ceiling = lab.rig.axes[motor.name].ceiling_duty
    duties = [sign * round(ceiling * step / LEVELS) for step in range(1, LEVELS + 1)]
    script = lab.script(f"levels {WORDS[sign]}").hold(100)
    for duty in (*duties, *duties[-2::-1]):
        script.drive(motor.name, duty, in_ms=CHANGE_MS).hold(SETTLE_MS).mark("window").hold(WINDOW_MS).mark("done")
    script.drive(motor.name, 0, in_ms=GENTLE_MS).coast(motor.name).hold(RUN_DOWN_MS)
    trace = lab.run(script)
    found = trace.motor(motor)
    check_not_saturated(found, noise_a=zero.noise_a)
    rising = [True] * LEVELS + [False] * (LEVELS - 1)
    windows = zip(trace.at("window"), trace.at("done"), rising, strict=True)
    return tuple(_level(motor, found.between(begin, end), zero, rises) for begin, end, rises in windows)


def _level(motor: Motor, window: MotorTrace, zero: Zero, rising: bool) -> Level:
    if len(window) < 10:
        raise NotMeasurable("samples are missing on a level of the staircase")
    length_s = float(window.time_s[-1] - window.time_s[0])
    counts = float(window.counts[-1] - window.counts[0])
    # Each end is known to a count: two rectangular distributions of that width (GUM 4.3.7).
    counts_u = math.sqrt(2.0 / 12.0)
    sense = motor.sense or 1
    noise_a = float(window.current_a.std(ddof=1)) / math.sqrt(len(window))
    return Level(
        duty=float(window.duty.mean()),
        speed_rpm=motor.rpm_of(sense * counts / length_s),
        speed_u_rpm=abs(motor.rpm_of(counts_u / length_s)),
        current_a=float(window.current_a.mean()) - zero.mean_a,
        current_u_a=math.hypot(noise_a, zero.mean_u_a),
        rising=rising,
    )


def _line(levels: Sequence[Level]) -> tuple[Fit, tuple[float, float]]:
    """The line through the levels at which the shaft runs, and the duties (shares, positive) between which it holds.

    Begun with the upper half, levels are taken in downwards as long as they lie on it.
    """
    running = sorted((one for one in levels if one.speed_rpm), key=lambda one: abs(one.duty))
    if len(running) < 4:
        raise NotMeasurable(f"the shaft ran at {len(running)} levels of the staircase", wanted="4 or more")
    highest = max(abs(one.speed_rpm) for one in running)
    kept = running[len(running) // 2 :]
    fit = _fit(kept)
    for one in reversed(running[: len(running) // 2]):
        predicted = float(fit.values[0] + fit.values[1] * abs(one.duty))
        if abs(predicted - abs(one.speed_rpm)) > LINEAR_WITHIN * highest:
            break
        kept = [one, *kept]
        fit = _fit(kept)
    return fit, (abs(kept[0].duty), abs(kept[-1].duty))


def _fit(levels: Sequence[Level]) -> Fit:
    duty = np.array([abs(one.duty) for one in levels])
    speed = np.array([abs(one.speed_rpm) for one in levels])
    return fit_linear(np.stack([np.ones_like(duty), duty], axis=1), speed, names=("at_zero", "slope"))


def _hysteresis(levels: Sequence[Level]) -> float:
    """The greatest difference of speed at one duty between the way up and the way down, in rpm."""
    up = {round(one.duty, 4): abs(one.speed_rpm) for one in levels if one.rising}
    down = {round(one.duty, 4): abs(one.speed_rpm) for one in levels if not one.rising}
    return max((abs(up[duty] - down[duty]) for duty in up.keys() & down.keys()), default=0.0)


# ---- what is told --------------------------------------------------------------------------------------------------


def _told(motor: Motor, ways: tuple[Way, ...]) -> Findings:
    values: dict[str, Measured] = {}
    lines: list[str] = []
    facts: dict[str, object] = {}
    for way in ways:
        word = WORDS[way.sign]
        for what in ("breakaway", "dropout"):
            found = [getattr(one, what) for one in way.excursions]
            reading_u = [getattr(one, f"{what}_u") for one in way.excursions]
            values[f"{what}_{word}"] = spread(found, reading_u, "%", factor=100.0)
            low, high = 100 * min(found), 100 * max(found)
            lines.append(
                f"{what} {word}: {digits(low, 3)} % to {digits(high, 3)} % over {len(found)} repeats, standard "
                f"deviation {digits(100 * float(np.std(found, ddof=1)), 2)} %"
            )
        values[f"slope_{word}"] = _per_percent(way.line)
        values[f"no_load_current_{word}"[:24]] = _no_load(way)
        lines.append(
            f"{word}: linear from {digits(100 * way.linear[0], 3)} % to {digits(100 * way.linear[1], 3)} %, hysteresis "
            f"{digits(way.hysteresis_rpm, 2)} rpm at most"
        )
        facts[word] = {
            "levels": way.levels,
            "excursions": way.excursions,
            "linear_from": way.linear[0],
            "linear_to": way.linear[1],
            "hysteresis_rpm": way.hysteresis_rpm,
            "turns_at_breakaway": [motor.turns_of(motor.sense * one.angle) % 1.0 for one in way.excursions],
        }
    return Findings(
        procedure="curve",
        subject=motor.name,
        sentence=_sentence(motor, ways),
        values=values,
        facts=facts,
        lines=tuple(lines),
        pictures=(
            Picture(name="curve", draw=lambda figure: pictures.curve(figure, ways, title=motor.name), height_in=8.5),
        ),
    )


def _per_percent(fit: Fit) -> Measured:
    """The slope of the line in rpm for one percent of duty."""
    slope = fit.measured("slope", "rpm/%")
    return Measured(slope.value / 100, slope.unit, slope.standard_uncertainty / 100, slope.dof)


def _no_load(way: Way) -> Measured:
    """The current at the highest level."""
    top = max(way.levels, key=lambda one: abs(one.duty))
    return Measured(abs(top.current_a), "A", top.current_u_a)


def _sentence(motor: Motor, ways: tuple[Way, ...]) -> str:
    parts = []
    for way in ways:
        breakaway = float(np.mean([one.breakaway for one in way.excursions]))
        dropout = float(np.mean([one.dropout for one in way.excursions]))
        top = max(way.levels, key=lambda one: abs(one.duty))
        parts.append(
            f"{WORDS[way.sign]} it starts at {digits(100 * breakaway, 3)} % and stops at {digits(100 * dropout, 3)} %, "
            f"and reaches {format_speed(round(abs(top.speed_rpm), 2))} at {digits(100 * abs(top.duty), 3)} %"
        )
    return f"{motor.name}: {'; '.join(parts)}."
