"""The sample codec does what `protocol/vectors/samples.json` asks of every implementation."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TypedDict

import pytest

from ramprig_link.faults import SampleFault
from ramprig_link.samples import Encoder, decode, decode_plain, encode_plain
from samples_reference import reference_decode, reference_encode

FILE = Path(__file__).resolve().parent.parent / "protocol" / "vectors" / "samples.json"


class Refused(TypedDict):
    name: str
    clause: list[str]
    payload: str


class PlainRefused(TypedDict):
    name: str
    clause: list[str]
    body: str


class Taken(TypedDict):
    name: str
    clause: list[str]
    payload: str
    first_tick: int
    period: int
    mask: int
    columns: list[list[int]]


class Logging(TypedDict):
    name: str
    clause: list[str]
    mask: int
    period: int
    first_tick: int
    rows: list[list[int]]
    payloads: list[str]


class Plain(TypedDict):
    name: str
    clause: list[str]
    body: str
    first_tick: int
    period: int
    mask: int
    values: list[int]


class Vectors(TypedDict):
    about: list[str]
    loggings: list[Logging]
    payloads: list[Taken]
    refused: list[Refused]
    plain: list[Plain]
    plain_refused: list[PlainRefused]


VECTORS: Vectors = json.loads(FILE.read_text("utf-8"))


def sent(logging: Logging) -> list[str]:
    encoder = Encoder(logging["mask"], logging["period"])
    made = [
        encoder.add((logging["first_tick"] + i * logging["period"]) % 2**32, row)
        for i, row in enumerate(logging["rows"])
    ]
    return [payload for payload in (*made, encoder.flush()) if payload is not None]


@pytest.mark.parametrize("vector", VECTORS["loggings"], ids=lambda vector: vector["name"])
def test_a_logging_makes_these_payloads_and_no_others(vector: Logging) -> None:
    assert sent(vector) == vector["payloads"]
    rows_first = [decode(payload) for payload in vector["payloads"]]
    assert [list(row) for block in rows_first for row in zip(*block.columns, strict=True)] == vector["rows"]


@pytest.mark.parametrize("vector", VECTORS["payloads"], ids=lambda vector: vector["name"])
def test_a_payload_is_taken(vector: Taken) -> None:
    block = decode(vector["payload"])
    assert (block.first_tick, block.period, block.mask) == (vector["first_tick"], vector["period"], vector["mask"])
    assert block.columns == vector["columns"]


@pytest.mark.parametrize("vector", VECTORS["refused"], ids=lambda vector: vector["name"])
def test_a_payload_is_refused(vector: Refused) -> None:
    with pytest.raises(SampleFault):
        decode(vector["payload"])


@pytest.mark.parametrize("vector", VECTORS["plain"], ids=lambda vector: vector["name"])
def test_a_plain_body_is_made_and_taken(vector: Plain) -> None:
    block = decode_plain(vector["body"].split(" "))
    assert (block.first_tick, block.period, block.mask) == (vector["first_tick"], vector["period"], vector["mask"])
    assert block.columns == [[value] for value in vector["values"]]
    assert encode_plain(vector["first_tick"], vector["period"], vector["mask"], vector["values"]) == vector["body"]


@pytest.mark.parametrize("vector", VECTORS["plain_refused"], ids=lambda vector: vector["name"])
def test_a_plain_body_is_refused(vector: PlainRefused) -> None:
    with pytest.raises(SampleFault):
        decode_plain(vector["body"].split(" "))


def test_the_bitwise_reading_of_the_spec_agrees_with_the_vectors() -> None:
    for logging in VECTORS["loggings"]:
        made = reference_encode(logging["mask"], logging["period"], logging["first_tick"], logging["rows"])
        assert made == logging["payloads"], logging["name"]
    for taken in VECTORS["payloads"]:
        assert reference_decode(taken["payload"])[3] == taken["columns"], taken["name"]
    for refused in VECTORS["refused"]:
        with pytest.raises(ValueError, match=r"too|cannot|left|found"):
            reference_decode(refused["payload"])


def test_every_vector_names_its_clauses() -> None:
    kinds = (VECTORS["loggings"], VECTORS["payloads"], VECTORS["refused"], VECTORS["plain"], VECTORS["plain_refused"])
    unnamed = [vector["name"] for kind in kinds for vector in kind if not vector["clause"]]
    assert unnamed == []
