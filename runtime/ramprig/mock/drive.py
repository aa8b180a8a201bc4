"""One axis's output: its demand, and the chain that makes the bridge duty of it, fast enough for every tick.

`chain.chain_step` is the readable form of `Drive.step`; a property test holds them equal. Ages are device ticks that
do not wrap.
"""

from __future__ import annotations

from collections.abc import Callable

from ramprig_link.words import STATE_BITS, Rest

from .limits import LimitStore
from .orders import Motion, Order

DWELL_LOCK = 1 << STATE_BITS["dwell_lock"].low
AT_CEILING = 1 << STATE_BITS["at_ceiling"].low
AT_SLEW = 1 << STATE_BITS["at_slew"].low
BRAKING = 1 << STATE_BITS["braking"].low

Tell = Callable[..., None]
"""Notes a notice for the end of the tick: its word, then its fields."""


class Drive:
    """The demand and bridge of one axis.

    `duty` is what the bridge has, `brake` whether it brakes at zero. While `steady` is True a `step` would change
    nothing and return 0, so the caller may leave it out.
    """

    __slots__ = (
        "_ceiling",
        "_down",
        "_dwell_ticks",
        "_held_ticks",
        "_index",
        "_last_sign",
        "_tag",
        "_tell",
        "_up",
        "_zero_since",
        "brake",
        "demand",
        "duty",
        "steady",
    )

    def __init__(self, index: int, limits: LimitStore, *, age: int, tell: Tell) -> None:
        """`age` is the tick in which the board starts."""
        self._index = index
        self._tell = tell
        self.demand = Motion()
        self.duty = 0
        self.brake = False
        self.steady = True
        self._tag: int | None = None
        self._last_sign = 0
        self._zero_since = age
        self._held_ticks = 0
        self.refresh(limits)

    def refresh(self, limits: LimitStore) -> None:
        """Take over the limits."""
        index = self._index
        self._ceiling = min(limits["ceiling_duty", index], limits.board.max_duty)
        self._up = limits["slew_up_duty", index]
        self._down = limits["slew_down_duty", index]
        self._dwell_ticks = limits["dwell_ticks", index]
        self.steady = False

    def start(self, order: Order, age: int) -> None:
        """Begin a `ramp` or `rest`."""
        if isinstance(order.goal, Rest):
            self.brake = order.goal is Rest.BRAKE
            self._tell("done", f"{order.tag:02x}")
            return
        self.demand.begin(order.goal, ticks=order.ticks, age=age)
        self._tag = order.tag
        self.steady = False

    def release(self) -> None:
        """End all orders: the demand is zero from now on."""
        self.demand.set(0)
        self._tag = None
        self.steady = False

    def switch_off(self, age: int) -> None:
        """Have the bridge off in this tick, whatever it was."""
        self.release()
        self.brake = False
        self._held_ticks = 0
        if self.duty:
            self.duty = 0
            self._zero_since = age

    @property
    def moving(self) -> bool:
        """Whether the bridge duty or the demand is not zero."""
        return bool(self.duty or self.demand.value)

    def step(self, age: int, still: bool) -> int:  # noqa: C901  the chain inline, for speed; chain.py is the plain form
        """One tick of the chain; `still` says that the shaft is at standstill, or that there is no encoder.

        Returns the state bits dwell_lock, at_ceiling and at_slew.
        """
        demand = target = self.demand.value
        was = duty = self.duty
        ceiling = self._ceiling
        bits = 0
        if target > ceiling:
            target = ceiling
            bits = AT_CEILING
        elif target < -ceiling:
            target = -ceiling
            bits = AT_CEILING
        if duty > ceiling:
            duty = ceiling
        elif duty < -ceiling:
            duty = -ceiling

        if duty > 0:
            if target < 0:
                target = 0
            if target < duty:
                duty -= self._down
                duty = target if duty < target else duty
            elif target > duty:
                duty += self._up
                duty = target if duty > target else duty
        elif duty < 0:
            if target > 0:
                target = 0
            if target > duty:
                duty += self._down
                duty = target if duty > target else duty
            elif target < duty:
                duty -= self._up
                duty = target if duty < target else duty
        elif target > 0:
            duty = target if target < self._up else self._up
        elif target < 0:
            duty = target if target > -self._up else -self._up
        if duty != target:
            bits |= AT_SLEW
        return self._cross(was, duty, demand, bits, age, still)

    def _cross(self, was: int, duty: int, demand: int, bits: int, age: int, still: bool) -> int:
        """The dwell lock and the bridge: from the last tick's duty `was` to what the slew allows, `duty`."""
        if was == 0:
            if duty:
                sign = 1 if duty > 0 else -1
                if sign != self._last_sign:
                    if not still or age - self._zero_since < self._dwell_ticks:
                        self._held_ticks += 1
                        self.steady = False
                        return bits | DWELL_LOCK
                    if self._held_ticks:
                        self._tell("dwell", self._index, self._held_ticks)
                    self._last_sign = sign
            self._held_ticks = 0
        elif duty == 0:
            self._zero_since = age
        self.duty = duty
        if duty == demand and not self.demand.moving:
            self.steady = not bits
            if self._tag is not None:
                self._tell("done", f"{self._tag:02x}")
                self._tag = None
        return bits
