"""Joint least squares over many windows: parameters common to all, and a start state for each window of its own.

Gauss-Newton with Levenberg's damping on normal equations from which every window's start state (current, speed,
angle) is eliminated first, exactly, because the motion is linear in it (variable projection, Golub and Pereyra 1973).
The cost grows with the samples alone. The predictions are the exact motion between samples (`motor.transitions`),
their derivatives the motion's own variational equations.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from ramprig.errors import UsageError

from . import copper
from .motor import Motion, respond, transitions
from .windows import Window

Array = NDArray[np.float64]

NAMES = ("R", "K", "b", "J", "L", "Tc", "offset", "rise")
"""The common parameters: ohm, V*s, N*m*s, kg*m2, H, N*m, A, 1/(A^2 s); the first five are `motor.transitions`'."""
R, K, B, J, L, TC, OFFSET, RISE = range(8)

_POSITIVE = [R, K, J, L]
_DYNAMIC = {Motion.TURNING: [R, K, B, J, L], Motion.COASTING: [B, J], Motion.STILL: [R, L]}
_STATES = {Motion.TURNING: 3, Motion.COASTING: 2, Motion.STILL: 1, Motion.IDLE: 0}

MOST_STEPS = 60
SETTLED = 0.01
"""The search has settled when no parameter wants to move by more than this share of its standard uncertainty."""
LARGEST_CHANGE = 2.5
"""A positive parameter changes by at most this factor a step."""
NODES = 7
"""Resistances at which the motion is worked out exactly; windows' own ones lie between."""
LEAST_DIAGONAL = 1e-150
"""Stands for a parameter without any effect, so that it can be scaled by."""
LEAST_PERIODS = 0.02
"""Least L/R in sample periods: anything less is the same to the samples."""
SINGULAR = 1e-11
"""Below this eigenvalue of the normal equations, with unit diagonal, a combination of parameters is undetermined."""


@dataclass(frozen=True, slots=True, eq=False)
class Noise:
    """Standard deviations of one current and one angle reading."""

    current_a: float
    angle_rad: float


@dataclass(frozen=True, slots=True, eq=False)
class Linearised:
    """One window at given parameters, each row over its noise: channels are current and, where used, angle.

    `left` `(channels, n)` is measured - predicted with the best start state, `slopes` `(8, channels, n)` the
    prediction's derivatives by the common parameters, `basis` `(states, channels, n)` those by the start state.
    """

    window: Window
    left: Array
    slopes: Array
    basis: Array


@dataclass(slots=True, eq=False)
class Sums:
    """Normal equations of the common parameters, window by window and in all, and the sums of squares by channel.

    `matrices` is `(windows, 8, 8)`, `scores` the gradients `(windows, 8)`, `by_window` mean squares of the residuals.
    """

    matrices: Array
    scores: Array
    by_window: Array
    matrix: Array = field(default_factory=lambda: np.zeros((8, 8)))
    vector: Array = field(default_factory=lambda: np.zeros(8))
    square: float = 0.0
    square_current: float = 0.0
    square_angle: float = 0.0
    count_current: int = 0
    count_angle: int = 0
    states: int = 0

    @property
    def readings(self) -> int:
        """Readings that were fitted."""
        return self.count_current + self.count_angle


def resistances(values: Array, windows: Sequence[Window], bridge_ohm: float) -> tuple[Array, Array, Array]:
    """Each window's total resistance, and its derivatives by R and by the rise."""
    warm = np.array(
        [copper.factor(w.winding_c) if w.winding_c is not None else 1.0 + values[RISE] * w.heat_a2s for w in windows]
    )
    by_rise = np.array([0.0 if w.winding_c is not None else values[R] * w.heat_a2s for w in windows])
    return values[R] * warm + bridge_ohm, warm, by_rise


def linearised(values: Array, windows: Sequence[Window], *, bridge_ohm: float, noise: Noise) -> Iterator[Linearised]:
    """Each window in turn at these parameters, grouped by motion."""
    for motion in Motion:
        group = [window for window in windows if window.motion is motion]
        if not group:
            continue
        if motion is Motion.IDLE:
            for window in group:
                yield _idle(window, values, noise)
            continue
        ohms, warm, by_rise = resistances(values, group, bridge_ohm)
        for period_s in sorted({window.period_s for window in group}):
            chosen = [index for index, window in enumerate(group) if window.period_s == period_s]
            steps = _steps(values, ohms[chosen], motion, period_s)
            for place, index in enumerate(chosen):
                own = tuple(part[place] for part in steps)
                chain = (float(warm[index]), float(by_rise[index]))
                yield _moving(group[index], values, own, chain, noise)


def _steps(values: Array, ohms: Array, motion: Motion, period_s: float) -> list[Array]:
    """`transitions` for each resistance, by polynomial interpolation between Chebyshev nodes of their range.

    The steps are analytic in the resistance and its range is that of a warming winding, so `NODES` give all digits
    that matter, at the cost of so many matrix exponentials instead of one a window.
    """
    low, high = float(ohms.min()), float(ohms.max())
    middle, half = (low + high) / 2.0, (high - low) / 2.0
    if half <= 1e-12 * middle:
        places, nodes = np.zeros(len(ohms)), np.zeros(1)
    else:
        places = (ohms - middle) / half
        nodes = np.cos((2.0 * np.arange(NODES) + 1.0) * np.pi / (2.0 * NODES))
    dynamic = np.tile(values[:5], (len(nodes), 1))
    dynamic[:, R] = middle + half * nodes
    degree = len(nodes) - 1
    share = chebyshev.chebvander(places, degree) @ np.linalg.inv(chebyshev.chebvander(nodes, degree))
    return [np.tensordot(share, part, axes=1) for part in transitions(dynamic, motion, period_s)]


def _idle(window: Window, values: Array, noise: Noise) -> Linearised:
    left = (window.current_a - values[OFFSET])[None, :] / noise.current_a
    slopes = np.zeros((8, *left.shape))
    slopes[OFFSET] = 1.0 / noise.current_a
    return Linearised(window, left, slopes, np.zeros((0, *left.shape)))


def _moving(
    window: Window, values: Array, step: tuple[Array, ...], chain: tuple[float, float], noise: Noise
) -> Linearised:
    """`step` are F, G and their derivatives for this window; `chain` derivatives of its resistance by R and rise."""
    count, motion = len(window), window.motion
    advance, drive, by_advance, by_drive = step
    # Within a window the resistance's change is small and enters as a voltage: -(R(t) - mean R) i.
    per_rise = np.zeros(count - 1) if window.winding_c is not None else -values[R] * window.warming[:-1]
    inputs = np.stack([window.volts[:-1] + values[RISE] * per_rise, np.full(count - 1, window.direction * values[TC])])
    forcing = np.zeros((3, 2, count))
    forced = drive @ inputs
    forcing[0, :, 1:] = forced[:2]
    forcing[1, 0, 0] = 1.0
    forcing[2, 1, 0] = 1.0
    states = respond(advance[:2, :2], forcing)
    angles = _turned(advance[2, :2], states)
    angles[0, 1:] += np.cumsum(forced[2])

    weights = np.array([1.0 / noise.current_a, 1.0 / noise.angle_rad])
    shape = _stacked(states, angles, motion) * weights[: _channels(motion), None]
    measured = np.stack([window.current_a - values[OFFSET], window.angle_rad])[: _channels(motion)]
    measured = measured * weights[: _channels(motion), None]
    basis = np.zeros((_STATES[motion], *measured.shape))
    if motion is not Motion.COASTING:
        basis[0] = shape[1]
    if motion is not Motion.STILL:
        basis[-2] = shape[2]
        basis[-1, 1] = weights[1]
    left, best = _projected(measured - shape[0], basis)
    start = np.zeros(2)
    if motion is not Motion.COASTING:
        start[0] = best[0]
    if motion is not Motion.STILL:
        start[1] = best[-2]
    motion_now = states[0] + start[0] * states[1] + start[1] * states[2]

    dynamic = _DYNAMIC[motion]
    bent = np.zeros((len(dynamic) + 2, 3, count))
    bent[:-2, :, 1:] = by_advance[dynamic][:, :, :2] @ motion_now[:, :-1] + by_drive[dynamic] @ inputs
    bent[-2, :, 1:] = drive[:, :1] * per_rise
    bent[-1, :, 1:] = window.direction * drive[:, 1:]
    changes = respond(advance[:2, :2], bent[:, :2])
    turned = _turned(advance[2, :2], changes) + np.cumsum(bent[:, 2], axis=-1)
    found = _stacked(changes, turned, motion) * weights[: _channels(motion), None]
    slopes = np.zeros((8, *measured.shape))
    slopes[dynamic] = found[:-2]
    slopes[TC] = found[-1]
    slopes[RISE] = slopes[R] * chain[1] + found[-2]
    slopes[R] *= chain[0]
    slopes[OFFSET, 0] = weights[0]
    return Linearised(window, left, slopes, basis)


def _channels(motion: Motion) -> int:
    return 1 if motion is Motion.STILL else 2


def _stacked(states: Array, angles: Array, motion: Motion) -> Array:
    """Predicted channels `(m, channels, n)`: the current, 0 when coasting, and the angle where the shaft turns."""
    if motion is Motion.STILL:
        alone: Array = states[:, :1]
        return alone
    current = np.zeros_like(angles) if motion is Motion.COASTING else states[:, 0]
    return np.stack([current, angles], axis=1)


def _turned(row: Array, states: Array) -> Array:
    """Angle from the states, `(m, n)`, starting at 0."""
    moved = row[0] * states[:, 0] + row[1] * states[:, 1]
    found: Array = np.zeros_like(moved)
    np.cumsum(moved[:, :-1], axis=1, out=found[:, 1:])
    return found


def _projected(left: Array, basis: Array) -> tuple[Array, Array]:
    """What remains of `left` with the best combination of `basis`, and that combination."""
    rows = basis.reshape(len(basis), left.size)
    best = np.zeros(len(basis))
    for _ in range(2):  # the second pass takes back what rounding left of the first
        gram = rows @ rows.T
        size = np.sqrt(np.maximum(np.diag(gram), LEAST_DIAGONAL))
        more = np.linalg.solve(gram / np.outer(size, size) + 1e-14 * np.eye(len(size)), rows @ left.ravel() / size)
        more /= size
        best += more
        left = left - np.tensordot(more, basis, axes=1)
    return left, best


def sums(values: Array, windows: Sequence[Window], *, bridge_ohm: float, noise: Noise) -> Sums:
    """The normal equations at these parameters."""
    count = len(windows)
    total = Sums(np.zeros((count, 8, 8)), np.zeros((count, 8)), np.zeros(count))
    places = {id(window): index for index, window in enumerate(windows)}
    for found in linearised(values, windows, bridge_ohm=bridge_ohm, noise=noise):
        left, states, place = found.left, len(found.basis), places[id(found.window)]
        rows = np.concatenate([found.slopes, found.basis, left[None]]).reshape(9 + states, left.size)
        gram = rows @ rows.T
        if states:
            size = np.sqrt(np.maximum(np.diag(gram)[8:-1], LEAST_DIAGONAL))
            cross = gram[8:-1, :] / size[:, None]
            own = gram[8:-1, 8:-1] / np.outer(size, size) + 1e-14 * np.eye(states)
            gram = gram - cross.T @ np.linalg.solve(own, cross)
        total.matrices[place] = gram[:8, :8]
        total.scores[place] = gram[:8, -1]
        square = np.sum(left * left, axis=1)
        total.square_current += float(square[0])
        total.count_current += left.shape[1]
        if len(square) > 1:
            total.square_angle += float(square[1])
            total.count_angle += left.shape[1]
        total.states += states
        total.by_window[place] = float(square.sum()) / left.size
    total.matrix = total.matrices.sum(axis=0)
    total.vector = total.scores.sum(axis=0)
    total.square = total.square_current + total.square_angle
    return total


@dataclass(frozen=True, slots=True, eq=False)
class Solution:
    """Parameters at the least sum of squares, `covariance` `(8, 8)` for noise as stated, zero for what was not free.

    `settled` is False when the search was given up after its most steps; `weak` names undetermined combinations.
    """

    values: Array
    covariance: Array
    sums: Sums
    free: tuple[int, ...]
    settled: bool
    weak: tuple[tuple[str, ...], ...]


def solve(windows: Sequence[Window], start: Array, *, free: Sequence[int], bridge_ohm: float, noise: Noise) -> Solution:
    """Find the free parameters; the others stay at `start`. Raises `UsageError` without windows."""
    if not windows:
        raise UsageError("nothing to fit: no window of the recordings can be used")
    chosen = np.array(sorted(free))
    values = start.copy()
    period_s = min(window.period_s for window in windows)
    now = sums(values, windows, bridge_ohm=bridge_ohm, noise=noise)
    damping = 1e-6
    settled = False
    for _ in range(MOST_STEPS):
        step, expected = _step(now, chosen, damping)
        if expected < SETTLED**2 * len(chosen):
            settled = True
            break
        further = _limited(values, chosen, step, period_s)
        # A trial step may lead where the motion overflows: it then counts as worse, and a shorter one is taken.
        with np.errstate(all="ignore"):
            then = sums(further, windows, bridge_ohm=bridge_ohm, noise=noise)
        if then.square <= now.square:
            gained = now.square - then.square
            values, now = further, then
            # Less damping only where the linear forecast was good, else a curved valley takes two trials a step.
            if gained > 0.75 * expected:
                damping = max(damping / 10.0, 1e-12)
            elif gained < 0.25 * expected:
                damping *= 3.0
            if gained < SETTLED**2:
                settled = True
                break
        else:
            damping = max(damping, 1e-6) * 10.0
            if damping > 1e8:
                break
    covariance, weak = _covariance(now.matrix, chosen)
    return Solution(values, covariance, now, tuple(int(i) for i in chosen), settled, weak)


def _step(now: Sums, chosen: NDArray[np.int64], damping: float) -> tuple[Array, float]:
    """The damped step of the free parameters, and how much it lowers the sum of squares if all is linear."""
    matrix, vector = now.matrix[np.ix_(chosen, chosen)], now.vector[chosen]
    size = np.sqrt(np.maximum(np.diag(matrix), LEAST_DIAGONAL))
    scaled = matrix / np.outer(size, size)
    step = np.linalg.solve(scaled + (damping + 1e-14) * np.eye(len(chosen)), vector / size)
    return step / size, float(step @ (vector / size))


def _limited(values: Array, chosen: NDArray[np.int64], step: Array, period_s: float) -> Array:
    """Values after the step, positive ones kept positive."""
    further = values.copy()
    further[chosen] += step
    for index in _POSITIVE:
        further[index] = np.clip(further[index], values[index] / LARGEST_CHANGE, values[index] * LARGEST_CHANGE)
    if L in chosen:
        further[L] = max(further[L], LEAST_PERIODS * period_s * further[R])
    return further


def _covariance(matrix: Array, chosen: NDArray[np.int64]) -> tuple[Array, tuple[tuple[str, ...], ...]]:
    """Inverse of the normal equations, and the combinations that they do not determine."""
    part = matrix[np.ix_(chosen, chosen)]
    size = np.sqrt(np.maximum(np.diag(part), LEAST_DIAGONAL))
    levels, frame = np.linalg.eigh(part / np.outer(size, size))
    weak = tuple(
        tuple(NAMES[chosen[place]] for place in np.flatnonzero(np.abs(direction) > 0.2))
        for level, direction in zip(levels, frame.T, strict=True)
        if level < SINGULAR
    )
    inverse = (frame / np.maximum(levels, SINGULAR)) @ frame.T / np.outer(size, size)
    covariance = np.zeros((len(NAMES), len(NAMES)))
    covariance[np.ix_(chosen, chosen)] = inverse
    return covariance, weak


def scatter(found: Sums, free: Sequence[int]) -> Array:
    """Standard uncertainties `(8,)` from what leaving out each window in turn does to the parameters; 0 if not free.

    The jackknife over windows (Tukey 1958; in closed form, since the normal equations are linear). It makes no use of
    the noise's size, and so also covers what the model leaves out and what stays the same throughout a window.
    """
    chosen = np.array(sorted(free))
    count = len(found.by_window)
    size = np.sqrt(np.maximum(np.diag(found.matrix)[chosen], LEAST_DIAGONAL))
    scale = np.outer(size, size)
    moves = []
    for matrix, score in zip(found.matrices, found.scores, strict=True):
        rest = (found.matrix - matrix)[np.ix_(chosen, chosen)] / scale
        moves.append(np.linalg.solve(rest + SINGULAR * np.eye(len(chosen)), score[chosen] / size) / size)
    moved = np.array(moves)
    spread = np.zeros(len(NAMES))
    spread[chosen] = np.sqrt((count - 1) / count * np.sum((moved - moved.mean(axis=0)) ** 2, axis=0))
    return spread
