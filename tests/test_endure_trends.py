"""Trend tests and control charts against published examples; false alarms and detection by simulation."""

from __future__ import annotations

import dataclasses
import itertools
import math

import numpy as np
import pytest

from ramprig.endure import charts, trends
from ramprig.endure.mannkendall import exact_tail, kendall_s, mann_kendall, sen_slope
from ramprig.endure.trends import FeatureTrend, Level, Sign, TrendSettings, TrendWatch
from ramprig.errors import UsageError
from ramprig.mock.plant import VENT_BENCH, Plant
from ramprig.sequence.wear_limits import Threshold, WearLimit

# EPA QA/G-9S, page 109.
EPA = (10, 10, 10, 5, 10, 20, 18, 17, 15, 24, 15)

# Annual flow of the Nile at Aswan, 1871 to 1970, 10^8 m^3 (Cobb 1978; in R and statsmodels as `nile`).
NILE = (
    1120, 1160, 963, 1210, 1160, 1160, 813, 1230, 1370, 1140, 995, 935, 1110, 994, 1020, 960, 1180, 799, 958, 1140,
    1100, 1210, 1150, 1250, 1260, 1220, 1030, 1100, 774, 840, 874, 694, 940, 833, 701, 916, 692, 1020, 1050, 969, 831,
    726, 456, 824, 702, 1120, 1100, 832, 764, 821, 768, 845, 864, 862, 698, 845, 744, 796, 1040, 759, 781, 865, 845,
    944, 984, 897, 822, 1010, 771, 676, 649, 846, 812, 742, 801, 1040, 860, 874, 848, 890, 744, 749, 838, 1050, 918,
    986, 797, 923, 975, 815, 1020, 906, 901, 1170, 912, 746, 919, 718, 714, 740,
)  # fmt: skip


def test_mann_kendall_of_epas_example_with_ties() -> None:
    found = mann_kendall(EPA)
    assert found.s == 22
    assert found.variance == pytest.approx(155.3333, abs=1e-4)
    assert found.z == pytest.approx(1.6849498, abs=1e-7)
    assert found.p_up == pytest.approx(0.0459991, abs=1e-7)
    assert found.p_two_sided == pytest.approx(0.0919983, abs=1e-7)
    assert not found.exact
    assert sen_slope(EPA) == pytest.approx((1.0, 10.0))


def test_mann_kendall_of_epas_small_sample() -> None:
    # EPA QA/G-9 (from memory): S = 6, p = 0.117.
    found = mann_kendall((5, 6, 11, 8, 10))
    assert found.s == 6
    assert found.exact
    assert found.p_up == pytest.approx(7.0 / 60.0)


def test_mann_kendall_of_the_nile() -> None:
    found = mann_kendall(NILE)
    assert len(NILE) == 100
    assert found.s == -1387
    assert found.variance == pytest.approx(112728.3333, abs=1e-4)
    assert found.z == pytest.approx(-4.1280665, abs=1e-7)
    assert found.p_two_sided == pytest.approx(3.658e-5, rel=1e-3)
    assert sen_slope(NILE)[0] == pytest.approx(-2.6)


@pytest.mark.parametrize(
    ("count", "tails"),
    [
        # Gilbert (1987), table A18: probabilities of S or more.
        (4, {0: 0.625, 2: 0.375, 4: 0.167, 6: 0.042}),
        (5, {0: 0.592, 2: 0.408, 4: 0.242, 6: 0.117, 8: 0.042, 10: 0.0083}),
        (6, {1: 0.500, 3: 0.360, 5: 0.235, 7: 0.136, 9: 0.068, 11: 0.028, 13: 0.0083, 15: 0.0014}),
        (7, {1: 0.500, 3: 0.386, 5: 0.281, 7: 0.191, 9: 0.119, 11: 0.068, 13: 0.035, 17: 0.0054, 19: 0.0014}),
        (8, {0: 0.548, 4: 0.360, 8: 0.199, 12: 0.089, 16: 0.031, 20: 0.0071, 24: 0.0009}),
    ],
)  # fmt: skip
def test_exact_tails_of_gilberts_table(count: int, tails: dict[int, float]) -> None:
    for s, probability in tails.items():
        assert exact_tail(count, s) == pytest.approx(probability, abs=5.1e-4 if probability > 0.01 else 5.1e-5)


def test_exact_tails_are_those_of_all_orders_counted_out() -> None:
    scores = [kendall_s(np.array(order, float)) for order in itertools.permutations(range(6))]
    for s in range(-15, 16, 2):
        assert exact_tail(6, s) == pytest.approx(sum(score >= s for score in scores) / 720.0)


def test_a_trend_needs_three_values_and_constant_ones_have_none() -> None:
    with pytest.raises(UsageError, match="at least 3"):
        mann_kendall((1.0, 2.0))
    assert mann_kendall((4.0, 4.0, 4.0, 4.0)).p_two_sided == 1.0


# NIST/SEMATECH e-Handbook 6.3.2.4.
EWMA_X = (
    52.0, 47.0, 53.0, 49.3, 50.1, 47.0, 51.0, 50.1, 51.2, 50.5, 49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4,
    53.6, 52.1,
)  # fmt: skip
EWMA_Z = (
    50.60, 49.52, 50.56, 50.18, 50.16, 49.21, 49.75, 49.85, 50.26, 50.33, 50.11, 49.36, 49.52, 50.05, 49.38, 49.92,
    50.73, 51.23, 51.94, 51.99,
)  # fmt: skip


def test_nists_ewma_example() -> None:
    chart = charts.Ewma(50.0, 0.3)
    assert [chart.add(x) for x in EWMA_X] == pytest.approx(EWMA_Z, abs=0.0051)
    low, high = chart.limits(2.0539, 3.0)
    assert (low, high) == pytest.approx((47.4115, 52.5884), abs=1e-4)
    assert all(low < z < high for z in EWMA_Z)


# NIST/SEMATECH e-Handbook 6.3.2.3.
CUSUM_X = (
    324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225, 324.600, 324.625, 325.150, 328.325,
    327.250, 327.825, 328.500, 326.675, 327.775, 326.875, 328.350,
)  # fmt: skip
CUSUM_HIGH = (0, 0, 0, 0, 0.0325, 0, 0, 0, 0, 0, 0, 0, 3.0075, 4.94, 7.4475, 10.63, 11.9875, 14.445, 16.0025, 19.035)
CUSUM_LOW = (0, 0.0075, 0, 0.3325, 0, 0, 0.5575, 0.715, 0.1725, 0.255, 0.3125, 0, 0)


def test_nists_cusum_example() -> None:
    chart = charts.Cusum(325.0, 0.3175, 4.1959)
    rows = [(chart.add(x), chart.high, chart.low) for x in CUSUM_X]
    assert [row[1] for row in rows] == pytest.approx(CUSUM_HIGH, abs=0.0051)
    assert [row[2] for row in rows[:13]] == pytest.approx(CUSUM_LOW, abs=0.0051)
    assert [place for place, row in enumerate(rows, 1) if row[0]] == list(range(14, 21))


@pytest.mark.parametrize(
    ("values", "mean", "sd", "lag"),
    [
        # NIST StRD univariate, NumAcc1 to 4; the rules by which the data are made are from memory.
        ((10000001.0, 10000003.0, 10000002.0), 10000002.0, 1.0, -0.5),
        ((1.2, *(1.1, 1.3) * 500), 1.2, 0.1, -0.999),
        ((1000000.2, *(1000000.1, 1000000.3) * 500), 1000000.2, 0.1, -0.999),
        ((10000000.2, *(10000000.1, 10000000.3) * 500), 10000000.2, 0.1, -0.999),
    ],
)
def test_streaming_mean_and_spread_keep_their_digits(
    values: tuple[float, ...], mean: float, sd: float, lag: float
) -> None:
    found = charts.Spread()
    for value in values:
        found.add(value)
    assert found.mean == pytest.approx(mean, rel=1e-14)
    assert found.sd == pytest.approx(sd, rel=1e-8)
    assert found.autocorrelation == pytest.approx(lag, abs=1e-6)


def test_k_of_n_forgets_what_is_older() -> None:
    votes = charts.KOfN(2, 3)
    answers = [votes.add(yes, at) for at, yes in enumerate((True, False, False, True, True, False, False))]
    assert answers == [False, False, False, False, True, True, False]
    assert votes.where == (4,)


def test_blocks_stay_few_and_keep_the_slope() -> None:
    blocks = charts.Blocks(most=16, size=1)
    for cycle in range(10_000):
        blocks.add(cycle, 3.0 + 0.01 * cycle)
    assert 8 <= len(blocks.means) < 16
    assert blocks.size == 1024
    slope, _ = sen_slope(blocks.means, blocks.centres)
    assert slope == pytest.approx(0.01)


# ---- the decision ----------------------------------------------------------------------------------------------------


def healthy(seed: int, *, cycles: int, features: int, hang: float = 0.0) -> list[list[float]]:
    """Features about 1 with noise of 0.2 to 8 %, each value hanging on the last one by `hang` (AR(1))."""
    source = np.random.default_rng(seed)
    sds = source.uniform(0.002, 0.08, features)
    noise = source.normal(size=(cycles, features))
    for k in range(1, cycles):
        noise[k] = hang * noise[k - 1] + math.sqrt(1.0 - hang * hang) * noise[k]
    rows: list[list[float]] = (1.0 + noise * sds).tolist()
    return rows


def alarms(rows: list[list[float]]) -> list[trends.Finding]:
    watch = TrendWatch()
    names = [f"feature {index}" for index in range(len(rows[0]))]
    found = []
    for cycle, row in enumerate(rows):
        found += watch.add(cycle, dict(zip(names, row, strict=True)))
    return found


@pytest.mark.parametrize("seed", [1, 2])
def test_no_false_alarm_in_10000_healthy_cycles_of_10_features(seed: int) -> None:
    assert alarms(healthy(seed, cycles=10_000, features=10)) == []


@pytest.mark.parametrize(("sds", "found"), [(1.15, False), (1.3, True)])
def test_a_slow_change_must_stand_out_from_what_the_baseline_itself_leaves_open(sds: float, found: bool) -> None:
    # Width 6.5, share 0.05, baseline 100: 6.5 sqrt(0.05 / 1.95 + 1 / 100) = 1.23; without the baseline's share 1.04.
    trend = FeatureTrend("speed", TrendSettings(run_in=0))
    for cycle in range(100):
        assert trend.add(cycle, 102.0 if cycle % 2 else 98.0) == []
    value = trend.baseline.mean + sds * trend.baseline.sd
    signs = [finding.sign for cycle in range(100, 160) for finding in trend.add(cycle, value)]
    assert (Sign.SLOW in signs) is found


@pytest.mark.soak
@pytest.mark.parametrize("hang", [0.0, 0.5])
def test_false_alarms_over_100_nights_are_as_few_as_stated(hang: float) -> None:
    wrong = [seed for seed in range(100) if alarms(healthy(seed, cycles=10_000, features=10, hang=hang))]
    print(f"hanging together by {hang}: false alarms in {len(wrong)} of 100 runs, seeds {wrong}")
    assert len(wrong) <= 1


def ageing(seed: int, *, per_1000: float, cycles: int = 4000, noise: float = 0.02) -> list[float]:
    """A feature that grows by `per_1000` of itself in 1000 cycles from cycle 500 on, with noise."""
    source = np.random.default_rng(seed)
    at = np.arange(cycles)
    true = 1.0 + per_1000 * np.maximum(at - 500, 0) / 1000.0
    values: list[float] = (true * (1.0 + noise * source.normal(size=cycles))).tolist()
    return values


def first_cycle(values: list[float], settings: TrendSettings | None = None) -> dict[Level, int]:
    trend = FeatureTrend("steady current", settings or TrendSettings())
    found: dict[Level, int] = {}
    for cycle, value in enumerate(values):
        for finding in trend.add(cycle, value):
            found.setdefault(finding.level, cycle)
    return found


@pytest.mark.parametrize("seed", range(5))
def test_an_ageing_motors_current_is_found_within_400_cycles_of_its_beginning(seed: int) -> None:
    # Friction grows so that the current rises by 10 % in 1000 cycles, under noise of 2 %: at 400 cycles it is 4 %.
    found = first_cycle(ageing(seed, per_1000=0.10), TrendSettings(fail_change=0.25))
    assert 500 < found[Level.WATCH] <= 900
    # The limit of 25 % is crossed at cycle 3000; noise of 2 % spreads that by some hundred cycles.
    assert 2600 <= found[Level.FAIL] <= 3200


@pytest.mark.parametrize("step", [0.08, -0.08])
def test_a_sudden_change_of_four_sigma_is_found_within_10_cycles(step: float) -> None:
    source = np.random.default_rng(5)
    values = 1.0 + 0.02 * source.normal(size=1000)
    values[600:] += step
    trend = FeatureTrend("speed")
    found = [finding for cycle, value in enumerate(values.tolist()) for finding in trend.add(cycle, value)]
    assert found[0].sign in (Sign.SUDDEN, Sign.SLOW)
    assert 600 <= found[0].cycle <= 610
    assert math.copysign(1.0, found[-1].change) == math.copysign(1.0, step)


@pytest.mark.parametrize("step", [0.5, -0.3])
@pytest.mark.parametrize("noise", [0.002, 0.02])
def test_a_large_step_is_told_as_large_as_it_is_by_whatever_finds_it(step: float, noise: float) -> None:
    values = 1.0 + noise * np.random.default_rng(5).normal(size=1000)
    values[600:] += step
    trend = FeatureTrend("vent: energy")
    found = [finding for cycle, value in enumerate(values.tolist()) for finding in trend.add(cycle, value)]
    assert {finding.sign for finding in found} == set(Sign)
    for finding in found:
        assert finding.change == pytest.approx(step, abs=0.03), str(finding)
        assert (finding.per_1000 is not None) == (finding.sign is Sign.DRIFT)
    assert trend.change_of(trend.now) == pytest.approx(step, abs=0.03)
    sudden = next(finding for finding in found if finding.sign is Sign.SUDDEN)
    assert " over the last 5 cycles against " in str(sudden)


def test_a_feature_about_zero_has_no_share_of_itself() -> None:
    watch = Threshold(text="at most 1 deg", high=1 / 360.0, is_share=False)
    limit = WearLimit(feature="vent: position error", watch=watch, fail=None, k=1, n=1, place="f.yaml:1:1")
    trend = FeatureTrend("vent: position error", TrendSettings(run_in=0, baseline=10), limit)
    for cycle in range(10):
        trend.add(cycle, 1e-7 * cycle)
    (found,) = trend.add(10, 0.01)
    assert math.isnan(found.change)
    assert "%" not in str(found)
    assert "at first; beyond 'at most 1 deg'" in str(found)


def test_one_wild_value_is_no_finding() -> None:
    values = ageing(1, per_1000=0.0, cycles=800)
    values[400] = 50.0
    assert first_cycle(values) == {}


def test_a_slow_drift_is_told_with_its_slope() -> None:
    trend = FeatureTrend("coast-down time")
    findings = [f for cycle, value in enumerate(ageing(3, per_1000=0.05)) for f in trend.add(cycle, value)]
    drift = next(finding for finding in findings if finding.sign is Sign.DRIFT)
    assert drift.per_1000 is not None
    assert drift.per_1000 > 0.0
    assert trend.slope_per_1000() == pytest.approx(0.05, rel=0.15)
    assert str(drift).startswith(f"coast-down time: drift at cycle {drift.cycle}")
    assert len([finding for finding in findings if finding.sign is Sign.DRIFT]) == 1
    assert "+120 % in 1000 cycles)" in str(dataclasses.replace(drift, per_1000=1.2))
    assert "-250 % in 1000 cycles)" in str(dataclasses.replace(drift, per_1000=-2.5))


def test_a_feature_that_hardly_varies_is_not_called_changed_for_a_trifle() -> None:
    values = [5.0 + 1e-9 * (cycle % 7) for cycle in range(300)] + [5.0 + 1e-6] * 300
    assert first_cycle(values) == {}


def test_without_detectors_the_present_value_is_the_last_one() -> None:
    settings = TrendSettings(run_in=0, baseline=10, detectors=False)
    trend = FeatureTrend("x", settings)
    for cycle in range(10):
        trend.add(cycle, 2.0)
    trend.add(10, 3.0)
    assert trend.now == 3.0


def test_values_that_are_missing_are_counted_and_do_no_harm() -> None:
    trend = FeatureTrend("energy")
    for cycle, value in enumerate(ageing(2, per_1000=0.0, cycles=600)):
        assert trend.add(cycle, math.nan if cycle % 10 == 0 else value) == []
    assert trend.missing == 60
    assert trend.established


def test_memory_does_not_grow_with_the_test() -> None:
    trend = FeatureTrend("peak current")
    for cycle in range(20_000):
        trend.add(cycle, 1.0 + 0.01 * math.sin(cycle * 1.7))
    assert len(trend._blocks.means) < trend._blocks.most
    assert len(trend._watch._last) <= trend.settings.n


def test_settings_that_cannot_be_are_refused() -> None:
    with pytest.raises(UsageError, match="baseline of 3 cycles"):
        TrendSettings(baseline=3)
    with pytest.raises(UsageError, match="not above the second"):
        TrendSettings(watch_change=0.5, fail_change=0.2)


def test_the_mocks_ageing_motor_is_found_within_150_cycles_of_its_beginning() -> None:
    # The vent drive of the examples runs 200 ms a cycle; from cycle 900 on its friction grows by 0.05 % a cycle. It is
    # warm by then: with a shorter run-in it is the warming that is found, rightly.
    plant = Plant(VENT_BENCH, seed=11)
    axis = plant.axes[0]
    axis.brake = True
    fresh_nm = axis.coulomb_nm
    watch = TrendWatch(TrendSettings(run_in=700))
    found = []
    for cycle in range(1050):
        axis.coulomb_nm = fresh_nm * (1.0 + 0.0005 * max(0, cycle - 900))
        axis.duty = 5000
        for _ in range(160):
            plant.step()
        begin, readings = plant.read_counts(0), []
        for _ in range(40):
            plant.step()
            readings.append(plant.read_current_ma(0))
        counts = plant.read_counts(0) - begin
        axis.duty = 0
        for _ in range(100):
            plant.step()
        found += watch.add(cycle, {"steady current": float(np.mean(readings)), "steady speed": counts / 0.040})
    assert found[0].feature == "steady current"
    assert 900 < found[0].cycle <= 1050
    assert found[0].change > 0.0
