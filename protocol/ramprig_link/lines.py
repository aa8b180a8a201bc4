"""Cut a stream of bytes into lines, in bounded memory and the same however the stream comes in pieces."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Overlong:
    """A line that was dropped for its length; `length` counts its bytes, LF included."""

    length: int


class LineSplitter:
    """Lines of at most `limit` bytes, LF included (SPEC.md LINE-5).

    Never holds more than `limit` bytes between two calls. A line is judged when its LF arrives (BAD-3).
    """

    def __init__(self, limit: int) -> None:
        self._limit = limit
        self._held = b""
        self._dropped = 0  # bytes of an overlong line that have gone by and are not held

    def feed(self, data: bytes) -> list[bytes | Overlong]:
        """The lines that `data` completes, in order, without LF and without a CR before it; empty ones are left out."""
        *ended, rest = data.split(b"\n")
        found: list[bytes | Overlong] = []
        if ended:
            ended[0] = self._held + ended[0]
            dropped, self._held, self._dropped = self._dropped, b"", 0
            for line in ended:
                length = dropped + len(line) + 1
                dropped = 0
                if length > self._limit:
                    found.append(Overlong(length))
                elif line.endswith(b"\r"):
                    if line != b"\r":
                        found.append(line[:-1])
                elif line:
                    found.append(line)
        if rest:
            self._keep(rest)
        return found

    def _keep(self, rest: bytes) -> None:
        """Hold the beginning of the next line, or only its length once it is too long."""
        if self._dropped or len(self._held) + len(rest) >= self._limit:
            self._dropped += len(self._held) + len(rest)
            self._held = b""
        else:
            self._held += rest
