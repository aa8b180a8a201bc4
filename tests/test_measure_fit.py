"""Least squares against NIST's certified digits, and the warnings where the data do not determine a parameter."""

from __future__ import annotations

import numpy as np
import pytest

from ramprig.errors import PackageMissing, UsageError
from ramprig.extras import need
from ramprig.measure.numbers import fit

# NIST StRD nonlinear, Misra1a (NIST/ITL, Misra, D. 1978) and BoxBOD (Box, Hunter and Hunter 1978).
MISRA_X = (77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8, 593.1, 689.1, 760.0)
MISRA_Y = (10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01, 66.40, 75.47, 81.78)
BOX_X = (1, 2, 3, 5, 7, 10)
BOX_Y = (109, 149, 149, 191, 213, 224)

# NIST StRD linear regression, Norris (Norris, J., calibration of ozone monitors): y, x.
NORRIS = (
    (0.1, 0.2), (338.8, 337.4), (118.1, 118.2), (888.0, 884.6), (9.2, 10.1), (228.1, 226.5), (668.5, 666.3),
    (998.5, 996.3), (449.1, 448.6), (778.9, 777.0), (559.2, 558.2), (0.3, 0.4), (0.1, 0.6), (778.1, 775.5),
    (668.8, 666.9), (339.3, 338.0), (448.9, 447.5), (10.8, 11.6), (557.7, 556.0), (228.3, 228.1), (998.0, 995.8),
    (888.8, 887.6), (119.6, 120.2), (0.3, 0.3), (0.6, 0.3), (557.6, 556.8), (339.3, 339.1), (888.0, 887.2),
    (998.5, 999.0), (778.9, 779.0), (10.2, 11.1), (117.6, 118.3), (228.9, 229.2), (668.4, 669.1), (449.2, 448.9),
    (0.2, 0.5),
)  # fmt: skip

# NIST StRD linear regression, Longley (J. Am. Statist. Assoc. 62 (1967) 819): y, then six predictors.
LONGLEY = (
    (60323, 83.0, 234289, 2356, 1590, 107608, 1947), (61122, 88.5, 259426, 2325, 1456, 108632, 1948),
    (60171, 88.2, 258054, 3682, 1616, 109773, 1949), (61187, 89.5, 284599, 3351, 1650, 110929, 1950),
    (63221, 96.2, 328975, 2099, 3099, 112075, 1951), (63639, 98.1, 346999, 1932, 3594, 113270, 1952),
    (64989, 99.0, 365385, 1870, 3547, 115094, 1953), (63761, 100.0, 363112, 3578, 3350, 116219, 1954),
    (66019, 101.2, 397469, 2904, 3048, 117388, 1955), (67857, 104.6, 419180, 2822, 2857, 118734, 1956),
    (68169, 108.4, 442769, 2936, 2798, 120445, 1957), (66513, 110.8, 444546, 4681, 2637, 121950, 1958),
    (68655, 112.6, 482704, 3813, 2552, 123366, 1959), (69564, 114.2, 502601, 3931, 2514, 125368, 1960),
    (69331, 115.7, 518173, 4806, 2572, 127852, 1961), (70551, 116.9, 554894, 4007, 2827, 130081, 1962),
)  # fmt: skip


def check_misra(found: fit.Fit) -> None:
    assert found.values == pytest.approx([2.3894212918e2, 5.5015643181e-4], rel=1e-9)
    assert found.standard_uncertainties == pytest.approx([2.7070075241, 7.2668688436e-6], rel=1e-6)
    assert found.residual_sum == pytest.approx(1.2455138894e-1, rel=1e-9)
    assert found.dof == 12


def check_box(found: fit.Fit) -> None:
    assert found.values == pytest.approx([2.1380940889e2, 5.4723748542e-1], rel=1e-8)
    assert found.standard_uncertainties == pytest.approx([1.2354515176e1, 1.0455993237e-1], rel=1e-6)
    assert found.residual_sum == pytest.approx(1.1680088766e3, rel=1e-9)


@pytest.mark.parametrize("start", [(500.0, 1e-4), (250.0, 5e-4)])
def test_misra1a_comes_out_with_the_certified_digits_from_both_of_nists_starts(start: tuple[float, float]) -> None:
    time = np.array(MISRA_X)
    check_misra(fit.fit_curve(lambda b: fit.first_order(b, time), MISRA_Y, start, names=("end", "rate")))


def test_misra1a_started_from_the_data() -> None:
    check_misra(fit.fit_first_order(MISRA_X, MISRA_Y))


def test_boxbod_started_from_the_data_needs_no_start_value_at_all() -> None:
    check_box(fit.fit_first_order(BOX_X, BOX_Y))


@pytest.mark.parametrize("start", [(1.0, 1.0), (100.0, 0.75)])
def test_boxbod_from_nists_starts_where_the_rate_is_first_taken_from_the_data(start: tuple[float, float]) -> None:
    # From (1, 1) plain Levenberg-Marquardt is known to fail; whatever is given, the rate that the data suggest is used.
    time = np.array(BOX_X, float)
    rate = fit.start_rate(BOX_X, BOX_Y, from_zero=True)
    found = fit.fit_curve(lambda b: fit.first_order(b, time), BOX_Y, (start[0], rate), names=("end", "rate"))
    check_box(found)


def test_norris() -> None:
    y, x = np.array(NORRIS).T
    found = fit.fit_linear(np.stack([np.ones_like(x), x], axis=1), y, names=("intercept", "slope"))
    assert found.values == pytest.approx([-0.262323073774029, 1.00211681802045], rel=1e-11)
    assert found.standard_uncertainties == pytest.approx([0.232818234301152, 0.429796848199937e-3], rel=1e-11)
    assert found.residual_sd == pytest.approx(0.884796396144373, rel=1e-11)


def test_longley_keeps_its_digits_although_its_columns_are_nearly_dependent() -> None:
    table = np.array(LONGLEY)
    design = np.column_stack([table[:, 1:], np.ones(len(table))])
    names = ("deflator", "gnp", "unemployed", "armed", "population", "year", "constant")
    found = fit.fit_linear(design, table[:, 0], names=names)
    certified = [
        *(15.0618722713733, -0.0358191792925910, -2.02022980381683, -1.03322686717359),
        *(-0.0511041056535807, 1829.15146461355, -3482258.63459582),
    ]
    assert found.values == pytest.approx(certified, rel=1e-9)
    assert found.residual_sd**2 == pytest.approx(92936.0061673238, rel=1e-9)
    # Certified standard deviation of the constant, NIST StRD.
    assert found.standard_uncertainties[-1] == pytest.approx(890420.383607373, rel=1e-9)


def test_weights_count_a_point_of_half_the_sigma_four_times() -> None:
    x = np.array([0.0, 1.0, 2.0, 3.0])
    y = np.array([0.0, 1.2, 1.9, 3.3])
    once = fit.fit_linear(np.stack([x, np.ones(4)], 1), y, names=("a", "b"), sigma=[1.0, 1.0, 1.0, 0.5])
    rows = [0, 1, 2, 3, 3, 3, 3]
    many = fit.fit_linear(np.stack([x[rows], np.ones(7)], 1), y[rows], names=("a", "b"))
    assert once.values == pytest.approx(many.values, rel=1e-12)
    assert once.residual_sum == pytest.approx(many.residual_sum, rel=1e-12)


def test_the_general_first_order_shape_is_found_from_the_data() -> None:
    time = np.linspace(0.3, 2.0, 60)
    true = fit.approach(np.array([5.0, 1.0, 4.0], complex), time).real
    found = fit.fit_approach(time, true)
    assert found.values == pytest.approx([5.0, 1.0, 4.0], rel=1e-9)


def test_parameters_that_act_alike_are_named() -> None:
    x = np.linspace(1.0, 2.0, 20)
    noise = np.sin(37.0 * np.arange(20))
    found = fit.fit_linear(
        np.stack([x, 2.0 * x + 1e-9 * x**2, np.ones(20)], 1), 3.0 * x + 1.0 + 0.01 * noise, names=("left", "right", "c")
    )
    assert any("left and right cannot be told apart" in sentence for sentence in found.warnings)


def test_a_parameter_without_effect_is_named() -> None:
    x = np.linspace(1.0, 2.0, 20)
    found = fit.fit_linear(np.stack([x, np.zeros(20)], 1), 3.0 * x + 0.01 * np.cos(50.0 * x), names=("slope", "idle"))
    assert "idle has no effect on what was measured" in found.warnings


def test_a_run_up_cut_off_too_early_says_that_its_rate_is_not_determined() -> None:
    time = np.linspace(0.0, 0.02, 30)
    noise = 0.02 * np.sin(1234.0 * np.arange(30))
    found = fit.fit_first_order(time, 5.0 * -np.expm1(-time) + noise)
    assert any("not determined" in sentence for sentence in found.warnings)


def test_too_few_points_are_refused() -> None:
    with pytest.raises(UsageError, match="1 points for 2 parameters"):
        fit.fit_linear([[1.0, 2.0]], [1.0], names=("a", "b"))


def test_a_missing_package_is_named_with_what_it_is_for() -> None:
    with pytest.raises(PackageMissing, match=r"a curve fit needs the Python package no_such_package") as caught:
        need("no_such_package.part", purpose="a curve fit")
    assert caught.value.package == "no_such_package"
    assert caught.value.exit_code == 2
