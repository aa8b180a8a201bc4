"""Data lines read in C: the same samples as the codec gives for every line it takes, and no other line taken."""

from __future__ import annotations

import json
import random
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.mock.core import build, dataline, why_not
from ramprig.mock.core.dataline import ROWS_MAX, data_reader
from ramprig.session.blocks import block_from
from ramprig_link.check import seal
from ramprig_link.faults import SampleFault
from ramprig_link.fields import HEX2
from ramprig_link.host import WAITING_MAX, Answered, DataReader, Dropped, HostEvent, HostLink, Sampled
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


def said(number: int, block: SampleBlock) -> tuple[int, Said]:
    """Number and samples of a line, with plain lists."""
    columns = [[int(value) for value in column] for column in block.columns]
    return number, (block.first_tick, block.period, block.mask, block.rows, columns)


def said_in_c(line: bytes) -> tuple[int, Said] | None:
    """What the reader gave for one line; None where it did not take it."""
    assert READER is not None
    found = READER(line + b"\n", 0)
    if found is None:
        return None
    assert (found.first_number, found.end) == (found.last_number, len(line) + 1)
    return said(found.last_number, found.block)


def said_by_the_codec(line: bytes) -> tuple[int, Said] | None:
    """The same from `ramprig_link` alone; None for what is no packed data line, or not a right one."""
    message = parse_device_line(line)
    if not isinstance(message, Data) or " " in message.body:
        return None
    try:
        return said(message.number, decode(message.body))
    except SampleFault:
        return None


def agrees(line: bytes) -> bool:
    """Whether both read the line alike; returns whether it was taken."""
    mine, codec = said_in_c(line), said_by_the_codec(line)
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
        found = read(line_of(payload) + b"\n", 0)
        assert found is not None
        quick, slow = block_from(found.block, 12345), block_from(decode(payload), 12345)
        assert quick.layout is slow.layout
        assert quick.ticks.tolist() == slow.ticks.tolist()
        assert quick.values.tolist() == slow.values.tolist()
        assert (quick.values.dtype, quick.values.shape) == (slow.values.dtype, slow.values.shape)
        assert not quick.values.flags.writeable
        assert not slow.values.flags.writeable


def test_a_block_outlives_the_next_line(read: DataReader) -> None:
    first, second = payloads_of(0b1, 1, 0, [[1]])[0], payloads_of(0b1, 1, 0, [[2]])[0]
    kept = read(line_of(first) + b"\n", 0)
    read(line_of(second) + b"\n", 0)
    assert kept is not None
    assert said(0, kept.block) == (0, (0, 1, 1, 1, [[1]]))


def put_together(blocks: list[SampleBlock]) -> Said:
    """Blocks that follow each other, as one."""
    first = blocks[0]
    columns = [[int(v) for block in blocks for v in block.columns[place]] for place in range(len(first.columns))]
    return first.first_tick, first.period, first.mask, sum(block.rows for block in blocks), columns


@given(st.data())
@settings(max_examples=60)
def test_lines_read_together_are_those_that_follow_each_other(data: st.DataObject) -> None:
    """SPEC DATA-1, DATA-3: by number, tick, period and mask, all of them right; what comes after is left alone."""
    assert READER is not None
    mask, period, start = (
        0b111,
        data.draw(st.sampled_from([1, 10, 0xFFFF])),
        data.draw(st.sampled_from([0, 2**32 - 40])),
    )
    samples = [[data.draw(st.integers(-9, 9)), 3 * i, -i] for i in range(data.draw(st.integers(2, 9)))]
    number = data.draw(st.integers(0, 255))
    lines, blocks = [], []
    for i, sample in enumerate(samples):
        tick = start + period * i
        (payload,) = payloads_of(mask, period, tick % 2**32, [sample])
        lines.append((payload, (number + i) % 256))
        blocks.append(decode(payload))
    wrong = data.draw(st.integers(1, len(lines)))
    text = [line_of(*line) for line in lines]
    if wrong < len(lines):
        payload, at = lines[wrong]
        (late,) = payloads_of(mask, period, (start + period * wrong + 1) % 2**32, [samples[wrong]])
        (slow,) = payloads_of(mask, period ^ 2, blocks[wrong].first_tick, [samples[wrong]])
        (narrow,) = payloads_of(0b11, period, blocks[wrong].first_tick, [samples[wrong][:2]])
        others = [(payload, (at + 1) % 256), (payload, (at - 1) % 256), (late, at), (slow, at), (narrow, at)]
        texts = [*(line_of(*other) for other in others), text[wrong][:-1] + b"g", text[wrong] + b"\r", b"", b"D"]
        text[wrong] = data.draw(st.sampled_from(texts))
    before = data.draw(st.sampled_from([b"", b"x", text[0] + b"\n"]))
    found = READER(before + b"\n".join(text) + data.draw(st.sampled_from([b"\n", b"\nD01 "])), len(before))
    assert found is not None
    assert (found.first_number, found.last_number) == (number, (number + wrong - 1) % 256)
    assert found.end == len(before) + sum(len(line) + 1 for line in text[:wrong])
    assert said(0, found.block)[1] == put_together(blocks[:wrong])


def test_no_more_lines_are_read_together_than_there_is_room_for() -> None:
    assert READER is not None
    payloads = payloads_of(0b1, 1, 7, [[i % 3] for i in range(2 * ROWS_MAX)])
    blocks = [decode(payload) for payload in payloads]
    text = b"".join(line_of(payload, i % 256) + b"\n" for i, payload in enumerate(payloads))
    begin, rows = 0, [0]
    while begin < len(text):
        found = READER(text, begin)
        assert found is not None
        begin = found.end
        rows.append(rows[-1] + found.block.rows)
        assert found.block.rows <= ROWS_MAX
    edges = [sum(block.rows for block in blocks[:i]) for i in range(len(blocks) + 1)]
    assert set(rows) <= set(edges)
    assert rows[-1] == edges[-1] == 2 * ROWS_MAX
    assert ROWS_MAX - 255 < rows[1] <= ROWS_MAX


def test_a_line_without_its_end_is_not_taken() -> None:
    assert READER is not None
    line = line_of(payloads_of(0b1, 1, 7, [[3]])[0])
    assert READER(line, 0) is None
    assert READER(line + b"\n", len(line)) is None
    assert READER(line + b"\n", len(line) + 1) is None


def damaged_stream(source: random.Random) -> bytes:
    """Data lines with gaps in their numbers, lines that came again, plain lines and every kind of damage."""
    payloads = payloads_of(0b111, 1, 0, [[source.randint(-900, 900) for _ in range(3)] for _ in range(1500)])
    stream = b""
    for i, payload in enumerate(payloads):
        line = bytearray(line_of(payload, i % 256) + b"\n")
        if i % 5 == 1:
            line[source.randrange(len(line) - 1)] ^= 1 << source.randrange(7)
        if i % 7 != 3:
            stream += bytes(line)
        if i % 11 == 0:
            stream += seal(f"D{i % 256:02x} {encode_plain(i, 1, 1, [i])}".encode("ascii"))
            stream += line_of(payload[: source.randrange(len(payload))], i % 256) + b"\r\n"
        if i % 13 == 0:
            stream += seal(f"N{i // 13:02x} done {i} 7".encode("ascii"))
    return stream


def told(events: list[HostEvent]) -> list[object]:
    """Events with the samples of lines that follow each other put together."""
    out: list[object] = []
    for event in events:
        if not isinstance(event, Sampled):
            out.append(event)
            continue
        before = out[-1] if out else None
        if isinstance(before, list) and not event.missed and not event.again and not before[0].again:
            ended = before[-1].block
            if event.block.first_tick == ended.first_tick + ended.rows * ended.period:
                before.append(event)
                continue
        out.append([event])
    return [
        (one[-1].number, one[0].missed, one[0].again, put_together([each.block for each in one]))
        if isinstance(one, list)
        else one
        for one in out
    ]


def test_a_host_that_reads_in_c_tells_the_same_events() -> None:
    stream = damaged_stream(random.Random(3))
    links = HostLink(0, read_data=READER), HostLink(0)
    for link in links:
        link.ask("again", 3, now_s=0.0)
    quick, slow = (told(link.receive(stream, 0.0)) for link in links)
    assert quick == slow
    assert sum(isinstance(event, Dropped) for event in quick) > 5


@pytest.mark.parametrize("seed", range(6))
def test_samples_that_wait_are_told_in_their_place(seed: int) -> None:
    """However the bytes come, and whenever the samples are asked for."""
    source = random.Random(seed)
    stream = damaged_stream(source)
    waiting, prompt = HostLink(0, read_data=READER), HostLink(0)
    if seed % 2:
        waiting.ask("again", 3, now_s=0.0)
        prompt.ask("again", 3, now_s=0.0)
    events: list[HostEvent] = []
    place = 0
    while place < len(stream):
        cut = source.randint(1, source.choice((40, 900)))
        events += waiting.receive(stream[place : place + cut], 0.0, samples_wait=source.random() < 0.7)
        place += cut
        if source.random() < 0.2:
            events += waiting.samples()
    events += waiting.samples()
    assert told(events) == told(prompt.receive(stream, 0.0))


def test_only_the_answer_to_a_beat_overtakes_samples() -> None:
    first, second, third = (
        line_of(payload, i) + b"\n" for i, payload in enumerate(payloads_of(0b1, 1, 0, [[i] for i in range(999)])[:3])
    )
    for word, overtakes in (("beat", True), ("state", False)):
        link = HostLink(0, read_data=READER)
        link.receive(first, 0.0)
        link.ask(word, now_s=0.0)
        events = link.receive(second + seal(b"00 ok 5 off") + third, 0.0, samples_wait=True)
        assert [type(event) for event in events] == [Answered] if overtakes else [Sampled, Answered]
        assert [(type(event), event.number) for event in link.samples() if isinstance(event, Sampled)] == [(Sampled, 2)]
        assert link.samples() == []


def test_so_many_lines_wait_at_most() -> None:
    payloads = payloads_of(0b1, 1, 0, [[i * i * 977 % 99991] for i in range(4000)])
    link, told_lines = HostLink(0, read_data=READER), 0
    for i, payload in enumerate(payloads):
        link.receive(line_of(payload, i % 256) + b"\n", 0.0, samples_wait=True)
        assert len(link._waiting) <= WAITING_MAX
        told_lines += not link._waiting
    assert told_lines > len(payloads) // (WAITING_MAX + 2)


def test_without_a_compiler_the_codec_reads(monkeypatch: pytest.MonkeyPatch) -> None:
    dataline._library.cache_clear()
    monkeypatch.setattr(build, "compiler", lambda: None)
    assert data_reader() is None
    dataline._library.cache_clear()
