"""Whether the device that answers is still the one that was opened, in the same start, and whether the host was awake.

Three clocks are held against each other: the host's monotonic one, its wall clock, and the device's ticks. A tick that
does not fit is only a suspicion (a damaged line can pass a 16-bit check): `who` is asked before anything is concluded.
"""

from __future__ import annotations

from enum import Enum, auto

from ramprig.port.clock import Clock
from ramprig.session.clockfit import DRIFT_MAX

TICK_SLACK_S = 0.25
"""A tick this far from where it should be is a suspicion."""
WALL_STEP_S = 2.0
"""The wall clock moved by this much against the monotonic one was set, or the host slept."""
WALL_LOOK_S = 1.0
"""How often the two are compared."""


class Fit(Enum):
    """How a tick stands to where the clocks say it should be."""

    RIGHT = auto()
    AHEAD = auto()
    BEHIND = auto()


class TickWatch:
    """Judges ticks by the last exchange that was right; knows nothing before the first."""

    def __init__(self, tick_s: float) -> None:
        self.tick_s = tick_s
        self._anchor: tuple[int, float, float] | None = None

    def take(self, tick: int, sent_s: float, received_s: float) -> None:
        """An exchange that is held to be right."""
        self._anchor = tick, sent_s, received_s

    def judge(self, tick: int, sent_s: float, received_s: float) -> tuple[Fit, float]:
        """Where the unwrapped tick of an answer stands, and by how many seconds it is off."""
        anchor = self._anchor  # tick, when its request was sent, when it was received
        if anchor is None:
            return Fit.RIGHT, 0.0
        anchor_tick, anchor_sent_s, anchor_received_s = anchor
        device_s = (tick - anchor_tick) * self.tick_s
        shortest_s = sent_s - anchor_received_s
        longest_s = received_s - anchor_sent_s
        slack_s = TICK_SLACK_S + DRIFT_MAX * longest_s
        if device_s > longest_s + slack_s:
            return Fit.AHEAD, device_s - longest_s
        if device_s < shortest_s - slack_s:
            return Fit.BEHIND, device_s - shortest_s
        return Fit.RIGHT, 0.0


class WallWatch:
    """Notices when the wall clock moves against the monotonic one. `look_s` is when to look next."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._apart_s = clock.wall() - clock.now()
        self.look_s = clock.now() + WALL_LOOK_S

    def moved_s(self, now_s: float) -> float | None:
        """By how much the wall clock was moved since the last look, where that is WALL_STEP_S or more."""
        self.look_s = now_s + WALL_LOOK_S
        apart_s = self._clock.wall() - now_s
        moved_s, self._apart_s = apart_s - self._apart_s, apart_s
        return moved_s if abs(moved_s) >= WALL_STEP_S else None
