"""How large the log of a plan becomes, and how it is kept, in words and bytes."""

from __future__ import annotations

from dataclasses import dataclass

from ramprig.bench import Bench
from ramprig.quantity import format_bytes, format_duration
from ramprig.record.columns import predicted_bytes
from ramprig.record.keeping import Around, Thinning
from ramprig.record.ranges import EACH, HEAD

from .columns import bench_columns
from .plan import Plan

RANGE_FIELD_BYTES = 7
"""What a field of a ranges file takes, as a rule."""


@dataclass(frozen=True, slots=True, kw_only=True)
class LogForecast:
    """Rows in `files` samples files, and bytes with the ranges beside them."""

    rows: int
    size_bytes: int
    files: int


def forecast_log(plan: Plan, bench: Bench, ticks: int) -> LogForecast:
    """The log of `ticks` ticks of this plan.

    A thinned one is taken to have no event but the begins and ends of cycles, where full rate is kept around those.
    """
    columns = bench_columns(bench, tick_us=plan.tick_us)
    made = rows = ticks // plan.period_ticks + 1
    thinning, volumes = plan.keeping.thinning, plan.keeping.volumes
    ranges = 2 * _turns(plan, ticks)
    if thinning is not None:
        rows = _thinned_rows(plan, thinning, ticks, made)
        if thinning.ranges_s is not None:
            ranges += round(ticks * plan.tick_us / 1e6 / thinning.ranges_s) + 1
    files = -(-rows // volumes.rows)
    if volumes.span_s is not None:
        files = max(files, int(ticks * plan.tick_us / 1e6 / volumes.span_s) + 1)
    size = predicted_bytes(columns, rows, period_ticks=max(1, ticks // rows))
    size += ranges * (len(HEAD) + len(columns.names) * len(EACH)) * RANGE_FIELD_BYTES
    return LogForecast(rows=rows, size_bytes=size, files=files)


def _turns(plan: Plan, ticks: int) -> int:
    """Cycles that may be done in this time."""
    found = 0
    for part in plan.cycles:
        each = max(1, part.first.totals.least + part.rest)
        found += min(part.times or ticks // each, ticks // each + 1)
    return found


def _thinned_rows(plan: Plan, thinning: Thinning, ticks: int, made: int) -> int:
    tick_s = plan.tick_us / 1e6
    full_s = thinning.before_s + thinning.after_s  # the run's begin and end
    if Around.CYCLE in thinning.around:
        full_s += 2 * _turns(plan, ticks) * (thinning.before_s + thinning.after_s)
    full = min(made, round(full_s / tick_s) // plan.period_ticks + 1)
    return full + (0 if thinning.every is None else (made - full) // thinning.every)


def log_text(plan: Plan, bench: Bench) -> str:
    """How often, how many rows and bytes, for `ramprig check`."""
    totals = plan.totals
    period = format_duration(plan.period_ticks * plan.tick_us / 1e6)
    least = forecast_log(plan, bench, totals.least)
    text = f"every {period}, about {least.rows} rows, {format_bytes(least.size_bytes)}{_in_files(least)}"
    if totals.most > totals.least:
        most = forecast_log(plan, bench, totals.most)
        text += f"; {most.rows} rows, {format_bytes(most.size_bytes)}{_in_files(most)} at the longest"
    return text


def _in_files(forecast: LogForecast) -> str:
    return f" in {forecast.files} files" if forecast.files > 1 else ""


def thinning_text(plan: Plan) -> str:
    """How the log is thinned, in one line; empty where it is not."""
    thinning = plan.keeping.thinning
    return "" if thinning is None else said_of(thinning)


def _ordinal(number: int) -> str:
    """`500th`, `2nd`, `112th`."""
    teens = number % 100 in (11, 12, 13)
    return f"{number}{'th' if teens else {1: 'st', 2: 'nd', 3: 'rd'}.get(number % 10, 'th')}"


def said_of(thinning: Thinning) -> str:
    """The rule in words."""
    kept = [] if thinning.every is None else [f"every {_ordinal(thinning.every)} row"]
    if thinning.ranges_s is not None:
        kept.append(f"ranges over each {format_duration(thinning.ranges_s)}")
    around = ", ".join(word.value for word in Around if word in thinning.around)
    return (
        f"{' and '.join(kept)}; full rate from {format_duration(thinning.before_s)} before to "
        f"{format_duration(thinning.after_s)} after: {around}"
    )
