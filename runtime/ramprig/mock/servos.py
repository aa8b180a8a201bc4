"""One servo's output: its pulse in ns, inside its limits and no faster than its slew (ORDER-5, S7)."""

from __future__ import annotations

from .drive import AT_SLEW, Tell
from .limits import LimitStore
from .orders import Motion, Order

NS_PER_US = 1000


class ServoPulse:
    """The pulse of one servo: `pulse_ns`, 0 for none. While `steady` is True a `step` would change nothing."""

    __slots__ = (
        "_highest_ns",
        "_home_ns",
        "_index",
        "_lowest_ns",
        "_slew_ns",
        "_tag",
        "_tell",
        "demand",
        "pulse_ns",
        "steady",
    )

    def __init__(self, index: int, limits: LimitStore, *, tell: Tell) -> None:
        self._index = index
        self._tell = tell
        self.demand = Motion()
        self.pulse_ns = 0
        self.steady = True
        self._tag: int | None = None
        self.refresh(limits)

    def refresh(self, limits: LimitStore) -> None:
        """Take over the limits."""
        index = self._index
        self._lowest_ns = limits["pulse_min_us", index] * NS_PER_US
        self._highest_ns = limits["pulse_max_us", index] * NS_PER_US
        self._slew_ns = limits["pulse_slew_ns", index]
        self._home_ns = self._inside(limits["pulse_home_us", index] * NS_PER_US)
        self.steady = False

    def _inside(self, pulse_ns: int) -> int:
        return max(self._lowest_ns, min(self._highest_ns, pulse_ns))

    @property
    def pulse_us(self) -> int:
        """The whole part of the pulse in us."""
        return self.pulse_ns // NS_PER_US

    def start(self, order: Order, age: int) -> None:
        """Begin a `swing`; a goal of 0 takes the pulses away."""
        assert isinstance(order.goal, int)
        if self.demand.moving:
            self.demand.advance(age)
        if order.goal and not self.demand.value:
            self.demand.set(self.pulse_ns or self._home_ns)
        self.demand.begin(order.goal, ticks=order.ticks, age=age)
        self._tag = order.tag
        self.steady = False

    def release(self) -> None:
        """End all orders and keep the pulse as it is."""
        self.demand.set(self.pulse_ns)
        self._tag = None
        self.steady = False

    def switch_off(self) -> None:
        """Have no pulse from this tick on."""
        self.pulse_ns = 0
        self.release()

    def step(self) -> int:
        """One tick; returns the state bit at_slew where the slew holds the pulse back."""
        demand = self.demand.value
        if not demand:
            self.pulse_ns = 0
            target = 0
        else:
            lowest_ns, highest_ns = self._lowest_ns, self._highest_ns
            target = lowest_ns if demand < lowest_ns else highest_ns if demand > highest_ns else demand
            pulse_ns = self.pulse_ns
            if not pulse_ns:
                pulse_ns = self._home_ns
            else:
                if not lowest_ns <= pulse_ns <= highest_ns:
                    pulse_ns = self._inside(pulse_ns)
                if target > pulse_ns:
                    pulse_ns += self._slew_ns
                    pulse_ns = target if pulse_ns > target else pulse_ns
                elif target < pulse_ns:
                    pulse_ns -= self._slew_ns
                    pulse_ns = target if pulse_ns < target else pulse_ns
            self.pulse_ns = pulse_ns
        if self.pulse_ns != target:
            return AT_SLEW
        if target == demand and not self.demand.moving:
            self.steady = True
            if self._tag is not None:
                self._tell("done", f"{self._tag:02x}")
                self._tag = None
        return 0
