"""Uncertainty of measurement after the GUM (JCGM 100:2008): means, propagation, expanded uncertainty, printing.

The law of propagation in matrix form, U_y = J U_x J^T (GUM 5.2.2, and JCGM 102 6.2), so that correlated inputs are
treated as such; effective degrees of freedom by Welch and Satterthwaite (GUM G.4.1); coverage factor from Student's
t (GUM G.3). Rounding of the printed figures is common practice within GUM 7.2.6 (at most two digits).
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.errors import UsageError
from ramprig.extras import need

Array = NDArray[np.float64]

CONFIDENCE = 0.95
"""The coverage probability that results are stated with."""

DOF_SHOWN = 200
"""From this many degrees of freedom on they no longer matter and are not printed."""

_PREFIXES = {-12: "p", -9: "n", -6: "u", -3: "m", 0: "", 3: "k", 6: "M"}
_PREFIXED = {"A", "F", "H", "Hz", "J", "N", "N*m", "V", "W", "ohm", "s"}


def coverage_factor(dof: float, confidence: float = CONFIDENCE) -> float:
    """Student's t for a two-sided interval; the normal quantile where `dof` is infinite."""
    stats = need("scipy.stats", purpose="an expanded uncertainty")
    upper = 0.5 + confidence / 2.0
    return float(stats.norm.ppf(upper) if math.isinf(dof) else stats.t.ppf(upper, dof))


@dataclass(frozen=True, slots=True)
class Measured:
    """A value with its standard uncertainty and degrees of freedom, in `unit` (no prefix, such as `ohm` or `kg*m2`).

    Prints as `2.41 ohm +- 0.03 ohm (95 %, dof 42)`.
    """

    value: float
    unit: str
    standard_uncertainty: float
    dof: float = math.inf

    def __post_init__(self) -> None:
        if not self.standard_uncertainty >= 0.0 or not self.dof > 0.0:
            raise UsageError(
                f"a standard uncertainty of {self.standard_uncertainty} with {self.dof} degrees of freedom; "
                "the first must be at least 0, the second above 0"
            )

    def expanded(self, confidence: float = CONFIDENCE) -> float:
        """Half the width of the interval that holds the value with this probability."""
        return coverage_factor(self.dof, confidence) * self.standard_uncertainty

    def interval(self, confidence: float = CONFIDENCE) -> tuple[float, float]:
        """Lower and upper end of that interval."""
        half = self.expanded(confidence)
        return self.value - half, self.value + half

    @property
    def relative(self) -> float:
        """Standard uncertainty over the size of the value; infinite at 0."""
        return self.standard_uncertainty / abs(self.value) if self.value else math.inf

    def __str__(self) -> str:
        expanded = self.expanded()
        scale, symbol, tail = _scaling(max(abs(self.value), expanded), self.unit)
        value, half = rounded_pair(self.value / scale, expanded / scale)
        dof = f", dof {self.dof:.0f}" if self.dof < DOF_SHOWN else ""
        return f"{value}{tail} {symbol} +- {half}{tail} {symbol} ({100.0 * CONFIDENCE:g} %{dof})".replace("  ", " ")

    def to_json(self) -> dict[str, float | str | None]:
        """For programs: everything the printed form is made from; infinite degrees of freedom are null."""
        low, high = self.interval()
        return {
            "value": self.value,
            "unit": self.unit,
            "standard_uncertainty": self.standard_uncertainty,
            "dof": None if math.isinf(self.dof) else self.dof,
            "confidence": CONFIDENCE,
            "coverage_factor": coverage_factor(self.dof),
            "low": low,
            "high": high,
        }


def _scaling(size: float, unit: str) -> tuple[float, str, str]:
    """Divisor, unit and exponent to print a number of this size with: a prefix where the unit takes one."""
    if size == 0.0 or not math.isfinite(size):
        return 1.0, unit, ""
    power = 3 * math.floor(math.log10(1.0005 * size) / 3.0)  # 0.9999 ohm is better reading than 999.9 mohm
    if unit in _PREFIXED and power in _PREFIXES and not (unit == "s" and power > 0):
        return 10.0**power, _PREFIXES[power] + unit, ""
    if -3 <= power <= 3:
        return 1.0, unit, ""
    return 10.0**power, unit, f"e{power}"


def rounded_pair(value: float, half_width: float) -> tuple[str, str]:
    """Value and half width as text, rounded to the same place.

    The half width keeps two digits where it begins with 1 or 2, else one; it is never printed as 0 unless it is.
    """
    if not half_width or not math.isfinite(half_width):
        return f"{value:.6g}", f"{half_width:g}"
    power = math.floor(math.log10(half_width))
    kept = 1 if half_width / 10.0**power < 2.95 else 0
    places = kept - power
    if places < 0:
        return f"{round(value, places) + 0.0:.0f}", f"{round(half_width, places):.0f}"
    return f"{round(value, places) + 0.0:.{places}f}", f"{half_width:.{places}f}"  # + 0.0: no -0


def means(readings: Array) -> tuple[Array, Array]:
    """Means of simultaneous readings and the covariance of those means.

    `readings` is `(n, quantities)`, n at least 2, each row read together; the covariance has n - 1 degrees of freedom
    (GUM 5.2.3).
    """
    readings = np.asarray(readings, float)
    count = len(readings)
    if readings.ndim != 2 or count < 2:
        raise UsageError(f"readings of shape {readings.shape}; at least two rows of simultaneous readings are needed")
    return readings.mean(axis=0), np.atleast_2d(np.cov(readings, rowvar=False, ddof=1)) / count


def correlations(covariance: Array) -> Array:
    """Correlation matrix; a quantity without uncertainty is uncorrelated with the others."""
    sd = np.sqrt(np.diag(covariance))
    safe = np.where(sd > 0.0, sd, 1.0)
    found: Array = covariance / np.outer(safe, safe)
    np.fill_diagonal(found, 1.0)
    return found


def sensitivities(function: Callable[[Array], Array], at: Array) -> Array:
    """Derivatives `(outputs, inputs)` by central differences, good to about 1e-9 of their size for smooth functions."""
    at = np.asarray(at, float)
    columns = []
    for index, value in enumerate(at):
        step = 6e-6 * max(abs(value), 1e-6)
        up, down = at.copy(), at.copy()
        up[index] += step
        down[index] -= step
        high, low = np.atleast_1d(function(up)), np.atleast_1d(function(down))
        columns.append((high - low) / (up[index] - down[index]))
    return np.stack(columns, axis=1)


def propagate(function: Callable[[Array], Array], at: Array, covariance: Array) -> tuple[Array, Array]:
    """Outputs of `function` at the inputs `at`, and their covariance to first order (GUM 5.2.2, JCGM 102 6.2)."""
    slope = sensitivities(function, at)
    return np.atleast_1d(function(np.asarray(at, float))), slope @ covariance @ slope.T


def welch_satterthwaite(contributions: Array, dofs: Array) -> float:
    """Effective degrees of freedom of a sum of independent contributions (standard uncertainties), GUM G.2b."""
    contributions, dofs = np.asarray(contributions, float), np.asarray(dofs, float)
    total = float(np.sum(contributions**2))
    spread = float(np.sum(contributions**4 / dofs))
    return total**2 / spread if spread > 0.0 else math.inf


def combine(value: float, unit: str, contributions: list[tuple[float, float]]) -> Measured:
    """A result with independent contributions, each (standard uncertainty, degrees of freedom)."""
    parts = np.array([part for part, _ in contributions], float)
    dofs = np.array([dof for _, dof in contributions], float)
    return Measured(value, unit, float(np.sqrt(np.sum(parts**2))), welch_satterthwaite(parts, dofs))
