"""Weighted least squares, linear and nonlinear, with covariance, and a warning where a parameter is not determined.

The nonlinear fit is Levenberg-Marquardt (`scipy.optimize.least_squares`), finished with Gauss-Newton steps. Its
Jacobian is analytic where the model gives one, else by complex step (Squire and Trapp, SIAM Review 40 (1998)), exact
to the last digits for a model written in analytic functions. Covariance is s^2 (J^T W J)^-1 with s^2 the weighted
residual sum over the degrees of freedom.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ramprig.errors import UsageError
from ramprig.extras import need

from .uncertainty import Measured, correlations

Array = NDArray[np.float64]
Model = Callable[[NDArray[np.complex128]], NDArray[np.complex128]]
"""Parameters to predictions; called with complex parameters where no Jacobian is given."""
Jacobian = Callable[[Array], Array]
"""Parameters to derivatives `(points, parameters)`."""

COMPLEX_STEP = 1e-30
POLISH_STEPS = 4
EVALUATIONS = 200
"""Evaluations of the model, a parameter, after which a search counts as not settling."""
WEAK_SINGULAR = 1e-5
"""Below this share of the largest singular value, with all columns scaled to length 1, a combination is undetermined.

A choice of this program, not a standard: parameters then are correlated to 1 - 1e-10.
"""
WEAK_RELATIVE = 0.5
"""A parameter whose standard uncertainty exceeds this share of its size is called not determined; ours, too."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Fit:
    """A finished fit. `residuals` are measured - fitted, `weighted` the same over their sigma.

    `covariance` belongs to `values`; `residual_sd` is the weighted residuals' standard deviation with `dof` degrees of
    freedom. `warnings` are sentences, empty when every parameter is determined by the data.
    """

    names: tuple[str, ...]
    values: Array
    covariance: Array
    residuals: Array
    weighted: Array
    dof: int
    residual_sd: float
    singular_values: Array
    warnings: tuple[str, ...]

    @property
    def standard_uncertainties(self) -> Array:
        """One a parameter, in its unit."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def correlations(self) -> Array:
        """Correlation matrix of the parameters."""
        return correlations(self.covariance)

    @property
    def residual_sum(self) -> float:
        """Weighted sum of squared residuals."""
        return float(self.weighted @ self.weighted)

    def measured(self, name: str, unit: str) -> Measured:
        """One parameter as a result."""
        index = self.names.index(name)
        return Measured(
            float(self.values[index]), unit, float(self.standard_uncertainties[index]), float(max(self.dof, 1))
        )


def identifiability(jacobian: Array, names: Sequence[str]) -> tuple[Array, tuple[str, ...]]:
    """Singular values of the Jacobian with columns of length 1, and a sentence for each undetermined combination."""
    size = np.linalg.norm(jacobian, axis=0)
    dead = [name for name, length in zip(names, size, strict=True) if not length > 0.0]
    sentences = [f"{name} has no effect on what was measured" for name in dead]
    scaled = jacobian / np.where(size > 0.0, size, 1.0)
    _, singular, right = np.linalg.svd(scaled, full_matrices=False)
    for value, direction in zip(singular, right, strict=True):
        if value > WEAK_SINGULAR * singular[0]:
            continue
        together = [name for name, part in zip(names, direction, strict=True) if abs(part) > 0.2 and name not in dead]
        if together:
            sentences.append(f"{' and '.join(together)} cannot be told apart by what was measured")
    return singular, tuple(sentences)


def undetermined(names: Sequence[str], values: Array, covariance: Array) -> tuple[str, ...]:
    """A sentence for each parameter whose uncertainty is of the size of its value."""
    sd = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    return tuple(
        f"{name} is not determined: {value:.3g} with a standard uncertainty of {u:.3g}"
        for name, value, u in zip(names, values, sd, strict=True)
        if not u <= WEAK_RELATIVE * abs(value)
    )


def _finish(names: Sequence[str], values: Array, jacobian: Array, residuals: Array, sigma: Array) -> Fit:
    """Covariance and warnings at the optimum; `jacobian` is that of the weighted predictions."""
    weighted = residuals / sigma
    dof = len(residuals) - len(values)
    variance = float(weighted @ weighted) / dof if dof > 0 else float("nan")
    singular, sentences = identifiability(jacobian, names)
    size = np.linalg.norm(jacobian, axis=0)
    size = np.where(size > 0.0, size, 1.0)
    _, upper = np.linalg.qr(jacobian / size)
    inverse = np.linalg.pinv(upper, rcond=1e-14)
    covariance = variance * (inverse @ inverse.T) / np.outer(size, size)
    return Fit(
        names=tuple(names),
        values=values,
        covariance=covariance,
        residuals=residuals,
        weighted=weighted,
        dof=dof,
        residual_sd=float(np.sqrt(variance)),
        singular_values=singular,
        warnings=sentences + undetermined(names, values, covariance),
    )


def _sigmas(sigma: ArrayLike, count: int, parameters: int) -> Array:
    found = np.broadcast_to(np.asarray(sigma, float), (count,))
    if count < parameters:
        raise UsageError(f"{count} points for {parameters} parameters; a fit needs at least as many points")
    if not np.all(found > 0.0):
        raise UsageError("a sigma that is not above 0; each point needs one")
    return found


def fit_linear(design: ArrayLike, measured: ArrayLike, *, names: Sequence[str], sigma: ArrayLike = 1.0) -> Fit:
    """Fit `design @ values` to `measured`, weighted by 1/sigma^2.

    `design` is `(points, parameters)`; `sigma` a number or one a point, in the unit of `measured`. Columns are scaled
    to length 1 and decomposed by QR, which keeps the digits of ill-conditioned sets, followed by one refinement.
    """
    design, measured = np.asarray(design, float), np.asarray(measured, float)
    sigmas = _sigmas(sigma, *design.shape)
    weighted = design / sigmas[:, None]
    size = np.linalg.norm(weighted, axis=0)
    size = np.where(size > 0.0, size, 1.0)
    values = np.zeros(design.shape[1])
    for _ in range(3):
        # A second and third pass over the residuals refine the digits lost in the first.
        left = (measured - design @ values) / sigmas
        step, *_ = np.linalg.lstsq(weighted / size, left, rcond=None)
        values = values + step / size
    return _finish(names, values, weighted, measured - design @ values, sigmas)


def complex_step(model: Model, at: Array) -> Array:
    """Derivatives `(points, parameters)` of an analytic model, without cancellation."""
    columns = []
    for index, value in enumerate(at):
        step = COMPLEX_STEP * max(abs(value), 1.0)
        probe = at.astype(np.complex128)
        probe[index] += 1j * step
        columns.append(np.imag(model(probe)) / step)
    return np.stack(columns, axis=1)


def fit_curve(
    model: Model,
    measured: ArrayLike,
    start: ArrayLike,
    *,
    names: Sequence[str],
    sigma: ArrayLike = 1.0,
    jacobian: Jacobian | None = None,
) -> Fit:
    """Fit the parameters of `model` to `measured` from `start`, weighted by 1/sigma^2.

    Raises `UsageError` when there are fewer points than parameters and when the start gives no finite prediction. A
    search that does not settle is among the warnings.
    """
    optimize = need("scipy.optimize", purpose="a curve fit")
    measured, at = np.asarray(measured, float), np.asarray(start, float)
    sigmas = _sigmas(sigma, len(measured), len(at))

    def predicted(values: Array) -> Array:
        # A trial step may lead where the model overflows; the search then takes a shorter one.
        with np.errstate(over="ignore", invalid="ignore"):
            return np.real(model(values.astype(np.complex128)))

    def slopes(values: Array) -> Array:
        return (jacobian(values) if jacobian else complex_step(model, values)) / sigmas[:, None]

    if not np.all(np.isfinite(predicted(at))):
        raise UsageError("the model is not finite at the start values")
    found = optimize.least_squares(
        lambda values: (predicted(values) - measured) / sigmas,
        at,
        jac=slopes,
        method="trf",
        x_scale="jac",
        xtol=1e-13,
        ftol=1e-13,
        gtol=1e-13,
        max_nfev=EVALUATIONS * len(at),
    )
    values = _polish(np.asarray(found.x, float), predicted, slopes, measured, sigmas)
    result = _finish(names, values, slopes(values), measured - predicted(values), sigmas)
    if found.status > 0:
        return result
    sentence = f"the search had not settled after {EVALUATIONS * len(at)} evaluations"
    return dataclasses.replace(result, warnings=(*result.warnings, sentence))


def _polish(
    values: Array, predicted: Callable[[Array], Array], slopes: Callable[[Array], Array], measured: Array, sigmas: Array
) -> Array:
    """Gauss-Newton steps from the optimum, kept only while they do not raise the residual sum."""
    left = (measured - predicted(values)) / sigmas
    for _ in range(POLISH_STEPS):
        slope = slopes(values)
        size = np.linalg.norm(slope, axis=0)
        size = np.where(size > 0.0, size, 1.0)
        step, *_ = np.linalg.lstsq(slope / size, left, rcond=1e-13)
        further = values + step / size
        then = (measured - predicted(further)) / sigmas
        if not float(then @ then) <= float(left @ left) * (1.0 + 1e-13):
            break
        values, left = further, then
    return values


# ---- first-order shapes --------------------------------------------------------------------------------------------


def first_order(values: NDArray[np.complex128], time: Array) -> NDArray[np.complex128]:
    """The run-up shape y = y_end (1 - e^(-rate t)); `values` are (y_end, rate)."""
    found: NDArray[np.complex128] = values[0] * -np.expm1(-values[1] * time)
    return found


def approach(values: NDArray[np.complex128], time: Array) -> NDArray[np.complex128]:
    """The general first-order shape y = y_end + (y_start - y_end) e^(-rate t); `values` (y_start, y_end, rate)."""
    found: NDArray[np.complex128] = values[1] + (values[0] - values[1]) * np.exp(-values[2] * time)
    return found


START_RATES = 121
"""Rates tried for a start value, evenly in their logarithm, from 1/1000 of the span's to 30 a finest step."""


def start_rate(time: ArrayLike, measured: ArrayLike, *, from_zero: bool) -> float:
    """A start value for the rate of a first-order shape, from the data alone.

    For each of a row of rates the other parameters follow by linear least squares (variable projection, Golub and
    Pereyra 1973); the rate with the least residual sum is returned. `from_zero` takes y = 0 at t = 0 for granted.
    """
    time, measured = np.asarray(time, float), np.asarray(measured, float)
    span = float(time.max() - (0.0 if from_zero else time.min()))
    gaps = np.diff(np.unique(time))
    if not span > 0.0 or len(gaps) == 0:
        raise UsageError("a rate needs at least two different times")
    rates = np.geomspace(1e-3 / span, 30.0 / float(gaps.min()), START_RATES)
    best = (np.inf, rates[0])
    for rate in rates:
        shape = -np.expm1(-rate * (time if from_zero else time - time.min()))
        columns = [shape] if from_zero else [shape, np.ones_like(shape)]
        design = np.stack(columns, axis=1)
        amplitude, *_ = np.linalg.lstsq(design, measured, rcond=None)
        left = measured - design @ amplitude
        best = min(best, (float(left @ left), rate))
    return float(best[1])


def fit_first_order(time: ArrayLike, measured: ArrayLike, *, sigma: ArrayLike = 1.0) -> Fit:
    """Fit y_end (1 - e^(-rate t)), started from the data; parameters `end` and `rate`."""
    time, measured = np.asarray(time, float), np.asarray(measured, float)
    rate = start_rate(time, measured, from_zero=True)
    shape = -np.expm1(-rate * time)
    end = float(shape @ measured) / float(shape @ shape)

    def slopes(values: Array) -> Array:
        decay = np.exp(-values[1] * time)
        return np.stack([-np.expm1(-values[1] * time), values[0] * time * decay], axis=1)

    return fit_curve(
        lambda values: first_order(values, time),
        measured,
        [end, rate],
        names=("end", "rate"),
        sigma=sigma,
        jacobian=slopes,
    )


def fit_approach(time: ArrayLike, measured: ArrayLike, *, sigma: ArrayLike = 1.0) -> Fit:
    """Fit y_end + (y_start - y_end) e^(-rate t), started from the data; parameters `start`, `end` and `rate`."""
    time, measured = np.asarray(time, float), np.asarray(measured, float)
    rate = start_rate(time, measured, from_zero=False)
    decay = np.exp(-rate * (time - time.min()))
    (start, end), *_ = np.linalg.lstsq(np.stack([decay, 1.0 - decay], axis=1), measured, rcond=None)
    at_zero = end + (start - end) * np.exp(rate * time.min())
    return fit_curve(
        lambda values: approach(values, time),
        measured,
        [at_zero, end, rate],
        names=("start", "end", "rate"),
        sigma=sigma,
    )
