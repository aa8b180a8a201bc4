"""How long the host did not look after the board in a run: asleep, held up, or stopped, by every clock there is."""

from __future__ import annotations

from ramprig.port.clock import Clock
from ramprig.session.events import Event, HostSlept, LateHost, WallClockSet
from ramprig.session.watch import WALL_STEP_S

SLEEPS_MAX = 1000
"""Sleeps of the host that are listed."""
RECENT_S = 30.0
"""A wall clock that jumped ahead so shortly before a link is lost: the host slept, and its ports did not survive it."""


class Absence:
    """Listens to one run. `slept_s` are the times for which the host was found to have slept."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._apart_s = clock.wall() - clock.now()
        self._longest_s = 0.0
        self._jumped_at_s, self._jumped_s = clock.now(), 0.0
        self.slept_s: list[float] = []

    def on_event(self, event: Event) -> None:
        """Something has happened."""
        match event:
            case HostSlept(slept_s=slept_s):
                self._longest_s = max(self._longest_s, slept_s)
                if len(self.slept_s) < SLEEPS_MAX:
                    self.slept_s.append(round(slept_s, 1))
            case LateHost(late_s=late_s):
                self._longest_s = max(self._longest_s, late_s)
            case WallClockSet(moved_s=moved_s):
                self._apart_s += moved_s
                self._jumped_at_s, self._jumped_s = self._clock.now(), moved_s
            case _ if abs(self._unseen_s()) < WALL_STEP_S:  # clocks drift apart, over a week by much
                self._apart_s += self._unseen_s()

    def longest_s(self) -> float:
        """The longest of all up to now, which is right after a link was lost where one was."""
        now_s = self._clock.now()
        recent_s = self._jumped_s if now_s - self._jumped_at_s <= RECENT_S else 0.0
        return max(self._longest_s, self._unseen_s(), recent_s, 0.0)

    def _unseen_s(self) -> float:
        """How far the wall clock has gone ahead without an event, as by a sleep from which nothing else was heard."""
        return self._clock.wall() - self._clock.now() - self._apart_s
