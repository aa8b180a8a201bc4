"""A user's file as text with lines, and places in it that errors can point to."""

from __future__ import annotations

import hashlib
import re
from dataclasses import dataclass, field
from pathlib import Path

from ..errors import FileError, Place

FILE_MAX_BYTES = 1_000_000
"""Largest file that is read."""

UTF16_OR_32_MARKS = (b"\xff\xfe", b"\xfe\xff", b"\x00\x00\xfe\xff")
UTF8_MARK = b"\xef\xbb\xbf"

_LINE_END = re.compile("\r\n|\r|\n")
# NEL, LS and PS are line ends to YAML 1.1 and not to editors: refused, so that line numbers mean one thing. So are a
# blank of no width and the marks that turn the direction of writing (Unicode Annex 9): with them a line would show
# another value than it has.
SEEN = "\xa0-\u200a\u200c-\u2027\u202f-\u2065\u206a-\ud7ff"
"""What a file may hold between ASCII and U+D800, as a class of a pattern has it."""
_REFUSED = re.compile(f"[^\t\n\r\x20-\x7e{SEEN}\ue000-\ufefe\uff00-\ufffd\U00010000-\U0010ffff]")


@dataclass(frozen=True, slots=True)
class Source:
    """A file's name as the user gave it, its bytes and their SHA-256 (hex), and its lines without their ends."""

    file: str
    data: bytes = field(repr=False)
    text: str = field(repr=False)
    lines: tuple[str, ...] = field(repr=False)
    digest: str

    def mark(self, line: int, column: int) -> Mark:
        """The place at `line` and `column`, counted from 1; held inside the file."""
        return Mark(self, max(1, min(line, len(self.lines))), max(1, column))


@dataclass(frozen=True, slots=True)
class Mark:
    """A place in a source, line and column counted from 1."""

    source: Source = field(repr=False)
    line: int
    column: int

    @property
    def place(self) -> Place:
        """File, line and column."""
        return Place(self.source.file, self.line, self.column)

    @property
    def text(self) -> str:
        """The whole line, with a blank for each tab and '?' for what a terminal must not be sent."""
        return _printable(self.source.lines[self.line - 1])

    def error(self, found: str, wanted: str = "") -> FileError:
        """An error that points here: what was found, what would be right."""
        return FileError(found, wanted=wanted, place=self.place, text=self.text)


def _printable(line: str) -> str:
    return "".join(c if c.isprintable() else " " if c == "\t" else "?" for c in line)


def read_source(path: str | Path, *, named_at: Mark | None = None) -> Source:
    """Read a file. Raises `FileError`, at `named_at` where given, if it cannot be read, is too large or is no text."""
    name = str(path)
    try:
        with Path(path).open("rb") as stream:
            data = stream.read(FILE_MAX_BYTES + 1)
    except (OSError, ValueError) as error:  # ValueError: a NUL in the path
        reason = getattr(error, "strerror", None) or str(error)
        found, wanted = f"cannot read '{_printable(name)}': {reason}", ""
        raise (named_at.error(found) if named_at else FileError(found, wanted=wanted)) from error
    return source_of(data, name)


def source_of(data: bytes, file: str) -> Source:
    """The source made of these bytes. Raises `FileError` with a place if they are too many or not plain UTF-8 text."""
    if len(data) > FILE_MAX_BYTES:
        wanted = f"a file has at most {FILE_MAX_BYTES} bytes"
        raise FileError(f"the file has more than {FILE_MAX_BYTES} bytes", wanted=wanted, place=Place(file, 1, 1))
    if data.startswith(UTF16_OR_32_MARKS):
        raise FileError("the file is UTF-16 or UTF-32", wanted="save it as UTF-8", place=Place(file, 1, 1))
    if data.startswith(UTF8_MARK):
        raise FileError(
            "the file begins with a byte order mark", wanted="save it as UTF-8 without BOM", place=Place(file, 1, 1)
        )
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        before = _LINE_END.split(data[: error.start].decode("utf-8"))
        place = Place(file, len(before), len(before[-1]) + 1)
        found = f"the byte 0x{data[error.start]:02x} is not UTF-8"
        raise FileError(found, wanted="save the file as UTF-8", place=place) from error
    source = Source(file, data, text, tuple(_LINE_END.split(text)), hashlib.sha256(data).hexdigest())
    refused = _REFUSED.search(text)
    if refused is not None:
        before = _LINE_END.split(text[: refused.start()])
        mark = source.mark(len(before), len(before[-1]) + 1)
        raise mark.error(f"found the character U+{ord(refused.group()):04X}", "remove it: it cannot be seen in a file")
    return source
