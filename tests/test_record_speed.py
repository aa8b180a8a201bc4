"""Speed from counts: the published examples, the stated resolution, reversal, standstill, gaps, wrap and cutting."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from ramprig.record.speed import HISTORY_MAX, SpeedEstimator, SpeedMethod, resolution_rpm, slowest_rpm

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def estimate(
    positions: Floats,
    *,
    per_rev: float = 4000,
    period: int = 1,
    tick_s: float = 1e-3,
    method: SpeedMethod | None = None,
    cuts: tuple[int, ...] = (),
) -> Floats:
    """The estimate in rpm at each sample, with the shaft at `positions` (counts, not whole) and the samples cut into
    blocks."""
    counts = np.floor(positions).astype(np.int64).astype(np.int32)  # wraps as a device's counter does
    ticks = np.arange(len(counts), dtype=np.int64) * period + 1000
    estimator = SpeedEstimator(counts_per_rev=per_rev, tick_s=tick_s, method=method)
    ends = [0, *cuts, len(counts)]
    return np.concatenate(
        [
            estimator.feed(ticks[begin:end], counts[begin:end], period_ticks=period)
            for begin, end in itertools.pairwise(ends)
            if end > begin
        ]
    )


def turning(rpm: float, *, seconds: float, per_rev: float = 4000, period_s: float = 1e-3, phase: float = 0.0) -> Floats:
    return phase + np.arange(round(seconds / period_s)) * period_s * rpm / 60 * per_rev


# TI, Example_posspeed.c for the eQEP (1000-line encoder, 4000 counts a turn, M method with a 10 ms gate).
TI_GATE = SpeedMethod(window_s=0.010, enough_counts=10**9)


@pytest.mark.parametrize(("rpm", "counts_in_gate"), [(6000, 4000), (300, 200)])
def test_the_m_method_example_of_ti_gives_its_speeds(rpm: int, counts_in_gate: int) -> None:
    positions = np.arange(20, dtype=np.float64) * counts_in_gate
    speeds = estimate(positions, period=10, method=TI_GATE)
    assert speeds[1:] == pytest.approx(rpm, abs=1.5)
    assert speeds[2:] == pytest.approx(rpm, abs=1e-9)


def test_the_m_method_example_of_ti_has_a_resolution_of_1_5_rpm() -> None:
    found = resolution_rpm(6000, counts_per_rev=4000, period_s=0.010, method=TI_GATE)
    assert found == pytest.approx(60 / (4000 * 0.01), rel=1e-12)
    assert found == pytest.approx(1.5, rel=1e-12)


def test_the_slow_end_has_the_resolution_of_the_t_method() -> None:
    """Kavanagh and Murphy 1998, from memory: Q = n^2 P / (60 f - n P), f being the rate at which edges are timed."""
    rpm, per_rev, rate_hz = 0.1, 1632.67, 500.0
    expected = rpm**2 * per_rev / (60 * rate_hz - rpm * per_rev)
    found = resolution_rpm(rpm, counts_per_rev=per_rev, period_s=1 / rate_hz, method=SpeedMethod())
    assert found == pytest.approx(expected, rel=1e-12)


def test_the_t_method_example_of_ti_has_its_resolution() -> None:
    """TI at 300 rpm: 1875 clock ticks of 150 MHz / 128 over 32 counts; one tick is 0.16009 rpm. So 4000 / 32 units a
    turn."""
    found = resolution_rpm(300, counts_per_rev=4000 / 32, period_s=128 / 150e6, method=SpeedMethod(window_s=1e-5))
    assert found == pytest.approx(300 / (1875 - 1), rel=1e-9)
    assert found == pytest.approx(0.16009, abs=1e-5)


@settings(max_examples=150, deadline=None)
@given(
    rpm=st.floats(0.2, 12_000) | st.floats(-12_000, -0.2),
    phase=st.floats(0, 1),
    period=st.sampled_from([1, 2, 5, 10]),
    per_rev=st.sampled_from([12.0, 48.0, 1632.67, 4000.0]),
)
@example(rpm=0.2, phase=0.0, period=1, per_rev=4000.0)
@example(rpm=-60.0, phase=0.5, period=10, per_rev=1632.67)
def test_a_constant_speed_is_found_within_the_stated_resolution(
    rpm: float, phase: float, period: int, per_rev: float
) -> None:
    method = SpeedMethod()
    positions = turning(rpm, seconds=6, per_rev=per_rev, period_s=period * 1e-3, phase=phase)
    speeds = estimate(positions, per_rev=per_rev, period=period, method=method)
    bound = resolution_rpm(rpm, counts_per_rev=per_rev, period_s=period * 1e-3, method=method)
    settled = speeds[round(2.5 / (period * 1e-3)) :]
    assert np.max(np.abs(settled - rpm)) <= bound * (1 + 1e-9)


def test_the_resolution_is_far_finer_than_plain_differences() -> None:
    """One count a sample at 1 kHz on 1632.67 counts a turn would be 36.7 rpm."""
    for rpm in (1.0, 10.0, 30.0, 100.0):
        found = resolution_rpm(rpm, counts_per_rev=1632.67, period_s=1e-3, method=SpeedMethod())
        assert found <= max(0.75, 0.0102 * rpm)
        assert found / rpm < 0.03


def test_a_reversal_passes_through_zero_once() -> None:
    seconds = np.arange(4000) * 1e-3
    rpm = 200 * np.cos(np.pi * seconds / 4)  # from 200 down to -200 in 4 s
    positions = np.cumsum(rpm) * 1e-3 / 60 * 1632.67
    speeds = estimate(positions, per_rev=1632.67)
    settled = slice(100, None)
    lag_s = 0.05
    assert np.max(np.abs(speeds[settled] - rpm[settled])) < 200 * np.pi / 4 * lag_s + 1.5
    signs = np.sign(speeds[settled])
    signs = signs[signs != 0]
    assert np.count_nonzero(np.diff(signs)) == 1


def test_a_standstill_reads_zero_in_a_stated_time_and_falls_before() -> None:
    method = SpeedMethod()
    moving = turning(50, seconds=0.4, per_rev=1632.67)
    positions = np.concatenate((moving, np.full(1000, moving[-1])))
    speeds = estimate(positions, per_rev=1632.67, method=method)
    after = speeds[len(moving) :]
    waited_s = np.arange(1, 1001) * 1e-3
    one_count_rpm = 60 / 1632.67
    assert np.all(after <= one_count_rpm / np.maximum(waited_s - 0.001, 1e-3) + 1e-9)
    assert np.all(np.diff(after) <= 1e-12)
    assert np.all(after[waited_s > method.standstill_s + 0.002] == 0)


def test_a_shaft_that_never_moved_reads_unknown_and_then_zero() -> None:
    speeds = estimate(np.full(1000, 5.5))
    assert np.all(np.isnan(speeds[:501]))
    assert np.all(speeds[501:] == 0)


def test_a_start_from_rest_has_no_spike() -> None:
    at_rest = np.full(800, 0.9)
    positions = np.concatenate((at_rest, 0.9 + turning(2.0, seconds=1, per_rev=1632.67)))
    speeds = estimate(positions, per_rev=1632.67)
    assert np.nanmax(speeds) < 2.2  # one count in one sample would have been 36.7 rpm
    assert speeds[-1] == pytest.approx(2.0, abs=0.1)


def test_an_encoder_that_dithers_on_an_edge_reads_zero() -> None:
    positions = np.concatenate((np.full(600, 0.5), 0.5 + 0.5 * (np.arange(1000) % 7 < 3)))
    speeds = estimate(positions)
    assert np.all(speeds[600:] == 0)


def test_the_wrap_of_the_counter_leaves_no_trace() -> None:
    plain = turning(3000, seconds=1, phase=0.25)
    assert np.array_equal(estimate(plain), estimate(plain + 2**31 - 50_000), equal_nan=True)
    assert np.array_equal(estimate(-plain), estimate(-plain - 2**31 + 50_000), equal_nan=True)


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    cuts=st.lists(st.integers(1, 1999), max_size=12, unique=True).map(lambda found: tuple(sorted(found))),
)
def test_the_cutting_into_blocks_makes_no_difference(seed: int, cuts: tuple[int, ...]) -> None:
    random = np.random.default_rng(seed)
    rpm = np.repeat(random.choice([0.0, 0.0, 3.0, -40.0, 900.0, -2.0], 20), 100)
    positions = np.cumsum(rpm + random.normal(0, 1, 2000)) * 2e-3 / 60 * 1632.67
    method = SpeedMethod(standstill_s=0.1)
    whole = estimate(positions, per_rev=1632.67, period=2, method=method)
    parts = estimate(positions, per_rev=1632.67, period=2, method=method, cuts=cuts)
    assert np.array_equal(parts, whole, equal_nan=True)


def test_a_gap_is_forgotten_across_and_not_averaged_over() -> None:
    counts = np.floor(turning(600, seconds=1)).astype(np.int32)
    ticks = np.arange(1000, dtype=np.int64)
    keep = (ticks < 400) | (ticks >= 700)
    estimator = SpeedEstimator(counts_per_rev=4000, tick_s=1e-3)
    speeds = estimator.feed(ticks[keep], counts[keep], period_ticks=1)
    assert math.isnan(speeds[400])
    fresh = SpeedEstimator(counts_per_rev=4000, tick_s=1e-3).feed(ticks[700:], counts[700:], period_ticks=1)
    assert np.array_equal(speeds[400:], fresh, equal_nan=True)


def test_a_change_of_the_period_without_a_gap_keeps_what_is_known() -> None:
    counts = np.floor(turning(600, seconds=1)).astype(np.int32)
    ticks = np.arange(1000, dtype=np.int64)
    estimator = SpeedEstimator(counts_per_rev=4000, tick_s=1e-3)
    estimator.feed(ticks[:500], counts[:500], period_ticks=1)
    slower = estimator.feed(ticks[509::10], counts[509::10], period_ticks=10)
    assert slower == pytest.approx(600, abs=2)


def test_the_memory_is_bounded() -> None:
    method = SpeedMethod(window_s=60.0, enough_counts=10**9, standstill_s=60.0)
    estimator = SpeedEstimator(counts_per_rev=4000, tick_s=1e-3, method=method)
    for start in range(0, 3 * HISTORY_MAX, 255):
        ticks = np.arange(start, start + 255, dtype=np.int64)
        estimator.feed(ticks, (ticks * 3).astype(np.int32), period_ticks=1)
    assert len(estimator._edge_ticks) <= HISTORY_MAX


def test_the_slowest_speed_is_one_count_in_the_standstill_time() -> None:
    assert slowest_rpm(counts_per_rev=1632.67, method=SpeedMethod()) == pytest.approx(0.0735, abs=1e-4)
    below = slowest_rpm(counts_per_rev=1632.67, method=SpeedMethod()) * 0.9
    speeds = estimate(turning(below, seconds=10, per_rev=1632.67), per_rev=1632.67)
    assert np.all(speeds[2000:] == 0)


@pytest.mark.parametrize("wrong", [{"window_s": 0.0}, {"enough_counts": 0}, {"standstill_s": 0.01}])
def test_impossible_settings_are_refused(wrong: dict[str, float]) -> None:
    with pytest.raises(ValueError, match="speed window"):
        SpeedMethod(**wrong)  # type: ignore[arg-type]  # one key of either number type at a time
