"""The link: round trip and its grid, the drift of the two clocks, and spoilt bytes with the motor off and on."""

from __future__ import annotations

import math
import statistics
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ramprig.bench import Bench
from ramprig.extras import need
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.lab import Lab
from ramprig.measure.numbers.uncertainty import CONFIDENCE, Measured, coverage_factor
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.tightening import tightened
from ramprig.quantity import digits, format_duration, format_duty
from ramprig.session.clockfit import ClockFit
from ramprig.session.readings import Counters

from . import pictures

PINGS = 60
"""Each follows the last answer at once: on a grid of 16 ms every one then takes the whole of it."""
GRID_S = (0.014, 0.018)
"""A median round trip in here is that of a USB adapter whose latency timer stands at its usual 16 ms."""
LISTEN_S = 30.0
DRIVE_DUTY = 3000
DRIVE_SHARE = 0.5
"""The motor runs at half its ceiling, DRIVE_DUTY at most."""
REQUEST_BYTES = 10
"""A line to the board, most of them beats, has about so many bytes."""
SIGNIFICANT = 0.01
"""A motor is said to spoil bytes where as great a difference comes by chance in fewer cases than this."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Spoilt:
    """Lines that were spoilt among so many bytes; each spoilt byte spoils about one line."""

    lines: int
    bytes: int

    @property
    def rate(self) -> Measured:
        """Spoilt bytes a byte. The interval reaches up to the exact bound of a count of rare events (Poisson; Garwood
        1936), which lies at 3.7 where none was seen, and as far down.
        """
        if self.bytes <= 0:
            raise NotMeasurable("no bytes came")
        stats = need("scipy.stats", purpose="the bound of a count")
        most = float(stats.chi2.ppf(0.5 + CONFIDENCE / 2.0, 2 * self.lines + 2)) / 2.0
        return Measured(self.lines / self.bytes, "", (most - self.lines) / coverage_factor(math.inf) / self.bytes)


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkCheck:
    """The link of a bench; with `motor`, also while that one runs."""

    motor: str | None = None

    @property
    def name(self) -> str:
        """As on the command line."""
        return "link"

    @property
    def subject(self) -> str:
        """Always the link."""
        return "link"

    def bench(self, bench: Bench) -> Bench:
        """The motor runs at half its ceiling and at the rated current at most."""
        if self.motor is None:
            return bench
        motor = bench.motor(self.motor)
        return tightened(bench, self.motor, ceiling_duty=self._duty(bench), trip_a=motor.rated_ma / 1000)

    def moves(self, bench: Bench) -> str:
        """What moves."""
        if self.motor is None:
            return ""
        return f"{self.motor} runs at {format_duty(self._duty(bench))} for {format_duration(LISTEN_S)}"

    def _duty(self, bench: Bench) -> int:
        assert self.motor is not None  # asked for with a motor only
        ceiling = bench.motor(self.motor).limits(1000)["ceiling_duty"]
        return min(DRIVE_DUTY, round(DRIVE_SHARE * ceiling))

    def carry_out(self, lab: Lab) -> Findings:
        """Ping, listen, drive."""
        trips_s = _round_trips(lab)
        off = self._spoilt(lab, lambda: lab.watch("motor off", LISTEN_S))
        on = None
        if self.motor is not None:
            script = lab.script("motor on")
            script.drive(self.motor, self._duty(lab.bench), in_ms=500).hold(1000 * LISTEN_S).coast(self.motor)
            on = self._spoilt(lab, lambda: lab.run(script.hold(500)))
        return _told(lab, trips_s, off, on)

    @staticmethod
    def _spoilt(lab: Lab, work: Callable[[], object]) -> Spoilt:
        """What was spoilt, here and at the board, while `work` went on."""
        before, there = lab.session.health, Counters.read(lab.session.ask("counters"))
        work()
        after, then = lab.session.health, Counters.read(lab.session.ask("counters"))
        lines = after.dropped_lines - before.dropped_lines + then.garbled - there.garbled
        sent = REQUEST_BYTES * (then.lines - there.lines)
        return Spoilt(lines=lines, bytes=after.bytes_in - before.bytes_in + sent)


def _round_trips(lab: Lab) -> list[float]:
    trips_s: list[float] = []
    for _ in range(PINGS):
        repeats = lab.session.health.repeats
        begin_s = lab.clock.now()
        lab.session.ask("beat")
        if lab.session.health.repeats == repeats:  # one that was repeated tells of a loss, not of a time
            trips_s.append(lab.clock.now() - begin_s)
    if len(trips_s) < PINGS // 2:
        raise NotMeasurable(
            f"{PINGS - len(trips_s)} of {PINGS} pings had to be repeated", wanted="a line that carries more than half"
        )
    return trips_s


def _told(lab: Lab, trips_s: list[float], off: Spoilt, on: Spoilt | None) -> Findings:
    median_s, worst_s = statistics.median(trips_s), max(trips_s)
    tick_s = lab.session.identity.tick_s
    # The board answers in its ticks, so the median is known to a tick at best.
    values = {"round_trip": Measured(median_s, "s", math.hypot(_median_u(trips_s), tick_s / math.sqrt(12.0)))}
    lines = [f"round trip: median {format_duration(median_s)}, worst {format_duration(worst_s)} of {len(trips_s)}"]
    troubles: list[str] = []
    on_grid = GRID_S[0] <= median_s <= GRID_S[1]
    if on_grid:
        troubles.append("answers come on a grid of about 16 ms")
        lines.append(
            "the median round trip is that of a USB adapter's latency timer at its usual 16 ms: set it to 1 ms (on "
            "Linux in /sys/bus/usb-serial/devices/*/latency_timer, on Windows in the port's advanced settings)"
        )
    fit = lab.session.clock_fit
    if fit is not None:
        values["clock_drift"] = Measured(fit.drift_ppm, "ppm", _drift_u_ppm(lab, fit))
        lines.append(
            f"the board's clock is {'slow' if fit.drift_ppm > 0 else 'fast'} by {digits(abs(fit.drift_ppm), 3)} ppm, "
            f"{digits(fit.drift_error_ppm, 2)} ppm either way at the very most"
        )
    values["errors_motor_off"] = off.rate
    lines.append(f"motor off: {off.lines} of about {off.bytes} bytes spoilt or lost")
    chance: float | None = None
    if on is not None:
        values["errors_motor_on"] = on.rate
        lines.append(f"motor on: {on.lines} of about {on.bytes} bytes spoilt or lost")
        chance = _chance(off, on)
        if chance < SIGNIFICANT:
            troubles.append("the motor spoils bytes when it runs")
            lines.append(
                "fit 0.1 uF across the motor's terminals and from each to its case, twist its leads, and keep its "
                "current out of the ground of the signals"
            )
    if off.lines:
        troubles.append("bytes are spoilt or lost with the motor off")
        lines.append("look at the cable, its length and shield, the ground, and whether the speed is right")
    return Findings(
        procedure="link",
        subject="link",
        sentence=f"link: {'; '.join(troubles) or 'sound'}.",
        good=not troubles,
        values=values,
        facts={
            "round_trips_s": [round(one, 6) for one in trips_s],
            "on_grid": on_grid,
            "off": off,
            "on": on,
            "chance_of_difference": chance,
        },
        lines=tuple(lines),
        pictures=(Picture(name="link", draw=lambda figure: pictures.round_trips(figure, trips_s), height_in=3.5),),
    )


def _drift_u_ppm(lab: Lab, fit: ClockFit) -> float:
    """The standard uncertainty of the drift: what the lines over the sendings and under the receptions differ by, and
    that answers bear whole ticks, so that each end of a line is known to a tick (two rectangular distributions)."""
    span_s = max(1.0, (lab.session.tick_now() - fit.origin_tick) * fit.tick_s)
    apart = abs(fit.late.slope - fit.early.slope) / 2 / fit.tick_s
    return 1e6 * math.hypot(apart, math.sqrt(2.0 / 12.0) * fit.tick_s / span_s)


def _median_u(values: list[float]) -> float:
    """The standard uncertainty of a median: 1.2533 of the mean's, from the spread of the middle half (robust)."""
    quarters = np.quantile(values, [0.25, 0.75])
    sd = float(quarters[1] - quarters[0]) / 1.349
    return 1.2533 * sd / math.sqrt(len(values))


def _chance(off: Spoilt, on: Spoilt) -> float:
    """How often chance alone gives so many more spoilt lines with the motor on: the exact conditional test of two
    Poisson rates, which is binomial (Przyborowski and Wilenski 1940)."""
    total = off.lines + on.lines
    if total == 0:
        return 1.0
    stats = need("scipy.stats", purpose="a comparison of two counts")
    share = on.bytes / (on.bytes + off.bytes)
    return float(stats.binom.sf(on.lines - 1, total, share))
