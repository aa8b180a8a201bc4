"""Lines for a terminal of some width: broken between words, with what stands in columns going on in its column."""

from __future__ import annotations

import os
import re
import textwrap
from typing import TextIO

HANG = 2
"""Blanks before the rest of a line that has no columns, beyond its own."""
COLUMNS_MIN = 20
"""No terminal is taken for narrower; one that was never told its size says 0."""
COLUMNS_DEFAULT = 80
"""Of what is no terminal, or was never told its size."""
_COLUMN = re.compile(r"\S {2,}(?=\S)")


def wrapped(line: str, columns: int) -> str:
    """The line, broken at blanks into pieces of at most `columns` where it is longer.

    The rest of a line with columns goes on under the last one that begins in its first two thirds. A word that is
    longer than the terminal is wide stands as it is.
    """
    columns = max(columns, COLUMNS_MIN)
    if len(line) <= columns:
        return line
    begins = [found.end() for found in _COLUMN.finditer(line) if found.end() <= columns * 2 // 3]
    own = len(line) - len(line.lstrip(" "))
    hang = begins[-1] if begins else min(own + HANG, columns // 2)
    pieces = textwrap.wrap(
        line,
        columns,
        subsequent_indent=" " * hang,
        break_long_words=False,
        break_on_hyphens=False,
        replace_whitespace=False,
        expand_tabs=False,
    )
    return "\n".join(pieces)


def columns_of(stream: TextIO) -> int:
    """How wide the terminal is that the stream writes to."""
    try:
        columns = os.get_terminal_size(stream.fileno()).columns
    except (OSError, ValueError):
        return COLUMNS_DEFAULT
    return columns or COLUMNS_DEFAULT  # a terminal that was never told its size says 0
