"""Tells how far a long piece of work is: one rewritten line on a terminal, plain lines elsewhere.

A terminal that goes away ends the telling and nothing else. One that takes no more (output held by Ctrl-S, a stalled
connection, a pipe that nobody reads) holds up nothing: whoever tells may be the one who renews a motor's lease.
"""

from __future__ import annotations

import sys
import threading
import time
from collections import deque
from collections.abc import Callable
from typing import TextIO

from ramprig.wrapping import columns_of, wrapped

REWRITE_EVERY_S = 0.1
"""A terminal's line is rewritten this often."""
LINE_EVERY_S = 5.0
"""Elsewhere a line is written this often; a log of a night has some thousands of them."""
PATIENCE_S = 0.05
"""What is told is waited for so long, and not at all while something told before is still to be written."""
PIECES_MAX = 1000
"""Most pieces that wait to be written; further lines are left out, and how many is said."""
CLOSE_WAIT_S = 2.0
"""How long the end waits for what is still to be written."""


class _Pen:
    """Writes to a stream in a thread of its own, in order; `gone` once that has failed."""

    def __init__(self, stream: TextIO) -> None:
        self.gone = False
        self._stream = stream
        self._pieces: deque[str] = deque()
        self._dropped = 0
        self._writing = self._over = False
        self._news = threading.Condition()
        self._thread: threading.Thread | None = None

    @property
    def behind(self) -> bool:
        """Whether something is still to be written."""
        return self._writing or bool(self._pieces)

    def write(self, text: str, *, patience_s: float) -> None:
        """Have it written; waits for that `patience_s` at the longest, where nothing stands before it."""
        if self.gone:
            return
        if self._thread is None:
            self._thread = threading.Thread(target=self._run, name="ramprig progress", daemon=True)
            self._thread.start()
        with self._news:
            behind = self.behind
            if len(self._pieces) >= PIECES_MAX:
                self._dropped += 1
                return
            self._pieces.append(text)
            self._news.notify_all()
            if not behind:
                self._news.wait_for(lambda: not self.behind, patience_s)

    def close(self) -> None:
        """Write what is left, for CLOSE_WAIT_S at the longest."""
        with self._news:
            self._over = True
            self._news.notify_all()
        if self._thread is not None:
            self._thread.join(CLOSE_WAIT_S)

    def _run(self) -> None:
        while True:
            with self._news:
                self._writing = False
                self._news.notify_all()
                self._news.wait_for(lambda: self._pieces or self._over)
                if not self._pieces:
                    return
                text = self._next()
                self._writing = True
            try:
                self._stream.write(text)
                self._stream.flush()
            except (OSError, ValueError):
                with self._news:
                    self.gone = True
                    self._pieces.clear()

    def _next(self) -> str:
        text = self._pieces.popleft()
        if not self._pieces and self._dropped:
            text += f"({self._dropped} lines were left out: the terminal took no more)\n"
            self._dropped = 0
        return text


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
        patience_s: float = PATIENCE_S,
    ) -> None:
        self._stream = sys.stderr if stream is None else stream
        self._is_terminal = _is_terminal(self._stream) if is_terminal is None else is_terminal
        self._width = columns_of(self._stream) if width is None else width
        self._now = now
        self._next_s = now() if self._is_terminal else now() + LINE_EVERY_S
        self._shown = ""
        self._patience_s = patience_s
        self._pen = _Pen(self._stream)

    def show(self, make: Callable[[], str]) -> None:
        """Show what `make` says, if it is time again and what was told before is written; only then it is called."""
        now_s = self._now()
        if self._pen.gone or now_s < self._next_s or self._pen.behind:
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
        if self._is_terminal:
            text = "\n".join(wrapped(line, self._width) for line in text.split("\n"))
        self._write(f"{self._erasing()}{text}\n")

    def close(self) -> None:
        """Take the rewritten line away. Nothing more is told."""
        erasing = self._erasing()
        if erasing:
            self._write(erasing)
        self._pen.close()

    def _erasing(self) -> str:
        shown, self._shown = self._shown, ""
        return "\r" + " " * len(shown) + "\r" if shown else ""

    def _write(self, text: str) -> None:
        self._pen.write(text, patience_s=self._patience_s)


def _is_terminal(stream: TextIO) -> bool:
    try:
        return stream.isatty()
    except ValueError:
        return False
