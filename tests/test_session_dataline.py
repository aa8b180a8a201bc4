"""Data lines read in C: the same samples as the codec gives for every line it takes, and no other line taken."""

from __future__ import annotations

import json
import random
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.mock.core import build, dataline, why_not
from ramprig.mock.core.dataline import DataReader, data_reader
from ramprig.session.blocks import block_from
from ramprig_link.check import seal
from ramprig_link.faults import SampleFault
from ramprig_link.fields import HEX2
from ramprig_link.host import Dropped, HostEvent, HostLink, Sampled
from ramprig_link.messages import Data, parse_device_line
from ramprig_link.samples import Encoder, SampleBlock, decode, encode_plain
from ramprig_link.words import PAYLOAD_MAX
from samples_reference import ALPHABET
from test_link_samples import loggings, payloads_of

pytestmark = pytest.mark.skipif(why_not() is not None, reason=why_not() or "")

VECTORS = Path(__file__).resolve().parent.parent / "protocol" / "vectors"
Said = tuple[int, int, int, int, list[list[int]]]


@pytest.fixture(scope="module")
def read() -> DataReader:
    reader = data_reader()
    assert reader is not None
    return reader


READER = data_reader()


def line_of(payload: str, number: int = 0) -> bytes:
    return seal(f"D{number:02x} {payload}".encode()).removesuffix(b"\n")


def said(found: tuple[int, SampleBlock] | None) -> tuple[int, Said] | None:
    """What a reader gave, with plain lists."""
    if found is None:
        return None
    number, block = found
    columns = [[int(value) for value in column] for column in block.columns]
    return number, (block.first_tick, block.period, block.mask, block.rows, columns)


def said_by_the_codec(line: bytes) -> tuple[int, Said] | None:
    """The same from `ramprig_link` alone; None for what is no packed data line, or not a right one."""
    message = parse_device_line(line)
    if not isinstance(message, Data) or " " in message.body:
        return None
    try:
        return said((message.number, decode(message.body)))
    except SampleFault:
        return None


def agrees(line: bytes) -> bool:
    """Whether both read the line alike; returns whether it was taken."""
    assert READER is not None
    mine, codec = said(READER(line)), said_by_the_codec(line)
    assert mine == codec, line
    return mine is not None


def test_every_line_of_the_vectors_is_read_alike() -> None:
    samples = json.loads((VECTORS / "samples.json").read_text("utf-8"))
    for logging in samples["loggings"]:
        assert all(agrees(line_of(payload, 200)) for payload in logging["payloads"])
    for vector in samples["payloads"]:
        assert agrees(line_of(vector["payload"]))
    for vector in samples["refused"]:
        assert not agrees(line_of(vector["payload"]))
    for vector in (*samples["plain"], *samples["plain_refused"]):
        assert not agrees(line_of(vector["body"]))
    lines = json.loads((VECTORS / "lines.json").read_text("utf-8"))
    for vector in lines["from_device"]:
        for line in vector["bytes"].encode("latin-1").split(b"\n"):
            agrees(line)


@given(loggings(), st.sampled_from(sorted(HEX2.values())))
def test_every_line_that_a_device_can_send_is_taken(
    logging: tuple[int, int, int, list[list[int]]], number: int
) -> None:
    assert all(agrees(line_of(payload, number)) for payload in payloads_of(*logging))


@given(loggings(), st.data())
def test_a_damaged_payload_under_a_right_check_is_read_alike(
    logging: tuple[int, int, int, list[list[int]]], data: st.DataObject
) -> None:
    """SPEC DATA-10: among others bits that end too soon, bits left over, escapes that were not needed."""
    payload = list(data.draw(st.sampled_from(payloads_of(*logging))))
    for _ in range(data.draw(st.integers(0, 3))):
        payload[data.draw(st.integers(0, len(payload) - 1))] = data.draw(st.sampled_from(ALPHABET + "-=\n"))
    cut = data.draw(st.integers(0, len(payload)))
    more = data.draw(st.text(ALPHABET, max_size=data.draw(st.sampled_from([0, 1, 2, 40, PAYLOAD_MAX]))))
    agrees(line_of("".join(payload[:cut]) + more))
    agrees(line_of("".join(payload) + more))


@given(st.text(ALPHABET, min_size=1, max_size=PAYLOAD_MAX + 2))
@settings(max_examples=300)
def test_any_payload_is_read_alike(payload: str) -> None:
    agrees(line_of(payload))


@given(st.binary(max_size=240).filter(lambda line: b"\n" not in line))
def test_any_line_is_read_alike(line: bytes) -> None:
    agrees(line)
    agrees(b"D" + line)


@given(loggings(), st.integers(0, 400), st.integers(0, 255))
def test_a_line_with_a_wrong_byte_anywhere_is_read_alike(
    logging: tuple[int, int, int, list[list[int]]], at: int, byte: int
) -> None:
    line = bytearray(line_of(payloads_of(*logging)[0]))
    line[at % len(line)] = byte
    agrees(bytes(line))


def test_long_lively_loggings_are_read_alike() -> None:
    source = random.Random(20)
    encoder = Encoder(0b111 | 1 << 12 | 1 << 18, 1)
    taken = 0
    for i in range(6000):
        spread = (0, 3, 400, 70_000)[i // 300 % 4]
        wild = source.randint(-(2**31), 2**31 - 1) if source.random() < 0.001 else source.randint(-spread, spread)
        payload = encoder.add(i, [wild, wild * 50, source.randint(-spread, spread), 1500 + i % 3, i % 7])
        taken += payload is not None and agrees(line_of(payload))
    assert taken > 100


def test_a_block_is_the_same_from_either_reader(read: DataReader) -> None:
    payloads = payloads_of(0b111, 10, 5, [[i, -i, 7 * i] for i in range(30)])
    for payload in payloads:
        found = read(line_of(payload))
        assert found is not None
        quick, slow = block_from(found[1], 12345), block_from(decode(payload), 12345)
        assert quick.layout is slow.layout
        assert quick.ticks.tolist() == slow.ticks.tolist()
        assert quick.values.tolist() == slow.values.tolist()
        assert (quick.values.dtype, quick.values.shape) == (slow.values.dtype, slow.values.shape)
        assert not quick.values.flags.writeable
        assert not slow.values.flags.writeable


def test_a_block_outlives_the_next_line(read: DataReader) -> None:
    first, second = payloads_of(0b1, 1, 0, [[1]])[0], payloads_of(0b1, 1, 0, [[2]])[0]
    kept = read(line_of(first))
    read(line_of(second))
    assert said(kept) == (0, (0, 1, 1, 1, [[1]]))


def test_a_host_that_reads_in_c_tells_the_same_events() -> None:
    """Numbers, missed lines, lines that came again, plain lines and every kind of damage."""
    source = random.Random(3)
    payloads = payloads_of(0b111, 1, 0, [[source.randint(-900, 900) for _ in range(3)] for _ in range(400)])
    stream = b""
    for i, payload in enumerate(payloads):
        line = bytearray(line_of(payload, i % 256) + b"\n")
        if i % 5 == 1:
            line[source.randrange(len(line) - 1)] ^= 1 << source.randrange(7)
        if i % 7 != 3:
            stream += bytes(line)
        if i % 3 == 0:
            stream += seal(f"D{i % 256:02x} {encode_plain(i, 1, 1, [i])}".encode("ascii"))
            stream += line_of(payload[: source.randrange(len(payload))], i % 256) + b"\r\n"

    def told(link: HostLink) -> list[object]:
        link.ask("again", 3, now_s=0.0)
        events: list[HostEvent] = link.receive(stream, 0.0)
        return [
            (said((event.number, event.block)), event.missed, event.again) if isinstance(event, Sampled) else event
            for event in events
        ]

    quick = told(HostLink(0, read_data=READER))
    assert quick == told(HostLink(0))
    assert sum(isinstance(event, Dropped) for event in quick) > 5


def test_without_a_compiler_the_codec_reads(monkeypatch: pytest.MonkeyPatch) -> None:
    dataline._library.cache_clear()
    monkeypatch.setattr(build, "compiler", lambda: None)
    assert data_reader() is None
    dataline._library.cache_clear()
