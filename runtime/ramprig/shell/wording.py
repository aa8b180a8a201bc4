"""Events of the session as sentences for people; what comes in crowds is counted and told once in a while."""

from __future__ import annotations

from collections import Counter

from ramprig.bench import Bench
from ramprig.quantity import format_current, format_duration, format_duty, format_voltage
from ramprig.sequence.rig import Rig
from ramprig.sequence.tripsay import explain_trip
from ramprig.session import events as e
from ramprig_link.words import LIMITS, SPEED_TICKS, Per

TROUBLES_EVERY_S = 2.0
"""Troubles of the link are told together, at most this often."""


class Teller:
    """Turns events into lines, or into nothing. `troubles` gives the crowd's counts when they are due.

    `rig` is the bench on the board that answers.
    """

    def __init__(self, bench: Bench) -> None:
        self._bench = bench
        self.rig = Rig.of(bench)
        self._counts: Counter[str] = Counter()
        self._told_s: float | None = None
        self._off_told = False
        self._stop_told: tuple[int, float] | None = None

    def tell(self, event: e.Event) -> str | None:
        """The sentence for an event, None where there is nothing to say now."""
        match event:
            case e.Tripped():
                how = " (found when the device was opened)" if event.learned is e.Learned.AT_OPEN else ""
                return f"TRIPPED: {explain_trip(event, self.rig)}{how}"
            case e.Stopped(state=state):
                told, self._off_told = self._off_told, True
                return None if told else f"all outputs are off (state {state})"
            case e.StopAsked():
                return self._stop_asked(event)
            case e.Armed():
                self._off_told = False
            case e.Restarted():
                cause = f" ({event.cause})" if event.cause else ""
                return f"the device has restarted{cause}; it is disarmed. 'reopen' opens it anew."
            case e.DwellHeld(axis=axis, held_ticks=ticks):
                name = next((motor.name for motor in self._bench.motors if motor.axis == axis), f"axis {axis}")
                return f"{name}: the dwell lock held for {ticks} ticks before it turned the other way"
            case e.DeviceExchanged():
                return f"another device answers: {event.after}, where {event.before} was opened"
            case e.LateHost(late_s=late_s):
                return f"this computer was {format_duration(round(late_s, 3))} late; the lease is what stops then"
            case e.HostSlept(slept_s=slept_s):
                return f"this computer was asleep for about {format_duration(round(slept_s, 1))}"
            case e.GapFound(count=count, reason=reason):
                return f"{count} samples are lost: {reason}"
            case e.LimitWritten():
                return self._limit(event)
            case e.LinkTrouble(trouble=trouble):
                self._counts[str(trouble)] += 1
            case e.NoticesMissed(count=count):
                self._counts["notice missed"] += count
        return None

    def _stop_asked(self, event: e.StopAsked) -> str | None:
        """A stop is sent until it is acknowledged: each category is told once, and again only later."""
        last, self._stop_told = self._stop_told, (event.category, event.host_s)
        if not event.sent:
            return f"stop, category {event.category}: THE PORT DID NOT TAKE IT"
        if last is not None and last[0] <= event.category and event.host_s - last[1] < TROUBLES_EVERY_S:
            return None
        return f"stop, category {event.category}"

    def _limit(self, event: e.LimitWritten) -> str:
        limit = LIMITS[event.item]
        tick_s = self.rig.tick_us / 1e6
        before, after = (limit_shown(value, limit.unit, tick_s) for value in (event.before, event.after))
        return (
            f"written to the board: {limit_owner(self._bench, limit.per, event.index)} {event.item} {before} -> {after}"
        )

    def troubles(self, now_s: float) -> str | None:
        """The troubles of the link since they were last told, at most every TROUBLES_EVERY_S."""
        if not self._counts or (self._told_s is not None and now_s - self._told_s < TROUBLES_EVERY_S):
            return None
        self._told_s = now_s
        text = ", ".join(f"{count} x {what}" for what, count in self._counts.items())
        self._counts.clear()
        return f"link: {text}"


_PER_10000 = 100


def limit_shown(value: int, unit: str, tick_s: float) -> str:
    """A limit's number as an engineer reads it; `unit` is the protocol's."""
    match unit:
        case "1/10000":
            return format_duty(value)
        case "1/10000 a tick":
            return f"{value / _PER_10000 / tick_s:g} %/s"
        case "mA":
            return format_current(value / 1000)
        case "mV":
            return format_voltage(value / 1000)
        case "ms":
            return format_duration(value / 1000)
        case "s":
            return format_duration(value)
        case "ticks":
            return format_duration(value * tick_s)
        case "ns a tick":
            return f"{value / 1000 / tick_s:g} us/s"
        case "counts in SPEED_TICKS":
            return f"{value} counts in {format_duration(SPEED_TICKS * tick_s)}"
        case "sign":
            return {1: "counts rise", -1: "counts fall", 0: "no encoder"}.get(value, str(value))
    return f"{value} {unit}"


def limit_owner(bench: Bench, per: Per, index: int) -> str:
    """Whose limit it is: the name of the motor or servo, or `board`."""
    if per is Per.DEVICE:
        return "board"
    if per is Per.AXIS:
        return next((motor.name for motor in bench.motors if motor.axis == index), f"axis {index}")
    return next((servo.name for servo in bench.servos if servo.channel == index), f"servo {index}")
