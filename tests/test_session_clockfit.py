"""The clock fit against a linear programme, published figures, and clocks with known drift."""

from __future__ import annotations

import math
import random

import numpy as np
import pytest
from scipy.optimize import linprog

from ramprig.session.clockfit import HULL_MAX, ClockFitter, LowerHull, exchange


def best_line_by_lp(x: np.ndarray, y: np.ndarray) -> tuple[float, float]:
    """The linear programme of Moon, Skelly and Towsley (INFOCOM 1999), solved by scipy.

    In us and from the mean of x on: the solver's tolerance is absolute.
    """
    mean, span = x.mean(), x[-1] - x[0]
    x, y = (x - mean) / span, y * 1e6
    found = linprog(
        [-x.sum(), -float(len(x))], A_ub=np.column_stack([x, np.ones_like(x)]), b_ub=y, bounds=[(None, None)] * 2
    )
    slope = float(found.x[0]) / span / 1e6
    return slope, float(found.x[1]) / 1e6 - slope * float(mean)


def hull_of(x: np.ndarray, y: np.ndarray) -> LowerHull:
    hull = LowerHull()
    for at, value in zip(x, y, strict=True):
        hull.add(float(at), float(value))
    return hull


def skew_example() -> tuple[np.ndarray, np.ndarray]:
    """2000 points over 600 s: skew 50 ppm, offset 12.3 ms, least delay 1.1 ms, exponential delay, mean 2 ms; seed 1."""
    rng = np.random.default_rng(1)
    x = np.sort(rng.uniform(0.0, 600.0, 2000))
    return x, 0.0123 + 50e-6 * x + 0.0011 + rng.exponential(0.002, 2000)


def test_hull_and_linear_programme_agree_on_the_skew_example() -> None:
    x, y = skew_example()
    line = hull_of(x, y).best_line()
    slope, intercept = best_line_by_lp(x, y)
    assert line.slope == pytest.approx(slope, abs=1e-12)
    assert line.intercept == pytest.approx(intercept, abs=1e-12)
    # Figures of an independent computation of the same data: 49.98587 ppm, 13.40565 ms (truth 50 ppm, 13.4 ms).
    assert line.slope * 1e6 == pytest.approx(49.98587, abs=1e-5)
    assert line.intercept * 1e3 == pytest.approx(13.40565, abs=1e-5)
    assert np.all(y - line.intercept - line.slope * x >= -1e-12)


@pytest.mark.parametrize("seed", range(8))
def test_hull_and_linear_programme_agree_on_random_delays(seed: int) -> None:
    rng = np.random.default_rng(seed)
    x = np.sort(rng.uniform(0.0, 60.0, 300))
    y = 0.004 - 80e-6 * x + rng.gamma(0.7, 0.003, 300)
    line = hull_of(x, y).best_line()
    assert (line.slope, line.intercept) == pytest.approx(best_line_by_lp(x, y), abs=1e-12)


def test_exchange_gives_the_ntp_figures() -> None:
    # RFC 5905 section 8, with T1..T4 = 0, 10.105, 10.106, 0.211.
    offset, delay = exchange(0.0, 10.105, 10.106, 0.211)
    assert offset == pytest.approx(10.0, abs=1e-12)
    assert delay == pytest.approx(0.210, abs=1e-12)


def test_a_hull_keeps_few_corners_even_where_every_point_is_one() -> None:
    hull = LowerHull()
    for step in range(20 * HULL_MAX):
        hull.add(float(step), float(step * step))
    assert len(hull.corners) <= HULL_MAX
    assert hull.count == 20 * HULL_MAX


def test_points_out_of_order_are_refused() -> None:
    hull = LowerHull()
    hull.add(2.0, 0.0)
    with pytest.raises(ValueError, match="in order"):
        hull.add(1.0, 0.0)


class Wire:
    """A device whose clock runs at `1 + drift` host seconds a nominal second, behind random delays."""

    def __init__(self, drift: float, seed: int, grid_s: float = 0.0) -> None:
        self.rate_s = 0.001 * (1 + drift)
        self.random = random.Random(seed)
        self.grid_s = grid_s

    def true_tick(self, host_s: float) -> float:
        return (host_s - 5.0) / self.rate_s

    def exchange(self, sent_s: float) -> tuple[int, float, float]:
        arrived_s = sent_s + 0.0009 + self.random.expovariate(1 / 0.0008)
        tick = math.ceil(self.true_tick(arrived_s))
        received_s = 5.0 + tick * self.rate_s + 0.0012 + self.random.expovariate(1 / 0.0008)
        if self.grid_s:
            received_s = math.ceil(received_s / self.grid_s) * self.grid_s
        return tick, sent_s, received_s


@pytest.mark.parametrize("drift", [-5e-3, -50e-6, 0.0, 20e-6, 5e-3])
@pytest.mark.parametrize("grid_s", [0.0, 0.016])
def test_the_drift_is_found_within_5_ppm_and_inside_its_error(drift: float, grid_s: float) -> None:
    wire = Wire(drift, seed=3, grid_s=grid_s)
    fitter = ClockFitter(0.001)
    for beat in range(6000):
        fitter.add(*wire.exchange(10.0 + beat * 0.1))
    fit = fitter.fit
    assert fit is not None
    assert fit.drift_ppm == pytest.approx(drift * 1e6, abs=5.0)
    assert abs(fit.drift_ppm - drift * 1e6) <= fit.drift_error_ppm


@pytest.mark.parametrize("seed", range(5))
def test_the_estimates_of_the_present_tick_enclose_the_truth(seed: int) -> None:
    wire = Wire(120e-6, seed=seed, grid_s=0.016 if seed % 2 else 0.0)
    fitter = ClockFitter(0.001)
    for beat in range(3000):
        tick, sent_s, received_s = wire.exchange(10.0 + beat * 0.1)
        fitter.add(tick, sent_s, received_s)
        fit = fitter.fit
        assert fit is not None
        truth = wire.true_tick(received_s)
        # Until the rate is known it is the nominal one: 120 ppm over SPAN_MIN_S are a fifth of a tick.
        assert fit.tick_not_later(received_s) <= truth + 1
        assert fit.tick_not_earlier(received_s) >= truth - 1
        assert fit.tick_not_earlier(received_s) - fit.tick_not_later(received_s) < 40


def test_the_fit_follows_a_clock_that_changes_its_rate() -> None:
    fitter = ClockFitter(0.001)
    slow, fast = Wire(200e-6, seed=1), Wire(0.0, seed=2)
    for beat in range(10000):
        fitter.add(*slow.exchange(10.0 + beat * 0.1))
    change_s = 10.0 + 10000 * 0.1
    change_tick = round(slow.true_tick(change_s))
    for beat in range(20000):
        tick, sent_s, received_s = fast.exchange(5.0 + beat * 0.1)
        fitter.add(change_tick + tick, change_s + sent_s - 5.0, change_s + received_s - 5.0)
    fit = fitter.fit
    assert fit is not None
    assert fit.drift_ppm == pytest.approx(0.0, abs=2.0)


def test_answers_out_of_order_are_passed_over_and_counted() -> None:
    fitter = ClockFitter(0.001)
    fitter.add(100, 1.0, 1.002)
    fitter.add(90, 1.1, 1.102)
    fitter.add(300, 1.3, 1.2)
    assert fitter.passed_over == 2
    fit = fitter.fit
    assert fit is not None
    assert fit.exchanges == 1


def test_the_present_tick_is_that_of_the_whole_fit() -> None:
    wire = Wire(-80e-6, seed=11)
    fitter = ClockFitter(0.001)
    assert fitter.tick_not_later(10.0) is None
    for beat in range(8000):  # past the window, so that the oldest exchanges are dropped meanwhile
        tick, sent_s, received_s = wire.exchange(10.0 + beat * 0.2)
        fitter.add(tick, sent_s, received_s)
        if beat % 50 < 3:
            early, later = fitter.tick_not_later(received_s), fitter.tick_not_later(received_s + 0.7)
            fit = fitter.fit
            assert fit is not None
            assert (early, later) == (fit.tick_not_later(received_s), fit.tick_not_later(received_s + 0.7))


@pytest.mark.parametrize("seed", range(6))
def test_the_bounds_of_the_rate_are_those_of_all_pairs_of_exchanges(seed: int) -> None:
    """The greatest rate with every sending below the line and every reception above it, found without any hull."""
    source = random.Random(seed)
    fitter, exchanges, at_s, tick_s = ClockFitter(0.001), [], 0.0, 0.001 * (1 + source.uniform(-1, 1) * 3e-4)
    for _ in range(60):
        at_s += source.choice([0.02, 0.1, 0.5])
        there_s, back_s = source.expovariate(300.0), source.expovariate(300.0)
        tick = int((at_s + there_s) / tick_s)
        exchanges.append((tick, at_s, at_s + there_s + back_s + 0.001))
        fitter.add(*exchanges[-1])
        at_s = exchanges[-1][2]
        (first_tick, origin_s, _), last_s = exchanges[0], exchanges[-1][2]
        rates = [
            (received_s - sent_s) / (later - earlier)
            for earlier, sent_s, _ in exchanges
            for later, _, received_s in exchanges
            if later > earlier
        ]
        greatest = min([0.001 * 1.02, *rates])
        support_s = min(received_s - origin_s - greatest * (tick - first_tick) for tick, _, received_s in exchanges)
        expected = first_tick + (last_s + 0.05 - origin_s - support_s) / greatest
        assert fitter.tick_not_later(last_s + 0.05) == pytest.approx(expected, abs=1.001)
        fit = fitter.fit
        assert fit is not None
        assert fit.slowest.slope == pytest.approx(greatest, rel=1e-12)
