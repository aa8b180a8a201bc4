"""Samples for the tests of the run folder: a motor `vent` and a servo `latch` (invented figures) as sample blocks."""

from __future__ import annotations

import numpy as np

from ramprig.port.clock import VirtualClock
from ramprig.record.columns import Columns, MotorColumns, ServoColumns, columns_of
from ramprig.record.manifest import Anchor
from ramprig.session.blocks import Block, Layout
from ramprig_link.samples import channels_of

TICK_US = 1000
UTC_START_S = 1_772_353_800.0  # 2026-03-01T08:30:00Z
MASK = 0b101_0001_0000_0000_0111  # axis 0, servo 0, supply, state
CHANNELS = channels_of(MASK)


def vent_columns() -> Columns:
    return columns_of(
        [MotorColumns("vent", 0, 1632.67)], [ServoColumns("latch", 0, neutral_us=1500, us_per_deg=10)], tick_us=TICK_US
    )


def vent_values(samples: int, *, seed: int = 1) -> np.ndarray[tuple[int, int], np.dtype[np.int32]]:
    """(samples, channels) int32: a motor that reverses about every 400 samples."""
    random = np.random.default_rng(seed)
    duty = np.round(3000 * np.sin(np.arange(samples) / 130)).astype(np.int32)
    counts = np.floor(np.cumsum(duty / 3000 * 1.7)).astype(np.int32)
    current = np.round(np.abs(duty) / 5 + random.normal(0, 12, samples)).astype(np.int32)
    pulse = np.where(np.arange(samples) // 500 % 2, 1600, 1500).astype(np.int32)
    supply = np.round(12_000 - current / 5 + random.normal(0, 5, samples)).astype(np.int32)
    state = np.where(np.arange(samples) % 400 < 20, 0x11, 0x01).astype(np.int32)
    return np.stack([duty, counts, current, pulse, supply, state], axis=1)


def blocks_of(
    samples: int, *, first_tick: int = 5000, period: int = 2, size: int = 50, seed: int = 1, mask: int = MASK
) -> list[Block]:
    values = vent_values(samples, seed=seed)[:, : len(channels_of(mask))]
    ticks = np.arange(samples, dtype=np.int64) * period + first_tick
    layout = Layout.of(mask, period)
    return [Block(ticks[i : i + size], values[i : i + size], layout) for i in range(0, samples, size)]


def start_anchor() -> Anchor:
    return Anchor(tick=4000, host_s=100.0, unix_s=UTC_START_S)


def virtual_clock() -> VirtualClock:
    return VirtualClock(start_s=100.0, wall_s=UTC_START_S)
