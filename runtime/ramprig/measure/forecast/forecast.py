"""The forecast of a sequence on a bench: intervals, margins, duty types and the odds of a trip, as text and as JSON."""

from __future__ import annotations

import math
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from ramprig.bench import Bench
from ramprig.errors import UsageError
from ramprig.extras import need
from ramprig.measure.numbers.uncertainty import rounded_pair
from ramprig.measure.refusal import NotMeasurable
from ramprig.quantity import digits, format_bytes, format_duration
from ramprig.record.events import Json, jsonable
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.log_forecast import forecast_log
from ramprig.sequence.plan import Cycles, Plan
from ramprig.sequence.reading import Sequence as Steps

from .draws import Belief, belief_of
from .dutytype import DutyType, duty_type
from .limits import Margin, margins
from .montecarlo import Draw, Job, draws_of, packed_bench, with_pause
from .play import core_is_there, play
from .reduction import COLD_PASSES, Cut, alike_of, cut_of

DRAWS = 200
DRAWS_LEAST = 20
DRAWS_MOST = 100_000
"""All draws are kept until the end."""
COVERAGE = 0.95
ROUNDING = 1e-9
"""Draws that differ by no more than this differ by rounding alone."""
LONG_S = 600.0
"""From so long on a duration is told in hours, minutes and seconds."""
ENAMEL_C = 105.0
"""What the winding of class A stands for long (IEC 60085, from memory); small motors say seldom what theirs does."""


@dataclass(frozen=True, slots=True, kw_only=True)
class ForecastWish:
    """How many draws, from which seed, on how many cores (None: all), within which time, reduced or not."""

    draws: int = DRAWS
    seed: int = 1
    workers: int | None = None
    most_s: float = 600.0
    reduce: bool = True
    on_core: bool | None = None


@dataclass(frozen=True, slots=True)
class Interval:
    """A forecast: the median and the ends between which a further draw lies with the probability `coverage`."""

    median: float
    low: float
    high: float
    unit: str
    coverage: float = COVERAGE

    @classmethod
    def of(cls, values: Sequence[float], unit: str) -> Interval:
        """From the draws: the quantiles i/(n + 1); of fewer than 39 the least and the greatest, which cover less."""
        covered = coverage_of(len(values))
        tail = (1.0 - covered) / 2.0
        low, median, high = np.quantile(np.asarray(values, float), [tail, 0.5, 1.0 - tail], method="weibull")
        return cls(float(median), float(low), float(high), unit, covered)

    def holds(self, value: float, *, within: float = 0.0) -> bool:
        """Whether a value lies between the ends, give or take `within`, the value's own resolution."""
        return self.low - within <= value <= self.high + within

    def __str__(self) -> str:
        half = (self.high - self.low) / 2.0
        if self.unit == "s" and self.median >= LONG_S:
            low, median, high = (format_duration(round(value)) for value in (self.low, self.median, self.high))
            return f"{median} in every draw" if low == high else f"{median} ({low} to {high})"
        if half <= ROUNDING * max(1.0, abs(self.median)):
            return f"{self.median if abs(self.median) > ROUNDING else 0.0:.6g} {self.unit} in every draw"
        _, rounded = rounded_pair(self.median, half)
        places = len(rounded.partition(".")[2])
        low, median, high = (f"{value:.{places}f}" for value in (self.low, self.median, self.high))
        return f"{median} {self.unit} ({low} to {high})"


def coverage_of(draws: int) -> float:
    """What the ends cover: COVERAGE, or as much as the extremes of so few draws do."""
    return min(COVERAGE, (draws - 1) / (draws + 1))


@dataclass(frozen=True, slots=True, kw_only=True)
class Odds:
    """So many of so many draws; `low` and `high` are the 95 % confidence bounds (Clopper and Pearson 1934)."""

    times: int
    of: int
    low: float
    high: float

    @classmethod
    def count(cls, times: int, of: int) -> Odds:
        """The bounds by quantiles of the beta distribution."""
        stats = need("scipy.stats", purpose="the bounds of odds")
        low = float(stats.beta.ppf(0.025, times, of - times + 1)) if times else 0.0
        high = float(stats.beta.ppf(0.975, times + 1, of - times)) if times < of else 1.0
        return cls(times=times, of=of, low=low, high=high)

    def __str__(self) -> str:
        share = digits(100 * self.times / self.of, 2)
        bounds = f"between {digits(100 * self.low, 2)} % and {digits(100 * self.high, 2)} %"
        return f"{share} % ({self.times} of {self.of} draws; {bounds})"


@dataclass(frozen=True, slots=True, kw_only=True)
class Forecast:
    """What is forecast. `values` by name such as `vent.peak_current`; `trips` are causes with how often."""

    name: str
    sources: Mapping[str, str]
    how: tuple[str, ...]
    values: Mapping[str, Interval]
    margins: tuple[Margin, ...]
    duty_types: Mapping[str, DutyType]
    starts_per_hour: Mapping[str, float]
    log_bytes: int
    trip: Odds
    failure: Odds
    trips: Mapping[str, int]
    failures: Mapping[str, int]
    notes: tuple[str, ...]
    draws: tuple[Draw, ...] = field(repr=False, default=())

    def text(self) -> list[str]:
        """For the terminal, the sentence last."""
        width = max(len(name) for name in self.values)
        lines = [self.name, *(f"from      {name}: {source}" for name, source in self.sources.items())]
        lines += [f"how       {text}" for text in self.how]
        lines += [f"  {name.replace('_', ' '):<{width}}  {value}" for name, value in self.values.items()]
        lines += [
            f"  {name}: {digits(rate, 3)} start{'' if rate == 1.0 else 's'} per hour; {self.duty_types[name]}"
            for name, rate in self.starts_per_hour.items()
        ]
        lines += [f"limit     {margin.text()}" for margin in self.margins]
        lines.append(f"log       about {format_bytes(self.log_bytes)}")
        lines.append(f"trips     {self.trip}")
        lines += [f"            {times} x {cause}" for cause, times in self.trips.items()]
        if self.failure.times:
            lines.append(f"failures  {self.failure}")
            lines += [f"            {times} x {what}" for what, times in self.failures.items()]
        lines += [f"note      {note}" for note in self.notes]
        return [*lines, self.sentence]

    @property
    def sentence(self) -> str:
        """The whole of it in a sentence."""
        took = self.values["duration"]
        tight = [f"the {one.name} of {one.subject}" for one in self.margins if one.verdict == "tight"]
        share = digits(100 * self.trip.times / self.trip.of, 2)
        risk = f"it trips in {share} %" if self.trip.times else "no draw trips"
        limits = f"; too tight: {', '.join(tight)}" if tight else ""
        return f"{self.name}: takes about {format_duration(round(took.median))}; {risk}{limits}."

    def to_json(self) -> dict[str, Json]:
        """For programs."""
        return {
            "forecast": self.name,
            "sources": dict(self.sources),
            "how": list(self.how),
            "values": {name: jsonable(value) for name, value in self.values.items()},
            "limits": [jsonable(margin) for margin in self.margins],
            "duty_types": {name: jsonable(kind) for name, kind in self.duty_types.items()},
            "starts_per_hour": dict(self.starts_per_hour),
            "log_bytes": self.log_bytes,
            "odds": {"trip": jsonable(self.trip), "failure": jsonable(self.failure)},
            "trips": dict(self.trips),
            "failures": dict(self.failures),
            "notes": list(self.notes),
            "sentence": self.sentence,
        }


def forecast(
    sequence: Steps,
    bench: Bench,
    wish: ForecastWish,
    *,
    belief: Belief | None = None,
    progress: Callable[[int, int], None] = lambda done, of: None,
) -> Forecast:
    """Forecast a sequence. `belief` takes the place of what the bench file says.

    Raises `FileError` where the plan does not fit the bench, NotMeasurable where too little is known of a motor or no
    draw comes to its end, and UsageError for a wish that makes no sense.
    """
    _check(wish)
    plan = compile_plan(sequence, bench)
    believed = belief_of(bench) if belief is None else belief
    on_core = core_is_there(believed.setup) if wish.on_core is None else wish.on_core
    cut = cut_of(sequence, lambda steps: _least_s(steps, bench)) if wish.reduce else None
    job = Job(
        bench=bench,
        belief=believed,
        cold=plan if cut is None else compile_plan(cut.cold, bench),
        hot=None if cut is None else compile_plan(cut.hot, bench),
        cut=cut,
        part=None if cut is None else _part_of(plan, cut),
        seed=wish.seed,
        on_core=on_core,
    )
    draws = draws_of(job, wish.draws, workers=wish.workers, most_s=wish.most_s, progress=progress)
    return _told(plan, bench, job, wish, draws)


def _check(wish: ForecastWish) -> None:
    """Raises UsageError for a wish that makes no sense."""
    if not DRAWS_LEAST <= wish.draws <= DRAWS_MOST:
        raise UsageError(f"{wish.draws} draws: at least {DRAWS_LEAST} and at most {DRAWS_MOST}")
    if wish.seed < 0:
        raise UsageError(f"a seed of {wish.seed}: 0 or more")
    if wish.workers is not None and wish.workers < 1:
        raise UsageError(f"{wish.workers} processes: at least 1")
    if not 0.0 < wish.most_s < math.inf:
        raise UsageError(f"within {wish.most_s:g} s: more than 0 s, and an end")


def _part_of(plan: Plan, cut: Cut) -> Cycles | None:
    """The plan's part of the block of cycles that is cut."""
    return next((part for part in plan.cycles if cut.block is not None and str(part.mark.place) == cut.place), None)


def _least_s(steps: Steps, bench: Bench) -> float:
    plan = compile_plan(steps, bench)
    return plan.totals.least * plan.tick_us / 1e6


def _told(plan: Plan, bench: Bench, job: Job, wish: ForecastWish, draws: list[Draw]) -> Forecast:
    whole = [draw for draw in draws if draw.whole]
    trips = Counter(_shortened(draw.trip) for draw in draws if draw.trip)
    if len(whole) < 2:
        common = trips.most_common(1)[0][0] if trips else next((draw.failed for draw in draws if draw.failed), "")
        raise NotMeasurable(
            f"only {len(whole)} of {len(draws)} draws come to their end: {common}",
            wanted="mend the limit or the sequence first; `ramprig rehearse` shows where it ends",
        )
    values = _values(bench, draws, whole)
    hours = max(values["duration"].median / 3600.0, 1.0)  # a short run has its starts in one hour
    starts = {name: count / hours for name, count in plan.totals.starts.items() if count}
    if job.cut is not None and job.cut.for_s is not None:
        starts = {name: rate * _passes_share(plan, job, draws) for name, rate in starts.items()}
    rows = int(values["duration"].median * 1e6 / plan.tick_us / plan.period_ticks) + 1
    failures = Counter(draw.failed for draw in draws if draw.failed)
    return Forecast(
        name=plan.name,
        sources={name: known.source for name, known in job.belief.motors.items()},
        how=_how(job, wish, draws, len(whole)),
        values=values,
        margins=tuple(margins(bench, draws, tick_us=plan.tick_us)),
        duty_types=_duty_types(job, starts, draws[0].pause_s),
        starts_per_hour=starts,
        log_bytes=forecast_log(plan, bench, rows * plan.period_ticks).size_bytes,
        trip=Odds.count(sum(trips.values()), len(draws)),
        failure=Odds.count(sum(failures.values()), len(draws)),
        trips=dict(trips.most_common(5)),
        failures=dict(failures.most_common(3)),
        notes=_notes(job, draws, whole, values),
        draws=tuple(draws),
    )


def _shortened(trip: str) -> str:
    """The cause without the numbers of one draw, so that alike ones count as one."""
    return trip.partition(":")[0]


def _passes_share(plan: Plan, job: Job, draws: list[Draw]) -> float:
    """Passes as they are over passes as the plan reckons them, which does not know the waits."""
    found = float(np.median([draw.passes for draw in draws if draw.whole]))
    assert job.cut is not None, "asked only of a reduced run"
    assert job.cut.for_s is not None, "asked only of a run for a time"
    if job.part is not None:
        least = min(body.totals.least for body in (job.part.first, job.part.later, job.part.checked)) + job.part.pause
        least_s = least * plan.tick_us / 1e6
    else:
        least_s = job.cold.totals.least * plan.tick_us / 1e6 / COLD_PASSES
    return min(1.0, found / max(1.0, math.ceil(job.cut.for_s / least_s)))


def _values(bench: Bench, draws: list[Draw], whole: list[Draw]) -> dict[str, Interval]:
    values = {
        "duration": Interval.of([draw.elapsed_s for draw in whole], "s"),
        "energy": _energy([draw.energy_j for draw in whole]),
        "supply_high": Interval.of([draw.bus_high_v for draw in draws], "V"),
        "supply_low": Interval.of([draw.bus_low_v for draw in draws], "V"),
    }
    for motor in bench.motors:
        name = motor.name
        per_rpm = 60.0 / math.tau / float(motor.gear_ratio)
        values[f"{name}.peak_current"] = Interval.of([draw.motors[name].peak_a for draw in draws], "A")
        values[f"{name}.speed"] = Interval.of([draw.motors[name].speed_rad_s * per_rpm for draw in draws], "rpm")
        values[f"{name}.hottest"] = Interval.of([draw.motors[name].hottest_c for draw in whole], "degC")
        values[f"{name}.end_temperature"] = Interval.of([draw.motors[name].end_c for draw in whole], "degC")
    return values


def _energy(joules: list[float]) -> Interval:
    """In kJ from one on."""
    if float(np.median(joules)) < 1000.0:
        return Interval.of(joules, "J")
    return Interval.of([one / 1000.0 for one in joules], "kJ")


def _how(job: Job, wish: ForecastWish, draws: list[Draw], whole: int) -> tuple[str, ...]:
    device = "the firmware core and plant in C" if job.on_core else "the mock in Python"
    lines = [f"{len(draws)} draws (seed {wish.seed}) on {device}; each figure drawn on its own, correlations left out"]
    if len(draws) - 1 < wish.draws:
        lines.append(f"{wish.draws} draws were asked for; more would take longer than {format_duration(wish.most_s)}")
    if job.cut is not None:
        lines.append(job.cut.text())
    ends = "the ends" if coverage_of(whole) == COVERAGE else "the extremes of so few draws"
    lines.append(f"values: median, and {ends}, between which a further draw lies with {100 * coverage_of(whole):.0f} %")
    return tuple(lines)


def _duty_types(job: Job, starts: Mapping[str, float], pause_s: float) -> dict[str, DutyType]:
    """From the run with every figure at its value; `pause_s` is what spacing its starts adds to a cycle."""
    run = play(job.cold, packed_bench(job), job.belief.setup, seed=1, on_core=job.on_core)
    found = {}
    for name, motor in run.motors.items():
        duty, square = motor.duty, motor.square_a2
        if job.cut is not None:
            alike = alike_of(run, job.cut)
            rows, added_s = slice(alike.begin, alike.end), pause_s * alike.passes
            duty, square = (with_pause(values[rows], added_s, run.row_s) for values in (duty, square))
        tau_s = job.belief.motors[name].figures["thermal_time"].value
        kind = duty_type(duty, square, run.row_s, tau_s=tau_s, periodic=job.cut is not None)
        if name in starts or kind.word != "none":
            found[name] = kind
    return found


def _notes(job: Job, draws: list[Draw], whole: list[Draw], values: Mapping[str, Interval]) -> tuple[str, ...]:
    notes = []
    if len(whole) < len(draws):
        notes.append(f"time, energy and temperatures are of the {len(whole)} draws that come to their end")
    for name, known in job.belief.motors.items():
        if known.usual:
            said = ", ".join(one.replace("_", " ") for one in known.usual)
            notes.append(f"{name}: nothing says its {said}: a usual figure is taken, twice as uncertain")
        if values[f"{name}.hottest"].high > ENAMEL_C:
            notes.append(
                f"{name}: its winding may pass {ENAMEL_C:g} degC, what class A stands (IEC 60085, from memory); the "
                "board does not see it"
            )
    return tuple(notes)
