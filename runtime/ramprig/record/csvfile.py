"""Comma-separated records as RFC 4180 describes them: how a field is quoted.

Sources: RFC 4180 section 2, rules 1 to 7. Our files are UTF-8, with a header line and CRLF after every record.
"""

from __future__ import annotations

from collections.abc import Iterable

LINE_END = "\r\n"
_TO_QUOTE = frozenset('",\r\n')


def field(text: str) -> str:
    """The field as it stands in a record: quoted only where it must be (rules 5 to 7)."""
    if _TO_QUOTE.isdisjoint(text):
        return text
    return '"' + text.replace('"', '""') + '"'


def record(texts: Iterable[str]) -> bytes:
    """One whole record, with its CRLF, as UTF-8. A record of one empty field is quoted, or it would look like no
    record."""
    line = ",".join(map(field, texts))
    return ((line or '""') + LINE_END).encode("utf-8")
