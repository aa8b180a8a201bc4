"""Sampling: the channels asked for, every period, in data lines that are kept for `again` (SPEC `log`, section 13)."""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Sequence

from ramprig_link.device import DeviceLink
from ramprig_link.samples import Encoder, encode_plain
from ramprig_link.words import FLUSH_TICKS, Form

from .orders import NEVER
from .transmit import Transmitter

TICK_MASK = 0xFFFFFFFF


class Sampling:
    """The present logging. `due` is the age of the next sample, `flush_due` that of closing an unfinished line.

    `made` and `dropped` count samples since the board's start.
    """

    __slots__ = (
        "_encoder",
        "_in_line",
        "_kept",
        "_link",
        "_made_before",
        "_mask",
        "_period",
        "_transmitter",
        "_values",
        "dropped",
        "due",
        "flush_due",
        "made",
    )

    def __init__(self, link: DeviceLink, transmitter: Transmitter, *, keep: int) -> None:
        self._link = link
        self._transmitter = transmitter
        self._kept: deque[tuple[int, bytes]] = deque(maxlen=keep)
        self._encoder: Encoder | None = None
        self._values: Callable[[], Sequence[int]] = tuple
        self._in_line = 0
        self._mask = 0
        self._period = 0
        self._made_before = 0
        self.made = 0
        self.dropped = 0
        self.due = NEVER
        self.flush_due = NEVER

    def begin(self, *, period: int, mask: int, form: Form, age: int, values: Callable[[], Sequence[int]]) -> None:
        """Sample the channels of `mask` from the tick `age` on; `values` gives them in order of the bits."""
        self._kept.clear()
        self._period = period
        self._mask = mask
        self._encoder = Encoder(mask, period) if form is Form.PACKED else None
        self._values = values
        self.due = age

    def end(self) -> int:
        """End the logging: send what is held, and return how many samples it made in all."""
        self.flush()
        self.due = NEVER
        made = self.made - self._made_before
        self._made_before = self.made
        return made

    def take(self, age: int) -> None:
        """Take the sample of the tick `age`."""
        self.due = age + self._period
        self.made += 1
        values = self._values()
        encoder = self._encoder
        if encoder is None:
            self._send(encode_plain(age & TICK_MASK, self._period, self._mask, values), samples=1)
            return
        closed = encoder.add(age & TICK_MASK, values)
        if closed is None:
            self._in_line += 1
            if self._in_line == 1:
                self.flush_due = age + FLUSH_TICKS
            return
        if encoder.oldest_tick is None:
            self._send(closed, samples=self._in_line + 1)
            self._in_line = 0
            self.flush_due = NEVER
        else:
            self._send(closed, samples=self._in_line)
            self._in_line = 1
            self.flush_due = age + FLUSH_TICKS

    def flush(self) -> None:
        """Close the line that is being filled."""
        self.flush_due = NEVER
        if self._encoder is None:
            return
        closed = self._encoder.flush()
        if closed is not None:
            self._send(closed, samples=self._in_line)
            self._in_line = 0

    def _send(self, payload: str, *, samples: int) -> None:
        number, line = self._link.data(payload)
        self._kept.append((number, line))
        if not self._transmitter.send_data(line):
            self.dropped += samples

    def kept(self, number: int) -> bytes | None:
        """The kept line of that number, None where it is no longer, or not yet, kept."""
        for kept_number, line in self._kept:
            if kept_number == number:
                return line
        return None
