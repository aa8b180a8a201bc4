"""Lines on a terminal of some width: whole words, and columns that go on in their column."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.wrapping import wrapped

LIMIT = "vent       rated_ma        900 mA               current that may flow for ever; 0 = trip off"


@pytest.mark.parametrize(
    ("line", "columns", "shown"),
    [
        (LIMIT, 100, [LIMIT]),
        (
            LIMIT,
            80,
            [LIMIT[:79], " " * 48 + "0 = trip off"],
        ),
        ("  A terminal does not tell that", 20, ["  A terminal does", "    not tell that"]),
        ("runs/20261201T115807Z-jog-check-rehearsal-7d05a8", 20, ["runs/20261201T115807Z-jog-check-rehearsal-7d05a8"]),
        ("a terminal that was never told its size", 0, ["a terminal that was", "  never told its", "  size"]),
    ],
)
def test_a_line_is_broken_between_words_and_goes_on_in_its_column(line: str, columns: int, shown: list[str]) -> None:
    assert wrapped(line, columns).split("\n") == shown


@given(st.text(st.sampled_from("ab .-"), max_size=200), st.integers(20, 120))
def test_no_sign_is_lost_and_no_piece_is_too_long_but_for_one_word(line: str, columns: int) -> None:
    pieces = wrapped(line, columns).split("\n")
    assert "".join("".join(pieces).split()) == "".join(line.split())
    assert all(len(piece) <= columns or len(piece.split()) <= 1 for piece in pieces)
