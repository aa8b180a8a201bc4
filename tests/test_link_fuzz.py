"""Any bytes to either end give no exception, no growth and no act that was not sealed (SPEC BAD-1)."""

from __future__ import annotations

import random

import pytest

from ramprig_link.check import seal, unseal
from ramprig_link.device import DeviceLink, Reply
from ramprig_link.host import HostLink
from ramprig_link.messages import Request, parse_device_line, parse_host_line
from ramprig_link.words import DEVICE_LINE_MAX, HOST_LINE_MAX, LIMITS, NOTICES, WORDS, Reason

PARTS = [
    *("a1", "ff", "00", "N07", "D08", "ok", "no", "0", "-1", "7", "4294967295", "4294967296", "-2147483648", "", " "),
    *("1000 2 7 500 -3 120", "AAAA", "////", "AAAAAAAAAAAAAAAAAAAAAAAA", "cbf43926", "packed", "brake", "\x7f", "\r"),
    *WORDS,
    *NOTICES,
    *list(LIMITS)[:4],
    *Reason,
]


def hostile(draw: random.Random) -> bytes:
    """Something to feed: noise, a sealed line of known parts in any order, or such a line spoilt."""
    kind = draw.randrange(6)
    if kind == 0:
        return draw.randbytes(draw.randrange(40))
    if kind == 1:
        return draw.choice([b"\n", b"\r\n", b"stop\n", b"who\n", b"z" * 250, b"\xff" * 30, b"\x00" * 5])
    body = " ".join(draw.choice(PARTS) for _ in range(draw.randrange(1, 7)))
    if kind == 5:
        word = draw.choice([*WORDS])
        args = (draw.choice(["0", "1", "12", draw.choice(PARTS)]) for _ in range(len(WORDS[word].args)))
        body = " ".join([f"{draw.randrange(256):02x}", word, *args])
    if kind == 2:
        letters = "ABCDabcd0189+/"
        body = f"D{draw.randrange(256):02x} " + "".join(draw.choice(letters) for _ in range(draw.randrange(1, 190)))
    line = bytearray(seal(body.encode("latin-1")))
    if kind == 3:
        line[draw.randrange(len(line))] = draw.randrange(256)
    if kind == 4:
        del line[draw.randrange(len(line)) :]
    return bytes(line)


def feed_both_ends(draw: random.Random, inputs: int) -> tuple[int, int]:
    """Feed both ends `inputs` times; how many requests and how many usable events came of it."""
    device, host = DeviceLink(), HostLink(0xA0)
    taken = used = 0
    for i in range(inputs):
        data = hostile(draw)
        for incoming in device.receive(data, i & 0xFFFFFFFF):
            if isinstance(incoming, Request):
                incoming.values()
                device.no(incoming, i & 0xFFFFFFFF, Reason.STATE)
                taken += 1
            elif isinstance(incoming, Reply):
                assert len(incoming.line) <= DEVICE_LINE_MAX
        device.garbled_news(i & 0xFFFFFFFF)
        if host.outstanding is None:
            host.ask("beat", now_s=float(i))
        used += len(host.receive(data, float(i)))
        assert len(device._splitter._held) <= HOST_LINE_MAX
        assert len(host._splitter._held) <= DEVICE_LINE_MAX
    return taken, used


@pytest.mark.parametrize("seed", range(4))
def test_any_bytes_give_no_exception_and_no_growth(seed: int) -> None:
    taken, used = feed_both_ends(random.Random(seed), 3000)
    assert taken > 10  # the noise does reach the depths
    assert used > 1000


@pytest.mark.soak
@pytest.mark.parametrize("seed", range(1000, 1010))
def test_a_million_inputs_give_no_exception_and_no_growth(seed: int) -> None:
    feed_both_ends(random.Random(seed), 100_000)


@pytest.mark.parametrize("seed", range(2))
def test_nothing_is_made_of_a_line_whose_check_is_wrong(seed: int) -> None:
    """SPEC CHECK-2: only the two bare lines act without a check."""
    draw = random.Random(seed)
    acted = 0
    for _ in range(5000):
        for line in hostile(draw).split(b"\n"):
            garbled = {"Garbled"}
            from_host, from_device = type(parse_host_line(line)).__name__, type(parse_device_line(line)).__name__
            if unseal(line) is None:
                assert {from_device} == garbled, line
                assert {from_host} == garbled or line in (b"stop", b"who"), line
            acted += from_host == "Request"
    assert acted > 100
