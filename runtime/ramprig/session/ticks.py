"""Device ticks without their wrap: 32-bit ticks from the line become numbers that only grow."""

from __future__ import annotations

_WRAP = 2**32


class TickCounter:
    """Unwraps ticks next to the latest one seen; right as long as two lines lie less than 24 days apart."""

    def __init__(self) -> None:
        self.latest: int | None = None

    def near(self, tick: int) -> int:
        """The unwrapped tick for a 32-bit one, without taking it for the present."""
        if self.latest is None:
            return tick
        behind = (tick - self.latest + _WRAP // 2) % _WRAP - _WRAP // 2
        return self.latest + behind

    def see(self, tick: int) -> int:
        """The unwrapped tick for one that came just now."""
        unwrapped = self.near(tick)
        self.reach(unwrapped)
        return unwrapped

    def reach(self, unwrapped: int) -> None:
        """The device has reached this unwrapped tick."""
        if self.latest is None or unwrapped > self.latest:
            self.latest = unwrapped

    def restart(self) -> None:
        """Forget everything: the device begins at 0 again, or the first tick was from an old answer."""
        self.latest = None


def wrapped(tick: int) -> int:
    """The tick as it stands in a line: modulo 2^32."""
    return tick % _WRAP
