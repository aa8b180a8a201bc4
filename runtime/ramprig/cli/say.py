"""Words to the user: results on standard output, everything else on standard error.

A terminal that has gone away (a closed window, a dropped connection) never ends a run: what cannot be said is lost.
"""

from __future__ import annotations

import contextlib
import sys
from typing import TextIO

NARROWEST = 40
"""Columns that a filled text has at least."""


def say(text: str = "", *, as_is: bool = False) -> None:
    """A line of the result, on a terminal broken between words unless it is wanted `as_is`.

    Raises BrokenPipeError where nobody reads any more.
    """
    print(text if as_is else _fitted(text, sys.stdout))


def tell(text: str) -> None:
    """A line beside the result; never raises for a terminal that is gone."""
    with contextlib.suppress(OSError, ValueError):
        print(_fitted(text, sys.stderr), file=sys.stderr, flush=True)


def say_surely(text: str, *, as_is: bool = False) -> None:
    """As `say`, of a run, which is over and stays what it is though nobody reads it; never raises."""
    with contextlib.suppress(OSError, ValueError):
        print(text if as_is else _fitted(text, sys.stdout), flush=True)


def width_of(stream: TextIO | None, *, most: int) -> int:
    """How wide a text may be that is filled for the stream: `most`, or less on a narrow terminal."""
    if stream is None or not stream.isatty():
        return most
    from ramprig.wrapping import columns_of

    return min(most, max(NARROWEST, columns_of(stream)))


def _fitted(text: str, stream: TextIO | None) -> str:
    """The text as it fits a terminal; elsewhere as it is."""
    if stream is None or not stream.isatty():
        return text
    from ramprig.wrapping import columns_of, wrapped

    columns = columns_of(stream)
    return "\n".join(wrapped(line, columns) for line in text.split("\n"))
