"""Decides, cycle by cycle and in constant memory, whether a feature of an endurance test changes: watch, or fail.

The first cycles after run-in give the baseline. Then five looks at each value, all against that baseline and all
allowing for its own uncertainty: the change itself against two limits, k of n; a CUSUM for sudden changes; an EWMA
for slow ones; and Mann-Kendall with Sen's slope on block means for drifts over the whole test.

The default figures are choices of this program, found by simulation; they are no standard and no maker's limit.
False alarms, by `python -m pytest -m soak tests/test_endure_trends.py -s`: see `FALSE_ALARMS`. Detection, in the same
file: a feature that grows by 10 % in 1000 cycles under noise of 2 % is found within 400 cycles, a step of four
standard deviations within 10, the mock's vent drive with friction growing by 0.05 % a cycle within 150.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import IntEnum, StrEnum

from ramprig.errors import UsageError

from .charts import Blocks, Cusum, Ewma, KOfN, Spread
from .mannkendall import mann_kendall, sen_slope

FALSE_ALARMS = (
    "At the default figures, 100 simulated tests of 10,000 healthy cycles with 10 features each, noise of 0.2 to 8 %: "
    "with independent values a false alarm in 0 of 100 tests, with values that hang together by 0.5 from cycle to "
    "cycle in 1 of 100."
)
"""What the simulation named above last found (its seeds are 0 to 99); 0 of 100 bounds the odds at 3 %, with 95 %."""


class Level(IntEnum):
    """How bad it is: `WATCH` is a note and denser checks, `FAIL` ends the test."""

    OK = 0
    WATCH = 1
    FAIL = 2


class Sign(StrEnum):
    """Which look found it."""

    LIMIT = "limit"
    SUDDEN = "sudden change"
    SLOW = "slow change"
    DRIFT = "drift"


@dataclass(frozen=True, slots=True, kw_only=True)
class TrendSettings:
    """Figures of the decision; see the module's first lines for what the defaults are worth.

    `run_in` cycles are not looked at, `baseline` ones give mean and spread. A change counts towards `watch_change` or
    `fail_change` (shares of the baseline) only beyond `least_sds` standard deviations, too, in `k` of `n` cycles.
    CUSUM figures are in standard deviations, `ewma_width` in those of the weighted mean. A drift needs a Mann-Kendall
    Z of `drift_z` and a change over the test of `least_change`. Values further than `clip_sds` off count as that far,
    so that one outlier is no finding. `floor` is the least standard deviation, as a share of the baseline: it keeps a
    quiet feature's trifles from being findings. `run_in` must outlast the winding's warming (three of its thermal time
    constants), or that is what will be found.
    """

    run_in: int = 20
    baseline: int = 100
    watch_change: float = 0.10
    fail_change: float = 0.25
    least_sds: float = 5.0
    k: int = 3
    n: int = 5
    cusum_slack: float = 1.0
    cusum_limit: float = 14.0
    ewma_share: float = 0.05
    ewma_width: float = 6.5
    drift_z: float = 6.0
    drift_blocks: int = 16
    least_change: float = 0.02
    clip_sds: float = 4.0
    floor: float = 0.015

    def __post_init__(self) -> None:
        if self.baseline < 10 or self.run_in < 0:
            raise UsageError(f"a baseline of {self.baseline} cycles after {self.run_in}; it needs at least 10 after 0")
        if not 0.0 < self.watch_change <= self.fail_change:
            raise UsageError(
                f"limits of {self.watch_change:g} (watch) and {self.fail_change:g} (fail); the first must be above 0 "
                "and not above the second"
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """A change found at `cycle`: `change` is the present mean's share off the baseline, `per_1000` Sen's slope.

    `per_1000` is the change in 1000 cycles as a share of the baseline; None until there are blocks enough.
    """

    feature: str
    cycle: int
    level: Level
    sign: Sign
    baseline: float
    now: float
    change: float
    per_1000: float | None

    def __str__(self) -> str:
        slope = "" if self.per_1000 is None else f", {100.0 * self.per_1000:+.2g} % in 1000 cycles"
        return (
            f"{self.feature}: {self.sign} at cycle {self.cycle}, {self.now:.4g} against {self.baseline:.4g} at first "
            f"({100.0 * self.change:+.1f} %{slope})"
        )


class FeatureTrend:
    """One feature's stream. `level` is the worst found so far; each sign and level is reported once."""

    def __init__(self, feature: str, settings: TrendSettings | None = None) -> None:
        self.feature = feature
        self.settings = settings or TrendSettings()
        self.level = Level.OK
        self.baseline = Spread()
        self.missing = 0
        self._told: set[tuple[Sign, Level]] = set()
        self._seen = 0
        self._sd = 0.0
        self._correlated = 1.0
        self._watch = KOfN(self.settings.k, self.settings.n)
        self._fail = KOfN(self.settings.k, self.settings.n)
        self._cusum = Cusum(0.0, self.settings.cusum_slack, self.settings.cusum_limit)
        self._ewma = Ewma(0.0, self.settings.ewma_share)
        self._blocks = Blocks()
        self._slope: float | None = None

    @property
    def established(self) -> bool:
        """Whether the baseline is complete."""
        return self.baseline.count >= self.settings.baseline

    @property
    def mean_now(self) -> float:
        """The weighted mean of the last cycles; the baseline's mean before it is complete."""
        return self.baseline.mean + self._ewma.value * self._sd

    def add(self, cycle: int, value: float) -> list[Finding]:
        """Take the value of one cycle and return what it newly shows. A value that is not finite counts as missing."""
        if not math.isfinite(value):
            self.missing += 1
            return []
        self._seen += 1
        if self._seen <= self.settings.run_in:
            return []
        finished = self._blocks.add(cycle, value)
        if not self.established:
            self.baseline.add(value)
            if self.baseline.count == self.settings.baseline:
                self._settle()
            return []
        found = self._limits(value) + self._charts(value)
        if finished:
            found += self._drift()
        return [self._finding(cycle, sign, level, value) for sign, level in found if self._new(sign, level)]

    def _settle(self) -> None:
        """Fix the spread that later values are measured by, wider where the baseline's values hang together."""
        settings, baseline = self.settings, self.baseline
        together = min(max(baseline.autocorrelation, 0.0), 0.9)
        self._correlated = math.sqrt((1.0 + together) / (1.0 - together))
        self._sd = max(baseline.sd, settings.floor * abs(baseline.mean), 1e-300)

    def _limits(self, value: float) -> list[tuple[Sign, Level]]:
        settings = self.settings
        away, scale = abs(value - self.baseline.mean), abs(self.baseline.mean)
        least = settings.least_sds * self._sd
        found = []
        if self._watch.add(away > max(settings.watch_change * scale, least)):
            found.append((Sign.LIMIT, Level.WATCH))
        if self._fail.add(away > max(settings.fail_change * scale, least)):
            found.append((Sign.LIMIT, Level.FAIL))
        return found

    def _charts(self, value: float) -> list[tuple[Sign, Level]]:
        settings = self.settings
        z = (value - self.baseline.mean) / self._sd
        z = min(max(z, -settings.clip_sds), settings.clip_sds)
        found = []
        if self._cusum.add(z / self._correlated):
            found.append((Sign.SUDDEN, Level.WATCH))
        weighted = settings.ewma_share / (2.0 - settings.ewma_share)
        spread = self._correlated * math.sqrt(weighted + 1.0 / settings.baseline)
        if abs(self._ewma.add(z)) > settings.ewma_width * spread:
            found.append((Sign.SLOW, Level.WATCH))
        return found

    def _drift(self) -> list[tuple[Sign, Level]]:
        settings, blocks = self.settings, self._blocks
        if len(blocks.means) < settings.drift_blocks:
            return []
        trend = mann_kendall(blocks.means)
        # Blocks hang together less than the cycles in them, but not never: the baseline's factor stays in.
        if abs(trend.z) / self._correlated <= settings.drift_z:
            return []
        self._slope, _ = sen_slope(blocks.means, blocks.centres)
        whole = abs(self._slope) * (blocks.centres[-1] - blocks.centres[0])
        large = whole > settings.least_change * abs(self.baseline.mean)
        return [(Sign.DRIFT, Level.WATCH)] if large else []

    def slope_per_1000(self) -> float | None:
        """Sen's slope now, as the share of the baseline that changes in 1000 cycles; None with too few blocks."""
        if len(self._blocks.means) < self.settings.drift_blocks or not self.baseline.mean:
            return None
        slope, _ = sen_slope(self._blocks.means, self._blocks.centres)
        return 1000.0 * slope / abs(self.baseline.mean)

    def _new(self, sign: Sign, level: Level) -> bool:
        if (sign, level) in self._told:
            return False
        self._told.add((sign, level))
        self.level = max(self.level, level)
        return True

    def _finding(self, cycle: int, sign: Sign, level: Level, value: float) -> Finding:
        mean = self.baseline.mean
        now = value if sign is Sign.LIMIT else self.mean_now
        return Finding(
            feature=self.feature,
            cycle=cycle,
            level=level,
            sign=sign,
            baseline=mean,
            now=now,
            change=(now - mean) / abs(mean) if mean else math.inf,
            per_1000=self.slope_per_1000(),
        )


class TrendWatch:
    """All features of a test; features may be missing in some cycles."""

    def __init__(self, settings: TrendSettings | None = None) -> None:
        self.settings = settings or TrendSettings()
        self.features: dict[str, FeatureTrend] = {}

    def add(self, cycle: int, values: dict[str, float]) -> list[Finding]:
        """Take the features of one cycle and return what they newly show, in the features' order."""
        found = []
        for name, value in values.items():
            trend = self.features.get(name)
            if trend is None:
                trend = self.features[name] = FeatureTrend(name, self.settings)
            found += trend.add(cycle, value)
        return found

    @property
    def level(self) -> Level:
        """The worst of all features."""
        return max((trend.level for trend in self.features.values()), default=Level.OK)
