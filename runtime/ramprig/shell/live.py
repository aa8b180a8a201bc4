"""The present in numbers, for people: one immutable `Snapshot`, made in the session's thread and read in any other."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, replace

from ramprig.bench import Bench, Motor
from ramprig.session import Session
from ramprig.session.core import Latest
from ramprig.session.readings import AxisReading, Reading
from ramprig_link.words import STATE_BITS, Cap, State

SPEED_SPAN_S = 0.25
"""Speed is told over the last so much; at least two readings."""
POINTS_MAX = 64
"""Most readings kept for the speed of a motor."""
_WRAP = 1 << 32


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorLive:
    """A motor now: None where the board or the bench cannot tell."""

    name: str
    duty: int
    rpm: float | None = None
    turns: float | None = None
    current_ma: int | None = None


@dataclass(frozen=True, slots=True)
class ServoLive:
    """A servo's commanded angle now; None without pulses."""

    name: str
    degrees: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Snapshot:
    """Everything the status lines show. `state` is a word for people, `known` whether the rest is of a live device."""

    state: str = "opening"
    known: bool = False
    motors: tuple[MotorLive, ...] = ()
    servos: tuple[ServoLive, ...] = ()
    supply_mv: int | None = None
    round_trip_s: float = 0.0
    lost_lines: int = 0
    log: str = ""
    last_trip: str = ""
    doing: str = ""


class _Track:
    """The position of one shaft over the last readings."""

    def __init__(self, motor: Motor) -> None:
        self._motor = motor
        self._points: deque[tuple[int, int]] = deque(maxlen=POINTS_MAX)

    def take(self, tick: int, counts: int) -> None:
        """A reading; counts come in 32 bits and go on past their wrap."""
        if self._points:
            last_tick, last = self._points[-1]
            if tick <= last_tick:
                return
            counts = last + (counts - last + _WRAP // 2) % _WRAP - _WRAP // 2
        self._points.append((tick, counts))

    def turns(self) -> float | None:
        """Turns of the output shaft since the device's zero."""
        return self._motor.turns_of(self._points[-1][1]) if self._points else None

    def rpm(self, tick_s: float) -> float | None:
        """Mean speed over the last SPEED_SPAN_S or a little more."""
        if len(self._points) < 2:
            return None
        last_tick, last = self._points[-1]
        for tick, counts in reversed(self._points):
            first_tick, first = tick, counts
            if (last_tick - tick) * tick_s >= SPEED_SPAN_S:
                break
        return self._motor.rpm_of((last - first) / ((last_tick - first_tick) * tick_s))


class Live:
    """Makes snapshots of a session out of what it knows; asks the device nothing."""

    def __init__(self, bench: Bench) -> None:
        self._bench = bench
        self._tracks = {motor.name: _Track(motor) for motor in bench.motors if motor.encoder is not None}

    def forget(self) -> None:
        """The device is another or has restarted: counts begin anew."""
        self._tracks = {motor.name: _Track(motor) for motor in self._bench.motors if motor.encoder is not None}

    def snapshot(self, session: Session, *, state: str, log: str, last_trip: str, doing: str) -> Snapshot:
        """The session's newest reading or samples, whichever is younger."""
        reading = newest(session.latest)
        health = session.health
        common = Snapshot(
            state=state,
            round_trip_s=health.round_trip_median_s,
            lost_lines=health.dropped_lines + health.repeats,
            log=log,
            last_trip=last_trip,
            doing=doing,
        )
        if reading is None:
            return common
        caps = session.identity.caps
        return replace(
            common,
            known=True,
            motors=tuple(self._motor(motor, reading, session.identity.tick_s, caps) for motor in self._bench.motors),
            servos=tuple(
                ServoLive(servo.name, servo.degrees_of(pulse_us) if pulse_us else None)
                for servo, pulse_us in ((servo, reading.pulses_us[servo.channel]) for servo in self._bench.servos)
            ),
            supply_mv=reading.supply_mv if Cap.SUPPLY in caps else None,
        )

    def _motor(self, motor: Motor, reading: Reading, tick_s: float, caps: Cap) -> MotorLive:
        axis = reading.axes[motor.axis]
        track = self._tracks.get(motor.name) if Cap.ENCODER in caps else None
        if track is not None:
            track.take(reading.tick, axis.counts)
        return MotorLive(
            name=motor.name,
            duty=axis.duty,
            rpm=None if track is None else track.rpm(tick_s),
            turns=None if track is None else track.turns(),
            current_ma=axis.current_ma if Cap.CURRENT in caps else None,
        )


def newest(latest: Latest) -> Reading | None:
    """The youngest that is known, as a reading: a `state` answer, or the last row of samples with gaps filled by it."""
    reading, block = latest.reading, latest.block
    if reading is None or block is None or int(block.ticks[-1]) <= reading.tick:
        return reading

    def value(kind: str, index: int, before: int) -> int:
        place = block.layout.position(kind, index)
        return before if place is None else int(block.values[-1, place])

    bits_place = block.layout.position("state")
    state = reading.state
    if bits_place is not None:
        state = State(STATE_BITS["state"].of(int(block.values[-1, bits_place])))
    return Reading(
        tick=int(block.ticks[-1]),
        state=state,
        trip=reading.trip,
        queued=reading.queued,
        supply_mv=value("supply_mv", 0, reading.supply_mv),
        temperature_dc=value("temperature_dc", 0, reading.temperature_dc),
        axes=tuple(
            AxisReading(
                value("duty", i, axis.duty), value("counts", i, axis.counts), value("current_ma", i, axis.current_ma)
            )
            for i, axis in enumerate(reading.axes)
        ),
        pulses_us=tuple(value("pulse_us", i, pulse_us) for i, pulse_us in enumerate(reading.pulses_us)),
    )
