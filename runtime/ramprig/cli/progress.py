"""Tells how far a long piece of work is: one rewritten line on a terminal, plain lines elsewhere.

A terminal that goes away ends the telling and nothing else.
"""

from __future__ import annotations

import os
import sys
import time
from collections.abc import Callable
from typing import TextIO

REWRITE_EVERY_S = 0.1
"""A terminal's line is rewritten this often."""
LINE_EVERY_S = 5.0
"""Elsewhere a line is written this often; a log of a night has some thousands of them."""
WIDTH_DEFAULT = 80


class Progress:
    """Rewrites one line of `stream` where it is a terminal, and writes a line now and then where it is not.

    `now` is the time that bounds how often; it is the wall's even where the work runs in virtual time.
    """

    def __init__(
        self,
        stream: TextIO | None = None,
        *,
        is_terminal: bool | None = None,
        width: int | None = None,
        now: Callable[[], float] = time.monotonic,
    ) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._is_terminal = _is_terminal(self._stream) if is_terminal is None else is_terminal
        self._width = _width(self._stream) if width is None else width
        self._now = now
        self._next_s = now() if self._is_terminal else now() + LINE_EVERY_S
        self._shown = ""
        self._gone = False

    def show(self, make: Callable[[], str]) -> None:
        """Show what `make` says, if it is time again; `make` is called only then."""
        now_s = self._now()
        if self._gone or now_s < self._next_s:
            return
        self._next_s = now_s + (REWRITE_EVERY_S if self._is_terminal else LINE_EVERY_S)
        text = make()
        if not self._is_terminal:
            self._write(text + "\n")
            return
        text = text[: self._width - 1]
        self._write("\r" + text.ljust(len(self._shown)))
        self._shown = text

    def line(self, text: str) -> None:
        """Write a line that stays, above the rewritten one."""
        self._erase()
        self._write(text + "\n")

    def close(self) -> None:
        """Take the rewritten line away."""
        self._erase()

    def _erase(self) -> None:
        if self._shown:
            self._write("\r" + " " * len(self._shown) + "\r")
            self._shown = ""

    def _write(self, text: str) -> None:
        if self._gone:
            return
        try:
            self._stream.write(text)
            self._stream.flush()
        except (OSError, ValueError):
            self._gone = True


def _is_terminal(stream: TextIO) -> bool:
    try:
        return stream.isatty()
    except ValueError:
        return False


def _width(stream: TextIO) -> int:
    try:
        columns = os.get_terminal_size(stream.fileno()).columns
    except (OSError, ValueError):
        return WIDTH_DEFAULT
    return columns or WIDTH_DEFAULT  # a terminal that was never told its size says 0
