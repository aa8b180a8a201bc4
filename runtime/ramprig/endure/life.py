"""Life from failures and survivors: Weibull by maximum likelihood, ranks, B-lives with bounds, sample sizes.

Two-parameter Weibull, R(t) = e^(-(t/scale)^shape); suspensions (units taken out before they failed) count in full.
Sources: Meeker and Escobar, Statistical Methods for Reliability Data (likelihood, Fisher and likelihood-ratio
bounds); Abernethy, The New Weibull Handbook (adjusted ranks, Weibayes); Lipson and Sheth (trading time for samples);
all from memory, held against published figures in the tests. Times are in any one unit: cycles, hours.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ramprig.errors import UsageError
from ramprig.extras import need

Array = NDArray[np.float64]

PURPOSE = "a life estimate"
SHAPES = (0.02, 200.0)
"""Shapes that are searched."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Weibull:
    """A fit: `shape`, `scale` (63.2 % have failed), and the covariance of (ln scale, ln shape), `(2, 2)`."""

    shape: float
    scale: float
    log_likelihood: float
    covariance: Array
    failures: Array
    suspensions: Array

    @property
    def shape_sd(self) -> float:
        """Standard uncertainty of the shape from the Fisher information."""
        return self.shape * math.sqrt(self.covariance[1, 1])

    @property
    def scale_sd(self) -> float:
        """Standard uncertainty of the scale from the Fisher information."""
        return self.scale * math.sqrt(self.covariance[0, 0])

    @property
    def mean(self) -> float:
        """Mean life."""
        return self.scale * math.gamma(1.0 + 1.0 / self.shape)

    def reliability(self, time: float) -> float:
        """Share that survives `time`."""
        return math.exp(-((time / self.scale) ** self.shape))

    def life(self, failed: float = 0.10) -> float:
        """Time by which this share has failed; B10 by default."""
        return float(self.scale * (-math.log1p(-failed)) ** (1.0 / self.shape))


def _checked(failures: Sequence[float] | Array, suspensions: Sequence[float] | Array) -> tuple[Array, Array]:
    failed, left = np.sort(np.asarray(failures, float)), np.sort(np.asarray(suspensions, float))
    both = np.concatenate([failed, left])
    if not np.all(np.isfinite(both)) or not np.all(both > 0.0):
        raise UsageError("a time to failure or suspension that is not above 0")
    return failed, left


def fit_weibull(failures: Sequence[float] | Array, suspensions: Sequence[float] | Array = ()) -> Weibull:
    """Maximum-likelihood fit. At least two failures at different times, or `UsageError` that says what to use instead.

    With few failures the shape is biased upwards; see the bounds rather than the value.
    """
    failed, left = _checked(failures, suspensions)
    if len(np.unique(failed)) < 2:
        count = "1 failure" if len(failed) == 1 else f"{len(failed)} failures"
        raise UsageError(
            f"{count}; a Weibull fit needs two at different times. With none or one, use the "
            "success-run numbers, or a shape known from elsewhere (Weibayes)"
        )
    optimize = need("scipy.optimize", purpose=PURPOSE)
    times = np.concatenate([failed, left])
    unit = float(times.max())
    scaled, logs = times / unit, np.log(times / unit)
    mean_log = float(np.log(failed / unit).mean())

    def slope(shape: float) -> float:
        power = scaled**shape
        return float(power @ logs / power.sum() - 1.0 / shape - mean_log)

    shape = float(optimize.brentq(slope, *SHAPES, xtol=1e-13, rtol=1e-13))
    scale = unit * float((scaled**shape).sum() / len(failed)) ** (1.0 / shape)
    return Weibull(
        shape=shape,
        scale=scale,
        log_likelihood=_log_likelihood(shape, scale, failed, times),
        covariance=_covariance(shape, scale, failed, times),
        failures=failed,
        suspensions=left,
    )


def _log_likelihood(shape: float, scale: float, failed: Array, times: Array) -> float:
    logs = np.log(failed / scale)
    return float(len(failed) * math.log(shape / scale) + (shape - 1.0) * logs.sum() - ((times / scale) ** shape).sum())


def _covariance(shape: float, scale: float, failed: Array, times: Array) -> Array:
    """Inverse of the observed information in (ln scale, ln shape), where the normal approximation serves better."""
    logs = shape * np.log(times / scale)
    power = np.exp(logs)
    information = np.array(
        [
            [shape**2 * power.sum(), -shape * (power @ logs)],
            [-shape * (power @ logs), len(failed) + power @ logs**2],
        ]
    )
    return np.asarray(np.linalg.inv(information), float)


def fisher_bounds(fit: Weibull, failed: float = 0.10, *, confidence: float = 0.90) -> tuple[float, float]:
    """Two-sided bounds of the life at which `failed` have failed, by the normal approximation of its logarithm.

    Each one alone is a one-sided bound of (1 + confidence) / 2: 90 % two-sided is 95 % one-sided.
    """
    stats = need("scipy.stats", purpose=PURPOSE)
    quantile = math.log(-math.log1p(-failed)) / fit.shape
    gradient = np.array([1.0, -quantile])
    spread = float(stats.norm.ppf(0.5 + confidence / 2.0)) * math.sqrt(gradient @ fit.covariance @ gradient)
    life = fit.life(failed)
    return life * math.exp(-spread), life * math.exp(spread)


def likelihood_bounds(fit: Weibull, failed: float = 0.10, *, confidence: float = 0.90) -> tuple[float, float]:
    """Two-sided likelihood-ratio bounds of that life; preferable to Fisher's with few failures."""
    stats, optimize = need("scipy.stats", purpose=PURPOSE), need("scipy.optimize", purpose=PURPOSE)
    drop = float(stats.chi2.ppf(confidence, 1)) / 2.0
    times = np.concatenate([fit.failures, fit.suspensions])
    exponent = math.log(-math.log1p(-failed))

    def excess(log_life: float) -> float:
        """How far the best likelihood with this life lies below the bound's."""

        def loss(log_shape: float) -> float:
            shape = math.exp(log_shape)
            log_scale = log_life - exponent / shape
            logs = shape * (np.log(times) - log_scale)
            if logs.max() > 600.0:
                return 1e200
            own = shape * (np.log(fit.failures) - log_scale)
            return -float((log_shape - np.log(fit.failures) + own).sum() - np.exp(logs).sum())

        middle = math.log(fit.shape)
        best = optimize.minimize_scalar(
            loss, bounds=(middle - 3.0, middle + 3.0), method="bounded", options={"xatol": 1e-10}
        )
        return fit.log_likelihood + float(best.fun) - drop

    centre = math.log(fit.life(failed))
    ends = []
    for side in (-1.0, 1.0):
        step = 0.1
        while excess(centre + side * step) < 0.0 and step < 60.0:
            step *= 1.6
        low, high = sorted((centre, centre + side * step))
        ends.append(math.exp(optimize.brentq(excess, low, high, xtol=1e-10)))
    return ends[0], ends[1]


# ---- ranks -----------------------------------------------------------------------------------------------------------


def median_ranks(count: int) -> Array:
    """Exact median ranks of 1 to `count`: the median of the beta distribution of each order statistic."""
    stats = need("scipy.stats", purpose=PURPOSE)
    order = np.arange(1, count + 1)
    return np.asarray(stats.beta.ppf(0.5, order, count + 1 - order), float)


def benard(order: ArrayLike, count: int) -> Array:
    """Benard's approximation of the median rank, (i - 0.3) / (n + 0.4); `order` may be fractional."""
    return (np.asarray(order, float) - 0.3) / (count + 0.4)


def adjusted_orders(failures: Sequence[float] | Array, suspensions: Sequence[float] | Array) -> Array:
    """Order numbers of the failures, moved on for the suspensions before them (Johnson).

    A suspension at the same time as a failure counts as after it.
    """
    failed, left = _checked(failures, suspensions)
    count = len(failed) + len(left)
    events = sorted([(time, 0) for time in failed] + [(time, 1) for time in left])
    orders, order = [], 0.0
    for place, (_, suspended) in enumerate(events):
        if not suspended:
            order += (count + 1 - order) / (1 + count - place)
            orders.append(order)
    return np.array(orders)


def rank_regression(times: Sequence[float] | Array, ranks: Array, *, on_time: bool = False) -> tuple[float, float]:
    """Shape and scale of the straight line through the probability plot, ln(-ln(1 - rank)) against ln time.

    Least squares in the rank's direction, or in the time's if `on_time`. For plots; `fit_weibull` is the estimate.
    """
    x, y = np.log(np.asarray(times, float)), np.log(-np.log1p(-ranks))
    about_x, about_y = x - x.mean(), y - y.mean()
    shape = (
        float(about_y @ about_y / (about_x @ about_y)) if on_time else float(about_x @ about_y / (about_x @ about_x))
    )
    return shape, math.exp(float(x.mean()) - float(y.mean()) / shape)


# ---- planning --------------------------------------------------------------------------------------------------------


def weibayes(times: Sequence[float] | Array, failures: int, *, shape: float, confidence: float) -> float:
    """Lower bound of the scale with the shape taken as known and at most one failure among `times`.

    (sum t^shape / (chi2(confidence, 2 r + 2) / 2))^(1/shape).
    """
    stats = need("scipy.stats", purpose=PURPOSE)
    total = float((np.asarray(times, float) ** shape).sum())
    return float((total / (stats.chi2.ppf(confidence, 2 * failures + 2) / 2.0)) ** (1.0 / shape))


def success_run_size(*, confidence: float, reliability: float, failures: int = 0) -> int:
    """Samples that must each last one life so that, with so many failures allowed, the reliability is shown.

    Without failures ln(1 - C) / ln R, rounded up; with them the binomial's smallest n (Wilks).
    """
    _check_share("confidence", confidence)
    _check_share("reliability", reliability)
    if failures == 0:
        return math.ceil(math.log1p(-confidence) / math.log(reliability) - 1e-12)
    stats = need("scipy.stats", purpose=PURPOSE)
    low, high = failures, failures + 1

    def shown(count: int) -> bool:
        return bool(stats.binom.cdf(failures, count, 1.0 - reliability) <= 1.0 - confidence)

    while not shown(high):
        low, high = high, 2 * high
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if shown(middle) else (middle, high)
    return high


def reliability_shown(*, samples: int, failures: int, confidence: float) -> float:
    """Reliability that this outcome shows at this confidence (Clopper and Pearson); 0 where all failed."""
    stats = need("scipy.stats", purpose=PURPOSE)
    _check_share("confidence", confidence)
    return 0.0 if failures >= samples else float(stats.beta.ppf(1.0 - confidence, samples - failures, failures + 1))


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """How many samples must run how long, without more than `failures` failing, to show `reliability` at `life`."""

    samples: int
    time_each: float
    life: float
    reliability: float
    confidence: float
    failures: int
    shape: float | None

    def __str__(self) -> str:
        known = "" if self.shape is None else f", taking a Weibull shape of {self.shape:g} as known"
        return (
            f"{self.samples} samples to {in_figures(self.time_each)} each with at most {self.failures} failures show a "
            f"reliability of {100 * self.reliability:g} % at {in_figures(self.life)} with {100 * self.confidence:g} % "
            f"confidence{known}"
        )


def in_figures(value: float) -> str:
    """Four significant figures without an exponent where people would write none: `34950`, not `3.495e+04`."""
    return f"{float(f'{value:.4g}'):.10g}"


def plan(
    *,
    life: float,
    reliability: float,
    confidence: float,
    failures: int = 0,
    samples: int | None = None,
    shape: float | None = None,
) -> Plan:
    """Plan a demonstration test. Without `samples`, as many as last one life each.

    With `samples`, the time each must run; that trade needs the Weibull `shape`: reliability over L lives is
    R^(L^shape) (Lipson and Sheth). The shape must come from earlier failures of the same kind; if it is too high the
    plan promises too much.
    """
    if not life > 0.0:
        raise UsageError(f"a life of {life:g}; it must be above 0")
    count = success_run_size(confidence=confidence, reliability=reliability, failures=failures)
    lives = 1.0
    if samples is not None and samples != count:
        if shape is None:
            raise UsageError(
                f"{samples} samples instead of {count} must run for another time, which needs a Weibull shape"
            )
        if samples <= failures:
            raise UsageError(
                f"{samples} samples with {failures} failures allowed show nothing; more samples are needed"
            )
        shown = reliability_shown(samples=samples, failures=failures, confidence=confidence)
        lives = (math.log(shown) / math.log(reliability)) ** (1.0 / shape)
    return Plan(
        samples=count if samples is None else samples,
        time_each=life * lives,
        life=life,
        reliability=reliability,
        confidence=confidence,
        failures=failures,
        shape=shape if lives != 1.0 else None,
    )


def _check_share(name: str, value: float) -> None:
    if not 0.0 < value < 1.0:
        raise UsageError(f"a {name} of {value:g}; it must lie between 0 and 1")
