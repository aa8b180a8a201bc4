"""The vectors of protocol/vectors/lines.json hold for the Python implementation, whole and byte by byte."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from ramprig_link.check import crc16, digest, seal
from ramprig_link.device import Counts, DeviceLink, Incoming, Reply
from ramprig_link.lines import LineSplitter, Overlong
from ramprig_link.messages import Answer, Bare, Data, Garbled, Notice, Request, parse_device_line
from ramprig_link.words import DEVICE_LINE_MAX, Reason

FILE = Path(__file__).resolve().parent.parent / "protocol" / "vectors" / "lines.json"
VECTORS: dict[str, Any] = json.loads(FILE.read_text("utf-8"))

Vector = dict[str, Any]
Result = dict[str, Any]


def named(vector: Vector) -> str:
    return f"{vector['clause']}: {vector['note']}"


def pieces(data: bytes, *, one_by_one: bool) -> list[bytes]:
    return [data[i : i + 1] for i in range(len(data))] if one_by_one else [data]


def seen_by_device(data: bytes, *, one_by_one: bool) -> list[Result]:
    """What a new device makes of the bytes; a line that it only counts is recognised by the counts."""
    link = DeviceLink()
    found: list[Result] = []
    told = Counts()

    def count() -> None:
        overlong = link.counts.overlong - told.overlong
        garbled = link.counts.garbled - told.garbled - overlong
        found.extend([{"kind": "overlong"}] * overlong + [{"kind": "garbled"}] * garbled)
        told.garbled, told.overlong = link.counts.garbled, link.counts.overlong

    for piece in pieces(data, one_by_one=one_by_one):
        for incoming in link.receive(piece, 7):
            count()
            found.append(as_taken(incoming))
            if isinstance(incoming, Request):
                link.no(incoming, 7, Reason.STATE)
        count()
    return found


def as_taken(incoming: Incoming) -> Result:
    match incoming:
        case Request(tag=tag, word=word, args=args):
            return {"kind": "request", "tag": f"{tag:02x}", "word": word, "args": list(args)}
        case Bare(word=word):
            return {"kind": "bare", "word": word}
        case Reply(line=line):
            answer = parse_device_line(line.rstrip(b"\n"))
            assert isinstance(answer, Answer)
            return {"kind": "refused", "tag": f"{answer.tag:02x}", "reason": answer.reason}


def seen_by_host(data: bytes, *, one_by_one: bool) -> list[Result]:
    splitter = LineSplitter(DEVICE_LINE_MAX)
    return [as_result(line) for piece in pieces(data, one_by_one=one_by_one) for line in splitter.feed(piece)]


def as_result(line: bytes | Overlong) -> Result:
    if isinstance(line, Overlong):
        return {"kind": "overlong"}
    match parse_device_line(line):
        case Garbled():
            return {"kind": "garbled"}
        case Answer(tag=tag, ok=ok, tick=tick, fields=fields):
            return {"kind": "answer", "tag": f"{tag:02x}", "ok": ok, "tick": tick, "fields": list(fields)}
        case Notice(number=number, word=word, tick=tick, fields=fields):
            return {"kind": "notice", "number": f"{number:02x}", "word": word, "tick": tick, "fields": list(fields)}
        case Data(number=number, body=body):
            return {"kind": "data", "number": f"{number:02x}", "body": body}


@pytest.mark.parametrize("one_by_one", [False, True], ids=["whole", "byte by byte"])
@pytest.mark.parametrize("vector", VECTORS["from_host"], ids=named)
def test_a_device_reads_the_line_as_the_vector_says(vector: Vector, one_by_one: bool) -> None:
    assert seen_by_device(vector["bytes"].encode("latin-1"), one_by_one=one_by_one) == vector["gives"]


@pytest.mark.parametrize("one_by_one", [False, True], ids=["whole", "byte by byte"])
@pytest.mark.parametrize("vector", VECTORS["from_device"], ids=named)
def test_a_host_reads_the_line_as_the_vector_says(vector: Vector, one_by_one: bool) -> None:
    assert seen_by_host(vector["bytes"].encode("latin-1"), one_by_one=one_by_one) == vector["gives"]


@pytest.mark.parametrize("vector", VECTORS["checks"], ids=lambda vector: vector["body"][:20])
def test_the_check_is_the_vectors(vector: Vector) -> None:
    body = vector["body"].encode("ascii")
    assert f"{crc16(body):04x}" == vector["check"]
    assert seal(body) == body + b" " + vector["check"].encode("ascii") + b"\n"


@pytest.mark.parametrize("vector", VECTORS["digests"], ids=lambda vector: str(vector["limits"]))
def test_the_digest_is_the_vectors(vector: Vector) -> None:
    assert digest(vector["limits"]) == vector["digest"]
