"""RFC 3339 times and the event log: any event dataclass becomes one line of JSON."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from enum import IntEnum
from pathlib import PurePosixPath

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.record.events import RunTime, encode_line, event_object, from_rfc3339, jsonable, kind_of, rfc3339
from ramprig.session.events import GapFound, Learned, Tripped

WHEN = RunTime(tick_us=1000, tick_zero=4000, host_zero_s=100.0, utc_zero_s=1_772_353_800.0)


@pytest.mark.parametrize(
    ("text", "unix_s"),
    [  # RFC 3339 section 5.8
        ("1985-04-12T23:20:50.52Z", 482196050.52),
        ("1996-12-19T16:39:57-08:00", 851042397.0),
        ("1937-01-01T12:00:27.87+00:20", -1041337172.13),
        ("1990-12-31T23:59:60Z", 662688000.0),  # a leap second: Unix time counts it as the next second's number
        ("1990-12-31T15:59:60-08:00", 662688000.0),
    ],
)
def test_the_examples_of_rfc_3339_are_read(text: str, unix_s: float) -> None:
    assert from_rfc3339(text).timestamp() == pytest.approx(unix_s, abs=1e-6)


@pytest.mark.parametrize(
    ("unix_s", "decimals", "text"),
    [
        (482196050.52, 2, "1985-04-12T23:20:50.52Z"),
        (851042397, 0, "1996-12-20T00:39:57Z"),
        (-1041337172.13, 2, "1937-01-01T11:40:27.87Z"),
        (1_772_353_799.9996, 3, "2026-03-01T08:30:00.000Z"),
    ],
)
def test_the_same_instants_are_written_in_utc(unix_s: float, decimals: int, text: str) -> None:
    assert rfc3339(unix_s, decimals=decimals) == text


def test_an_unknown_offset_is_read_as_utc() -> None:
    """RFC 3339 section 4.3: -00:00."""
    assert from_rfc3339("2026-03-01t08:30:00-00:00") == datetime(2026, 3, 1, 8, 30, tzinfo=UTC)


@pytest.mark.parametrize(
    "text",
    ["2026-03-01T08:30:00", "2026-03-01 08:30:00Z", "2026-03-01", "2026-13-01T08:30:00Z", "26-03-01T08:30:00Z", ""],
)
def test_a_time_without_an_offset_or_of_another_form_is_refused(text: str) -> None:
    with pytest.raises(ValueError, match=r"RFC 3339|month"):
        from_rfc3339(text)


@given(st.datetimes(datetime(1900, 1, 1), datetime(2200, 1, 1)))
def test_what_is_written_is_read_back(moment: datetime) -> None:
    exact = moment.replace(tzinfo=UTC, microsecond=moment.microsecond // 1000 * 1000)
    unix_s = (exact - datetime(1970, 1, 1, tzinfo=UTC)) / timedelta(seconds=1)
    assert from_rfc3339(rfc3339(unix_s)) == exact


def line_of(event: object) -> dict[str, object]:
    encoded = encode_line(event_object(event, when=WHEN, host_s=103.5))
    assert encoded.endswith(b"\n")
    assert encoded.count(b"\n") == 1
    found = json.loads(encoded)
    assert isinstance(found, dict)
    return found


def test_an_event_of_the_session_is_one_line() -> None:
    event = Tripped(
        tick=5250, host_s=101.3, trip="overcurrent", index=0, value=2600, bound=2500, learned=Learned.NOTICE
    )
    assert encode_line(event_object(event, when=WHEN, host_s=0.0)) == (
        b'{"tick":5250,"time_s":1.25,"utc":"2026-03-01T08:30:01.300Z","kind":"tripped",'
        b'"trip":"overcurrent","index":0,"value":2600,"bound":2500,"learned":"notice"}\n'
    )


def test_an_event_that_no_tick_is_known_of_says_so() -> None:
    found = line_of(GapFound(tick=None, host_s=102.0, count=3, period_ticks=2, reason="lost"))
    assert found["tick"] is None
    assert found["time_s"] is None
    assert found["kind"] == "gap_found"


class Colour(IntEnum):
    DEEP_RED = 4


@dataclass(frozen=True)
class Odd:
    kind: str
    colour: Colour
    number: np.int32
    speed: float
    raw: bytes
    path: PurePosixPath
    parts: tuple[object, ...]
    table: dict[str, object]
    text: str


def test_any_dataclass_is_written_with_its_fields_in_plain_form() -> None:
    odd = Odd(
        "x", Colour.DEEP_RED, np.int32(7), math.nan, b"\xffab", PurePosixPath("a/b"), (1, "\n"), {"k": None}, "ü\u2028"
    )
    assert line_of(odd) == {
        "tick": None, "time_s": None, "utc": "2026-03-01T08:30:03.500Z", "kind": "odd",
        "kind_": "x", "colour": "deep_red", "number": 7, "speed": None, "raw": "\\xffab", "path": "a/b",
        "parts": [1, "\n"], "table": {"k": None}, "text": "ü\u2028",
    }  # fmt: skip


def test_a_lone_surrogate_of_a_file_name_is_kept_as_an_escape() -> None:
    assert json.loads(encode_line({"file": "a\udc80b"})) == {"file": "a\udc80b"}


@pytest.mark.parametrize("thing", [object(), 3, {"tick": 1}, Tripped])
def test_what_is_no_event_is_refused(thing: object) -> None:
    with pytest.raises(TypeError):
        event_object(thing, when=WHEN, host_s=0.0)


def test_sets_and_arrays_and_times_have_a_plain_form() -> None:
    assert jsonable({3, 1}) == [1, 3]
    assert jsonable(np.array([1.5, math.inf])) == [1.5, None]
    assert jsonable(datetime(2026, 3, 1, 8, 30, tzinfo=UTC)) == "2026-03-01T08:30:00.000000Z"


@pytest.mark.parametrize(
    ("name", "kind"), [("GapFound", "gap_found"), ("LEDTest", "led_test"), ("Axis2Off", "axis2_off")]
)
def test_kinds_are_class_names_in_small_letters(name: str, kind: str) -> None:
    assert kind_of(name) == kind
