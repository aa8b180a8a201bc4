"""Orders: what waits for its start tick, and how a motion moves in whole numbers from there (ORDER-1 to ORDER-4)."""

from __future__ import annotations

from bisect import insort
from dataclasses import dataclass, field

from ramprig_link.words import Rest

NEVER = 1 << 62
"""An age that no device reaches."""


@dataclass(frozen=True, slots=True, order=True)
class Order:
    """An order in the queue, sorted by start and then by arrival.

    `word` is `ramp`, `swing` or `rest`; `goal` the duty in 1/10000, the pulse in ns or the mode; `start` is in ticks of
    the device's age, which does not wrap.
    """

    start: int
    arrival: int
    word: str = field(compare=False)
    index: int = field(compare=False)
    goal: int | Rest = field(compare=False)
    ticks: int = field(compare=False)
    tag: int = field(compare=False)


class OrderQueue:
    """At most `depth` orders, taken out at their start. `due` is the age of the next start, NEVER where none waits."""

    __slots__ = ("_arrivals", "_waiting", "depth", "due")

    def __init__(self, depth: int) -> None:
        self.depth = depth
        self.due = NEVER
        self._arrivals = 0
        self._waiting: list[Order] = []

    def __len__(self) -> int:
        return len(self._waiting)

    @property
    def free(self) -> int:
        """Places left."""
        return self.depth - len(self._waiting)

    def add(self, word: str, index: int, *, goal: int | Rest, ticks: int, start: int, tag: int) -> None:
        """Queue an order; the caller has seen to it that there is a place."""
        self._arrivals += 1
        insort(self._waiting, Order(start, self._arrivals, word, index, goal, ticks, tag))
        self.due = self._waiting[0].start

    def take(self, age: int) -> list[Order]:
        """Remove and return the orders that start at `age`, in their order."""
        count = 0
        while count < len(self._waiting) and self._waiting[count].start <= age:
            count += 1
        started = self._waiting[:count]
        del self._waiting[:count]
        self.due = self._waiting[0].start if self._waiting else NEVER
        return started

    def empty(self) -> None:
        """Drop all orders."""
        self._waiting.clear()
        self.due = NEVER


class Motion:
    """A value that moves linearly: at start + k it is from + s floor(|to - from| k / ticks), s the sign of the way."""

    __slots__ = ("_begin", "_goal", "_size", "_start", "_ticks", "_way", "moving", "value")

    def __init__(self) -> None:
        self.value = 0
        self.moving = False
        self._begin = self._goal = self._size = self._start = self._way = 0
        self._ticks = 1

    def set(self, value: int) -> None:
        """Be at `value` and stay there."""
        self.value = value
        self.moving = False

    def begin(self, goal: int, *, ticks: int, age: int) -> None:
        """Set out at `age` from the value that the motion before has at `age`."""
        if self.moving:
            self.advance(age)
        if ticks == 0:
            self.set(goal)
            return
        self._begin = self.value
        self._goal = goal
        self._size = abs(goal - self.value)
        self._way = 1 if goal > self.value else -1
        self._start = age
        self._ticks = ticks
        self.moving = True

    def advance(self, age: int) -> None:
        """Move to where the motion is at `age`; at its end `moving` is False."""
        passed = age - self._start
        if passed >= self._ticks:
            self.value = self._goal
            self.moving = False
        else:
            self.value = self._begin + self._way * (self._size * passed // self._ticks)
