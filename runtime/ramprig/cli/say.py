"""Words to the user: results on standard output, everything else on standard error.

A terminal that has gone away (a closed window, a dropped connection) never ends a run: what cannot be said is lost.
"""

from __future__ import annotations

import contextlib
import sys


def say(text: str = "") -> None:
    """A line of the result. Raises BrokenPipeError where nobody reads any more."""
    print(text)


def tell(text: str) -> None:
    """A line beside the result; never raises for a terminal that is gone."""
    with contextlib.suppress(OSError, ValueError):
        print(text, file=sys.stderr, flush=True)


def say_surely(text: str) -> None:
    """A line of the result of a run, which is over and stays what it is though nobody reads it; never raises."""
    with contextlib.suppress(OSError, ValueError):
        print(text, flush=True)
