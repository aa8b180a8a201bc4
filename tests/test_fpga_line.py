"""The FPGA blocks of the receive line: bytes, check, bare `stop` and BREAK, by the protocol's own vectors."""

from __future__ import annotations

import json
from binascii import crc_hqx
from pathlib import Path
from typing import Any

import pytest
import toolchain

from test_fpga_agreement import compiled, simulated

ROOT = Path(__file__).resolve().parent.parent

pytestmark = pytest.mark.skipif(bool(toolchain.why_not(toolchain.GATES)), reason=toolchain.why_not(toolchain.GATES))

BREAK, LOW_STOP = 256, 257
"""What sim/wire.v makes of these instead of a byte."""
GOOD_LINE = b"a1 beat 5a04\n"

VECTORS: list[dict[str, Any]] = json.loads((ROOT / "protocol" / "vectors" / "lines.json").read_text("utf-8"))[
    "from_host"
]


def verdicts(symbols: list[int], folder: Path) -> list[str]:
    """What the gates say of the bytes, sent at a rate two per cent off theirs."""
    text = "".join(f"{symbol}\n" for symbol in symbols)
    return simulated(compiled("wire_bench", "wire.v", folder), text, folder)


def by_the_check(line: bytes) -> bool:
    """Whether a line has the form and check of SPEC sections 4, whatever its words: what `good` promises."""
    body, _, check = line.rpartition(b" ")
    printable = all(0x20 <= byte <= 0x7E for byte in body)
    return bool(body) and printable and check == b"%04x" % crc_hqx(body, 0xFFFF)


def test_every_host_line_of_the_vectors_gets_the_verdict_of_its_form_and_check(tmp_path: Path) -> None:
    symbols: list[int] = []
    expected: list[str] = []
    lines: list[bytes] = []
    for vector in VECTORS:
        data = vector["bytes"].encode("latin-1")
        if not data.endswith(b"\n"):
            data += b"\n"
        symbols += data
        for line in data.split(b"\n")[:-1]:
            kept = line.removesuffix(b"\r")
            if kept in (b"", b"who"):
                continue
            lines.append(line)
            if kept == b"stop":
                expected.append("stop")
            else:
                expected.append("good" if len(line) < 80 and by_the_check(kept) else "bad")
    found = verdicts(symbols, tmp_path)
    for index, (said, want) in enumerate(zip(found, expected, strict=True)):
        assert said == want, lines[index]
    assert expected.count("good") > 20
    assert expected.count("bad") > 20


def test_a_line_that_the_codec_takes_is_good_to_the_gates(tmp_path: Path) -> None:
    requests = [v for v in VECTORS if [g["kind"] for g in v["gives"]] == ["request"]]
    symbols = [byte for vector in requests for byte in vector["bytes"].encode("latin-1")]
    assert len(requests) >= 20
    assert verdicts(symbols, tmp_path) == ["good"] * len(requests)


def test_a_break_is_told_once_and_spoils_the_line_it_falls_in(tmp_path: Path) -> None:
    half = len(GOOD_LINE) // 2
    symbols = [*GOOD_LINE[:half], BREAK, *GOOD_LINE[half:], *GOOD_LINE]
    assert verdicts(symbols, tmp_path) == ["break", "bad", "good"]


def test_a_framing_error_is_no_break_and_spoils_its_line(tmp_path: Path) -> None:
    assert verdicts([*b"a1 ", LOW_STOP, *b"beat 5a04\n", *b"stop\n"], tmp_path) == ["framing", "bad", "stop"]


def test_no_flipped_bit_of_a_good_line_leaves_it_good(tmp_path: Path) -> None:
    symbols: list[int] = []
    for place in range(len(GOOD_LINE) - 1):
        spoilt = bytearray(GOOD_LINE)
        spoilt[place] ^= 1 << place % 7  # the eighth bit would cost a byte its being ASCII, which the vectors try
        symbols += spoilt
    assert verdicts(symbols, tmp_path) == ["bad"] * (len(GOOD_LINE) - 1)
