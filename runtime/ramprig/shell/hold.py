"""Hold-to-run without a key-up: when a key counts as held, and what duty that asks for.

A terminal tells of a key only by repeating it. So the first press runs for FIRST_S, which covers the usual delay before
a keyboard repeats; once it repeats, each repeat keeps the motor going for REPEAT_S only. A tap therefore runs for
FIRST_S, and letting go of a held key stops REPEAT_S later. Any other key stops at once.
"""

from __future__ import annotations

import threading

from ramprig_link.words import DUTY_FULL

FIRST_S = 0.6
"""The first press runs for so long; keyboards begin to repeat after 0.25 to 0.6 s (common practice)."""
REPEAT_S = 0.15
"""Each repeat runs for so long; keyboards repeat 10 to 30 times a second (common practice)."""
STEP_DUTY = DUTY_FULL // 100
"""Up and down change the jog duty by so much."""
START_DUTY = DUTY_FULL // 10
"""The duty of a jog that begins, where the ceiling allows it."""


class Hold:
    """One jog by keys. Keys come from one thread, `wanted` is asked by another; times are s of one clock."""

    def __init__(self, *, ceiling_duty: int, duty: int = START_DUTY) -> None:
        self._lock = threading.Lock()
        self._ceiling_duty = ceiling_duty
        self._duty = max(min(duty, ceiling_duty), min(STEP_DUTY, ceiling_duty))
        self._direction = 0
        self._until_s = 0.0
        self._left = False

    @property
    def duty(self) -> int:
        """The jog duty in 1/10000, without a sign."""
        return self._duty

    @property
    def left(self) -> bool:
        """Whether the jog is over."""
        return self._left

    def press(self, direction: int, now_s: float) -> None:
        """An arrow key: `direction` is 1 or -1. The other arrow than the one held stops first."""
        with self._lock:
            held = self._direction != 0 and now_s < self._until_s
            if held and direction != self._direction:
                self._direction = 0
                return
            self._direction = direction
            self._until_s = now_s + (REPEAT_S if held else FIRST_S)

    def change(self, steps: int) -> None:
        """Up and down: so many steps more or less, from one step up to the ceiling."""
        with self._lock:
            least = min(STEP_DUTY, self._ceiling_duty)
            self._duty = max(least, min(self._ceiling_duty, self._duty + steps * STEP_DUTY))

    def release(self) -> None:
        """Any other key: stop."""
        with self._lock:
            self._direction = 0

    def leave(self) -> None:
        """Stop, and end the jog."""
        with self._lock:
            self._direction = 0
            self._left = True

    def wanted(self, now_s: float) -> int:
        """The duty asked for now, 1/10000, signed; 0 while no key is held."""
        with self._lock:
            if now_s >= self._until_s:
                self._direction = 0
            return self._direction * self._duty
