"""What `run.json` says beyond the folder itself: clocks, the account of every sample, how speed was estimated, the
end."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from ..session.gaps import Accounting
from .columns import Columns
from .events import Json, RunTime, jsonable, rfc3339
from .speed import SpeedMethod, resolution_rpm, slowest_rpm

RESOLUTION_AT_RPM = (0.1, 1.0, 10.0, 100.0, 1000.0, 10000.0)


@dataclass(frozen=True, slots=True)
class Anchor:
    """One instant on all clocks: the device's unwrapped tick, the host's monotonic clock, and its wall clock."""

    tick: int
    host_s: float
    unix_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class RunEnd:
    """How a run ended. `verdict` is one word (`passed`, `failed`, `tripped` ...), `stop_reason` a sentence.

    `end` ties the clocks together once more, None where the device could no longer be asked. `accounts` has one
    account for each logging, in order. `link` holds counters (garbled lines, duplicates ...): 0 is stated, not left
    out. `results` is whatever else the caller wants on record, such as the expectations and their values.
    """

    verdict: str
    stop_reason: str
    end: Anchor | None = None
    drift_ppm: float | None = None
    accounts: Sequence[Accounting] = ()
    link: Mapping[str, object] = field(default_factory=dict)
    results: Mapping[str, object] = field(default_factory=dict)


def clocks(start: Anchor, end: Anchor | None, *, when: RunTime, drift_ppm: float | None = None) -> dict[str, Json]:
    """The clocks of the run: both anchors, and what they say about each other.

    `device_against_host_ppm` is positive where the device's clock ran fast; `drift_ppm` the session's finer fit,
    where there is one. `wall_moved_s` is how far the wall clock was set against the monotonic one (a sleeping host
    shows here too).
    """
    found: dict[str, Json] = {
        "tick_us": when.tick_us,
        "tick_zero": when.tick_zero,
        "start": _anchor(start),
        "end": None if end is None else _anchor(end),
        "drift_ppm": None if drift_ppm is None else round(drift_ppm, 3),
    }
    if end is None:
        return found
    device_s = (end.tick - start.tick) * when.tick_us / 1e6
    host_s = end.host_s - start.host_s
    found["device_s"] = round(device_s, 6)
    found["host_s"] = round(host_s, 6)
    found["device_against_host_ppm"] = round((device_s / host_s - 1) * 1e6, 3) if host_s > 0 else None
    found["wall_moved_s"] = round(end.unix_s - start.unix_s - host_s, 6)
    return found


def _anchor(anchor: Anchor) -> dict[str, Json]:
    return {
        "tick": anchor.tick,
        "host_s": round(anchor.host_s, 6),
        "utc": rfc3339(anchor.unix_s, decimals=6),
    }


def sample_account(
    accounts: Sequence[Accounting], *, received_rows: int, written_rows: int, thinned_rows: int = 0
) -> dict[str, Json]:
    """Where every sample of the run is: expected = received + lost, received = written + thinned + unwritten.

    Thinned rows were left out as the sequence wants it, unwritten ones because the disk would not take them.

    `complete` is true where the device confirmed for every logging how many it made. Without accounts (the caller had
    none) what was received is all that is known.
    """
    received = sum(account.received for account in accounts) if accounts else received_rows
    return {
        "expected": sum(account.expected for account in accounts) if accounts else received_rows,
        "received": received,
        "lost": sum(account.lost for account in accounts),
        "written": written_rows,
        "thinned": thinned_rows,
        "unwritten": received - written_rows - thinned_rows,
        "complete": bool(accounts) and all(account.complete for account in accounts),
        "gaps": [jsonable(gap) for account in accounts for gap in account.gaps],
        "gaps_unlisted": sum(account.gaps_unlisted for account in accounts),
        "asked_again": sum(account.asked_again for account in accounts),
        "recovered": sum(account.recovered for account in accounts),
        "duplicates": sum(account.duplicates for account in accounts),
        "strange_lines": sum(account.strange_lines for account in accounts),
        "loggings": [
            {
                "first_tick": account.first_tick,
                "period_ticks": account.period_ticks,
                "made": account.made,
                "expected": account.expected,
                "received": account.received,
                "lost": account.lost,
            }
            for account in accounts
        ],
    }


def speed_account(
    columns: Columns, method: SpeedMethod, *, tick_us: int, periods_ticks: Sequence[int]
) -> dict[str, Json]:
    """How speed was estimated, and how far it may be off at which speed for the periods that were logged."""
    found: list[Json] = [
        {
            "column": field.name,
            "counts_per_rev": field.counts_per_rev,
            "count_sign": field.sign,
            "encoder_on_output": field.on_output,
            "slowest_rpm": _short(slowest_rpm(counts_per_rev=field.counts_per_rev, method=method)),
            "resolution": [
                {
                    "period_ticks": period_ticks,
                    "at_rpm": rpm,
                    "rpm": _short(
                        resolution_rpm(
                            rpm,
                            counts_per_rev=field.counts_per_rev,
                            period_s=period_ticks * tick_us / 1e6,
                            method=method,
                        )
                    ),
                }
                for period_ticks in periods_ticks
                for rpm in RESOLUTION_AT_RPM
            ],
        }
        for field in columns.speeds
    ]
    return {"method": str(method), "settings": jsonable(method), "columns": found}


def _short(number: float) -> float:
    return float(f"{number:.4g}")
