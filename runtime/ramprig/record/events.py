"""The event log: one JSON object a line, for whatever frozen dataclass tells what happened.

Each line begins with `tick` (unwrapped, or null), `time_s` (since the run's tick zero), `utc` (RFC 3339, with Z) and
`kind`, the class's name in small letters, such as `gap_found`; then the fields of the event in their order. Times of
day are derived from the host's monotonic clock and the run's start, so that a wall clock that is set in mid-run moves
no event.
"""

from __future__ import annotations

import dataclasses
import json
import math
import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from enum import Enum
from functools import cache
from pathlib import PurePath
from typing import TypeAlias

import numpy as np

Json: TypeAlias = bool | int | float | str | list["Json"] | dict[str, "Json"] | None

_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_RFC3339 = re.compile(r"(\d{4}-\d\d-\d\d[Tt]\d\d:\d\d:)(\d\d)(\.\d+)?([Zz]|[+-]\d\d:\d\d)")
_OWN_KEYS = ("tick", "time_s", "utc", "kind")


def rfc3339(unix_s: float, *, decimals: int = 3) -> str:
    """The instant in UTC as RFC 3339 writes it, with 0 to 6 decimals of a second and Z; rounds to the nearest."""
    unit = 10**decimals
    whole, part = divmod(round(unix_s * unit), unit)
    moment = _EPOCH + timedelta(seconds=whole)
    return moment.strftime("%Y-%m-%dT%H:%M:%S") + (f".{part:0{decimals}d}" if decimals else "") + "Z"


def from_rfc3339(text: str) -> datetime:
    """The instant that an RFC 3339 text names, in UTC, to the microsecond.

    A leap second (`:60`) is the first instant of the next minute, as Unix time counts it. `-00:00` (offset unknown)
    is read as UTC. Raises ValueError for anything else, above all for a time without an offset.
    """
    match = _RFC3339.fullmatch(text)
    if match is None:
        raise ValueError(f"{text!r} is no RFC 3339 time; one looks like 2026-03-01T08:30:00.250Z, the offset included")
    minute, second, fraction, offset = match.groups()
    leap = second == "60"
    moment = datetime.fromisoformat(
        minute.upper() + ("59" if leap else second) + ("+00:00" if offset in "zZ" else offset)
    )
    return (moment + timedelta(seconds=float(fraction or 0) + leap)).astimezone(UTC)


@dataclass(frozen=True, slots=True)
class RunTime:
    """What ticks and host times mean in one run: the tick where `time_s` is 0, and the host's clocks at its start."""

    tick_us: int
    tick_zero: int
    host_zero_s: float
    utc_zero_s: float

    def time_s(self, tick: int) -> float:
        """Seconds since tick zero by the device's clock."""
        return (tick - self.tick_zero) * self.tick_us / 1e6

    def utc(self, host_s: float) -> str:
        """The time of day at which the host's monotonic clock read `host_s`."""
        return rfc3339(self.utc_zero_s + host_s - self.host_zero_s)


@cache
def kind_of(class_name: str) -> str:
    """`GapFound` is `gap_found`."""
    return re.sub(r"(?<=[a-z0-9])(?=[A-Z])|(?<=[A-Z])(?=[A-Z][a-z])", "_", class_name).lower()


def jsonable(value: object) -> Json:
    """The value as JSON can hold it: dataclasses and mappings as objects, enums by value or word, NaN as null.

    Raises TypeError for what has no plain form, so that nothing is written down as a memory address.
    """
    match value:
        case Enum():
            return jsonable(value.value) if isinstance(value, str) else value.name.lower()
        case None | bool() | int() | str():
            return value
        case float():
            return value if math.isfinite(value) else None
        case np.generic():
            return jsonable(value.item())
        case bytes():
            return value.decode("ascii", errors="backslashreplace")
        case PurePath():
            return str(value)
        case datetime():
            return rfc3339(value.timestamp(), decimals=6)
        case Mapping():
            return {str(key): jsonable(part) for key, part in value.items()}
        case tuple() | list() | frozenset() | set():
            parts = [jsonable(part) for part in value]
            return sorted(parts, key=repr) if isinstance(value, set | frozenset) else parts
        case np.ndarray():
            return [jsonable(part) for part in value.tolist()]
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: jsonable(getattr(value, field.name)) for field in dataclasses.fields(value)}
    raise TypeError(f"a {type(value).__name__} cannot be written down as JSON")


def event_object(event: object, *, when: RunTime, host_s: float) -> dict[str, Json]:
    """The object of one line. `event` is a dataclass; its own `tick` and `host_s`, where it has them, say when.

    `host_s` serves where it has none. A field of the event that is named like one of the first four keys (but `tick`)
    gets a trailing underscore.
    """
    fields = jsonable(event)
    if not isinstance(fields, dict) or isinstance(event, Mapping):
        raise TypeError(f"a {type(event).__name__} is no event: events are dataclasses")
    tick = fields.pop("tick", None)
    seen_s = fields.pop("host_s", None)
    known_s = float(seen_s) if isinstance(seen_s, int | float) else host_s
    head: dict[str, Json] = {
        "tick": tick,
        "time_s": round(when.time_s(tick), 6) if isinstance(tick, int) else None,
        "utc": when.utc(known_s),
        "kind": kind_of(type(event).__name__),
    }
    return head | {key + "_" if key in _OWN_KEYS else key: value for key, value in fields.items()}


def encode_line(thing: Mapping[str, Json]) -> bytes:
    """One line of the event log: compact JSON in UTF-8, and LF. A lone surrogate (from a file name) is escaped."""
    text = json.dumps(thing, ensure_ascii=False, allow_nan=False, separators=(",", ":"))
    return (text + "\n").encode("utf-8", errors="backslashreplace")
