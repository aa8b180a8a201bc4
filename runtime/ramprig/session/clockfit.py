"""The device's clock against the host's: offset and drift out of requests and their answers, in bounded memory.

An answer that bears tick T was made between the moment its request was sent and the moment it was received. So the line
host time = offset + rate * T has every sending below it and every reception above it, and the delays are what lies
between. The best line under the receptions is the one that minimises the sum of their distances (the linear programme
of Moon, Skelly and Towsley, INFOCOM 1999); its solution is the edge of the lower convex hull over the mean of the ticks
(Zhang, Liu and Xia, INFOCOM 2002). The same holds for the sendings with the upper hull.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

HULL_MAX = 256
"""Most corners a hull keeps; a hull of random delays has about ln(n) of them."""
WINDOW_S = 600.0
"""A fit looks back between one and two of these, so that it follows a clock that warms up."""
DRIFT_MAX = 0.02
"""Clocks are held to be right within this; a ceramic resonator is so within about 0.5 % (common practice)."""
SPAN_MIN_S = 2.0
"""Below this span of samples the rate is the nominal one: delays of 16 ms would turn into percents of drift."""


@dataclass(frozen=True, slots=True)
class Line:
    """y = intercept + slope * x."""

    slope: float
    intercept: float

    def at(self, x: float) -> float:
        """The line's y at x."""
        return self.intercept + self.slope * x


class LowerHull:
    """The lower convex hull of points that come in order of x, and the line under all of them nearest to them.

    Bounded: at HULL_MAX corners the flattest one goes, so the line may then lie above a few points by what that corner
    stood out. `count` is the number of points taken.
    """

    def __init__(self) -> None:
        self.corners: list[tuple[float, float]] = []
        self.count = 0
        self._sum_x = 0.0

    def add(self, x: float, y: float) -> None:
        """Take a point; `x` must not be smaller than the last one's (ValueError)."""
        corners = self.corners
        if corners and x <= corners[-1][0]:
            self._add_late(x, y)
            return
        self.count += 1
        self._sum_x += x
        while len(corners) >= 2:
            ax, ay = corners[-2]
            bx, by = corners[-1]
            if (bx - ax) * (y - by) - (by - ay) * (x - bx) > 0.0:  # `_turn`, written out: several times a beat
                break
            corners.pop()
        corners.append((x, y))
        if len(corners) > HULL_MAX:
            self._drop_flattest()

    def _add_late(self, x: float, y: float) -> None:
        """A point at the last one's x, or before it."""
        last_x, last_y = self.corners[-1]
        if x < last_x:
            raise ValueError(f"points must come in order: {x} after {last_x}")
        if y >= last_y:
            self.count += 1
            self._sum_x += x
            return
        self.corners.pop()
        self.add(x, y)

    def _drop_flattest(self) -> None:
        corners = self.corners
        inner = range(1, len(corners) - 1)
        del corners[min(inner, key=lambda at: _turn(corners[at - 1], corners[at], corners[at + 1]))]

    def mean_x(self) -> float:
        """The mean of all points' x."""
        return self._sum_x / self.count

    def best_line(self) -> Line:
        """The line under all points with the least sum of distances; slope 0 for a single x. Needs a point."""
        corners = self.corners
        if not corners:
            raise ValueError("no point yet")
        if len(corners) == 1:
            return Line(0.0, corners[0][1])
        mean = self.mean_x()
        right = 1
        while right < len(corners) - 1 and corners[right][0] < mean:
            right += 1
        (x0, y0), (x1, y1) = corners[right - 1], corners[right]
        slope = (y1 - y0) / (x1 - x0)
        return Line(slope, y0 - slope * x0)

    def support(self, slope: float) -> Line:
        """The highest line of this slope under all points. Needs a point."""
        return Line(slope, min([y - slope * x for x, y in self.corners]))


def _turn(a: tuple[float, float], b: tuple[float, float], c: tuple[float, float]) -> float:
    """Positive where a, b, c turn to the left, so that b is a corner of the lower hull."""
    (ax, ay), (bx, by), (cx, cy) = a, b, c
    return (bx - ax) * (cy - by) - (by - ay) * (cx - bx)


def exchange(t1: float, t2: float, t3: float, t4: float) -> tuple[float, float]:
    """Offset of the far clock and round trip delay of one exchange, in the unit of the arguments.

    t1 sent, t2 received there, t3 answered there, t4 received here (RFC 5905 section 8). The offset is wrong by at most
    half the delay.
    """
    return ((t2 - t1) + (t3 - t4)) / 2, (t4 - t1) - (t3 - t2)


@dataclass(frozen=True, slots=True)
class ClockFit:
    """The fitted relation of device ticks and host time.

    The lines have x in ticks since `origin_tick` and y in seconds since `origin_s`. `early` is the best line over the
    sendings, `late` the best one under the receptions: the truth lies between them where exchanges were. `slowest` and
    `fastest` bound it after the last exchange too: under the receptions with the greatest rate that fits all exchanges,
    over the sendings with the least. `drift_ppm` is positive where the device's clock is slow (a tick lasts longer than
    nominal), `drift_error_ppm` bounds its error by every rate that fits.
    """

    origin_tick: int
    origin_s: float
    tick_s: float
    early: Line
    late: Line
    slowest: Line
    fastest: Line
    drift_ppm: float
    drift_error_ppm: float
    exchanges: int

    def host_s(self, tick: int) -> float:
        """Host time of the tick's begin, in s on the port's clock: the middle between the bounds."""
        x = float(tick - self.origin_tick)
        return self.origin_s + (self.early.at(x) + self.late.at(x)) / 2

    def error_s(self, tick: int) -> float:
        """Half the distance of the bounds at this tick, in s."""
        x = float(tick - self.origin_tick)
        return abs(self.late.at(x) - self.early.at(x)) / 2

    def tick_not_later(self, host_s: float) -> int:
        """A tick that the device has reached at `host_s`, a time after the last exchange: never too late."""
        return _tick_on(self.slowest, host_s - self.origin_s, self.origin_tick)

    def tick_not_earlier(self, host_s: float) -> int:
        """A tick that the device has not passed at `host_s`, a time after the last exchange: never too early."""
        return self.origin_tick + math.ceil((host_s - self.origin_s - self.fastest.intercept) / self.fastest.slope)


def _tick_on(slowest: Line, elapsed_s: float, origin_tick: int) -> int:
    """The last tick that has begun `elapsed_s` after the origin, by this line."""
    return origin_tick + math.floor((elapsed_s - slowest.intercept) / slowest.slope)


class _Generation:
    """The two hulls of one window: receptions as they are, sendings upside down."""

    def __init__(self, origin_tick: int, origin_s: float, tick_s: float) -> None:
        self.origin_tick = origin_tick
        self.origin_s = origin_s
        self.last_tick = origin_tick
        self.received = LowerHull()
        self.sent = LowerHull()
        self._low, self._high = tick_s * (1 - DRIFT_MAX), tick_s * (1 + DRIFT_MAX)

    def add(self, tick: int, sent_s: float, received_s: float) -> None:
        x = float(tick - self.origin_tick)
        above, below = received_s - self.origin_s, -(sent_s - self.origin_s)  # the sendings are kept upside down
        self.last_tick = tick
        self.received.add(x, above)
        self.sent.add(x, below)
        self._narrow(x, above, below)

    def _narrow(self, x: float, above: float, below: float) -> None:
        """Take the exchange into the least and the greatest slope that a line between sendings and receptions has.

        Corners alone bound them: what lies behind a hull's edge bounds less than the edge's ends do.
        """
        for sent_x, earlier_below in self.sent.corners:
            if sent_x < x:
                slope = (above + earlier_below) / (x - sent_x)
                if slope < self._high:
                    self._high = slope
        for received_x, earlier_above in self.received.corners:
            if received_x < x:
                slope = (earlier_above + below) / (received_x - x)
                if slope > self._low:
                    self._low = slope

    def fit(self, tick_s: float) -> ClockFit:
        low, high = self._slopes()
        wide = (self.last_tick - self.origin_tick) * tick_s >= SPAN_MIN_S
        late = self._line(self.received, tick_s, wide)
        early = _upside_down(self._line(self.sent, -tick_s, wide))
        rate = (late.slope + early.slope) / 2
        return ClockFit(
            origin_tick=self.origin_tick,
            origin_s=self.origin_s,
            tick_s=tick_s,
            early=early,
            late=late,
            slowest=self.received.support(high),
            fastest=_upside_down(self.sent.support(-low)),
            drift_ppm=(rate / tick_s - 1) * 1e6,
            drift_error_ppm=max(high - rate, rate - low) / tick_s * 1e6,
            exchanges=self.received.count,
        )

    def slowest(self) -> Line:
        """The line `ClockFit.slowest` alone."""
        return self.received.support(self._slopes()[1])

    @staticmethod
    def _line(hull: LowerHull, nominal: float, wide: bool) -> Line:
        """The hull's best line where its slope is a believable one, else the supporting line of the nearest slope."""
        if not wide:
            return hull.support(nominal)
        line = hull.best_line()
        bounds = sorted((nominal * (1 - DRIFT_MAX), nominal * (1 + DRIFT_MAX)))
        if bounds[0] <= line.slope <= bounds[1]:
            return line
        return hull.support(min(max(line.slope, bounds[0]), bounds[1]))

    def _slopes(self) -> tuple[float, float]:
        """The least and the greatest slope of a line with all sendings below and all receptions above it."""
        # A clock whose rate changed in the window may leave none; then the two bounds have crossed.
        return min(self._low, self._high), max(self._low, self._high)


def _upside_down(line: Line) -> Line:
    return Line(-line.slope, -line.intercept)


class ClockFitter:
    """Takes exchanges and gives the fit, in memory bounded by HULL_MAX corners in four hulls.

    `tick_s` is the nominal length of a tick. Give it only answers that were no repeats, in order of their ticks; others
    are passed over and counted in `passed_over`.
    """

    def __init__(self, tick_s: float) -> None:
        self.tick_s = tick_s
        self.passed_over = 0
        self._generations: list[_Generation] = []
        self._fit: ClockFit | None = None
        self._slowest: Line | None = None

    def add(self, tick: int, sent_s: float, received_s: float) -> None:
        """Take an exchange: unwrapped tick of the answer, host times on one monotonic clock, in s."""
        generations = self._generations
        if received_s < sent_s or (generations and tick < generations[-1].last_tick):
            self.passed_over += 1
            return
        span = WINDOW_S / self.tick_s
        if not generations or tick - generations[-1].origin_tick >= span:
            generations.append(_Generation(tick, sent_s, self.tick_s))
            del generations[:-2]
        for generation in generations:
            generation.add(tick, sent_s, received_s)
        self._fit = self._slowest = None

    @property
    def fit(self) -> ClockFit | None:
        """The present fit, None before the first exchange."""
        if self._fit is None and self._generations:
            self._fit = self._generations[0].fit(self.tick_s)
        return self._fit

    def tick_not_later(self, host_s: float) -> int | None:
        """As `ClockFit.tick_not_later` of the present fit, without the rest of it; None before the first exchange."""
        if not self._generations:
            return None
        oldest = self._generations[0]
        if self._slowest is None:
            self._slowest = oldest.slowest()
        return _tick_on(self._slowest, host_s - oldest.origin_s, oldest.origin_tick)
