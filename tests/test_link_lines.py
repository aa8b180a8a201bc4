"""Bytes become the same lines however they come in pieces, in bounded memory."""

from __future__ import annotations

import sys
from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig_link.lines import LineSplitter, Overlong

LIMIT = 20

# Streams rich in what matters: line ends, CRs, and lengths around the limit.
KNOTS = st.sampled_from([b"\n", b"\r\n", b"\r", b"a1 beat", b"x" * (LIMIT - 1), b"y" * LIMIT])
STREAMS = st.lists(st.one_of(KNOTS, st.binary(max_size=30)), max_size=12).map(b"".join)
CUTS = st.lists(st.integers(0, 200), max_size=10)


def cut(data: bytes, places: list[int]) -> list[bytes]:
    edges = [0, *sorted(min(place, len(data)) for place in places), len(data)]
    return [data[start:end] for start, end in pairwise(edges)]


def fed(pieces: list[bytes]) -> list[bytes | Overlong]:
    splitter = LineSplitter(LIMIT)
    return [line for piece in pieces for line in splitter.feed(piece)]


def by_definition(data: bytes) -> list[bytes | Overlong]:
    """SPEC LINE-2, LINE-6 and BAD-3 said plainly, with the whole stream in hand."""
    found: list[bytes | Overlong] = []
    for line in data.split(b"\n")[:-1]:
        if len(line) + 1 > LIMIT:
            found.append(Overlong(len(line) + 1))
        elif line.removesuffix(b"\r"):
            found.append(line.removesuffix(b"\r"))
    return found


@given(STREAMS, CUTS)
def test_whole_byte_by_byte_and_split_anywhere_give_the_same_lines(data: bytes, places: list[int]) -> None:
    expected = by_definition(data)
    assert fed([data]) == expected
    assert fed([data[i : i + 1] for i in range(len(data))]) == expected
    assert fed(cut(data, places)) == expected


@given(STREAMS, STREAMS)
def test_bytes_behind_a_line_change_nothing_before_them(data: bytes, behind: bytes) -> None:
    assert fed([data + b"\n" + behind])[: len(fed([data + b"\n"]))] == fed([data + b"\n"])


@pytest.mark.parametrize("piece", [b"z", b"z" * 1000, b"z" * LIMIT])
def test_a_line_without_end_is_not_held(piece: bytes) -> None:
    splitter = LineSplitter(LIMIT)
    for _ in range(5000):
        assert splitter.feed(piece) == []
        # SPEC LINE-5: no longer buffer than the limit.
        assert sys.getsizeof(splitter._held) <= sys.getsizeof(b"") + LIMIT
    assert splitter.feed(b"\n") == [Overlong(5000 * len(piece) + 1)]
    assert splitter.feed(b"ok\n") == [b"ok"]
