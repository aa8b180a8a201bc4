"""The board's transmitter: whole lines, answers and notices before data, no faster than the wire (KIND-3, KIND-4)."""

from __future__ import annotations

from collections import deque

BITS_PER_BYTE = 10
"""Start bit, eight data bits, stop bit (LINE-1)."""

SAID_BYTES_MAX = 4096
"""Most bytes of answers and notices that wait; beyond, a line is dropped whole and the host asks again."""


class Transmitter:
    """Two queues of lines and the line under way. `baud` 0 is a wire that takes no time.

    A line is handed over in the tick in which its last bit has left, so that a host never sees part of one.
    `waiting` tells whether there is anything to send. `unsaid` counts lines of answers and notices dropped for room.
    """

    __slots__ = (
        "_baud",
        "_bit_time",
        "_data",
        "_data_bytes",
        "_data_bytes_max",
        "_free_at",
        "_said",
        "_said_bytes",
        "_tick_time",
        "_under_way",
        "unsaid",
        "waiting",
    )

    def __init__(self, *, data_bytes_max: int, baud: int = 0, tick_us: int = 1000) -> None:
        self._data_bytes_max = data_bytes_max
        self._baud = baud
        # Time counts in units of 1 us / baud, so that bits and ticks are both whole numbers of it.
        self._bit_time = 1_000_000
        self._tick_time = tick_us * baud
        self._free_at = 0
        self._said: deque[bytes] = deque()
        self._said_bytes = 0
        self._data: deque[bytes] = deque()
        self._data_bytes = 0
        self._under_way: bytes | None = None
        self.unsaid = 0
        self.waiting = False

    def say(self, line: bytes) -> None:
        """Queue an answer or a notice."""
        if self._said_bytes + len(line) > SAID_BYTES_MAX:
            self.unsaid += 1
            return
        self._said.append(line)
        self._said_bytes += len(line)
        self.waiting = True

    def send_data(self, line: bytes) -> bool:
        """Queue a data line; False where there is no room for the whole of it."""
        if self._data_bytes + len(line) > self._data_bytes_max:
            return False
        self._data.append(line)
        self._data_bytes += len(line)
        self.waiting = True
        return True

    def promote_data(self) -> None:
        """Have the data lines queued so far go before what is said from now on (LOG-4)."""
        self._said.extend(self._data)
        self._said_bytes += self._data_bytes
        self._data.clear()
        self._data_bytes = 0

    def take_all(self) -> bytes:
        """Everything that waits, whatever the wire's rate."""
        self.promote_data()
        everything = (self._under_way or b"") + b"".join(self._said)
        self._under_way = None
        self._said.clear()
        self._said_bytes = 0
        self.waiting = False
        return everything

    def take(self, ticks: int) -> bytes:
        """The lines that have left wholly `ticks` ticks after the start, since the last call."""
        if not self._baud:
            return self.take_all()
        now = ticks * self._tick_time
        start = now
        left: list[bytes] = []
        while self._under_way is not None or self._begin(start):
            if self._free_at > now:
                break
            left.append(self._under_way or b"")
            self._under_way = None
            start = self._free_at
        self.waiting = bool(self._under_way or self._said or self._data)
        return b"".join(left)

    def _begin(self, start: int) -> bool:
        """Put the next line on the wire at the time `start`; False where none waits."""
        if self._said:
            line = self._said.popleft()
            self._said_bytes -= len(line)
        elif self._data:
            line = self._data.popleft()
            self._data_bytes -= len(line)
        else:
            return False
        self._free_at = start + len(line) * BITS_PER_BYTE * self._bit_time
        self._under_way = line
        return True
