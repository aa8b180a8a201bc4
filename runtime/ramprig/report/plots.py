"""The plots of a report: against time, cycle over cycle, duty to speed both ways, and the record around a trip."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.endure.trends import Level as WearLevel

from .around import Around
from .digest import Digest, Level
from .envelope import Band
from .facts import Document, Facts
from .kept import thinning_of
from .svg import BLUE, EVENTS_MAX, GREEN, GREY, ORANGE, PURPLE, SERIES, VERMILION, Chart, padded
from .trends import Trend

Floats = NDArray[np.float64]

SPANS = ((7200.0, 3600.0, "h"), (180.0, 60.0, "min"), (0.0, 1.0, "s"))
TRIP_BEFORE_S, TRIP_AFTER_S = 0.25, 0.1
SPEED_OVER_S = 0.008
TREND_POINTS_MAX = 1000
"""Points of one feature against the cycle; more are summed up."""
COLUMN_TEXT = {
    "duty_pct": ("duty at the bridge", "%"),
    "speed_rpm": ("speed", "rpm"),
    "current_a": ("current", "A"),
    "pulse_us": ("pulse (commanded)", "us"),
    "supply_v": ("supply", "V"),
    "temperature_degc": ("temperature", "degC"),
}


@dataclass(frozen=True, slots=True)
class Plot:
    """A picture with what it shows in words."""

    caption: str
    svg: str


def label_of(column: str) -> tuple[str, str]:
    """A column's name for people, and its unit."""
    who, _, what = column.rpartition(".")
    text, unit = COLUMN_TEXT.get(what, (what, ""))
    return (f"{who}: {text}" if who else text), unit


def time_unit(span_s: float) -> tuple[float, str]:
    """Seconds of the unit that suits a span, and its symbol."""
    return next((unit_s, name) for least_s, unit_s, name in SPANS if span_s >= least_s)


@dataclass(frozen=True, slots=True)
class Moment:
    """Something at a time of the run that every plot against time marks."""

    time_s: float
    text: str
    colour: str
    dashes: str = ""


def moments_of(facts: Facts, digest: Digest) -> list[Moment]:
    """Trips, restarts, interruptions and gaps: what a reader must see beside the curves."""
    found = [Moment(at_s, "interrupted", GREY, "2 2") for at_s in digest.breaks]
    for kind, text, colour, dashes in (
        ("tripped", "trip", VERMILION, ""),
        ("restarted", "restart", VERMILION, "6 3"),
        ("host_slept", "host slept", GREY, "6 3"),
        ("gap_found", "gap", ORANGE, "2 2"),
        ("run_resumed", "gone on with", GREY, "6 3"),
    ):
        for event in facts.of(kind)[:EVENTS_MAX]:
            if isinstance(event.get("time_s"), int | float):
                label = f"trip: {event['trip']}" if kind == "tripped" else text
                found.append(Moment(float(event["time_s"]), label, colour, dashes))
    return found[:EVENTS_MAX]


def against_time(facts: Facts, digest: Digest) -> list[Plot]:
    """One plot for each column that is shown."""
    moments = moments_of(facts, digest)
    kept = _kept(facts, digest)
    plots = []
    for column in digest.columns:
        band = digest.band(column)
        if np.isnan(band.mean).all():
            continue
        plots.append(_time_plot(column, band, digest, moments, _levels(facts, column), kept))
    return plots


@dataclass(frozen=True, slots=True)
class _Kept:
    """What of the samples is drawn: `text` says where that is not all, and rows up to `apart_s` apart are joined."""

    text: str
    apart_s: float


def _kept(facts: Facts, digest: Digest) -> _Kept:
    rule = thinning_of(facts)
    if rule is None:
        return _Kept("", 0.0)
    widened = ", and over the ranges that were recorded where rows were left out"
    return _Kept(
        widened if digest.envelope.is_widened else ", of the rows that were kept", (rule.every or 1) * facts.period_s
    )


def _levels(facts: Facts, column: str) -> list[tuple[float, str]]:
    """Limits in force that belong to a column, in its unit."""
    who, _, what = column.rpartition(".")
    limits = facts.limits
    if facts.bench is None:
        return []
    if column == "supply_v":
        low, high = limits.get(("under_mv", 0), 0), limits.get(("over_mv", 0), 0)
        return [(low / 1000, "trips below"), (high / 1000, "trips above")]
    motor = next((motor for motor in facts.bench.motors if motor.name == who), None)
    if motor is None:
        return []
    if what == "current_a":
        trip_a = limits.get(("trip_ma", motor.axis), 0) / 1000
        return [(trip_a, "trips above"), (-trip_a, "trips below")]
    if what == "duty_pct":
        ceiling = limits.get(("ceiling_duty", motor.axis), 0) / 100
        return [(ceiling, "ceiling"), (-ceiling, "ceiling")]
    return []


def _time_plot(
    column: str,
    band: Band,
    digest: Digest,
    moments: Sequence[Moment],
    levels: Sequence[tuple[float, str]],
    kept: _Kept,
) -> Plot:
    text, unit = label_of(column)
    scale, symbol = time_unit(digest.last_s - digest.first_s)
    x_range = digest.first_s / scale, max(digest.last_s, digest.first_s + 1e-3) / scale
    low, high = float(np.nanmin(band.least)), float(np.nanmax(band.greatest))
    near = [value for value, _ in levels if low - 0.6 * (high - low) <= value <= high + 0.6 * (high - low)]
    chart = Chart(x_range, padded(min([low, *near]), max([high, *near])), unit, f"time of the run, {symbol}")
    times, gaps = _with_gaps(band, digest.envelope.width_s, kept.apart_s)
    least, mean, greatest = (_gapped(values, gaps) for values in (band.least, band.mean, band.greatest))
    if band.is_exact:
        chart.line(times / scale, mean)
        how = "every sample" if not kept.text else "every row that was kept"
    else:
        chart.band(times / scale, least, greatest)
        chart.line(times / scale, mean, width=1.0)
        how = f"line: mean, area: least to greatest, each over {digest.envelope.width_s:.3g} s{kept.text}"
    for value, name in levels:
        chart.level(value, f"{name} {value:g} {unit}")
    for moment in moments:
        chart.event(moment.time_s / scale, moment.text, colour=moment.colour, dashes=moment.dashes)
    return Plot(f"{text} ({how})", chart.text(f"{text} in {unit} against time, {low:g} to {high:g}"))


def _with_gaps(band: Band, width_s: float, apart_s: float) -> tuple[Floats, NDArray[np.int64]]:
    """The times with one more wherever samples are missing, and where those stand."""
    gaps = np.flatnonzero(np.diff(band.time_s) > max(3.5 * width_s, 1.5 * apart_s)) + 1
    return np.insert(band.time_s, gaps, band.time_s[gaps - 1] + width_s), gaps


def _gapped(values: Floats, gaps: NDArray[np.int64]) -> Floats:
    return np.insert(values, gaps, np.nan)


def overlays(facts: Facts, digest: Digest) -> list[Plot]:
    """First, middle and last cycle laid over each other: speed and current of each motor."""
    if len(digest.windows) < 2:
        return []
    what = "cycle" if facts.counts["cycle_begun"] else "pass"
    said = " of the block with the most" if len(set(facts.blocks().values())) > 1 else ""
    said += " overlaid" + (" (of the rows that were kept)" if thinning_of(facts) is not None else "")
    plots = []
    for motor in facts.motors:
        for column in (f"{motor}.speed_rpm", f"{motor}.current_a"):
            if column not in digest.columns:
                continue
            bands = [window.envelope.band(column) for window in digest.windows]
            if any(not len(band.mean) or np.isnan(band.mean).all() for band in bands):
                continue
            plots.append(_overlay(column, what, digest, bands, said))
    return plots


def _overlay(column: str, what: str, digest: Digest, bands: Sequence[Band], said: str) -> Plot:
    text, unit = label_of(column)
    longest = max(window.end_s - window.begin_s for window in digest.windows)
    low = min(float(np.nanmin(band.least)) for band in bands)
    high = max(float(np.nanmax(band.greatest)) for band in bands)
    chart = Chart((0.0, longest), padded(low, high), unit, f"time in the {what}, s", height=190)
    for window, band, (colour, dashes) in zip(digest.windows, bands, SERIES, strict=False):
        times = np.minimum(band.time_s, longest)  # the middle of the last interval may lie behind the end
        if not band.is_exact:
            chart.band(times, band.least, band.greatest, colour=colour)
        chart.line(times, band.mean, colour=colour, dashes=dashes)
        chart.name(f"{what} {window.number}", colour=colour, dashes=dashes)
    return Plot(f"{text}, first and last {what}{said}", chart.text(f"{text}, one {what} over another"))


def by_cycle(facts: Facts, found: Sequence[Trend]) -> list[Plot]:
    """Each feature against the cycle, with its baseline and limits once there are cycles enough, and what was found."""
    what = "cycle" if facts.counts["cycle_begun"] else "pass"
    return [_trend(trend, what if what == "pass" else trend.judged.turn) for trend in found]


LEAST_SPAN = 0.02
"""A feature is drawn over this share of its value at least: what scatters by less is to look steady."""
LIMIT_COLOURS = {WearLevel.WATCH: ORANGE, WearLevel.FAIL: VERMILION}


def _trend(trend: Trend, what: str) -> Plot:
    levels = [(trend.judged.baseline.mean, "baseline", GREY)] if trend.judged.established else []
    levels += [(value, level.name.lower(), LIMIT_COLOURS[level]) for level, value in trend.judged.limit_values()]
    low, high = float(np.nanmin(trend.values)), float(np.nanmax(trend.values))
    watched = [value for value, name, _ in levels if name != "fail"]
    room = max(0.0, (LEAST_SPAN * max(abs(low), abs(high)) - (high - low)) / 2)
    y_range = padded(min([low - room, *watched]), max([high + room, *watched]))
    chart = Chart(
        (float(trend.numbers[0]) - 0.5, float(trend.numbers[-1]) + 0.5), y_range, trend.unit, what, height=160
    )
    _trend_line(chart, trend)
    for value, name, colour in levels:
        chart.level(value, f"{name} {value:.4g} {trend.unit}", colour=colour)
    for finding in trend.findings[:EVENTS_MAX]:
        chart.event(float(finding.cycle), f"{finding.level.name.lower()}: {finding.sign}", colour=PURPLE)
    return Plot(f"{trend.name} of each {what}", chart.text(f"{trend.name} against {what}, {low:g} to {high:g}"))


def _trend_line(chart: Chart, trend: Trend) -> None:
    """Every value; of more than TREND_POINTS_MAX least, mean and greatest of several in a row, so that none is lost."""
    count = len(trend.values)
    if count <= TREND_POINTS_MAX:
        chart.line(trend.numbers, trend.values, width=1.0)
        return
    stride = -(-count // TREND_POINTS_MAX)
    padding = np.full(-count % stride, np.nan)
    rows = np.concatenate((trend.values, padding)).reshape(-1, stride)
    known = ~np.isnan(rows)
    some = known.any(axis=1)
    low = np.where(some, np.where(known, rows, np.inf).min(axis=1), np.nan)
    high = np.where(some, np.where(known, rows, -np.inf).max(axis=1), np.nan)
    mean = np.where(known, rows, 0.0).sum(axis=1) / np.where(some, known.sum(axis=1), np.nan)
    chart.band(trend.numbers[::stride], low, high)
    chart.line(trend.numbers[::stride], mean, width=1.0)


def curves(facts: Facts, digest: Digest) -> list[Plot]:
    """Duty to speed, reached from below and from above, for motors that were held at three duties or more."""
    return [_curve(motor, levels) for motor in facts.motors if (levels := digest.curve(motor))]


def _curve(motor: str, levels: Sequence[Level]) -> Plot:
    lowest, highest = min(level.duty_pct for level in levels), max(level.duty_pct for level in levels)
    chart = Chart(
        padded(lowest, highest),
        padded(min(level.least for level in levels), max(level.greatest for level in levels), zero=True),
        "speed, rpm",
        "duty, %",
        height=230,
    )
    for growing, colour, name in ((True, BLUE, "duty growing in size"), (False, ORANGE, "duty falling")):
        chosen = [level for level in levels if level.is_growing is growing]
        for level in chosen:
            chart.line(np.array([level.duty_pct] * 2), np.array([level.least, level.greatest]), colour=colour, width=1)
        chart.marks([lv.duty_pct for lv in chosen], [lv.mean for lv in chosen], colour=colour, up=growing)
        if chosen:
            chart.name(f"{name} ({'filled' if growing else 'open'})", colour=colour)
    caption = f"{motor}: speed at held duties, both ways (mark: mean, line: least to greatest)"
    return Plot(caption, chart.text(caption))


def trip_record(event: Document, look: Around) -> list[Plot]:
    """Duty, speed, current and supply around a trip."""
    begin_s, end_s = -TRIP_BEFORE_S, TRIP_AFTER_S
    if not look.has_trail:
        begin_s, end_s = -2.0, 0.3
    inside = (look.time_s >= begin_s) & (look.time_s <= end_s)
    times = look.time_s[inside]
    if len(times) < 2:
        return []
    speed = _speed_of(times, look.counts[inside], look.counts_per_rev)
    rows = (
        ("duty, %", look.duty[inside] * 100, BLUE),
        ("speed, rpm" if look.counts_per_rev > 0 else "counts/s", speed, GREEN),
        ("current, A", look.current_a[inside], VERMILION),
        ("supply, V", look.supply_v[inside], GREY),
    )
    plots = []
    for label, values, colour in rows:
        if np.isnan(values).all():
            continue
        limits = padded(float(np.nanmin(values)), float(np.nanmax(values)))
        chart = Chart((begin_s * 1000, end_s * 1000), limits, label, "ms from the trip", height=130)
        chart.line(times * 1000, values, colour=colour)
        chart.event(0.0, f"trip: {event['trip']}", colour="#000")
        source = "the board's trail, every tick" if look.has_trail else "samples"
        plots.append(Plot(f"{look.motor}: {label} around the trip ({source})", chart.text(label)))
    return plots


def _speed_of(times: Floats, counts: Floats, counts_per_rev: float) -> Floats:
    """Speed over the last SPEED_OVER_S, or since the sample before where those are farther apart."""
    places = np.arange(len(times))
    since = np.minimum(np.searchsorted(times, times - SPEED_OVER_S), np.maximum(places - 1, 0))
    with np.errstate(invalid="ignore", divide="ignore"):
        speed = (counts - counts[since]) / (times - times[since])
    if counts_per_rev > 0:
        speed *= 60 / counts_per_rev
    speed[~np.isfinite(speed)] = np.nan
    return speed
