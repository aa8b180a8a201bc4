"""Life from failures and survivors: Weibull by maximum likelihood, ranks, B-lives with bounds, sample sizes.

Two-parameter Weibull, R(t) = e^(-(t/scale)^shape); suspensions (units taken out before they failed) count in full.
Sources: Meeker and Escobar, Statistical Methods for Reliability Data (likelihood, Fisher and likelihood-ratio
bounds); Abernethy, The New Weibull Handbook (adjusted ranks, Weibayes); Lipson and Sheth (trading time for samples);
all from memory, held against published figures in the tests. Times are in any one unit: cycles, hours.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ramprig.errors import UsageError
from ramprig.extras import need

Array = NDArray[np.float64]

PURPOSE = "a life estimate"
TIMES = (1e-20, 1e20)
"""Times that are taken: a wider span is a slip of the pen, and leaves the range of a double."""
LOG_MOST = 690.0
"""Natural logarithm of the largest number that is told, either way; a double holds 709."""
DOUBLINGS_MAX = 9
"""Bound of the search for a shape, which begins at one step and doubles it: to e^512 either way."""


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
    beyond = both[(both < TIMES[0]) | (both > TIMES[1])]
    if len(beyond):
        raise UsageError(f"a time of {beyond[0]:g}; times lie between {TIMES[0]:g} and {TIMES[1]:g}")
    return failed, left


def fit_weibull(failures: Sequence[float] | Array, suspensions: Sequence[float] | Array = ()) -> Weibull:
    """Maximum-likelihood fit. At least two failures at different times, or `UsageError` that says what to use instead.

    With few failures the shape is biased upwards; see the bounds rather than the value.
    """
    failed, left = _checked(failures, suspensions)
    if len(np.unique(failed)) < 2:
        count = "1 failure" if len(failed) == 1 else f"{len(failed)} failures, all at one time"
        count = count if len(failed) else "no failure"
        raise UsageError(
            f"{count}; a Weibull fit needs two at different times. With none or one, use the "
            "success-run numbers, or a shape known from elsewhere (Weibayes)"
        )
    times = np.concatenate([failed, left])
    unit = float(times.max())
    logs = np.log(times) - math.log(unit)
    mean_log = float(np.log(failed).mean()) - math.log(unit)

    def slope(log_shape: float) -> float:
        """Of the likelihood, with its sign turned; it rises with the shape, from below 0 to above it."""
        shape = math.exp(log_shape)
        power = np.exp(shape * logs)
        return float(power @ logs / power.sum() - 1.0 / shape - mean_log)

    shape = math.exp(_crossing(slope, 0.0))
    log_scale = math.log(unit) + math.log(float(np.exp(shape * logs).sum()) / len(failed)) / shape
    if log_scale > LOG_MOST:
        raise UsageError(f"{len(failed)} of {len(times)} failed, too few and too far apart for any scale")
    scale = math.exp(log_scale)
    return Weibull(
        shape=shape,
        scale=scale,
        log_likelihood=_log_likelihood(shape, scale, failed, times),
        covariance=_covariance(shape, scale, failed, times),
        failures=failed,
        suspensions=left,
    )


def _crossing(rising: Callable[[float], float], start: float) -> float:
    """Where a function that rises for ever goes through 0, from about `start` on. Raises UsageError if nowhere near."""
    optimize = need("scipy.optimize", purpose=PURPOSE)
    low, high, step = start - 1.0, start + 1.0, 1.0
    for _ in range(DOUBLINGS_MAX):
        below, above = rising(low) < 0.0, rising(high) > 0.0
        if below and above:
            return float(optimize.brentq(rising, low, high, xtol=1e-13, rtol=1e-13))
        low, high, step = low - (0.0 if below else step), high + (0.0 if above else step), 2.0 * step
    raise UsageError("the times lie so close together that they cannot be told apart")


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
    """Two-sided likelihood-ratio bounds of that life; preferable to Fisher's with few failures.

    Raises UsageError where a bound lies beyond all numbers: so little is known at so high a confidence.
    """
    stats = need("scipy.stats", purpose=PURPOSE)
    drop = float(stats.chi2.ppf(confidence, 1)) / 2.0
    logs, failed_logs = np.log(np.concatenate([fit.failures, fit.suspensions])), np.log(fit.failures)
    exponent = math.log(-math.log1p(-failed))

    def excess(log_life: float) -> float:
        """How far the best likelihood with this life lies below the bound's."""
        away, own = logs - log_life, float((failed_logs - log_life).sum())

        def slope(log_shape: float) -> float:
            """Of the likelihood with this life by the shape, its sign turned: the likelihood is concave in it."""
            shape = math.exp(log_shape)
            power = np.exp(np.minimum(shape * away + exponent, LOG_MOST))
            return float(away @ power) - own - len(failed_logs) / shape

        shape = math.exp(_crossing(slope, math.log(fit.shape)))
        power = np.exp(np.minimum(shape * away + exponent, LOG_MOST))
        best = len(failed_logs) * (math.log(shape) + exponent) + shape * own - failed_logs.sum() - power.sum()
        return float(fit.log_likelihood - best - drop)

    centre = math.log(fit.scale) + exponent / fit.shape
    return _bound(excess, centre, -1.0), _bound(excess, centre, 1.0)


def _bound(excess: Callable[[float], float], centre: float, side: float) -> float:
    """Where the likelihood has fallen to the bound, below the estimate or above it. Raises UsageError."""
    optimize = need("scipy.optimize", purpose=PURPOSE)
    step = 0.1
    while excess(centre + side * step) < 0.0:
        step *= 1.6
        if step > LOG_MOST:
            raise UsageError(
                "too little is known to bound this life: ask with less confidence or for a larger share, or test on"
            )
    low, high = sorted((centre, centre + side * step))
    log_life = float(optimize.brentq(excess, low, high, xtol=1e-10))
    if abs(log_life) > LOG_MOST:
        raise UsageError("this life is beyond all numbers: ask for a share nearer to 10 %")
    return math.exp(log_life)


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
    """Lower bound of the scale with the shape taken as known and so many failures among `times`.

    (sum t^shape / (chi2(confidence, 2 r + 2) / 2))^(1/shape). Raises UsageError where that is beyond all numbers.
    """
    stats = need("scipy.stats", purpose=PURPOSE)
    all_times, _ = _checked(times, ())
    longest = float(all_times[-1])
    total = float(np.exp(shape * (np.log(all_times) - math.log(longest))).sum())
    log_scale = math.log(longest) + math.log(2.0 * total / stats.chi2.ppf(confidence, 2 * failures + 2)) / shape
    if not abs(log_scale) <= LOG_MOST:
        raise UsageError(f"with a Weibull shape of {shape:g} the scale is beyond all numbers; give a larger one")
    return math.exp(log_scale)


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
            f"{counted(self.samples, 'sample')} to {in_figures(self.time_each)} each, of which at most {self.failures} "
            f"may fail, show a reliability of {100 * self.reliability:g} % at {in_figures(self.life)} with "
            f"{100 * self.confidence:g} % "
            f"confidence{known}"
        )


def counted(count: int, what: str) -> str:
    """`1 sample`, `2 samples`."""
    return f"{count} {what}" if count == 1 else f"{count} {what}s"


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
    if not TIMES[0] <= life <= TIMES[1]:
        raise UsageError(f"a life of {life:g}; it must lie between {TIMES[0]:g} and {TIMES[1]:g}")
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
