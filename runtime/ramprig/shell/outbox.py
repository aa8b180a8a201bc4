"""What the shell has to say, between the thread that says it and the one that prints: bounded, nothing ever waits."""

from __future__ import annotations

import threading
from collections import deque

LINES_MAX = 500
"""Most lines that wait to be printed; older ones are dropped, and how many is said."""


class Outbox:
    """Lines of text in order. `say` never blocks, whatever the terminal does."""

    def __init__(self, lines_max: int = LINES_MAX) -> None:
        self._lines: deque[str] = deque(maxlen=lines_max)
        self._dropped = 0
        self._closed = False
        self._news = threading.Condition()

    def say(self, text: str) -> None:
        """Put lines at the end; the oldest go where there is no room."""
        with self._news:
            for line in text.split("\n"):
                self._dropped += len(self._lines) == self._lines.maxlen
                self._lines.append(line)
            self._news.notify_all()

    def take(self) -> list[str]:
        """All lines that wait, and how many were dropped before them."""
        with self._news:
            return self._take()

    def wait(self, timeout_s: float) -> list[str]:
        """As `take`, but wait for a line first, `timeout_s` at the longest or until `close`."""
        with self._news:
            self._news.wait_for(lambda: bool(self._lines) or self._closed, timeout_s)
            return self._take()

    def close(self) -> None:
        """End every `wait`; what is said later can still be taken."""
        with self._news:
            self._closed = True
            self._news.notify_all()

    def _take(self) -> list[str]:
        lines = list(self._lines)
        self._lines.clear()
        if self._dropped:
            lines.insert(0, f"({self._dropped} lines were dropped: they came faster than they could be printed)")
            self._dropped = 0
        return lines
