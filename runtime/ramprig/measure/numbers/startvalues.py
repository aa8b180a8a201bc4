"""Start values of the motor's constants from means over short blocks, by two linear fits.

Over a block the equations hold for means: mean V = R mean i + K mean w + L change of i / block, and
K mean i = J change of w / block + b mean w + Tc sign. Good to a few per cent, which is what a search needs.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from .joint import NAMES, OFFSET, RISE, TC, B, J, K, L, R
from .motor import Motion
from .windows import Window

Array = NDArray[np.float64]

BLOCKS_S = (0.008, 0.016, 0.064)
"""Lengths of the blocks: short ones see run-ups, long ones average the noise."""
LEAST_ELECTRICAL_PERIODS = 0.3
"""Start value of L/R, in sample periods."""


def _blocks(window: Window, block: int) -> Array:
    """Rows (mean V, mean i, speed, acceleration) of a window; the speed from the angle at the block's ends."""
    length = min(block, (len(window) - 1) // 2)
    count = (len(window) - 1) // length
    if length < 3 or count < 2:
        return np.zeros((0, 4))
    edges = np.arange(count + 1) * length
    speed = np.diff(window.angle_rad[edges]) / (length * window.period_s)
    volts = np.add.reduceat(window.volts[:-1], edges[:-1])[:count] if edges[-1] == len(window) - 1 else None
    if volts is None:
        volts = np.add.reduceat(window.volts[: edges[-1]], edges[:-1])
    current = np.add.reduceat(window.current_a[1 : edges[-1] + 1], edges[:-1])
    slope = np.gradient(speed, length * window.period_s)
    return np.stack([volts / length, current / length, speed, slope], axis=1)


def start_values(windows: Sequence[Window], *, bridge_ohm: float, offset_a: float) -> Array:
    """Values in the order of `joint.NAMES`; all of them usable as a start, whatever the data."""
    rows, signs, coast, coast_signs = [], [], [], []
    for window in windows:
        for block_s in BLOCKS_S:
            block = max(4, round(block_s / window.period_s))
            if window.motion is Motion.TURNING:
                found = _blocks(window, block)
                rows.append(found)
                signs.append(np.full(len(found), float(window.direction)))
            elif window.motion is Motion.COASTING:
                found = _blocks(window, block)
                coast.append(found)
                coast_signs.append(np.full(len(found), float(window.direction)))
    table, sign = np.concatenate(rows), np.concatenate(signs)
    volts, current, speed, slope = table.T
    current = current - offset_a
    still = [w for w in windows if w.motion is Motion.STILL and np.abs(w.volts).max() > 0.0]
    ohm, constant = _two(np.stack([current, speed], 1), volts)
    if not constant > 0.0:
        constant = float(np.median(np.abs(volts)) / max(float(np.median(np.abs(speed))), 1e-9))
    if not ohm > 0.0:
        ohm = _pulse_resistance(still, offset_a) or float(np.abs(volts).max() / max(np.abs(current).max(), 1e-6))
    torque = constant * current
    if coast:
        free, free_sign = np.concatenate(coast), np.concatenate(coast_signs)
        torque = np.concatenate([torque, np.zeros(len(free))])
        slope, speed = np.concatenate([slope, free[:, 3]]), np.concatenate([speed, free[:, 2]])
        sign = np.concatenate([sign, free_sign])
    inertia, viscous, coulomb = _three(np.stack([slope, speed, sign], 1), torque)
    values = np.zeros(len(NAMES))
    values[R] = max(ohm - bridge_ohm, 0.05 * ohm)
    values[K] = constant
    values[J] = inertia if inertia > 0.0 else constant**2 * 0.02 / ohm
    values[B] = max(viscous, 0.0)
    values[TC] = coulomb if coulomb > 0.0 else float(np.median(np.abs(torque)))
    values[L] = LEAST_ELECTRICAL_PERIODS * windows[0].period_s * ohm
    values[OFFSET] = offset_a
    values[RISE] = 0.0
    return values


def _two(design: Array, wanted: Array) -> tuple[float, float]:
    found, *_ = np.linalg.lstsq(design, wanted, rcond=None)
    return float(found[0]), float(found[1])


def _three(design: Array, wanted: Array) -> tuple[float, float, float]:
    """Inertia, viscous and Coulomb friction; each column scaled, since their sizes differ by many powers of ten."""
    size = np.linalg.norm(design, axis=0)
    size = np.where(size > 0.0, size, 1.0)
    found, *_ = np.linalg.lstsq(design / size, wanted, rcond=None)
    inertia, viscous, coulomb = found / size
    return float(inertia), float(viscous), float(coulomb)


def _pulse_resistance(still: Sequence[Window], offset_a: float) -> float | None:
    """V/i at the ends of pulses at rest."""
    ratios = [
        abs(float(w.volts[-2])) / abs(float(w.current_a[-3:].mean()) - offset_a)
        for w in still
        if abs(float(w.volts[-2])) > 0.0 and abs(float(w.current_a[-3:].mean()) - offset_a) > 1e-3
    ]
    return float(np.median(ratios)) if ratios else None
