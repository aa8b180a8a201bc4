"""The bring-up check: is this motor wired as the bench file says, and if not, what is wrong.

Outputs off first: current zero and noise, supply, counts at rest; then, if somebody is there, turns by hand; then
small pulses either way, each stronger than the last, until one has shown what there is to see. The check runs under a
ceiling, a current and a speed of its own.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from ramprig.bench import Bench, Motor
from ramprig.measure.diagnosis import (
    COUNTS_ENOUGH,
    Bring,
    Case,
    Push,
    Rest,
    Verdict,
    at_rest,
    decided,
    judge,
    offset_bound_a,
)
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.lab import Lab
from ramprig.measure.numbers.fit import fit_linear
from ramprig.measure.numbers.uncertainty import Measured, coverage_factor
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.tightening import tightened
from ramprig.measure.trace import Floats, MotorTrace, Trace
from ramprig.quantity import format_current, format_duty, format_speed
from ramprig.session.readings import Counters
from ramprig_link.words import Cap

from . import pictures

CEILING_DUTY = 2500
"""The check never asks for more than a quarter of full drive."""
SPEED_SHARE = 0.4
"""The check trips above this share of the rated speed."""
LADDER_DUTY = (300, 500, 800, 1200, 1800, 2500)
"""The pulses in 1/10000, weakest first."""
RAMP_MS = 80
HOLD_MS = 200
RUN_DOWN_MS = 300
REST_S = 1.0
HAND_TURNS = 2
LEAST_DUTY = 0.015
"""Below this duty a current per duty is noise."""
SMOOTH_S = 0.012
"""Currents are averaged over so long."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Wiring:
    """The bring-up check of one motor; `by_hand` asks a bystander to turn the shaft."""

    motor: str
    by_hand: bool = False

    @property
    def name(self) -> str:
        """As on the command line."""
        return "wiring"

    @property
    def subject(self) -> str:
        """The motor."""
        return self.motor

    def bench(self, bench: Bench) -> Bench:
        """A quarter of full drive, the rated current and a part of the rated speed at most."""
        motor = bench.motor(self.motor)
        speed_rpm = None if motor.rated_rpm is None else SPEED_SHARE * motor.rated_rpm
        return tightened(
            bench, self.motor, ceiling_duty=CEILING_DUTY, trip_a=motor.rated_ma / 1000, speed_rpm=speed_rpm
        )

    def moves(self, bench: Bench) -> str:
        """What moves, and how far."""
        motor = bench.motor(self.motor)
        speed = "" if motor.rated_rpm is None else f" and {format_speed(SPEED_SHARE * motor.rated_rpm)}"
        ceiling = min(CEILING_DUTY, motor.limits(1000)["ceiling_duty"])
        return (
            f"{self.motor} turns in pulses of {(RAMP_MS + HOLD_MS) / 1000:g} s either way, up to "
            f"{format_duty(ceiling)}, {format_current(motor.rated_ma / 1000)}{speed} at most"
        )

    def carry_out(self, lab: Lab) -> Findings:
        """Rest, hand, pulses, verdict."""
        return _Check(lab, lab.bench.motor(self.motor), by_hand=self.by_hand).findings()


class _Check:
    """One check under way; `bring` grows with what is seen."""

    def __init__(self, lab: Lab, motor: Motor, *, by_hand: bool) -> None:
        self.lab = lab
        self.motor = motor
        self.by_hand = by_hand
        self.caps = lab.session.identity.caps
        self.pulses: list[tuple[Push, MotorTrace]] = []
        self.at_rest: MotorTrace | None = None
        if Cap.CURRENT not in self.caps:
            raise NotMeasurable("this board does not measure the motor current", wanted="the check needs it")

    def findings(self) -> Findings:
        rest_trace = self.lab.watch("outputs off", REST_S)
        if not len(rest_trace.ticks):
            raise NotMeasurable("no samples came with the outputs off")
        bring = self._rest(rest_trace)
        bring = self._hand(bring)
        before = at_rest(bring)
        if before is None or (before.case is not Case.NO_SUPPLY and self._can_be_driven(bring)):
            bring = self._push_both_ways(bring)
        verdict = judge(bring)
        return self._told(bring, verdict)

    # ---- outputs off ---------------------------------------------------------------------------------------------

    def _rest(self, trace: Trace) -> Bring:
        self.at_rest = found = trace.motor(self.motor)
        changes = np.diff(found.counts)
        rest = Rest(
            offset_a=float(found.current_a.mean()),
            noise_a=float(found.current_a.std(ddof=1)) if len(found) > 1 else 0.0,
            supply_v=float(found.supply_v.mean()) if Cap.SUPPLY in self.caps else None,
            count_span=int(np.ptp(found.counts)),
            count_changes=int(np.count_nonzero(changes)),
        )
        motor = self.motor
        return Bring(
            rated_a=motor.rated_ma / 1000,
            supply_nominal_v=self.lab.bench.supply.voltage_v,
            gear=float(motor.gear_ratio),
            has_encoder=motor.encoder is not None,
            zero_a=motor.limits(self.lab.rig.tick_us)["offset_ma"] / 1000,
            rest=rest,
        )

    def _hand(self, bring: Bring) -> Bring:
        """Turns by hand, if somebody is there to make them."""
        if not self.by_hand or self.motor.encoder is None:
            return bring
        done: list[bool] = []
        trace = self.lab.watch(
            "by hand",
            0.3,
            during=lambda: done.append(self.lab.bystander.turn(self.motor, HAND_TURNS, self.lab.pump)),
        )
        if not done[0] or not len(trace.ticks):
            return bring
        counts = trace.motor(self.motor).counts
        return replace(
            bring,
            hand_turns=HAND_TURNS,
            hand_counts=float(counts[-1] - counts[0]),
            hand_span=int(np.ptp(counts)),
            hand_elsewhere=self._elsewhere(trace),
            expected_counts=float(HAND_TURNS * self.motor.counts_per_turn),
        )

    def _can_be_driven(self, bring: Bring) -> bool:
        """Whether the reading leaves room below the trip: beyond it, it would trip at once, whatever the motor does."""
        trip_a = self.motor.limits(self.lab.rig.tick_us)["trip_ma"] / 1000
        return abs(bring.rest.offset_a) + 4 * bring.rest.noise_a < trip_a

    # ---- pulses --------------------------------------------------------------------------------------------------

    def _push_both_ways(self, bring: Bring) -> Bring:
        forward = self._ladder(bring, 1)
        bring = replace(bring, forward=forward)
        if forward[-1].restarted:
            return bring
        bring = replace(bring, backward=self._ladder(bring, -1))
        if bring.backward[-1].restarted:
            return bring
        if all(abs(way[-1].moved) >= COUNTS_ENOUGH for way in (bring.forward, bring.backward)):
            if bring.forward[-1].moved < 0:
                forwards = self.lab.bystander.turned_forwards(
                    self.motor, round(forward[-1].duty * 10_000), self.lab.pump
                )
                bring = replace(bring, forwards=forwards)
            else:
                bring = self._load(bring)
        return replace(bring, sag_low_v=self._sag_low_v(bring))

    def _ladder(self, bring: Bring, sign: int) -> tuple[Push, ...]:
        """Pulses one way, until one has shown what there is to see."""
        ceiling = self.lab.rig.axes[self.motor.name].ceiling_duty
        pushes: list[Push] = []
        for duty in sorted({min(duty, ceiling) for duty in LADDER_DUTY}):
            push = self._push(bring, sign * duty)
            pushes.append(push)
            if decided(push, bring):
                break
        return tuple(pushes)

    def _load(self, bring: Bring) -> Bring:
        """One strong pulse, to load the supply."""
        duty = min(CEILING_DUTY, self.lab.rig.axes[self.motor.name].ceiling_duty)
        push = self._push(bring, duty)
        good = push.restarted or abs(push.moved) >= COUNTS_ENOUGH
        return replace(bring, forward=(*bring.forward, push)) if good else bring

    def _push(self, bring: Bring, duty: int) -> Push:
        name = self.motor.name
        way = "forwards" if duty > 0 else "backwards"
        script = self.lab.script(f"pulse {abs(duty) // 100} {way}")
        script.brake(name).hold(60).drive(name, duty, in_ms=RAMP_MS).hold(HOLD_MS)
        script.brake(name).hold(RUN_DOWN_MS).coast(name)
        trace = self.lab.attempt(script)
        if not len(trace.ticks):
            raise NotMeasurable("no samples came during a pulse")
        push = push_of(
            trace.motor(self.motor),
            duty / 10_000,
            offset_a=bring.rest.offset_a,
            elsewhere=self._elsewhere(trace),
            trip="" if trace.trip is None else trace.trip.trip,
            restarted=trace.restarted is not None,
        )
        self.pulses.append((push, trace.motor(self.motor)))
        return push

    def _elsewhere(self, trace: Trace) -> Mapping[str, int]:
        """How far the counts of the other motors went, by name."""
        others = [motor for motor in self.lab.bench.motors if motor.name != self.motor.name and motor.encoder]
        moved = {motor.name: trace.motor(motor).counts for motor in others}
        return {name: int(counts[-1] - counts[0]) for name, counts in moved.items()}

    # ---- the supply ----------------------------------------------------------------------------------------------

    def _sag_low_v(self, bring: Bring) -> float | None:
        """The least that the supply sags at rated current, with 97.5 % confidence; None where it is not known.

        The bus carries duty times motor current, so the slope of voltage over that is the supply's resistance. Only
        the end of each hold counts: what an earlier pulse gave back into the bus has been used up by then.
        """
        if Cap.SUPPLY not in self.caps or not self.pulses or self.at_rest is None:
            return None
        bus_a, volts = [np.zeros(len(self.at_rest))], [self.at_rest.supply_v]
        for _, trace in self.pulses:
            held = np.flatnonzero(np.abs(trace.duty) >= np.abs(trace.duty).max() - 1e-9)
            late = held[len(held) // 2 :]
            drawn = trace.duty[late] * (trace.current_a[late] - bring.rest.offset_a)
            bus_a.append(np.full(len(late), drawn.mean()))
            volts.append(trace.supply_v[late])
        x, y = np.concatenate(bus_a), np.concatenate(volts)
        if float(np.ptp(x)) <= 0.0:
            return None
        fit = fit_linear(np.stack([np.ones_like(x), -x], axis=1), y, names=("open", "resistance"))
        resistance = fit.measured("resistance", "ohm")
        return (resistance.value - coverage_factor(resistance.dof) * resistance.standard_uncertainty) * bring.rated_a

    # ---- what is told --------------------------------------------------------------------------------------------

    def _told(self, bring: Bring, verdict: Verdict) -> Findings:
        rest = bring.rest
        count = max(2.0, REST_S * 1000 / self.lab.period_ms)
        values = {
            "current_zero": Measured(rest.offset_a + bring.zero_a, "A", rest.noise_a / math.sqrt(count), count - 1)
        }
        lines = list(verdict.lines)
        if abs(rest.offset_a) > 0.2 * offset_bound_a(bring.rated_a) and verdict.case is Case.GOOD:
            lines.append(f"note: the current zero is off by {format_current(rest.offset_a)}")
        lines += self._about_link()
        pushes = (*bring.forward, *bring.backward)
        return Findings(
            procedure="wiring",
            subject=self.motor.name,
            sentence=f"{self.motor.name}: {verdict.case.heading}.",
            good=verdict.case is Case.GOOD,
            values=values,
            facts={
                "case": verdict.case.name.lower(),
                "because": verdict.because,
                "noise_a": rest.noise_a,
                "supply_v": rest.supply_v,
                "pulses": pushes,
                "hand_counts": bring.hand_counts if bring.hand_turns else None,
            },
            lines=tuple(lines),
            pictures=(
                Picture(
                    name="pulses",
                    draw=lambda figure: pictures.pulses(
                        figure, [trace for _, trace in self.pulses], title=f"{self.motor.name}: {verdict.case.heading}"
                    ),
                    height_in=7.0,
                ),
            )
            if self.pulses
            else (),
        )

    def _about_link(self) -> list[str]:
        """A line that spoils bytes is not the wiring of the motor, and is told all the same."""
        session = self.lab.session
        here = session.health.dropped_lines
        there = Counters.read(session.ask("counters")).garbled if session.valid else 0
        if here + there == 0:
            return []
        return [f"note: {here + there} lines were spoilt on the way; `ramprig measure link` tells how many and when"]


def smooth(values: Floats, width: int) -> Floats:
    """Means over `width` neighbours; shorter ones at both ends."""
    if width <= 1 or len(values) < width:
        return values
    kernel = np.ones(width)
    return np.convolve(values, kernel, "same") / np.convolve(np.ones(len(values)), kernel, "same")


def push_of(
    trace: MotorTrace,
    duty: float,
    *,
    offset_a: float,
    elsewhere: Mapping[str, int],
    trip: str = "",
    restarted: bool = False,
) -> Push:
    """What a pulse has shown: the samples of its whole stage, the duty asked for, and the zero of the current."""
    sign = 1.0 if duty > 0 else -1.0
    step_s = float(np.median(np.diff(trace.time_s))) if len(trace) > 1 else 1.0
    width = max(1, round(SMOOTH_S / step_s))
    current = smooth(sign * (trace.current_a - offset_a), width)
    driven = sign * trace.duty
    top = float(driven.max(initial=0.0))
    peak_at = int(np.argmax(driven)) if len(driven) else 0
    rising = np.arange(len(driven)) <= peak_at + width
    useful = driven >= max(LEAST_DUTY, 0.3 * top)
    at_top = np.flatnonzero(driven >= top - 1e-9) if top > 0.0 else np.empty(0, np.int64)
    late = at_top[-max(1, len(at_top) // 3) :]
    after = np.arange(len(driven)) > (int(at_top[-1]) if len(at_top) else len(driven))
    standing = current[rising & useful] / driven[rising & useful]
    return Push(
        duty=duty,
        moved=sign * float(trace.counts[-1] - trace.counts[0]),
        span=int(np.ptp(trace.counts)),
        toggles=int(np.count_nonzero(np.diff(trace.counts))),
        peak_a=float(current.max(initial=0.0)),
        holding_ap1=float(current[late].mean() / top) if len(late) and top > 0.0 else 0.0,
        standing_ap1=float(standing.max(initial=0.0)),
        least_a=float(current[after].min(initial=0.0)),
        elsewhere=dict(elsewhere),
        trip=trip,
        restarted=restarted,
    )
