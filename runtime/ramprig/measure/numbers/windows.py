"""Cuts a recording into windows in which one set of linear equations holds, and takes start values from them.

Only stretches whose motion is beyond doubt are used: `turning` and `coasting` where the encoder moved the same way
before and after each sample; `still` where it did not move at all; `idle` where the bridge was open as well.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.errors import UsageError

from .motor import Motion

Array = NDArray[np.float64]

LONGEST_S = 1.0
"""Longest window: each has a start state of its own, so slow disturbances do not add up beyond it."""
LEAST_SAMPLES = 12
LOOK_S = 0.010
"""How far before and after a sample the encoder must have moved for it to count as turning."""
LEAST_COUNTS = 2
SETTLE_S = 0.010
"""What is left out after the bridge opens, while the diodes still carry current; longer while a current is read."""
QUIET_S = 0.050
"""How long after the drive has gone a shaft must stay at rest for the time before to count as still."""


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Recording:
    """Samples of one axis at a constant period, as the board logs them: measured first, then the duty set.

    Arrays of `n` samples. `duty` in -1 to 1 holds from its sample to the next; `supply_v` and `current_a` (signed,
    positive the way a positive duty drives it) are read at the sample; `counts` is the encoder (x4, wrapping at 32
    bits is undone). `coasting` is True where the bridge is off and not braking. `held` says that the shaft was held
    fast. `winding_c` is the winding's temperature where it is measured, else None. Raises `UsageError` for columns
    that do not belong together.
    """

    period_s: float
    duty: Array
    supply_v: Array
    current_a: Array
    counts: NDArray[np.int64]
    coasting: NDArray[np.bool_]
    counts_per_turn: int
    held: bool = False
    winding_c: Array | None = None

    def __post_init__(self) -> None:
        lengths = {len(part) for part in (self.duty, self.supply_v, self.current_a, self.counts, self.coasting)}
        if len(lengths) != 1 or not self.period_s > 0.0 or self.counts_per_turn < 1:
            raise UsageError(
                f"a recording of {sorted(lengths)} samples, period {self.period_s} s, {self.counts_per_turn} counts a "
                "turn; all columns must have the same length, period and counts must be above 0"
            )


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Window:
    """Part of a recording in which one motion holds. `volts[k]` drives from sample k to k + 1 (its last is unused).

    `angle_rad` counts from the window's first sample, half a count added; `direction` is -1, 0 or 1. `heat_a2s` is
    the square of the current integrated from the recording's start, its mean over the window, and `warming` the same
    sample by sample less that mean, times the current, in A^3 s; `winding_c` is the mean temperature where that is
    measured. `lively` says that something other than steady running happens, `held` that the shaft was held fast.
    """

    motion: Motion
    period_s: float
    begin_s: float
    volts: Array
    current_a: Array
    angle_rad: Array
    direction: int
    heat_a2s: float
    warming: Array
    winding_c: float | None
    lively: bool
    held: bool

    def __len__(self) -> int:
        return len(self.volts)


def unwrapped(counts: NDArray[np.int64]) -> NDArray[np.int64]:
    """Counts without their wraps at 32 bits."""
    moves = np.diff(np.asarray(counts, np.int64))
    moves = np.mod(moves + 2**31, 2**32) - 2**31
    return np.concatenate([[0], np.cumsum(moves)])


def _shifted(counts: NDArray[np.int64], by: int) -> NDArray[np.int64]:
    """Counts `by` samples later (earlier if negative), the ends repeated."""
    index = np.clip(np.arange(len(counts)) + by, 0, len(counts) - 1)
    return counts[index]


def _directions(counts: NDArray[np.int64], look: int) -> NDArray[np.int64]:
    """1 or -1 where the shaft certainly turned that way at the sample, else 0."""
    before = counts - _shifted(counts, -look)
    after = _shifted(counts, look) - counts
    up = (before >= LEAST_COUNTS) & (after >= LEAST_COUNTS)
    down = (before <= -LEAST_COUNTS) & (after <= -LEAST_COUNTS)
    return up.astype(np.int64) - down.astype(np.int64)


def _resting(counts: NDArray[np.int64], quiet: int) -> NDArray[np.bool_]:
    """Where the encoder neither moved since `quiet` samples nor moves within the next `quiet`."""
    resting: NDArray[np.bool_] = (counts == _shifted(counts, -quiet)) & (counts == _shifted(counts, quiet))
    return resting


def _runs(labels: NDArray[np.int64]) -> Iterator[tuple[int, int, int]]:
    """Start, end and label of each run of equal labels."""
    edges = np.flatnonzero(np.diff(labels)) + 1
    starts = np.concatenate([[0], edges])
    ends = np.concatenate([edges, [len(labels)]])
    for start, end in zip(starts, ends, strict=True):
        yield int(start), int(end), int(labels[start])


def _labels(recording: Recording, counts: NDArray[np.int64]) -> NDArray[np.int64]:
    """A number a sample: 0 not usable, 1/2 turning up/down, 3/4 coasting up/down, 5 still, 6 idle."""
    off = recording.coasting
    if recording.held:
        return np.where(off, 6, 5)
    look = max(3, round(LOOK_S / recording.period_s))
    directions = _directions(counts, look)
    resting = _resting(counts, max(3, round(QUIET_S / recording.period_s)))
    labels = np.where(directions > 0, 1, np.where(directions < 0, 2, 0))
    labels = np.where(off & (labels > 0), labels + 2, labels)
    return np.where((labels == 0) & resting, np.where(off, 6, 5), labels)


def noise_a(current_a: Array) -> float:
    """Standard deviation of the current's noise, from second differences by their median size (Rice 1984)."""
    if len(current_a) < 5:
        return 0.0
    bends = current_a[2:] - 2.0 * current_a[1:-1] + current_a[:-2]
    return float(np.median(np.abs(bends)) / 0.6745 / np.sqrt(6.0))


def _settled(current_a: Array, offset_a: float, noise: float, least: int) -> int:
    """Samples from the beginning in which an open bridge may still carry current."""
    away = np.abs(current_a - offset_a) > 6.0 * noise + 1e-6
    flowing = np.flatnonzero(~away[least:])
    return least + int(flowing[0]) if len(flowing) else len(current_a)


_MOTIONS = {
    1: (Motion.TURNING, 1), 2: (Motion.TURNING, -1), 3: (Motion.COASTING, 1), 4: (Motion.COASTING, -1),
    5: (Motion.STILL, 0), 6: (Motion.IDLE, 0),
}  # fmt: skip


def cut(recording: Recording, *, thermal_time_s: float) -> list[Window]:
    """The usable windows of a recording, in order of time; see the module's first lines for what is usable."""
    counts = unwrapped(recording.counts)
    labels = _labels(recording, counts)
    period_s = recording.period_s
    # The supply is read at a period's end and the duty set at its beginning.
    volts = recording.duty * np.append(recording.supply_v[1:], recording.supply_v[-1])
    idle = recording.current_a[labels == 6]
    noise = noise_a(recording.current_a)
    offset = float(np.median(idle)) if len(idle) > LEAST_SAMPLES else 0.0
    heat = _heat(recording.current_a - offset, noise, period_s, thermal_time_s)
    per_count = 2.0 * np.pi / recording.counts_per_turn
    longest = max(LEAST_SAMPLES, round(LONGEST_S / period_s))
    windows = []
    for begin, end, label in _runs(labels):
        if not label:
            continue
        motion, direction = _MOTIONS[label]
        start = begin
        if motion in (Motion.COASTING, Motion.IDLE):
            least = min(end - begin, max(2, round(SETTLE_S / period_s)))
            start += _settled(recording.current_a[begin:end], offset, noise, least)
        parts = max(1, -(-(end - start) // longest))
        for first, last in zip(*_split(start, end, parts), strict=True):
            if last - first < LEAST_SAMPLES:
                continue
            part = slice(first, last)
            drive = volts[part]
            mean_heat = float(heat[part].mean())
            temperatures = recording.winding_c
            windows.append(
                Window(
                    motion=motion,
                    period_s=period_s,
                    begin_s=first * period_s,
                    volts=drive,
                    current_a=recording.current_a[part],
                    angle_rad=(counts[part] - counts[first]) * per_count,
                    direction=direction,
                    heat_a2s=mean_heat,
                    warming=(heat[part] - mean_heat) * (recording.current_a[part] - offset),
                    winding_c=None if temperatures is None else float(temperatures[part].mean()),
                    lively=bool(np.ptp(drive[:-1]) > 0.0) or first == start,
                    held=recording.held,
                )
            )
    return windows


def _split(start: int, end: int, parts: int) -> tuple[list[int], list[int]]:
    edges = [start + (end - start) * part // parts for part in range(parts + 1)]
    return edges[:-1], edges[1:]


def _heat(current_a: Array, noise: float, period_s: float, thermal_time_s: float) -> Array:
    """Square of the current, the noise's share taken out, integrated with a leak of the winding's time constant."""
    gain = (current_a**2 - noise**2) * period_s
    decay = np.exp(-period_s / thermal_time_s)
    # Blockwise, so that it stays a plain cumulative sum: within a block the growth of the weights is bounded.
    block = max(1, int(thermal_time_s / period_s))
    found = np.empty(len(gain))
    last = 0.0
    for begin in range(0, len(gain), block):
        part = gain[begin : begin + block]
        fade = decay ** np.arange(1, len(part) + 1)
        found[begin : begin + block] = fade * (last + np.cumsum(part / fade))
        last = float(found[begin + len(part) - 1])
    return found
