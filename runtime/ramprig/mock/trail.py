"""The trail: a record of every tick around a trip, in a ring (TRAIL-1, TRAIL-2)."""

from __future__ import annotations

from collections import deque

from ramprig_link.samples import Encoder
from ramprig_link.words import CHANNELS, TRAIL_PAYLOAD_MAX

AFTER_TRIP = 4
"""One part in this many of the ring is recorded after a trip."""


class Trail:
    """A ring of `length` records, one a tick: supply, state bits, then duty, counts and current of each axis.

    `recording` tells whether a tick in a live state must be recorded; the records are of ticks in a row.
    """

    __slots__ = ("_left", "_length", "_newest_age", "_ring", "frozen")

    def __init__(self, length: int) -> None:
        self._length = length
        self._ring: deque[tuple[int, ...]] = deque(maxlen=length)
        self._newest_age = 0
        self._left: int | None = None
        self.frozen = False

    def __len__(self) -> int:
        return len(self._ring)

    def begin(self) -> None:
        """Forget the last trip's records and wait for the next trip: at `arm`."""
        self._ring.clear()
        self._left = None
        self.frozen = False

    def trip(self) -> None:
        """A trip has latched: record on for a part of the ring, this tick's record included, then freeze."""
        if not self.frozen:
            self._left = self._length // AFTER_TRIP

    @property
    def running_on(self) -> bool:
        """Whether records are still wanted though the device is no longer armed."""
        return self._left is not None

    def add(self, record: tuple[int, ...], age: int) -> None:
        """Keep the record of the tick `age`; does nothing once frozen."""
        if self.frozen:
            return
        self._ring.append(record)
        self._newest_age = age
        if self._left is not None:
            self._left -= 1
            if self._left == 0:
                self._left = None
                self.frozen = True

    def read(self, axis: int, first: int) -> str | None:
        """A packed block of one axis from record `first` on, as long as an answer holds; None where there is none."""
        if not self.frozen or first >= len(self._ring):
            return None
        per_axis = sum(
            1 << CHANNELS[name].first_bit + axis * CHANNELS[name].step for name in ("duty", "counts", "current_ma")
        )
        mask = per_axis | 1 << CHANNELS["supply_mv"].first_bit | 1 << CHANNELS["state"].first_bit
        encoder = Encoder(mask, 1, payload_max=TRAIL_PAYLOAD_MAX)
        oldest_age = self._newest_age - len(self._ring) + 1
        at = 2 + 3 * axis
        for number in range(first, len(self._ring)):
            record = self._ring[number]
            closed = encoder.add(oldest_age + number & 0xFFFFFFFF, (*record[at : at + 3], record[0], record[1]))
            if closed is not None:
                return closed
        return encoder.flush()
