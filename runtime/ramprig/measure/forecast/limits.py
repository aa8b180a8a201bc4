"""How far a run stays from each limit of the bench, in which step it comes nearest, and which limits do not fit it."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from ramprig.bench import Bench
from ramprig.sequence.rig import Rig
from ramprig_link.words import SPEED_TICKS

from .montecarlo import Draw

TIGHT = 0.85
"""A limit of which 97.5 % of the draws use more than this share is too tight; ours."""
LOOSE = 1.0 / 3.0
"""One of which 97.5 % use less than this share is too loose: it would be late to notice a fault; ours."""
HIGH = 0.975


@dataclass(frozen=True, slots=True, kw_only=True)
class Margin:
    """One limit: how much of it is used, median and 97.5 % quantile of the draws, 1 being the trip.

    `step` is where it is used most. `verdict` is `fits`, `tight` or `loose`.
    """

    name: str
    subject: str
    bound: str
    used: float
    used_high: float
    step: str
    verdict: str

    def text(self) -> str:
        """In a line."""
        said = {
            "fits": "",
            "tight": f"  TOO TIGHT for {self.step}",
            "loose": f"  LOOSE: {self.step} uses the most of it",
        }[self.verdict]
        share = f"{100 * self.used:.0f} % used, up to {100 * self.used_high:.0f} %"
        return f"{self.subject}: {self.name} {self.bound}: {share}{said}"


def margins(bench: Bench, draws: Sequence[Draw], *, tick_us: int) -> list[Margin]:
    """Every limit that a number can be put on. The stall and wrong-way trips show in the odds alone."""
    rig = Rig.of(bench, tick_us=tick_us)
    found = []
    for name, axis in rig.axes.items():
        trip_a = rig.limits["trip_ma", axis.index] / 1000.0
        rated_ma = rig.limits["rated_ma", axis.index]

        def current(draw: Draw, name: str = name, trip_a: float = trip_a) -> tuple[float, str]:
            motor = draw.motors[name]
            return motor.lasting_a / trip_a, motor.lasting_step

        def overload(draw: Draw, name: str = name) -> tuple[float, str]:
            return draw.motors[name].overload, draw.motors[name].lasting_step

        found.append(_margin("current trip", name, f"{trip_a:g} A", draws, current))
        if rated_ma:
            found.append(_margin("overload trip", name, f"{rated_ma / 1000:g} A for ever", draws, overload))
        speed_counts = rig.limits["speed_counts", axis.index]
        if speed_counts and axis.has_encoder:
            found.append(_speed(bench, rig, name, draws))
    found += _supply(rig, draws, bench.supply.voltage_v)
    return found


def _speed(bench: Bench, rig: Rig, name: str, draws: Sequence[Draw]) -> Margin:
    motor = bench.motor(name)
    setting = motor.settings.get("speed_counts")
    gear = float(motor.gear_ratio)
    counts_per_s = rig.limits["speed_counts", motor.axis] / (SPEED_TICKS * rig.tick_us / 1e6)
    limit_rpm = abs(motor.rpm_of(counts_per_s))

    def used(draw: Draw) -> tuple[float, str]:
        one = draw.motors[name]
        return one.speed_rad_s * 60 / (2 * np.pi) / gear / limit_rpm, one.speed_step

    return _margin("speed trip", name, setting.text if setting is not None else f"{limit_rpm:.3g} rpm", draws, used)


def _supply(rig: Rig, draws: Sequence[Draw], nominal_v: float) -> list[Margin]:
    """Of a voltage limit the distance from the nominal voltage is what is used."""
    over_v, under_v = rig.limits["over_mv", 0] / 1000.0, rig.limits["under_mv", 0] / 1000.0
    found = []
    if over_v > nominal_v:
        found.append(
            _margin(
                "upper limit",
                "supply",
                f"{over_v:g} V",
                draws,
                lambda draw: (max(0.0, draw.bus_high_v - nominal_v) / (over_v - nominal_v), draw.bus_high_step),
                loose=False,
            )
        )
    if 0.0 < under_v < nominal_v:
        found.append(
            _margin(
                "lower limit",
                "supply",
                f"{under_v:g} V",
                draws,
                lambda draw: (max(0.0, nominal_v - draw.bus_low_v) / (nominal_v - under_v), draw.bus_low_step),
                loose=False,
            )
        )
    return found


def _margin(
    name: str,
    subject: str,
    bound: str,
    draws: Sequence[Draw],
    used: Callable[[Draw], tuple[float, str]],
    *,
    loose: bool = True,
) -> Margin:
    found = [used(draw) for draw in draws]
    shares = np.array([share for share, _ in found])
    middle, high = float(np.median(shares)), float(np.quantile(shares, HIGH))
    step = found[int(shares.argmax())][1]
    # A limit of what this run does not move at all is neither: nothing of it is used.
    verdict = "tight" if high > TIGHT else "loose" if loose and 0.0 < high < LOOSE else "fits"
    return Margin(name=name, subject=subject, bound=bound, used=middle, used_high=high, step=step, verdict=verdict)
