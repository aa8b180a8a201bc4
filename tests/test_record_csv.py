"""RFC 4180 records, printing of whole columns, and the rows of a samples file read back with the csv module."""

from __future__ import annotations

import csv
import io
import itertools
import math
from decimal import Decimal

import numpy as np
import pytest
from dev import bench_csv
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.record import digits
from ramprig.record.columns import (
    MotorColumns,
    ServoColumns,
    columns_of,
    predicted_bytes,
    state_label,
    turns_decimals,
)
from ramprig.record.csvfile import field, record
from ramprig.record.rows import RowPrinter
from ramprig.record.speed import SpeedEstimator
from ramprig.session.blocks import Block, Layout
from record_samples import MASK, TICK_US, blocks_of, vent_columns, vent_values


def read_back(data: bytes) -> list[list[str]]:
    return list(csv.reader(io.StringIO(data.decode("utf-8"), newline="")))


@pytest.mark.parametrize(
    ("texts", "line"),
    [
        (["aaa", "bbb", "ccc"], b"aaa,bbb,ccc\r\n"),  # RFC 4180 section 2, rule 1
        (["aaa", "b\r\nbb", "ccc"], b'aaa,"b\r\nbb",ccc\r\n'),  # rule 6
        (["aaa", 'b"bb', "ccc"], b'aaa,"b""bb",ccc\r\n'),  # rule 7
        (["a,b", 'c"d', "e\r\nf", "g"], b'"a,b","c""d","e\r\nf",g\r\n'),  # what Python's csv module writes
        ([" spaces stay "], b" spaces stay \r\n"),  # rule 4
        (["", ""], b",\r\n"),
        ([""], b'""\r\n'),
    ],
)
def test_records_are_those_of_rfc_4180(texts: list[str], line: bytes) -> None:
    assert record(texts) == line
    assert read_back(line) == [texts]


def test_the_quoted_examples_of_rfc_4180_are_read_as_the_same_fields() -> None:
    """Section 2, rules 5 to 7, in the RFC's own spelling, which quotes more than it must."""
    assert read_back(b'"aaa","b\r\nbb","ccc"\r\nzzz,yyy,xxx') == [["aaa", "b\r\nbb", "ccc"], ["zzz", "yyy", "xxx"]]
    assert read_back(b'"aaa","b""bb","ccc"') == [["aaa", 'b"bb', "ccc"]]


@given(st.lists(st.text(st.characters(exclude_categories=["Cs"], exclude_characters="\0"), max_size=8), min_size=1))
def test_any_record_is_read_back_equal_by_the_csv_module(texts: list[str]) -> None:
    assert read_back(record(texts)) == [texts]
    assert field(texts[0]) in record(texts).decode("utf-8")


@settings(max_examples=300, deadline=None)
@given(
    st.lists(st.integers(-(10**18), 10**18) | st.integers(-20_000, 20_000), min_size=1, max_size=12),
    st.integers(0, digits.DECIMALS_MAX),
)
def test_numbers_are_printed_as_the_decimal_module_would(values: list[int], decimals: int) -> None:
    pieces = digits.number_pieces(np.array(values, dtype=np.int64), decimals=decimals, lead="")
    printed = digits.joined([*pieces, digits.constant_piece("\n", len(values))]).decode("ascii")
    expected = [
        f"{Decimal(value).scaleb(-decimals):.{decimals}f}" if value else f"{0:.{decimals}f}" for value in values
    ]
    assert printed.split("\n")[:-1] == expected


def test_more_decimals_than_there_are_tables_for_are_refused() -> None:
    with pytest.raises(ValueError, match="8 decimals"):
        digits.number_pieces(np.zeros(1, np.int64), decimals=8)


def test_a_text_that_fits_no_word_is_refused() -> None:
    with pytest.raises(ValueError, match="longer than one word"):
        digits.words_of(["12345"])


def test_the_header_has_the_columns_of_the_bench_in_order() -> None:
    assert vent_columns().names == (
        "tick", "time_s", "vent.duty_pct", "vent.counts", "vent.position_rev", "vent.speed_rpm", "vent.current_a",
        "latch.pulse_us", "latch.angle_deg", "supply_v", "state",
    )  # fmt: skip
    assert {("duty", 0), ("counts", 0), ("current_ma", 0), ("pulse_us", 0), ("supply_mv", 0), ("state", 0)} == set(
        vent_columns().needed
    )


def printer(*, duty_sign: int = 1, count_sign: int = 1) -> RowPrinter:
    columns = columns_of(
        [MotorColumns("vent", 0, 1632.67, duty_sign, count_sign)],
        [ServoColumns("latch", 0, neutral_us=1500, us_per_deg=10)],
        tick_us=TICK_US,
    )
    return RowPrinter(columns, tick_us=TICK_US, tick_zero=4000)


def table(data: bytes) -> dict[str, list[str]]:
    rows = read_back(data)
    assert all(len(row) == len(rows[0]) for row in rows)
    return dict(zip(vent_columns().names, map(list, zip(*rows, strict=True)), strict=True))


def test_every_value_is_read_back_as_the_device_told_it() -> None:
    values = vent_values(1000)
    found = table(printer().rows(blocks_of(1000)))
    assert list(map(int, found["tick"])) == list(range(5000, 7000, 2))
    assert [round(float(text) * 1000) for text in found["time_s"]] == list(range(1000, 3000, 2))
    assert [round(float(text) * 100) for text in found["vent.duty_pct"]] == values[:, 0].tolist()
    assert list(map(int, found["vent.counts"])) == values[:, 1].tolist()
    assert [round(float(text) * 1000) for text in found["vent.current_a"]] == values[:, 2].tolist()
    assert list(map(int, found["latch.pulse_us"])) == values[:, 3].tolist()
    assert [round(float(text) * 10) + 1500 for text in found["latch.angle_deg"]] == values[:, 3].tolist()
    assert [round(float(text) * 1000) for text in found["supply_v"]] == values[:, 4].tolist()
    assert found["state"] == [state_label(bits) for bits in values[:, 5].tolist()]


def test_position_and_speed_follow_from_the_logged_counts() -> None:
    """So a wrong constant can be mended afterwards."""
    found = table(printer().rows(blocks_of(1000)))
    counts = np.array(found["vent.counts"], dtype=np.int64)
    positions = np.array(found["vent.position_rev"], dtype=np.float64)
    assert positions == pytest.approx(counts / 1632.67, abs=0.51e-5)
    speeds = np.array([float(text) if text else math.nan for text in found["vent.speed_rpm"]])
    again = SpeedEstimator(counts_per_rev=1632.67, tick_s=TICK_US / 1e6).feed(
        np.array(found["tick"], dtype=np.int64), counts.astype(np.int32), period_ticks=2
    )
    assert speeds == pytest.approx(again, abs=0.51e-3, nan_ok=True)
    assert np.nanmax(speeds) == pytest.approx(1.7 / 0.002 / 1632.67 * 60, rel=0.05)


def test_the_signs_of_a_bench_turn_the_columns_but_not_the_counts() -> None:
    plain = table(printer().rows(blocks_of(300)))
    turned = table(printer(duty_sign=-1, count_sign=-1).rows(blocks_of(300)))
    for name in ("vent.duty_pct", "vent.position_rev", "vent.speed_rpm", "vent.current_a"):
        pairs = zip(plain[name], turned[name], strict=True)
        assert all(first == second == "" or float(first) == -float(second) for first, second in pairs), name
        assert any(text.startswith("-") for text in turned[name])
    assert turned["vent.counts"] == plain["vent.counts"]
    assert not any(set(text) <= set("-0.") and text.startswith("-") for text in turned["vent.duty_pct"])


@settings(max_examples=40, deadline=None)
@given(st.lists(st.integers(1, 999), unique=True, max_size=10).map(sorted), st.lists(st.integers(0, 9), max_size=9))
def test_the_rows_do_not_depend_on_how_blocks_are_cut_or_batched(cuts: list[int], joins: list[int]) -> None:
    whole = blocks_of(1000, size=1000)
    expected = printer().rows(whole)
    ends = [0, *cuts, 1000]
    parts = [
        Block(whole[0].ticks[begin:end], whole[0].values[begin:end], whole[0].layout)
        for begin, end in itertools.pairwise(ends)
    ]
    batches = np.split(np.arange(len(parts)), sorted(set(joins)))
    one = printer()
    assert b"".join(one.rows([parts[i] for i in batch.tolist()]) for batch in batches) == expected


def test_a_channel_that_is_not_logged_leaves_its_fields_empty() -> None:
    layout = Layout.of(MASK & ~0b10 & ~(1 << 12), 2)
    block = Block(np.array([5000, 5002]), np.array([[1, 2, 3, 1], [1, 2, 3, 1]], dtype=np.int32), layout)
    found = table(printer().rows([block]))
    for name in ("vent.counts", "vent.position_rev", "vent.speed_rpm", "latch.pulse_us", "latch.angle_deg"):
        assert found[name] == ["", ""]
    assert found["vent.duty_pct"] == ["0.01", "0.01"]
    assert found["vent.current_a"] == ["0.002", "0.002"]


def test_a_servo_without_pulses_has_no_angle() -> None:
    values = vent_values(3).copy()
    values[:, 3] = (0, 1490, 0)
    found = table(printer().rows([Block(np.array([5000, 5002, 5004]), values, Layout.of(MASK, 2))]))
    assert found["latch.pulse_us"] == ["0", "1490", "0"]
    assert found["latch.angle_deg"] == ["", "-1.00", ""]


def test_counts_go_on_past_the_wrap_of_32_bits() -> None:
    values = vent_values(4).copy()
    values[:, 1] = (2**31 - 2, 2**31 - 1, -(2**31), -(2**31) + 1)
    found = table(printer().rows([Block(np.arange(5000, 5008, 2), values, Layout.of(MASK, 2))]))
    assert list(map(int, found["vent.counts"])) == [2**31 - 2, 2**31 - 1, 2**31, 2**31 + 1]


def test_ticks_that_jump_back_are_a_restart_and_counts_begin_anew() -> None:
    one = printer()
    before, after = blocks_of(20, first_tick=9000)[0], blocks_of(20, first_tick=10)[0]
    shifted = Block(before.ticks, (before.values + 2**30).astype(np.int32), before.layout)
    found = table(one.rows([shifted, after]))
    assert list(map(int, found["vent.counts"]))[20:] == after.values[:, 1].tolist()
    assert found["vent.speed_rpm"][20] == ""
    assert found["time_s"][20] == "-3.990"


def test_the_state_is_told_in_words_and_nothing_of_it_is_lost() -> None:
    assert state_label(0x001) == "armed"
    assert state_label(0x015) == "armed dwell_lock at_slew"
    assert state_label(0x403) == "tripped overcurrent"
    assert state_label(0xF043) == "tripped bit6 bit12 bit13 bit14 bit15"
    assert state_label(0xF03) == "tripped trip15"
    assert len({state_label(bits) for bits in range(1 << 16)}) == 1 << 16


@pytest.mark.parametrize(("per_rev", "decimals"), [(12.0, 5), (1632.67, 5), (10_000.0, 5), (65_536.0, 6), (1e9, 7)])
def test_turns_have_enough_decimals_to_tell_counts_apart(per_rev: float, decimals: int) -> None:
    assert turns_decimals(per_rev) == decimals


def test_time_is_told_to_the_microsecond_where_ticks_are_not_whole_milliseconds() -> None:
    columns = columns_of([], [], tick_us=1024)
    rows = read_back(
        RowPrinter(columns, tick_us=1024, tick_zero=0).rows(
            [Block(np.array([1, 2]), np.array([[12000, 1]] * 2, dtype=np.int32), Layout.of(0b101 << 16, 1))]
        )
    )
    assert rows == [["1", "0.001024", "12.000", "armed"], ["2", "0.002048", "12.000", "armed"]]


@pytest.mark.parametrize("size", [10, 50, 1024])
def test_the_forecast_of_the_size_is_near_the_truth(size: int) -> None:
    one = printer()
    written = len(one.header()) + len(one.rows(blocks_of(20_000, size=size)))
    assert predicted_bytes(vent_columns(), 20_000, period_ticks=2) == pytest.approx(written, rel=0.2)
    assert predicted_bytes(vent_columns(), 0) == len(one.header())


@pytest.mark.parametrize(
    ("motors", "servos", "message"),
    [
        ([MotorColumns("vent", 0, 0.0)], [], "counts_per_rev"),
        ([MotorColumns("vent", 0, 10.0, duty_sign=2)], [], "signs"),
        ([], [ServoColumns("latch", 0, 1500, 0)], "us_per_deg"),
        ([MotorColumns("vent", 0, 10.0), MotorColumns("vent", 1, 10.0)], [], "vent.duty_pct"),
    ],
)
def test_columns_that_cannot_be_are_refused(
    motors: list[MotorColumns], servos: list[ServoColumns], message: str
) -> None:
    with pytest.raises(ValueError, match=message):
        columns_of(motors, servos, tick_us=TICK_US)


def test_temperature_is_a_column_where_the_bench_has_it() -> None:
    columns = columns_of([], [], tick_us=TICK_US, temperature=True)
    assert columns.names == ("tick", "time_s", "supply_v", "temperature_degc", "state")


def test_the_bench_against_the_csv_module_compares_the_same_rows() -> None:
    blocks = bench_csv.bench_blocks(500)
    rows = [tuple(map(bench_csv.number, row)) for row in read_back(bench_csv.bench_printer().rows(blocks))]
    by_csv_module = io.StringIO(newline="")
    csv.writer(by_csv_module).writerows(rows)
    again = [tuple(map(bench_csv.number, row)) for row in read_back(by_csv_module.getvalue().encode("utf-8"))]
    assert again == rows
    assert len(rows) == 500
    assert bench_csv.csv_ratio(rows=500, repeats=1) > 0
