"""Estimates the speed of a shaft from quadrature counts read at sample ticks, from standstill to full speed.

The counts say between which two edges of the encoder the shaft stands. A sample in which the counts
differ from those of the sample before tells that an edge was passed within the last period T: going up to count c it
was edge c, going down to c it was edge c + 1. So such an *edge sample* knows the position to min(1, v T) counts, v
being the speed in counts a second: when less than one count passes in a period the time of the edge is what limits,
else the count itself.

The estimate at an edge sample b is (x_b - x_a) / (t_b - t_a) with x the edge positions, and a the newest earlier edge
sample that lies at least `window_s` back or at least `enough_counts` of travel back. So the window is one period at
high speed (small delay), `window_s` at medium speed, and as long as the time between two edges at low speed. Its
error at a constant speed is below min(1, v T) / (t_b - t_a): see `resolution_rpm`. In its two ends this is the M
method (counts in a fixed time) and the T method (time between counts, timed at the sample rate); joining them over
one common span is the thought of the M/T method (Ohmae et al., IEEE Trans. Ind. Appl. 1982; cited from memory).

Between edge samples the estimate is held, but not above one count in the time since the last edge, since a faster
shaft would have shown another edge. After `standstill_s` without an edge it is 0, and the window begins anew at the
next edge. Turning back passes the same edge again, so an encoder that dithers on an edge reads 0.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

HISTORY_MAX = 4096  # edge samples kept; a longer window than this is cut to it
S_PER_MIN = 60.0


@dataclass(frozen=True, slots=True)
class SpeedMethod:
    """The settings of the estimate; all must be positive."""

    window_s: float = 0.05
    enough_counts: int = 100
    standstill_s: float = 0.5

    def __post_init__(self) -> None:
        if not (self.window_s > 0 and self.enough_counts >= 1 and self.standstill_s >= self.window_s):
            raise ValueError("a speed window must be positive and standstill not shorter than it")

    def __str__(self) -> str:
        return (
            "counts between edges over a span that grows until it holds "
            f"{self.enough_counts} counts or {self.window_s * 1000:g} ms and at least two edges; "
            f"0 after {self.standstill_s * 1000:g} ms without an edge; causal"
        )


def resolution_rpm(speed_rpm: float, *, counts_per_rev: float, period_s: float, method: SpeedMethod) -> float:
    """How far the estimate may lie from a constant `speed_rpm`, once the shaft has turned for a whole window.

    With v in counts/s it is min(1, v T) / span, the span being the longer of T and the shorter of (enough_counts - 1)
    / v and window_s, and at low speed at least 1 / v - T. The two ends are the published formulas (Kavanagh and
    Murphy, IEEE Trans. Instrum. Meas. 1998; from memory): M method 60 / (P W); T method n^2 P / (60 f - n P) with f =
    1 / T. Below one count in `standstill_s` the estimate is 0, and the resolution the speed itself.
    """
    counts_per_s = abs(speed_rpm) * counts_per_rev / S_PER_MIN
    if counts_per_s * (method.standstill_s - period_s) <= 1:
        return max(abs(speed_rpm), S_PER_MIN / counts_per_rev / method.standstill_s)
    span_s = min(method.window_s, (method.enough_counts - 1) / counts_per_s)
    span_s = max(span_s, period_s, 1 / counts_per_s - period_s)
    return min(1.0, counts_per_s * period_s) / span_s * S_PER_MIN / counts_per_rev


def slowest_rpm(*, counts_per_rev: float, method: SpeedMethod) -> float:
    """The speed below which the estimate is 0: one count in `standstill_s`."""
    return S_PER_MIN / counts_per_rev / method.standstill_s


class SpeedEstimator:
    """The speed of one shaft, block after block, in fixed memory. The result does not depend on how samples are cut
    into blocks."""

    def __init__(self, *, counts_per_rev: float, tick_s: float, method: SpeedMethod | None = None) -> None:
        self._method = method or SpeedMethod()
        self._tick_s = tick_s
        self._rpm_per_count_per_tick = S_PER_MIN / counts_per_rev / tick_s
        self._window_ticks = max(1, round(self._method.window_s / tick_s))
        self._standstill_ticks = max(1, round(self._method.standstill_s / tick_s))
        self._last_tick: int | None = None
        self._last_raw = np.int32(0)
        self._forget(0)

    def _forget(self, tick: int) -> None:
        """Nothing is known before `tick`."""
        self._position = 0
        self._edge_ticks: Ints = np.empty(0, np.int64)
        self._edge_positions: Ints = np.empty(0, np.int64)
        self._held = math.nan
        self._held_since = tick

    def feed(self, ticks: Ints, counts: NDArray[np.int32], *, period_ticks: int) -> Floats:
        """The speed in rpm at each sample, (n,) float64, positive while the counts grow.

        `ticks` is (n,) int64, strictly increasing; `counts` is (n,) int32, wrapping. A step of `ticks` other than the
        period is a gap: what was known before it is forgotten. NaN where nothing can be said yet: after the beginning
        or a gap until two edges have been seen, or until `standstill_s` without one (then it is 0).
        """
        speeds = np.empty(len(ticks))
        steps = np.diff(ticks, prepend=ticks[0] if self._last_tick is None else self._last_tick)
        broken = steps != period_ticks
        begin = 0
        for cut in [*(int(place) for place in np.flatnonzero(broken)), len(ticks)]:
            if cut > begin:
                speeds[begin:cut] = self._run(ticks[begin:cut], counts[begin:cut])
            if cut < len(ticks):
                self._forget(int(ticks[cut]))
                self._last_raw = counts[cut]
                self._last_tick = int(ticks[cut])
            begin = cut
        rpm: Floats = speeds * self._rpm_per_count_per_tick
        return rpm

    def _run(self, ticks: Ints, counts: NDArray[np.int32]) -> Floats:
        """Counts per tick at samples that follow the last one without a gap (or begin with it, just after
        `_forget`)."""
        steps = np.diff(counts, prepend=self._last_raw).astype(np.int64)  # 32-bit differences wrap as the counts do
        positions = self._position + np.cumsum(steps)
        moved = np.flatnonzero(steps)
        at_edges = self._edge_speeds(ticks, positions, steps, moved)
        seen = np.cumsum(steps != 0)
        since = ticks - np.concatenate(([self._held_since], ticks[moved]))[seen]
        speeds: Floats = np.concatenate(([self._held], at_edges))[seen]
        most = 1.0 / np.maximum(since, 1)
        speeds = np.where(since > 0, np.clip(speeds, -most, most), speeds)
        speeds[since > self._standstill_ticks] = 0.0
        if len(moved):
            self._held, self._held_since = float(at_edges[-1]), int(ticks[moved[-1]])
        self._position = int(positions[-1])
        self._last_tick, self._last_raw = int(ticks[-1]), counts[-1]
        return speeds

    def _edge_speeds(self, ticks: Ints, positions: Ints, steps: Ints, moved: Ints) -> Floats:
        """Counts per tick at the edge samples `moved`; keeps what later ones need."""
        if len(moved) == 0:
            return np.empty(0)
        rising = steps[moved] > 0
        at = ticks[moved]
        edges = positions[moved] + ~rising
        rested = np.diff(at, prepend=self._held_since) > self._standstill_ticks
        begins = rested.copy()
        begins[0] |= len(self._edge_ticks) == 0
        unknown = bool(begins[0] and not rested[0] and math.isnan(self._held))
        new = np.flatnonzero(begins)
        # Where a window begins anew, the sample before the edge stands in for an edge: the first one passed came
        # after it.
        before = moved[new]
        anchor_ticks = np.where(before > 0, ticks[before - 1], self._last_tick or 0)
        anchor_edges = positions[before] - steps[before] + rising[new]
        is_anchor = np.insert(np.zeros(len(at), np.bool_), new, True)
        speeds = self._over_windows(
            np.insert(at, new, anchor_ticks), np.insert(edges, new, anchor_edges), is_anchor=is_anchor
        )[~is_anchor]
        if unknown and speeds[0] == 0:
            speeds[0] = math.nan  # one edge alone tells nothing of the speed at which it was passed
        return speeds

    def _over_windows(self, at: Ints, edges: Ints, *, is_anchor: NDArray[np.bool_]) -> Floats:
        """Counts per tick over the window that ends at each of these edges (0 at anchors, which begin one)."""
        known = len(self._edge_ticks)
        at = np.concatenate((self._edge_ticks, at))
        edges = np.concatenate((self._edge_positions, edges))
        travel = np.cumsum(np.abs(np.diff(edges, prepend=edges[0])))
        order = np.arange(len(at))
        anchors = np.concatenate((np.zeros(known, np.bool_), is_anchor))
        oldest = np.maximum.accumulate(np.where(anchors, order, 0))
        in_time = np.searchsorted(at, at - self._window_ticks, side="right") - 1
        in_travel = np.searchsorted(travel, travel - self._method.enough_counts, side="right") - 1
        start = np.maximum(np.maximum(in_time, in_travel), oldest)
        speeds: Floats = (edges - edges[start]) / np.maximum(at - at[start], 1)
        keep = max(int(in_time[-1]), int(oldest[-1]), len(at) - HISTORY_MAX, 0)
        self._edge_ticks, self._edge_positions = at[keep:], edges[keep:]
        return speeds[known:]
