"""Every field has one spelling: what is printed is read back, and nothing else is read."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig_link.faults import FieldError
from ramprig_link.fields import (
    I32_MAX,
    I32_MIN,
    U32_MAX,
    print_field,
    read_args,
    read_field,
    read_fields,
    read_i32,
    read_u32,
)
from ramprig_link.words import NOTICES, WORDS, Field, Kind, Reason, State

NUMBERISH = st.text(alphabet="0123456789-+. ex_", max_size=14) | st.text(max_size=6)


def canonical(text: str, lowest: int, highest: int) -> bool:
    """SPEC FIELD-1 and FIELD-2 by way of Python's printing: the text is a number and is how that number is printed."""
    try:
        value = int(text)
    except ValueError:
        return False
    return str(value) == text and lowest <= value <= highest


@given(NUMBERISH | st.integers(-(2**40), 2**40).map(str))
def test_a_number_is_read_only_in_its_one_spelling(text: str) -> None:
    for read, lowest, highest in ((read_u32, 0, U32_MAX), (read_i32, I32_MIN, I32_MAX)):
        if canonical(text, lowest, highest):
            assert read(text) == int(text)
        else:
            with pytest.raises(FieldError):
                read(text)


@given(st.integers(I32_MIN, I32_MAX))
def test_a_printed_number_is_read_back(value: int) -> None:
    assert read_i32(print_field(value)) == value


@pytest.mark.parametrize(
    ("kind", "right", "wrong"),
    [
        # SPEC FIELD-4 and FIELD-5.
        (Kind.TOKEN, ["a", "A-9_b.c", "x" * 24], ["", "x" * 25, "a b", "a/b", "caf\u00e9", "a\n"]),
        (Kind.HEX8, ["cbf43926", "00000000"], ["CBF43926", "cbf4392", "cbf439260", "cbf4392g"]),
        (Kind.HEX2, ["00", "ff"], ["0", "FF", "fff", "0x", ""]),
        (Kind.PAYLOAD, ["AZaz09+/"], ["", "AA==", "A-", "A A"]),
        (Kind.AXIS, ["0", "4294967295"], ["-1", "00", ""]),
        (Kind.TICK, ["0", "4294967295"], ["4294967296", "1.0"]),
    ],
)
def test_each_kind_takes_its_spelling_and_no_other(kind: Kind, right: list[str], wrong: list[str]) -> None:
    field = Field("x", kind)
    for text in right:
        assert print_field(read_field(field, text)) in (text, str(int(text, 16)) if kind is Kind.HEX2 else text)
    for text in wrong:
        with pytest.raises(FieldError):
            read_field(field, text)


def test_a_refused_field_says_what_stood_there_and_what_would_be_right() -> None:
    with pytest.raises(FieldError) as caught:
        read_args(WORDS["rest"].args, ("0", "spin", "100"))
    assert caught.value.found == "spin"
    assert str(caught.value) == "'spin' is not one of coast, brake"


def test_arguments_must_be_as_many_as_the_table_says() -> None:
    assert read_args(WORDS["limit"].args, ("sense", "0")) == ("sense", 0)
    assert read_args(WORDS["limit"].args, ("sense", "0", "-1")) == ("sense", 0, -1)
    for texts in ([], ["sense"], ["sense", "0", "1", "1"]):
        with pytest.raises(FieldError):
            read_args(WORDS["limit"].args, texts)


def test_a_host_passes_over_fields_and_words_it_does_not_know() -> None:
    """SPEC KIND-5 and VER-2."""
    fields = NOTICES["trip"].fields
    assert read_fields(fields, ("stall", "1", "3000", "300")) == ("stall", 1, 3000, 300)
    assert read_fields(fields, ("meltdown", "1", "3000", "300", "77")) == ("meltdown", 1, 3000, 300)
    with pytest.raises(FieldError):
        read_fields(fields, ("stall", "1", "3000"))


def test_reading_ends_at_the_first_group() -> None:
    texts = ("off", "none", "0", "12000", "251", "0", "0", "0", "1500")
    assert read_fields(WORDS["state"].fields, texts) == ("off", "none", 0, 12000, 251)


@pytest.mark.parametrize(("value", "text"), [(State.ARMED, "armed"), (Reason.TAG, "tag"), (-5, "-5"), ("a+/", "a+/")])
def test_values_are_printed_as_they_stand_in_a_line(value: object, text: str) -> None:
    assert print_field(value) == text


@pytest.mark.parametrize("value", ["", "a b", "a\n", "\x7f", "\u00e9", True, None, 1.5, b"x"])
def test_what_is_no_field_cannot_be_printed(value: object) -> None:
    with pytest.raises(FieldError):
        print_field(value)
