"""The audit finds by windows what comparing everything at once would find, whatever the loggings, gaps and pieces."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.record.expected import EXAMPLES_MAX, FOREVER, KeptTicks, compare, some


@pytest.fixture(autouse=True, scope="module")
def _small_windows() -> Any:  # a fixture that yields
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("ramprig.record.expected.WINDOW_SAMPLES", 7)
        yield


def logging(first: int, period: int, count: int) -> dict[str, int]:
    return {"first_tick": first, "period_ticks": period, "expected": count}


@st.composite
def accounts(draw: st.DrawFn) -> dict[str, Any]:
    """Loggings one after another, at times with ticks that begin anew, and gaps in them."""
    loggings, gaps, tick = [], [], 100
    for _ in range(draw(st.integers(1, 4))):
        tick = draw(st.integers(0, 50)) + (0 if draw(st.integers(0, 4)) == 0 else tick)
        period, count = draw(st.integers(1, 3)), draw(st.integers(0, 40))
        loggings.append(logging(tick, period, count))
        if count > 2:
            begin = draw(st.integers(0, count - 1))
            size = draw(st.integers(0, count - begin))
            if size:
                gaps.append({"first_tick": tick + begin * period, "count": size, "period_ticks": period})
        tick += period * count
    return {"loggings": loggings, "gaps": gaps}


def ticks_of(account: dict[str, Any], kept: KeptTicks | None) -> list[int]:
    """By definition, one tick at a time."""
    found = []
    for each in account["loggings"]:
        period = each["period_ticks"]
        for number in range(each["expected"]):
            tick = each["first_tick"] + number * period
            fits = [gap for gap in account["gaps"] if gap["period_ticks"] == period]
            offsets = [(gap, gap["first_tick"] - each["first_tick"]) for gap in fits]
            own = [
                (offset // period, gap["count"])
                for gap, offset in offsets
                if offset % period == 0 and 0 <= offset // period < each["expected"]
            ]
            lost = any(begin <= number < begin + size for begin, size in own)
            if not lost and (kept is None or is_kept(kept, tick, period)):
                found.append(tick)
    return found


def is_kept(kept: KeptTicks, tick: int, period: int) -> bool:
    spans = zip(kept.begins.tolist(), kept.ends.tolist(), strict=True)
    return any(a <= tick <= b for a, b in spans) or (kept.every is not None and tick // period % kept.every == 0)


RULES = st.sampled_from(
    [
        None,
        KeptTicks(None, np.array([], np.int64), np.array([], np.int64)),
        KeptTicks(3, np.array([110, 150], np.int64), np.array([120, FOREVER], np.int64)),
        KeptTicks(5, np.array([90, 105], np.int64), np.array([99, 140], np.int64)),
    ]
)


@settings(max_examples=150, deadline=None)
@given(account=accounts(), kept=RULES, data=st.data())
def test_a_log_that_holds_what_it_must_is_found_right_and_any_change_is_counted(
    account: dict[str, Any], kept: KeptTicks | None, data: st.DataObject
) -> None:
    ticks = ticks_of(account, kept)
    size = data.draw(st.integers(1, 60), label="piece")

    def found_in(rows: list[int]) -> Any:
        return compare(account, kept, [np.array(rows[i : i + size], np.int64) for i in range(0, len(rows), size)])

    whole = found_in(ticks)
    if len(set(ticks)) < len(ticks):
        return  # two loggings claim the same tick: nothing can be told of it
    assert (whole.rows, whole.missing, whole.unexpected, whole.statements()) == (len(ticks), 0, 0, [])
    if not ticks:
        return
    place = data.draw(st.integers(0, len(ticks) - 1), label="place")
    gone = found_in([*ticks[:place], *ticks[place + 1 :]])
    assert (gone.missing, gone.unexpected, gone.absent) == (1, 0, [ticks[place]])
    stranger = max(ticks) + 5000
    more = found_in([*ticks, stranger])
    assert (more.missing, more.unexpected, more.extra) == (0, 1, [stranger])
    twice = found_in([*ticks[: place + 1], ticks[place], *ticks[place + 1 :]])
    assert twice.statements() != []


def test_rows_in_another_order_are_told() -> None:
    account = {"loggings": [logging(0, 1, 5)], "gaps": []}
    found = compare(account, None, [np.array([0, 2, 1, 3, 4], np.int64)])
    assert found.statements() == ["the rows are not in the order in which they were made, or some are there twice"]


def test_statements_name_the_first_few_ticks() -> None:
    account = {"loggings": [logging(0, 10, 100)], "gaps": []}
    found = compare(account, None, [np.arange(700, 1000, 10, dtype=np.int64)])
    assert found.statements() == ["70 samples are missing that were received: ticks 0, 10, 20, 30, 40 ..."]
    assert some(list(range(EXAMPLES_MAX))) == "0, 1, 2, 3, 4"
