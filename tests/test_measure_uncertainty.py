"""Propagation of uncertainty against the GUM's example H.2, and results printed as an engineer writes them."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest

from ramprig.errors import UsageError
from ramprig.measure.numbers import uncertainty as un

# GUM (JCGM 100:2008) H.2, table H.2: simultaneous readings of V in V, I in A, phase in rad (from memory).
H2 = np.array(
    [
        (5.007, 19.663e-3, 1.0456),
        (4.994, 19.639e-3, 1.0438),
        (5.005, 19.640e-3, 1.0468),
        (4.990, 19.685e-3, 1.0428),
        (4.999, 19.678e-3, 1.0433),
    ]
)


def impedance(inputs: np.ndarray) -> np.ndarray:
    volts, amperes, phase = inputs
    size = volts / amperes
    return np.array([size * math.cos(phase), size * math.sin(phase), size])


def test_gum_h2_means_and_their_correlations() -> None:
    means, covariance = un.means(H2)
    assert means == pytest.approx([4.9990, 19.6610e-3, 1.04446], rel=1e-5)
    assert np.sqrt(np.diag(covariance)) == pytest.approx([0.0032, 0.0095e-3, 0.00075], abs=5e-5, rel=0.01)
    r = un.correlations(covariance)
    assert [r[0, 1], r[0, 2], r[1, 2]] == pytest.approx([-0.36, 0.86, -0.65], abs=0.005)


def test_gum_h2_resistance_reactance_and_impedance() -> None:
    values, covariance = un.propagate(impedance, *un.means(H2))
    assert values == pytest.approx([127.732, 219.847, 254.260], abs=0.0006)
    assert np.sqrt(np.diag(covariance)) == pytest.approx([0.071, 0.295, 0.236], abs=0.0007)
    r = un.correlations(covariance)
    assert [r[0, 1], r[0, 2], r[1, 2]] == pytest.approx([-0.588, -0.485, 0.993], abs=0.0006)


def test_gum_h2_treated_as_independent_would_be_wrong() -> None:
    means, covariance = un.means(H2)
    _, independent = un.propagate(impedance, means, np.diag(np.diag(covariance)))
    assert math.sqrt(independent[0, 0]) > 2.0 * 0.071


def test_coverage_factors_of_the_gums_table_g2() -> None:
    # GUM table G.2 (from memory): p = 95 %.
    for dof, factor in ((1, 12.71), (4, 2.78), (10, 2.23), (50, 2.01), (math.inf, 1.960)):
        assert un.coverage_factor(dof) == pytest.approx(factor, abs=0.005)


def test_welch_satterthwaite_of_the_gums_example_h1() -> None:
    # GUM H.1.6, end gauge: contributions in nm with their degrees of freedom; effective 16.
    parts = np.array([25.0, 5.8, 3.9, 6.7, 2.9, 16.6])
    dofs = np.array([18.0, 24.0, 5.0, 8.0, 50.0, 2.0])
    assert un.welch_satterthwaite(parts, dofs) == pytest.approx(16.0, abs=1.0)


def test_a_contribution_with_infinite_freedom_does_not_limit_the_result() -> None:
    found = un.combine(10.0, "V", [(0.3, math.inf), (0.4, math.inf)])
    assert found.standard_uncertainty == pytest.approx(0.5)
    assert math.isinf(found.dof)


@pytest.mark.parametrize(
    ("measured", "text"),
    [
        (un.Measured(2.4123, "ohm", 0.0148, 42), "2.41 ohm +- 0.03 ohm (95 %, dof 42)"),
        (un.Measured(0.0012136, "H", 2.1e-5, 1000), "1.21 mH +- 0.04 mH (95 %)"),
        (un.Measured(6.0213e-6, "kg*m2", 0.0256e-6, 3000), "6.02e-6 kg*m2 +- 0.05e-6 kg*m2 (95 %)"),
        (un.Measured(-17.33, "V", 0.6), "-17.3 V +- 1.2 V (95 %)"),
        (un.Measured(12345.0, "rad/s", 300.0), "12300 rad/s +- 600 rad/s (95 %)"),
        (un.Measured(5.0, "s", 0.0), "5 s +- 0 s (95 %)"),
        (un.Measured(0.99996, "ohm", 0.0001), "0.99996 ohm +- 0.00020 ohm (95 %)"),
        (un.Measured(-0.0031e-3, "s", 0.6e-3), "0.0 ms +- 1.2 ms (95 %)"),
    ],
)
def test_a_result_reads_as_an_engineer_writes_it(measured: un.Measured, text: str) -> None:
    assert str(measured) == text


def test_a_result_as_json_is_plain_and_complete() -> None:
    told = json.loads(json.dumps(un.Measured(2.0, "ohm", 0.1).to_json(), allow_nan=False))
    assert told["dof"] is None
    assert told["low"] == pytest.approx(2.0 - 1.959964 * 0.1)
    assert told["unit"] == "ohm"


def test_an_uncertainty_below_zero_is_refused() -> None:
    with pytest.raises(UsageError, match=r"standard uncertainty of -1\.0"):
        un.Measured(1.0, "V", -1.0)
