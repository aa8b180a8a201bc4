"""Weibull fits, ranks and sample sizes against published figures."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ramprig.endure import life
from ramprig.errors import UsageError

# NIST/SEMATECH e-Handbook 8.4.1.3 and 8.2.2.1: ten failures, ten units taken out at 500 h.
NIST = (54, 187, 216, 240, 244, 335, 361, 373, 375, 386)
NIST_LEFT = (500,) * 10


def test_nist_weibull_with_suspensions() -> None:
    fit = life.fit_weibull(NIST, NIST_LEFT)
    assert (fit.shape, fit.scale) == pytest.approx((1.7208, 606.5280), rel=1e-5)
    assert fit.log_likelihood == pytest.approx(-75.1346, abs=1e-4)
    # Standard errors as the library lifelines gives them.
    assert (fit.scale_sd, fit.shape_sd) == pytest.approx((124.91, 0.5022), rel=1e-4)
    assert fit.life() == pytest.approx(164.022, rel=1e-5)
    assert fit.mean == pytest.approx(540.737, rel=1e-5)
    assert fit.reliability(fit.scale) == pytest.approx(math.exp(-1.0))


def test_nist_probability_plot_with_benards_ranks() -> None:
    ranks = life.benard(np.arange(1, 11), 20)
    hazard = -np.log1p(-ranks)
    assert hazard[:3] == pytest.approx([0.03491627, 0.08701138, 0.14197026], abs=1e-8)
    shape, scale = life.rank_regression(NIST, ranks)
    assert shape == pytest.approx(1.457519, abs=1e-6)
    assert -shape * math.log10(scale) == pytest.approx(-4.116536, abs=1e-6)


RELIAWIKI = (16, 34, 53, 75, 93, 120)


def test_reliawikis_two_parameter_example() -> None:
    ranks = life.median_ranks(6)
    assert ranks == pytest.approx([0.1091, 0.2645, 0.4214, 0.5786, 0.7355, 0.8909], abs=5.1e-5)
    assert life.rank_regression(RELIAWIKI, ranks) == pytest.approx((1.4302, 76.317), rel=1e-4)
    fit = life.fit_weibull(RELIAWIKI)
    assert (fit.shape, fit.scale) == pytest.approx((1.933, 73.526), rel=2e-4)


@pytest.mark.parametrize(
    ("failures", "suspensions", "shape", "scale"),
    [
        # Abernethy, The New Weibull Handbook, C.5.
        ((1500, 2250, 4000, 4300, 7000), (1750, 5000), 2.257, 4900.1),
        # Journal of Quality Technology 1997.
        (
            (45, 46, 34, 45, 32, 24, 58, 79, 56, 63, 34, 50),
            (23, 24, 57, 78, 76, 85, 51, 59),
            2.7540,
            67.9188,
        ),
    ],
)
def test_published_fits_with_suspensions(
    failures: tuple[float, ...], suspensions: tuple[float, ...], shape: float, scale: float
) -> None:
    fit = life.fit_weibull(failures, suspensions)
    assert (fit.shape, fit.scale) == pytest.approx((shape, scale), rel=3e-5)


def test_adjusted_orders_skip_on_for_suspensions() -> None:
    # By hand: of five, the second and fourth taken out: 1, then (6-1)/(1+3) = 1.25 on, then (6-2.25)/(1+1) = 1.875 on.
    assert life.adjusted_orders([10.0, 30.0, 50.0], [20.0, 40.0]) == pytest.approx([1.0, 2.25, 4.125])
    assert life.adjusted_orders([1.0, 2.0, 3.0], []) == pytest.approx([1.0, 2.0, 3.0])


def test_both_kinds_of_bounds_hold_the_estimate_and_the_likelihood_ones_satisfy_their_definition() -> None:
    fit = life.fit_weibull(NIST, NIST_LEFT)
    fisher, ratio = life.fisher_bounds(fit), life.likelihood_bounds(fit)
    for low, high in (fisher, ratio):
        assert low < fit.life() < high
    assert ratio == pytest.approx(fisher, rel=0.25)
    # At a bound the best likelihood under it lies chi2(0.90, 1)/2 = 1.352772 below the maximum: a grid search.
    times = np.array(NIST + NIST_LEFT, float)
    for bound in ratio:
        shapes = np.linspace(0.5, 4.0, 20_001)
        scales = bound / (-math.log(0.9)) ** (1.0 / shapes)
        logs = np.log(np.array(NIST, float))
        likelihood = (
            10 * np.log(shapes)
            - 10 * shapes * np.log(scales)
            + (shapes - 1.0) * logs.sum()
            - ((times[:, None] / scales) ** shapes).sum(axis=0)
        )
        assert fit.log_likelihood - likelihood.max() == pytest.approx(1.352772, abs=1e-4)


@pytest.mark.parametrize("failures", [(5400.0, 18700.0), (100.0, 20000.0), (5400.0, 5600.0)])
def test_the_bounds_of_few_failures_at_high_confidence_satisfy_their_definition(failures: tuple[float, ...]) -> None:
    fit = life.fit_weibull(failures)
    # chi2(0.9999, 1)/2 = 7.5684 (the square of the normal's 3.8906); the best shape there is far below the estimate's.
    times = np.array(failures)
    for bound in life.likelihood_bounds(fit, 0.5, confidence=0.9999):
        shapes = fit.shape * np.exp(np.linspace(-7.0, 2.0, 40_001))[:, None]
        powers = np.log(times) - math.log(bound)
        likelihood = np.log(shapes * math.log(2.0) / times) + shapes * powers
        likelihood -= math.log(2.0) * np.exp(np.minimum(shapes * powers, 600.0))
        assert fit.log_likelihood - likelihood.sum(axis=1).max() == pytest.approx(7.5684, abs=1e-3)


def test_bounds_cover_the_true_b10_as_often_as_they_say() -> None:
    source = np.random.default_rng(20)
    true = life.Weibull(
        shape=2.0,
        scale=1000.0,
        log_likelihood=0.0,
        covariance=np.eye(2),
        failures=np.array([]),
        suspensions=np.array([]),
    ).life()
    inside = 0
    for _ in range(80):
        times = 1000.0 * source.weibull(2.0, 12)
        fit = life.fit_weibull(times[times < 1300.0], np.full(int((times >= 1300.0).sum()), 1300.0))
        low, high = life.likelihood_bounds(fit)
        inside += low <= true <= high
    assert 0.82 <= inside / 80 <= 0.97


def test_success_run_sizes() -> None:
    # n = ln(1 - C)/ln R, rounded up; (0.90, 0.90) 22 and (0.95, 0.95) 59 are the well-known ones.
    table = {
        0.80: (8, 11, 14, 21), 0.90: (16, 22, 29, 44), 0.95: (32, 45, 59, 90),
        0.99: (161, 230, 299, 459), 0.999: (1609, 2302, 2995, 4603),
    }  # fmt: skip
    for reliability, sizes in table.items():
        for confidence, size in zip((0.80, 0.90, 0.95, 0.99), sizes, strict=True):
            assert life.success_run_size(confidence=confidence, reliability=reliability) == size


def test_wilks_numbers_with_failures() -> None:
    # Wilks 1941: 59, 93, 124 for 95 %/95 % with none, one and two; the others by the binomial.
    assert [life.success_run_size(confidence=0.95, reliability=0.95, failures=r) for r in range(3)] == [59, 93, 124]
    assert life.success_run_size(confidence=0.90, reliability=0.90, failures=1) == 38
    assert life.success_run_size(confidence=0.90, reliability=0.95, failures=1) == 77
    assert life.success_run_size(confidence=0.95, reliability=0.90, failures=1) == 46


def test_what_an_outcome_shows_is_the_inverse_of_the_size() -> None:
    assert life.reliability_shown(samples=22, failures=0, confidence=0.9) == pytest.approx(0.1 ** (1 / 22))
    assert life.reliability_shown(samples=93, failures=1, confidence=0.95) >= 0.95
    assert life.reliability_shown(samples=92, failures=1, confidence=0.95) < 0.95
    assert life.reliability_shown(samples=3, failures=3, confidence=0.9) == 0.0


def test_weibayes_without_failures_is_the_success_run_seen_from_the_scale() -> None:
    scale = life.weibayes([1000.0] * 22, 0, shape=2.0, confidence=0.9)
    assert math.exp(-((1000.0 / scale) ** 2.0)) == pytest.approx(0.1 ** (1 / 22))


def test_a_plan_trades_samples_for_time_by_the_shape() -> None:
    whole = life.plan(life=10_000.0, reliability=0.90, confidence=0.90)
    assert (whole.samples, whole.time_each, whole.shape) == (22, 10_000.0, None)
    few = life.plan(life=10_000.0, reliability=0.90, confidence=0.90, samples=6, shape=2.0)
    # R(L) = R^(L^2): six samples must each show 0.1^(1/6), so L^2 = ln(0.1)/6/ln(0.9).
    assert few.time_each == pytest.approx(10_000.0 * math.sqrt(math.log(0.1) / 6.0 / math.log(0.9)))
    assert "taking a Weibull shape of 2 as known" in str(few)
    with pytest.raises(UsageError, match="needs a Weibull shape"):
        life.plan(life=10_000.0, reliability=0.90, confidence=0.90, samples=6)


def test_too_few_failures_are_refused_with_the_way_out() -> None:
    with pytest.raises(UsageError, match=r"1 failure; .*Weibayes"):
        life.fit_weibull([100.0], [200.0, 300.0])
    with pytest.raises(UsageError, match="not above 0"):
        life.fit_weibull([100.0, 0.0])
