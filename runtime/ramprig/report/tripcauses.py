"""The likely causes of a trip of a motor or its supply, each with what speaks for it, from what was recorded around it.

A rule of thumb decides each weight, 0 to 1, from physics that the bench file's model gives where there is one: a held
shaft draws duty x supply / resistance, a turning one far less; a start is recognised by the time since the duty left
zero. The thresholds are choices of ours, tried on seeded faults of the mock; none is a standard.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

from ramprig.bench import Motor
from ramprig.quantity import format_current, format_duration, format_duty, format_speed, format_voltage

from .around import STILL_DUTY, Around, Floats, around
from .facts import Facts

START_S = 0.6
"""A trip so soon after the duty left zero is one of a start."""
HELD_SHARE = 0.6
"""From this share of the locked-shaft current on the shaft is held, or nearly."""
TURNING_SHARE = 0.45
"""Below this share of the locked-shaft current the shaft turns."""
LAST_S = 0.006
"""A shaft that is jammed stands within a few ms; its current rises about as fast."""
NO_ENCODER = "it has no encoder: whether it turned is not known"
NO_CURRENT_A = 0.03
"""Less than this is no current: sensors of small drives are so good."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Cause:
    """A possible cause: a word for programs, a sentence, what speaks for it, the next step, how likely (0 to 1)."""

    key: str
    sentence: str
    evidence: tuple[str, ...]
    next_step: str
    weight: float = field(compare=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Trip:
    """A trip as the device told it, with what was recorded around it. `value` and `bound` are in protocol units."""

    word: str
    motor: str
    value: int
    bound: int
    look: Around
    facts: Facts

    @property
    def bench_motor(self) -> Motor | None:
        """The motor as the bench file has it."""
        bench = self.facts.bench
        return None if bench is None else next((m for m in bench.motors if m.name == self.motor), None)

    @property
    def start_text(self) -> str:
        """When it was, against the start."""
        started_s = self.look.started_s
        if started_s is None:
            return "the motor was not driven at that moment"
        return f"it came {format_duration(round(started_s, 3))} after the duty left zero, at {_duty(self.look)}"

    @property
    def current_text(self) -> str:
        """The current against what a held shaft would draw."""
        look = self.look
        now_a = trip_a if (trip_a := self.value / 1000) and self.word == "overcurrent" else look.current_now
        text = f"current {format_current(round(now_a, 3))}"
        locked = look.locked_current()
        if not math.isnan(locked) and locked > 0:
            text += f", with the shaft held it would be about {format_current(round(locked, 2))}"
        return text


def _duty(look: Around) -> str:
    return format_duty(round(look.duty_now * 10_000))


def _speed(look: Around, counts_per_s: float) -> str:
    if math.isnan(look.counts_per_rev) or look.counts_per_rev <= 0:
        return f"{counts_per_s:.0f} counts/s"
    return format_speed(round(counts_per_s * 60 / look.counts_per_rev, 2))


def causes_of(trip: Trip) -> list[Cause]:
    """The causes worth naming, the likeliest first."""
    rule = RULES.get(trip.word)
    found = [] if rule is None else [cause for cause in rule(trip) if cause.weight > 0]
    return sorted(found, key=lambda cause: -cause.weight)


# ---- what several trips share --------------------------------------------------------------------------------------


def _sensor(trip: Trip, weight: float) -> Cause:
    rest = trip.look.rest_current
    return Cause(
        key="current_sensor",
        sentence=f"the current sensor of {trip.motor} reads wrong: it shows current where none can flow",
        evidence=(f"without duty the current reads {format_current(round(rest, 3))}", trip.start_text),
        next_step="Check the sensor's zero with the outputs off (`current zero` in the bench file) and its wiring.",
        weight=weight,
    )


def _sensor_weight(trip: Trip, limit_a: float) -> float:
    rest = trip.look.rest_current
    if math.isnan(rest):
        return 0.0
    return min(0.97, abs(rest) / max(0.1, 0.3 * limit_a)) if abs(rest) > max(0.08, 0.06 * limit_a) else 0.0


def _held(trip: Trip, weight: float) -> Cause:
    """Jammed in motion, or held from the start."""
    look = trip.look
    if look.ran_before:
        before = look.fastest(-1.5, -0.05)
        return Cause(
            key="jam",
            sentence=f"{trip.motor} jammed while turning: something stopped the shaft",
            evidence=(
                f"the shaft turned at up to {_speed(look, before)} before, then at "
                f"{_speed(look, look.speed(-LAST_S if look.has_trail else -0.04))} "
                f"with the duty still at {_duty(look)}",
                trip.current_text,
            ),
            next_step="With the power cut, turn the shaft by hand: look for an end stop or something caught in it.",
            weight=weight,
        )
    if not look.has_encoder:
        return Cause(
            key="held",
            sentence=f"{trip.motor} was held, or loaded as much",
            evidence=(trip.current_text, trip.start_text, NO_ENCODER),
            next_step="With the power cut, turn the shaft by hand: look for an end stop or something caught in it.",
            weight=weight,
        )
    return Cause(
        key="held",
        sentence=f"{trip.motor} was held from the start: seized, blocked, or against its end stop",
        evidence=(
            f"the counts moved by {look.moved(-(look.started_s or 1.0)):.0f} since the start",
            trip.current_text,
            trip.start_text,
        ),
        next_step="With the power cut, turn the shaft by hand; if it is free, raise the duty from zero in small steps.",
        weight=weight,
    )


# ---- overcurrent and overload --------------------------------------------------------------------------------------


def _overcurrent(trip: Trip) -> Iterator[Cause]:
    look = trip.look
    bound_a = trip.bound / 1000
    yield _sensor(trip, _sensor_weight(trip, bound_a))
    locked = look.locked_current()
    current = abs(trip.value) / 1000
    started_s = look.started_s
    speed, before = look.speed(-LAST_S if look.has_trail else -0.04), look.fastest(-0.5, -0.06)
    stopped = abs(speed) < 0.5 * abs(before)
    if speed * look.duty_now < 0 and abs(speed) > 0.2 * abs(before) and abs(look.duty_now) >= STILL_DUTY:
        yield Cause(
            key="reversal",
            sentence=f"{trip.motor} was reversed while it still turned the other way",
            evidence=(f"{_speed(look, speed)} against a duty of {_duty(look)}", trip.current_text),
            next_step="Give `reverse` a longer dwell or wait for standstill before the duty changes its sign.",
            weight=0.8,
        )
    falling = look.duty_change(0.1) < -0.03
    if falling and trip.value * (speed or look.duty_now) < 0 and abs(speed) > 0:
        yield Cause(
            key="braking",
            sentence=f"{trip.motor} was braked too hard: the duty fell faster than the shaft could follow",
            evidence=(
                f"the duty fell by {format_duty(round(-look.duty_change(0.1) * 10_000))} in the last 100 ms",
                f"{format_current(current)} against the motion, at {_speed(look, speed)}",
            ),
            next_step="Let the duty fall more slowly (`fall` in the bench file), or coast.",
            weight=0.91,
        )
    full = look.locked_current(1.0)
    if not math.isnan(full) and current > 1.3 * full:
        yield Cause(
            key="short",
            sentence=f"the winding, a lead or the bridge of {trip.motor} is shorted",
            evidence=(f"{format_current(current)} is more than the {format_current(round(full, 2))} of a held shaft at "
                      "full duty",),
            next_step="With the power cut, measure the resistance between the leads and from each lead to the case.",
            weight=0.85,
        )  # fmt: skip
    recent = started_s is not None and started_s < START_S
    enough = 2 if recent and started_s is not None and started_s < 0.1 else 8
    moving = look.moved(-0.1) > enough and speed * look.duty_now > 0
    rising = abs(speed) > 1.1 * abs(look.speed(-0.2, -0.1)) if look.moved(-0.2, -0.1) else True
    if recent and ((moving and rising) or not look.has_encoder):
        turned = f"it already turned at {_speed(look, speed)}, and rising" if look.has_encoder else NO_ENCODER
        yield Cause(
            key="inrush",
            sentence=f"this was the inrush of starting {trip.motor}: it was still speeding up",
            evidence=(trip.start_text, turned, trip.current_text),
            next_step="Ramp more slowly, or allow the start more: a higher `current` limit or a longer time above it.",
            weight=0.9 if look.has_encoder else 0.6,
        )
    if stopped and before and not recent:
        yield _held(trip, 0.93)
    elif look.moved(-0.1) <= enough or not moving:
        yield _held(trip, 0.9 if math.isnan(locked) or current > HELD_SHARE * locked else 0.5)
    yield Cause(
        key="load",
        sentence=f"the load of {trip.motor} is heavier than its current limit allows",
        evidence=(
            f"it turned at {_speed(look, speed)} at {_duty(look)}" if look.has_encoder else NO_ENCODER,
            trip.current_text,
        ),
        next_step="Compare with the motor's data sheet: lighten the load, lower the duty, or raise the limit.",
        weight=0.6 if moving and not recent else 0.2,
    )


def _overload(trip: Trip) -> Iterator[Cause]:
    look = trip.look
    rated_a = trip.bound / 1000
    yield _sensor(trip, _sensor_weight(trip, rated_a))
    locked = look.locked_current()
    if not math.isnan(locked) and abs(look.current_now) > HELD_SHARE * locked and look.moved(-0.5) <= 8:
        yield _held(trip, 0.92)
    long_s = -float(look.time_s[0]) if len(look) else 0.0
    mean = look.between(look.current_a, -long_s, 0.0)
    text = f"mean current of the last {format_duration(round(long_s, 1))} "
    text += format_current(round(float(abs(mean).mean()), 3)) if len(mean) else "unknown"
    yield Cause(
        key="overload",
        sentence=f"{trip.motor} carried more current for longer than its rating allows",
        evidence=(
            f"{text}, rated {format_current(rated_a)}",
            f"now {format_current(round(look.current_now, 3))} at {_duty(look)}",
        ),
        next_step="Let it cool; lighten the load, lower the duty, or give it longer rests. Check `rated` in the bench.",
        weight=0.7,
    )


# ---- stall and wrong way -------------------------------------------------------------------------------------------


def _stall(trip: Trip) -> Iterator[Cause]:
    look = trip.look
    started_s = min(look.started_s or 1.0, 1.0)
    current = abs(look.current_now)
    locked = look.locked_current()
    share = current / locked if locked and not math.isnan(locked) else math.nan
    ticks = trip.facts.tick_us / 1e6 * trip.bound
    window_s = min(started_s, max(0.1, ticks))
    moved = look.moved(-window_s)
    counts = look.between(look.counts, -window_s, 0.0)
    toggles = int((abs(counts[1:] - counts[:-1]) > 0).sum()) if len(counts) > 1 else 0
    volts = look.volts_now
    still = f"the counts moved by {moved:.0f} in {format_duration(round(window_s, 2))}"
    if not math.isnan(volts) and volts < 0.5 * look.volts:
        yield Cause(
            key="no_supply",
            sentence="the motor supply is off or very low",
            evidence=(f"supply {format_voltage(volts)}, the bench file says {format_voltage(look.volts)}",),
            next_step="Check the power cut, the fuse and the supply's output.",
            weight=0.95,
        )
    if abs(look.current_now - (0.0 if math.isnan(look.rest_current) else look.rest_current)) < NO_CURRENT_A:
        yield Cause(
            key="open_lead",
            sentence=f"no current reaches {trip.motor}: a lead is off, the bridge is disabled, or its fuse has blown",
            evidence=(trip.current_text, still),
            next_step="Check both motor leads, the bridge's enable and the fuse.",
            weight=0.95,
        )
    elsewhere = {name: _range(values, look, window_s) for name, values in look.others.items()}
    busiest = max(elsewhere, key=lambda name: elsewhere[name], default="")
    if busiest and elsewhere[busiest] > 40 and moved <= 2 and not _driven(look, busiest):
        yield Cause(
            key="encoders_exchanged",
            sentence=f"the encoders of {trip.motor} and {busiest} are exchanged",
            evidence=(f"{still}, those of {busiest} by {elsewhere[busiest]:.0f}",),
            next_step="Exchange the encoder plugs and check again with a little duty (`ramprig measure wiring`).",
            weight=0.96,
        )
    if moved and moved <= 2 and toggles >= 4:
        yield Cause(
            key="one_channel",
            sentence=f"one channel of the encoder of {trip.motor} is missing: the counts only toggle",
            evidence=(f"{toggles} changes to and fro within {moved:.0f} counts", trip.current_text),
            next_step="Check the encoder's two signal wires, their pull-ups and plugs.",
            weight=0.94,
        )
    turning = not math.isnan(share) and share < TURNING_SHARE
    ran = "it counted well before" if look.ran_before else "it has not counted in this run"
    yield Cause(
        key="encoder_dead",
        sentence=f"the encoder of {trip.motor} is silent while the shaft turns",
        evidence=(still, trip.current_text + ": so little means that it turns", ran),
        next_step="Look whether the shaft turned; check the encoder's supply, common ground, pull-ups and plug.",
        weight=0.9 if turning else 0.3,
    )
    yield from _stall_held(trip, share)


def _stall_held(trip: Trip, share: float) -> Iterator[Cause]:
    """The shaft stands although current flows."""
    motor = trip.bench_motor
    look = trip.look
    held = math.isnan(share) or share > TURNING_SHARE
    torque_low = False
    if motor is not None and motor.model is not None:
        torque = abs(look.current_now) * motor.model.constant_vs
        torque_low = torque < 1.15 * motor.model.breakaway_nm and not look.ran_before
    if torque_low:
        yield Cause(
            key="dead_band",
            sentence=f"{_duty(look)} is too little to break {trip.motor} loose: inside its dead band",
            evidence=(trip.current_text, trip.start_text, "its torque does not exceed the breakaway friction by much"),
            next_step="Start with more duty, or let the stall limit begin at a higher duty.",
            weight=0.92 if held else 0.2,
        )
    yield _held(trip, 0.85 if held else 0.25)


def _range(values: Floats, look: Around, window_s: float) -> float:
    found = look.between(values, -window_s, 0.0)
    return float(found.max() - found.min()) if len(found) else 0.0


def _driven(look: Around, other: str) -> bool:
    """Whether another motor is driven at the same time."""
    duty = look.between(look.other_duty[other], -0.1, 0.0)
    return bool((abs(duty) >= STILL_DUTY).any())


def _wrong_way(trip: Trip) -> Iterator[Cause]:
    look = trip.look
    if look.ran_before:
        yield Cause(
            key="driven_back",
            sentence=f"{trip.motor} was driven back by its load, or its coupling slipped: it had turned right before",
            evidence=(f"{trip.value} counts against {_duty(look)}", trip.start_text),
            next_step="Look what pulls at the shaft; check the coupling; give more duty where the load is worst.",
            weight=0.7,
        )
    yield Cause(
        key="swapped",
        sentence=f"the leads of {trip.motor} or the phases of its encoder are exchanged",
        evidence=(
            f"{trip.value} counts against {_duty(look)}, from the first motion on",
            trip.start_text,
        ),
        next_step="Which way did the shaft turn? Forward: exchange the encoder's phases (or `direction` in the bench "
        "file). Backward: exchange the motor leads.",
        weight=0.4 if look.ran_before else 0.95,
    )
    if look.between(look.supply_v, -0.5, 0).size and look.moved(-2.0, -0.3) and not look.was_driven:
        yield Cause(
            key="noise",
            sentence="the encoder picks up noise",
            evidence=("the counts moved without duty",),
            next_step="Check screens and grounds of the encoder cable.",
            weight=0.3,
        )


# ---- speed and supply ----------------------------------------------------------------------------------------------


def _overspeed(trip: Trip) -> Iterator[Cause]:
    look = trip.look
    speed = look.speed_now
    motor = trip.bench_motor
    expected = math.nan
    if motor is not None and motor.model is not None:
        volts = look.volts if math.isnan(look.volts_now) else look.volts_now
        turns_per_s = abs(look.duty_now) * volts / motor.model.constant_vs / (2 * math.pi)
        expected = turns_per_s / float(motor.gear_ratio) * look.counts_per_rev
    text = f"{_speed(look, speed)} at {_duty(look)}"
    if not math.isnan(expected):
        text += f"; without load it would be about {_speed(look, expected)}"
    over = not math.isnan(expected) and abs(speed) > 1.1 * expected + 20
    rest = look.rest_volts
    yield Cause(
        key="limit_low",
        sentence=f"the speed limit of {trip.motor} is lower than the speed that this duty gives",
        evidence=(text,),
        next_step="Lower the duty, or raise `speed` in the bench file if the mechanics allow it.",
        weight=0.3 if over else 0.8,
    )
    yield Cause(
        key="overhauling",
        sentence=f"the load drives {trip.motor} faster than its duty does, or the encoder counts too much",
        evidence=(text,),
        next_step="Look for a load that pulls; check the encoder cable for noise with the motor driven and not.",
        weight=0.75 if over else 0.2,
    )
    if not math.isnan(rest) and rest > 1.1 * look.volts:
        yield Cause(
            key="supply_high",
            sentence="the supply is set too high, so every speed is too high",
            evidence=(f"supply {format_voltage(rest)} at rest, the bench file says {format_voltage(look.volts)}",),
            next_step="Set the supply.",
            weight=0.9,
        )


def _overvoltage(trip: Trip) -> Iterator[Cause]:
    look = trip.look
    rest, bound = look.rest_volts, trip.bound / 1000
    value = trip.value / 1000
    before = look.between(look.supply_v, -2.0, -0.4)
    usual = float(sorted(before)[len(before) // 2]) if len(before) else rest
    current = look.between(look.current_a, -0.15, 0.0)
    returned = float(current.min() if look.duty_now >= 0 else -current.max()) if len(current) else math.nan
    braking = look.duty_change(0.15) < -0.005 or abs(look.duty_now) < STILL_DUTY
    turning = abs(look.fastest(-0.5, 0.0)) > 0
    high = not math.isnan(usual) and usual > 0.97 * bound
    numbers = f"supply {format_voltage(round(value, 2))}"
    if not math.isnan(usual):
        numbers += f", {format_voltage(round(usual, 2))} shortly before"
    yield Cause(
        key="regeneration",
        sentence=f"braking {trip.motor} pumped the supply up: it cannot take the energy back",
        evidence=(
            numbers,
            f"the duty fell by {format_duty(round(-look.duty_change(0.15) * 10_000))} in the last 150 ms",
            *((f"current down to {format_current(round(returned, 3))}",) if not math.isnan(returned) else ()),
        ),
        next_step="Let the duty fall more slowly (`fall`), coast instead of braking, or fit a capacitor, a brake "
        "resistor or a supply that can sink.",
        weight=0.2 if high else (0.92 if braking and turning else 0.5),
    )
    yield Cause(
        key="supply_high",
        sentence="the supply itself is too high",
        evidence=(numbers, f"the bound is {format_voltage(bound)}"),
        next_step="Measure and set the supply; compare `voltage` and `allowed` in the bench file.",
        weight=0.9 if high else 0.3,
    )


def _undervoltage(trip: Trip) -> Iterator[Cause]:
    bound = trip.bound / 1000
    look = _loudest(trip)
    rest, value = look.rest_volts, trip.value / 1000
    current = look.between(look.current_a, -0.1, 0.005)
    peak = float(abs(current).max()) if len(current) else math.nan
    usual = look.volts if math.isnan(rest) else rest
    numbers = f"supply {format_voltage(round(value, 2))}, {format_voltage(round(usual, 2))} without load"
    drawn = not math.isnan(peak) and peak > 0.15 and look.was_driven
    started_s = look.started_s
    when = "" if started_s is None else f", {format_duration(round(started_s, 3))} after {look.motor} was started"
    yield Cause(
        key="sag",
        sentence=f"the supply sagged under the current of {look.motor}",
        evidence=(numbers + when, *(() if math.isnan(peak) else (f"current up to {format_current(round(peak, 2))}",))),
        next_step="Ramp more slowly; check the supply's current limit, thin or long leads and plugs; add a capacitor.",
        weight=0.9 if drawn and not (not math.isnan(rest) and rest < 1.02 * bound) else 0.3,
    )
    yield Cause(
        key="supply_low",
        sentence="the supply is too low even without load",
        evidence=(numbers, f"the bound is {format_voltage(bound)}"),
        next_step="Measure and set the supply; compare `voltage` and `allowed` in the bench file.",
        weight=0.92 if not math.isnan(rest) and rest < 1.02 * bound else 0.15,
    )
    yield Cause(
        key="supply_off",
        sentence="the supply was switched off or its fuse blew: it fell without a motor drawing much",
        evidence=(numbers, "" if math.isnan(peak) else f"current at most {format_current(round(peak, 2))}"),
        next_step="Check the power cut, the fuse and the supply.",
        weight=0.3 if drawn else 0.85,
    )


def _loudest(trip: Trip) -> Around:
    """The motor that drew most: a trip of the supply names none."""
    views = [trip.look]
    tick, time_s = moment_of(trip.facts)
    for name in trip.facts.motors:
        view = around(trip.facts, name, tick, time_s=time_s) if name != trip.motor else None
        if view is not None:
            views.append(view)

    def drawn(view: Around) -> float:
        found = view.between(view.current_a, -0.1, 0.005)
        return float(abs(found).max()) if len(found) else 0.0

    return max(views, key=drawn)


def moment_of(facts: Facts) -> tuple[int, float | None]:
    """Tick and time in the run of the last trip."""
    trips = facts.of("tripped")
    event = trips[-1] if trips else {}
    return int(event.get("tick") or 0), event.get("time_s")


RULES: dict[str, Callable[[Trip], Iterator[Cause]]] = {
    "overcurrent": _overcurrent,
    "overload": _overload,
    "stall": _stall,
    "wrong_way": _wrong_way,
    "overspeed": _overspeed,
    "overvoltage": _overvoltage,
    "undervoltage": _undervoltage,
}
