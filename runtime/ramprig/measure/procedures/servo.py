"""A servo: positioning after ISO 230-2 where a second encoder measures its horn, else timing, and what was commanded.

A hobby servo tells nothing of where it is. Without a second encoder every angle here is the commanded one, and is
called so. The creep towards the end stops goes in small steps from home, looks at the supply or at the second encoder
after each, and goes back at once.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.bench import Bench, Motor, Servo
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.lab import Lab
from ramprig.measure.numbers import iso230
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.quality import need_encoder
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.spread import spread
from ramprig.measure.trace import Floats, Trace
from ramprig.quantity import digits, format_duration
from ramprig_link.words import Cap

from . import pictures

APPROACHES = 5
OVERSHOOT_SHARE = 0.06
"""A target is approached from this share of the travel beyond it, so that the way it comes from is known."""
SETTLE_MS = 400
WINDOW_MS = 100
MOVE_MS = 60
CREEP_DEG = 4.0
FINE_DEG = 1.0
LOOK_MS = 300
BEFORE_MS = 300
SAG_SIGMAS = 6.0
SAG_V = 0.01
"""A supply that stays lower by this at least, and by SAG_SIGMAS of its noise, is loaded by a servo at its stop."""
BACK_OFF_SHARE = 0.05
"""Limits should keep this share of the travel away from a stop."""
FOLLOW_DEG = 2.0
"""A horn that lags behind what was commanded by more than this, beyond its usual error, stands at a stop."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ServoCheck:
    """One servo; `second` is the motor entry whose encoder measures the horn, `creep` looks for the end stops."""

    servo: str
    second: str | None = None
    creep: bool = False
    repeats: int = APPROACHES

    @property
    def name(self) -> str:
        """As on the command line."""
        return "servo"

    @property
    def subject(self) -> str:
        """The servo."""
        return self.servo

    def bench(self, bench: Bench) -> Bench:
        """The bench's own limits of the servo."""
        bench.servo(self.servo)
        if self.second is not None:
            need_encoder(bench.motor(self.second))
        if self.repeats < 2:
            raise NotMeasurable("a repeatability from one approach", wanted="at least 2, such as --repeats 5")
        return bench

    def moves(self, bench: Bench) -> str:
        """What moves."""
        servo = bench.servo(self.servo)
        how = "creeps" if self.creep else "moves"
        return f"{self.servo} {how} between {digits(servo.low_deg)} deg and {digits(servo.high_deg)} deg"

    def carry_out(self, lab: Lab) -> Findings:
        """Creep, or targets with or without an encoder on the horn."""
        servo = lab.bench.servo(self.servo)
        second = None if self.second is None else lab.bench.motor(self.second)
        if self.creep:
            return _Creep(lab, servo, second).findings()
        return _targets(lab, servo, second, self.repeats)


# ---- targets -------------------------------------------------------------------------------------------------------


def targets_deg(servo: Servo) -> list[float]:
    """Evenly spread targets, as many as ISO 230-2 asks for, with room for the approach at both ends."""
    travel = servo.high_deg - servo.low_deg
    room = OVERSHOOT_SHARE * travel
    count = iso230.least_targets(travel)
    return [float(one) for one in np.linspace(servo.low_deg + room, servo.high_deg - room, count)]


def _targets(lab: Lab, servo: Servo, second: Motor | None, repeats: int) -> Findings:
    """Each target from both sides, `repeats` times."""
    targets = targets_deg(servo)
    room = OVERSHOOT_SHARE * (servo.high_deg - servo.low_deg)
    script, here = lab.script("targets"), servo.home_deg
    script.move(servo.name, here).hold(SETTLE_MS).mark("home").hold(WINDOW_MS).mark("done")
    for _ in range(repeats):
        for way, order in ((1, targets), (-1, targets[::-1])):
            script.move(servo.name, order[0] - way * room, from_deg=here).hold(SETTLE_MS)
            here = order[0] - way * room
            for target in order:
                script.mark("go").move(servo.name, target, in_ms=MOVE_MS, from_deg=here).mark("there").hold(SETTLE_MS)
                script.mark("up" if way > 0 else "down").hold(WINDOW_MS).mark("done")
                here = target
    script.move(servo.name, servo.home_deg, from_deg=here)
    trace = lab.run(script)
    if second is None:
        return _commanded(servo, trace, len(targets), repeats)
    return _positioning(servo, second, trace, np.array(targets), repeats)


def _commanded(servo: Servo, trace: Trace, targets: int, repeats: int) -> Findings:
    """Without an encoder on the horn: what was sent, and when the pulse came there."""
    time_s, pulse = trace.time_s, trace.columns["pulse_us", servo.channel].astype(float)
    planned, took = [], []
    for begin, there in zip(trace.at("go"), trace.at("there"), strict=True):
        window = (time_s > begin) & (time_s <= there + SETTLE_MS / 1000)
        final = pulse[window][-1]
        arrived = time_s[window][int(np.argmax(np.abs(pulse[window] - final) < 1.0))]
        planned.append(there - begin)
        took.append(float(arrived) - begin)
    late = [took_s - planned_s for took_s, planned_s in zip(took, planned, strict=True)]
    step_s = float(np.median(np.diff(time_s)))
    low, high = (servo.degrees_of(float(end)) for end in (pulse[pulse > 0].min(), pulse[pulse > 0].max()))
    ends = sorted((low, high))
    return Findings(
        procedure="servo",
        subject=servo.name,
        sentence=f"{servo.name}: commanded from {digits(ends[0], 4)} deg to {digits(ends[1], 4)} deg, in time; where "
        "the horn was is not measured.",
        values={"pulse_late": spread(late, [step_s / math.sqrt(12.0)], "s")},
        facts={"angles": "commanded", "moves": len(late), "worst_late_s": max(late), "targets": targets},
        lines=(
            f"{targets} targets x {repeats} approaches from each side; the pulse was there at most "
            f"{format_duration(max(0.0, max(late)))} after its time",
            "all angles are commanded: a second encoder on the horn (--second NAME) measures accuracy and reversal",
        ),
    )


def _positioning(servo: Servo, second: Motor, trace: Trace, targets: Floats, repeats: int) -> Findings:
    """Deviations of the horn from its targets, after ISO 230-2."""
    horn = horn_deg(servo, second, trace)
    time_s, done = trace.time_s, trace.at("done")
    found: dict[str, list[float]] = {"up": [], "down": []}
    for word, begins in ((word, trace.at(word)) for word in found):
        for begin in begins:
            end = min(one for one in done if one > begin)
            found[word].append(float(horn[(time_s > begin) & (time_s <= end)].mean()))
    up = np.array(found["up"]).reshape(repeats, len(targets)).T - targets[:, None]
    down = np.array(found["down"]).reshape(repeats, len(targets)).T[::-1] - targets[:, None]
    figures = iso230.positioning(up, down)
    travel = float(np.ptp(targets))
    resolution_u = 360.0 / float(second.counts_per_turn) / math.sqrt(12.0)
    reversal_u = math.hypot(float(np.hypot(figures.sd_up, figures.sd_down).mean()) / math.sqrt(up.size), resolution_u)
    settled = settling_s(horn, trace)
    norm = "as ISO 230-2 asks" if iso230.conforms(figures, travel_deg=travel) else "fewer than ISO 230-2 asks for"
    return Findings(
        procedure="servo",
        subject=servo.name,
        sentence=f"{servo.name}: accuracy {digits(figures.accuracy, 3)} deg, repeatability "
        f"{digits(figures.repeatability, 3)} deg, reversal error {digits(figures.reversal, 3)} deg.",
        values={
            "mean_reversal": Measured(figures.mean_reversal, "deg", reversal_u, float(up.size - 1)),
            "settling": spread(settled, [float(np.median(np.diff(time_s))) / math.sqrt(12.0)], "s"),
        },
        facts={"angles": "measured", "targets_deg": targets, "positioning": figures, "settling_s": settled},
        lines=(
            f"{len(targets)} targets x {repeats} approaches from each side, {norm}; bidirectional figures with 2 s",
            f"systematic {digits(figures.systematic, 3)} deg, from below {digits(figures.accuracy_up, 3)} deg, from "
            f"above {digits(figures.accuracy_down, 3)} deg; the encoder resolves "
            f"{digits(360.0 / float(second.counts_per_turn), 2)} deg",
            "angles are counted from where the horn stands at home, which is taken to be right",
        ),
        pictures=(
            Picture(name="servo", draw=lambda figure: pictures.positions(figure, targets, up, down, title=servo.name)),
        ),
    )


def horn_deg(servo: Servo, second: Motor, trace: Trace) -> Floats:
    """The horn's measured angle, counted from home, positive as the commanded one.

    Raises NotMeasurable where the encoder does not follow the servo.
    """
    turned = 360.0 * trace.motor(second).counts / float(second.counts_per_turn)
    pulse = trace.columns["pulse_us", servo.channel].astype(float)
    commanded = (pulse - float(servo.neutral_us)) / float(servo.us_per_deg)
    home, done = trace.at("home")[0], trace.at("done")[0]
    at_home = (trace.time_s > home) & (trace.time_s <= done)
    driven = pulse > 0
    if float(np.ptp(turned[driven])) < 0.3 * float(np.ptp(commanded[driven])):
        raise NotMeasurable(
            f"the encoder of {second.name} turned by {digits(float(np.ptp(turned[driven])), 3)} deg where {servo.name} "
            f"was commanded over {digits(float(np.ptp(commanded[driven])), 3)} deg",
            wanted="it must sit on the horn, and its lines in the bench file be right",
        )
    sign = float(np.sign(np.corrcoef(turned[driven], commanded[driven])[0, 1]))
    found: Floats = sign * (turned - turned[at_home].mean()) + commanded[at_home].mean()
    return found


def settling_s(horn: Floats, trace: Trace) -> list[float]:
    """From the end of each commanded move until the horn stays within a degree of where it ends up."""
    found = []
    for there in trace.at("there"):
        window = (trace.time_s > there) & (trace.time_s <= there + SETTLE_MS / 1000)
        away = np.abs(horn[window] - horn[window][-1]) > 1.0
        last = np.flatnonzero(away)
        found.append(0.0 if not len(last) else float(trace.time_s[window][last[-1]]) - there)
    return found


# ---- creep ---------------------------------------------------------------------------------------------------------


class _Creep:
    """Small steps outwards, each from home and back, until something tells of a stop or the limit is reached."""

    def __init__(self, lab: Lab, servo: Servo, second: Motor | None) -> None:
        self.lab = lab
        self.servo = servo
        self.second = second
        self.seen: list[tuple[float, float]] = []
        if second is None and Cap.SUPPLY not in lab.session.identity.caps:
            raise NotMeasurable(
                "nothing would tell of a stop: this board measures no supply, and no encoder sits on the horn",
                wanted="say --second NAME",
            )

    def findings(self) -> Findings:
        ends = {way: self._creep(way) for way in (-1, 1)}
        servo = self.servo
        texts = [
            f"{'low' if way < 0 else 'high'} end: "
            + (
                f"no stop up to the limit at {digits(self._limit(way), 4)} deg commanded"
                if stop is None
                else f"a stop near {digits(stop, 4)} deg commanded"
            )
            for way, stop in ends.items()
        ]
        found = {way: stop for way, stop in ends.items() if stop is not None}
        advice = []
        if found:
            travel = servo.high_deg - servo.low_deg
            safe = {way: stop - way * BACK_OFF_SHARE * travel for way, stop in found.items()}
            low = safe.get(-1, servo.low_deg)
            high = safe.get(1, servo.high_deg)
            advice.append(
                f"write 'angle: {digits(low, 3)} deg to {digits(high, 3)} deg' in its limits: 5 % off the stop"
            )
        return Findings(
            procedure="servo",
            subject=servo.name,
            sentence=f"{servo.name}: {'; '.join(texts)}.",
            good=not found,
            values={
                f"stop_{'low' if way < 0 else 'high'}": Measured(stop, "deg", FINE_DEG / math.sqrt(12.0))
                for way, stop in found.items()
            },
            facts={"angles": "commanded", "stops_deg": {str(way): stop for way, stop in ends.items()}},
            lines=tuple(advice),
        )

    def _limit(self, way: int) -> float:
        return self.servo.low_deg if way < 0 else self.servo.high_deg

    def _creep(self, way: int) -> float | None:
        """The commanded angle at which the stop tells of itself first, to FINE_DEG; None up to the limit."""
        limit = self._limit(way)
        home = self.servo.home_deg
        steps = max(1, math.ceil(abs(limit - home) / CREEP_DEG))
        angles = [home + (limit - home) * step / steps for step in range(1, steps + 1)]
        before = home
        for angle in angles:
            if self._stopped(angle):
                return self._finer(before, angle)
            before = angle
        return None

    def _finer(self, free: float, stopped: float) -> float:
        """Between an angle that was free and one that was not."""
        count = max(1, round(abs(stopped - free) / FINE_DEG))
        for angle in np.linspace(free, stopped, count + 1)[1:-1]:
            if self._stopped(float(angle)):
                return float(angle) - (stopped - free) / count / 2
        return stopped - (stopped - free) / count / 2

    def _stopped(self, angle: float) -> bool:
        """Go there from home, look, and go back."""
        servo, home = self.servo, self.servo.home_deg
        self.lab.tell(f"{servo.name}: creeps to {digits(angle, 4)} deg commanded")
        script = self.lab.script(f"creep to {round(angle)}")
        script.move(servo.name, home).hold(BEFORE_MS).mark("home").hold(LOOK_MS).mark("done")
        script.move(servo.name, angle, from_deg=home).hold(BEFORE_MS).mark("out").hold(LOOK_MS).mark("done")
        script.move(servo.name, home, from_deg=angle)
        trace = self.lab.run(script)
        windows = []
        for word, end in (("home", trace.at("done")[0]), ("out", trace.at("done")[1])):
            windows.append((trace.time_s > trace.at(word)[0]) & (trace.time_s <= end))
        if self.second is not None:
            return self._behind(trace, windows, angle)
        return _sags(trace.columns["supply_mv", 0] / 1000.0, windows)

    def _behind(self, trace: Trace, windows: Sequence[NDArray[np.bool_]], angle: float) -> bool:
        """Whether the horn did not come as far as it was sent."""
        assert self.second is not None  # asked for with an encoder only
        turned = 360.0 * trace.motor(self.second).counts / float(self.second.counts_per_turn)
        went = abs(float(turned[windows[1]].mean() - turned[windows[0]].mean()))
        return abs(angle - self.servo.home_deg) - went > FOLLOW_DEG


def _sags(volts: Floats, windows: Sequence[NDArray[np.bool_]]) -> bool:
    """Whether the supply stays lower out there than at home: the servo goes on pressing."""
    home, out = volts[windows[0]], volts[windows[1]]
    noise = float(home.std(ddof=1)) / math.sqrt(len(home))
    return float(home.mean() - out.mean()) > max(SAG_V, SAG_SIGMAS * noise)
