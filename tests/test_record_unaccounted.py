"""A part that broke off is judged by its rows and events alone: what is missing is found, and nothing that is not."""

from __future__ import annotations

import tracemalloc
from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.record.expected import FOREVER, KeptTicks, Told
from ramprig.record.thinning import kept_by_number
from ramprig.record.unaccounted import JUMP_WINDOWS, Unaccounted, without_account

DISORDERED = "the rows are not in the order in which they were made, or some are there twice"
WINDOW = 50


@pytest.fixture(autouse=True)
def _small_windows(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.record.expected.WINDOW_SAMPLES", WINDOW)
    monkeypatch.setattr("ramprig.record.unaccounted.PERIOD_ROWS", 20)


def told_of(*events: dict[str, Any]) -> Told:
    told = Told()
    for event in events:
        told.take({"utc": "", **event})
    return told


def gap(tick: int, count: int, period: int = 2) -> dict[str, Any]:
    return {"kind": "gap_found", "tick": tick, "count": count, "period_ticks": period}


def spans(*pairs: tuple[int, int | None]) -> list[dict[str, Any]]:
    events: list[dict[str, Any]] = []
    for begin, end in pairs:
        events.append({"kind": "full_rate_begun", "tick": begin})
        if end is not None:
            events.append({"kind": "full_rate_ended", "tick": end})
    return events


def look(
    rows: Sequence[int], *events: dict[str, Any], every: int | None = None, thinned: bool = False, piece: int = 7
) -> Unaccounted:
    told = told_of(*events)
    kept = KeptTicks(every, *told.spans) if thinned else None
    return without_account([np.array(rows[i : i + piece], np.int64) for i in range(0, len(rows), piece)], told, kept)


# ---- a log that has every row ---------------------------------------------------------------------------------------


def test_a_whole_log_is_right_with_what_is_told_and_wrong_without() -> None:
    rows = [*range(0, 200, 2), *range(300, 400, 2), *range(500, 600, 2)]
    assert look(rows, gap(200, 50), gap(400, 50)) == Unaccounted(200, 598, [])
    assert look(rows, gap(200, 20), gap(240, 30), gap(400, 50)).statements == []  # told in two
    untold = "rows are missing, or the period changed, at {} places: ticks {}"
    assert look(rows, gap(200, 50)).statements == [untold.format(1, 400)]
    assert look(rows, gap(200, 49), gap(400, 50)).statements == [untold.format(1, 200)]  # told too small
    assert look(rows).statements == [untold.format(2, "200, 400")]
    alone = [*range(0, 200, 2), 300, *range(400, 600, 2)]  # two holes of one length around one row
    assert look(alone, gap(200, 50)).statements == [untold.format(1, 302)]
    assert look([]) == Unaccounted(0, None, [])
    assert look([4]) == Unaccounted(1, 4, [])


def test_a_changed_period_is_one_place_however_long_it_lasts() -> None:
    rows = [*range(0, 100, 2), *range(100, 140, 4)]
    (statement,) = look(rows).statements
    assert statement.startswith("rows are missing, or the period changed, at 1 places")
    assert look([*range(0, 200, 4), *range(200, 220, 2)]).statements == []


def test_rows_that_are_there_twice_or_go_back_are_told_but_for_a_restart() -> None:
    assert look([0, 2, 4, 4, 6, 8]).statements == [DISORDERED]
    assert look([100, 102, 104, 0, 2, 4]).statements == [DISORDERED]
    assert look([100, 102, 104, 0, 2, 4], {"kind": "restarted"}).statements == []


@settings(max_examples=60, deadline=None)
@given(data=st.data(), period=st.integers(1, 3), rows=st.integers(40, 300), piece=st.integers(1, 90))
def test_a_row_that_is_gone_from_a_whole_log_is_found(data: st.DataObject, period: int, rows: int, piece: int) -> None:
    lost = data.draw(st.sets(st.integers(1, rows - 2), max_size=4), label="lost")
    gone = data.draw(st.integers(1, rows - 2), label="gone")
    ticks = [period * number for number in range(rows) if number not in lost]
    events = [gap(period * number, 1, period) for number in sorted(lost)]
    assert look(ticks, *events, piece=piece).statements == []
    without = [tick for tick in ticks if tick != period * gone]
    assert bool(look(without, *events, piece=piece).statements) == (gone not in lost)


# ---- a thinned log --------------------------------------------------------------------------------------------------


def thinned_rows(made: Sequence[int], period: int, every: int | None, full: Sequence[tuple[int, int]]) -> list[int]:
    ticks = np.array(made, np.int64)
    by_number = kept_by_number(ticks, period, every)
    return [t for t, keep in zip(made, by_number.tolist(), strict=True) if keep or any(a <= t <= b for a, b in full)]


@settings(max_examples=100, deadline=None)
@given(
    data=st.data(),
    period=st.integers(1, 3),
    first=st.integers(0, 9),
    every=st.none() | st.integers(2, 120),
    is_open=st.booleans(),
    piece=st.integers(1, 90),
)
def test_a_thinned_log_is_right_and_a_row_that_is_gone_from_it_is_found(
    data: st.DataObject, period: int, first: int, every: int | None, is_open: bool, piece: int
) -> None:
    made = [first + period * number for number in range(600)]
    full = [(made[0], made[40]), (made[200], made[260]), (made[500], made[580] if is_open else made[-1])]
    hole = data.draw(st.integers(45, 480), label="hole")
    lost = set(made[hole : hole + 30])
    rows = [tick for tick in thinned_rows(made, period, every, full) if tick not in lost]
    pairs = [*full[:2], (full[2][0], None if is_open else full[2][1])]
    events = [*spans(*pairs), gap(made[hole], 30, period)]
    whole = look(rows, *events, every=every, thinned=True, piece=piece)
    assert whole == Unaccounted(len(rows), rows[-1], [])
    place = data.draw(st.integers(2, len(rows) - 2), label="place")
    found = look([*rows[:place], *rows[place + 1 :]], *events, every=every, thinned=True, piece=piece)
    last_odd = max(tick for tick in rows if made[500] <= tick <= made[580])
    if is_open and rows[place] == last_odd:
        return  # it alone told where the open span ended
    assert found.statements == [f"1 rows are missing: ticks {rows[place]}"]


def test_a_second_logging_of_another_phase_or_period_is_looked_at_by_its_own(tmp_path: object) -> None:
    one = list(range(0, 600, 4))
    for other in (list(range(703, 1300, 4)), list(range(701, 1300, 3)), list(range(701, 1300, 2))):
        period = other[1] - other[0]
        full = [(0, 60), (701, 800)]
        rows = thinned_rows(one, 4, 10, full) + thinned_rows(other, period, 10, full)
        assert look(rows, *spans(*full), every=10, thinned=True).statements == []
        gone = rows.index(next(tick for tick in other if tick > 750))
        found = look([*rows[:gone], *rows[gone + 1 :]], *spans(*full), every=10, thinned=True)
        assert found.statements == [f"1 rows are missing: ticks {rows[gone]}"]


def test_ticks_that_begin_anew_in_a_thinned_log_are_a_restart_or_a_fault() -> None:
    rows = [*range(1000, 1050), *range(40)]
    events = spans((1000, 1049), (0, 39))
    assert look(rows, *events, {"kind": "restarted"}, every=10, thinned=True) == Unaccounted(90, 39, [])
    assert look(rows, *events, every=10, thinned=True).statements == [DISORDERED]
    twice = [*range(30), 29, *range(30, 50)]
    assert DISORDERED in look(twice, *spans((0, 49)), every=10, thinned=True).statements


def test_a_tick_that_cannot_be_right_is_told_and_not_walked_to() -> None:
    far = 10 * JUMP_WINDOWS * WINDOW
    found = look([*range(40), far], *spans((0, 39)), every=10, thinned=True)
    assert found.statements == ["the ticks jump ahead after 39, further than a run can last"]
    assert found.rows == 41


# ---- memory ---------------------------------------------------------------------------------------------------------


def pieces_of(samples: int, every: int, rows: int = 1000) -> Iterator[np.ndarray[Any, np.dtype[np.int64]]]:
    """The ticks of a log, made as they are asked for: every tick, or each `every`-th."""
    for begin in range(0, samples, rows * every):
        yield np.arange(begin, min(samples, begin + rows * every), every, dtype=np.int64)


@pytest.mark.parametrize(("every", "thinned"), [(1, False), (1, True), (100, True)])
def test_the_numbers_in_memory_do_not_grow_with_the_log(
    monkeypatch: pytest.MonkeyPatch, every: int, thinned: bool
) -> None:
    monkeypatch.setattr("ramprig.record.expected.WINDOW_SAMPLES", 5000)
    told = told_of(*spans((0, FOREVER - 1 if every == 1 else 0)))
    kept = KeptTicks(every, *told.spans) if thinned else None
    most = []
    for samples in (100_000 * every, 400_000 * every):
        tracemalloc.start()
        found = without_account(pieces_of(samples, every), told, kept)
        most.append(tracemalloc.get_traced_memory()[1] // 8)
        tracemalloc.stop()
        assert found == Unaccounted(samples // every, samples - every, [])
    assert max(most) < 20 * 5000  # numbers of eight bytes, of 400,000 rows and 40 million samples
    assert most[1] < 1.2 * most[0]
