"""What a plan must know of the bench, in the protocol's units: limits of each motor and servo, ticks, channels."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from ramprig.bench import Bench, Motor, Servo
from ramprig.quantity import format_duration
from ramprig.session.limits import LimitKey
from ramprig_link.words import CHANNELS, Per

US_PER_S = 1_000_000

BASE_CHANNELS = {
    Per.AXIS: ("duty", "counts", "current_ma"),
    Per.SERVO: ("pulse_us",),
    Per.DEVICE: ("supply_mv", "state"),
}
"""What every run logs, so that its samples fill every column."""


@dataclass(frozen=True, slots=True)
class Axis:
    """A motor with its limits: duties in 1/10000, slews in 1/10000 a tick, times in ticks.

    `count_sign` is -1 where the counts fall with positive duty. `still_ticks` is 0 without an encoder.
    """

    motor: Motor
    ceiling_duty: int
    slew_up_duty: int
    slew_down_duty: int
    dwell_ticks: int
    still_counts: int
    still_ticks: int
    count_sign: int

    @property
    def index(self) -> int:
        """The axis on the board."""
        return self.motor.axis

    @property
    def name(self) -> str:
        """The motor's name."""
        return self.motor.name

    @property
    def has_encoder(self) -> bool:
        """Whether position and speed are measured."""
        return self.motor.encoder is not None

    def least_ticks(self, duty: int, to_duty: int) -> int:
        """The shortest ramp between two duties of one sign that the slew limits allow."""
        slew = self.slew_up_duty if abs(to_duty) > abs(duty) else self.slew_down_duty
        return -(-abs(to_duty - duty) // slew)


@dataclass(frozen=True, slots=True)
class Channel:
    """A servo with its limits: pulses in us, slew in ns a tick."""

    servo: Servo
    pulse_min_us: int
    pulse_max_us: int
    slew_ns: int
    home_us: int

    @property
    def index(self) -> int:
        """The servo output on the board."""
        return self.servo.channel

    @property
    def name(self) -> str:
        """The servo's name."""
        return self.servo.name

    def least_ticks(self, pulse_us: int, to_us: int) -> int:
        """The shortest swing between two pulses that the slew limit allows."""
        return -(-abs(to_us - pulse_us) * 1000 // self.slew_ns)


@dataclass(frozen=True, slots=True, kw_only=True)
class Rig:
    """A bench for the compiler: motors and servos by name, and the board's tick in us."""

    bench: Bench
    tick_us: int
    limits: Mapping[LimitKey, int] = field(repr=False)
    axes: Mapping[str, Axis]
    channels: Mapping[str, Channel]

    @classmethod
    def of(cls, bench: Bench, *, tick_us: int = 1000) -> Rig:
        """The rig of a bench on a board with this tick. Raises `FileError` where the board cannot keep a limit."""
        limits = bench.limits(tick_us=tick_us)
        axes = {motor.name: _axis(motor, limits) for motor in bench.motors}
        channels = {servo.name: _channel(servo, limits) for servo in bench.servos}
        return cls(bench=bench, tick_us=tick_us, limits=limits, axes=axes, channels=channels)

    @property
    def tick_s(self) -> Fraction:
        """The tick in s."""
        return Fraction(self.tick_us, US_PER_S)

    def ticks(self, seconds: Fraction) -> Fraction:
        """A time in ticks, exact."""
        return seconds * US_PER_S / self.tick_us

    def show(self, ticks: int) -> str:
        """A time for people."""
        return format_duration(ticks * self.tick_s)

    @property
    def mask(self) -> int:
        """The log mask of every channel that the bench's columns need."""
        return sum(1 << bit for bit in self._bits())

    def _bits(self) -> Iterable[int]:
        used = {
            Per.AXIS: [axis.index for axis in self.axes.values()],
            Per.SERVO: [channel.index for channel in self.channels.values()],
            Per.DEVICE: [0],
        }
        for per, names in BASE_CHANNELS.items():
            for name in names:
                channel = CHANNELS[name]
                for index in used[per]:
                    yield channel.first_bit + index * channel.step


def _axis(motor: Motor, limits: Mapping[LimitKey, int]) -> Axis:
    def limit(item: str) -> int:
        return limits[item, motor.axis]

    return Axis(
        motor=motor,
        ceiling_duty=limit("ceiling_duty"),
        slew_up_duty=limit("slew_up_duty"),
        slew_down_duty=limit("slew_down_duty"),
        dwell_ticks=limit("dwell_ticks"),
        still_counts=limit("still_counts"),
        still_ticks=limit("still_ticks") if motor.encoder is not None else 0,
        count_sign=-1 if motor.sense < 0 else 1,
    )


def _channel(servo: Servo, limits: Mapping[LimitKey, int]) -> Channel:
    def limit(item: str) -> int:
        return limits[item, servo.channel]

    low_us, high_us = limit("pulse_min_us"), limit("pulse_max_us")
    return Channel(
        servo=servo,
        pulse_min_us=low_us,
        pulse_max_us=high_us,
        slew_ns=limit("pulse_slew_ns"),
        home_us=min(max(limit("pulse_home_us"), low_us), high_us),
    )
