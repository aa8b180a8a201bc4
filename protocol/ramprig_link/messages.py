"""The kinds of line as values, and the two parsers: one for lines from the host, one for lines from the device.

What comes ten times a second of a board's time is a named tuple, here and in `host`: it is made in half the time of a
frozen dataclass, and a rehearsal passes through hours.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from enum import StrEnum
from typing import NamedTuple

from .check import CHECK_LENGTH, crc16, unseal
from .faults import FieldError
from .fields import HEX2, U32_MAX, Value, read_args, read_u32
from .words import TAG_URGENT, WORDS

BARE_WORDS = (b"stop", b"who")

# All of an answer at once, since every beat has one: tag, ok or no, tick, fields each after a space, check.
_ANSWER = re.compile(rb"([0-9a-f]{2}) (ok|no) (0|[1-9][0-9]{0,9})((?: [!-~]+)*) ([0-9a-f]{4})")


class Flaw(StrEnum):
    """Why a line was refused below the answers (SPEC.md BAD-2, BAD-3)."""

    BYTE = "a byte outside printable ASCII"
    CHECK = "wrong or missing check"
    KIND = "not of a known kind"
    FORM = "an empty field"
    OVERLONG = "too long"


@dataclass(frozen=True, slots=True)
class Garbled:
    """A line nothing in which may be acted on."""

    raw: bytes
    why: Flaw


@dataclass(frozen=True, slots=True)
class Bare:
    """A line without a check: `stop` or `who` (LINE-7)."""

    word: str


@dataclass(frozen=True, slots=True)
class Request:
    """A request; `body` is the line's body letter for letter. In a received one `word` may be unknown or empty."""

    tag: int
    word: str
    args: tuple[str, ...]
    body: str

    @classmethod
    def of(cls, tag: int, word: str, args: tuple[str, ...] = ()) -> Request:
        """The request with the body that its parts make."""
        return cls(tag, word, args, " ".join((f"{tag:02x}", word, *args)))

    @property
    def urgent(self) -> bool:
        """Whether it stands outside the exactly-once memory (TAG-5)."""
        return self.tag == TAG_URGENT

    def values(self) -> tuple[Value, ...]:
        """The arguments, numbers as int; FieldError where not as the table asks, KeyError for an unknown word."""
        return read_args(WORDS[self.word].args, self.args)


class Answer(NamedTuple):
    """The answer to the request `tag`; of a refusal the first field is the reason."""

    tag: int
    ok: bool
    tick: int
    fields: tuple[str, ...]

    @property
    def reason(self) -> str:
        """The reason of a refusal; empty for `ok`."""
        return "" if self.ok else self.fields[0]


@dataclass(frozen=True, slots=True)
class Notice:
    """Something happened in tick `tick`; `word` may be one that this version does not know."""

    number: int
    word: str
    tick: int
    fields: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class Data:
    """Samples: a packed payload, or the fields of a plain line where `body` has spaces."""

    number: int
    body: str


FromDevice = Answer | Notice | Data | Garbled
FromHost = Request | Bare | Garbled


def _opened(line: bytes) -> str | Flaw:
    """The body of a line as text, or what is wrong with the line."""
    body = unseal(line)
    text = line.decode("latin-1")
    if not (text.isascii() and text.isprintable()):
        return Flaw.BYTE
    return Flaw.CHECK if body is None else text[: len(body)]


def parse_host_line(line: bytes) -> FromHost:
    """What the host said in `line`, given without its LF; never raises.

    A right check and a well-formed tag make a request, whatever follows (BAD-5).
    """
    if line in BARE_WORDS:
        return Bare(line.decode("ascii"))
    body = _opened(line)
    if isinstance(body, Flaw):
        return Garbled(line, body)
    first, *rest = body.split(" ")
    tag = HEX2.get(first)
    if tag is None:
        return Garbled(line, Flaw.KIND)
    word, *args = rest or [""]
    return Request(tag, word, tuple(args), body)


def parse_device_line(line: bytes) -> FromDevice:
    """What the device said in `line`, given without its LF; never raises."""
    answer = _answer(line)
    if answer is not None:
        return answer
    body = _opened(line)
    if isinstance(body, Flaw):
        return Garbled(line, body)
    if "  " in body or body[-1:] == " ":
        return Garbled(line, Flaw.FORM)
    first, _, rest = body.partition(" ")
    kind = first[:1]
    message: FromDevice | None = None
    if kind == "D":
        if first[1:] in HEX2 and rest:
            message = Data(HEX2[first[1:]], rest)
    elif kind == "N":
        message = _notice(first[1:], rest.split(" "))
    return message or Garbled(line, Flaw.KIND)


def _notice(number: str, fields: list[str]) -> Notice | None:
    if number not in HEX2 or len(fields) < 2 or (tick := _tick(fields[1])) is None:
        return None
    return Notice(HEX2[number], fields[0], tick, tuple(fields[2:]))


def _answer(line: bytes) -> Answer | None:
    """The answer that the line is, with a right check; None where it is none."""
    found = _ANSWER.fullmatch(line)
    if found is None:
        return None
    tag, verdict, tick, fields, check = found.groups()
    at = int(tick)
    if int(check, 16) != crc16(line[:-CHECK_LENGTH]) or at > U32_MAX or (verdict == b"no" and not fields):
        return None
    return Answer(int(tag, 16), verdict == b"ok", at, tuple(fields.decode("ascii").split()))


def _tick(text: str) -> int | None:
    try:
        return read_u32(text)
    except FieldError:
        return None
