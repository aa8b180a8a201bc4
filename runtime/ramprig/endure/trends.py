"""Decides, cycle by cycle and in constant memory, whether a feature of an endurance test changes: watch, or fail.

The first cycles after run-in give the baseline. Then five looks at each value, all against that baseline: the change
itself against the feature's limits (`sequence.wear_limits`), k of n; and, allowing for the baseline's own uncertainty,
a CUSUM for sudden changes; an EWMA for slow ones; and Mann-Kendall with Sen's slope on block means for drifts over the
whole test. Only a limit that somebody has set is a failure; what the others find is to be watched.

The default figures are choices of this program, found by simulation; they are no standard and no maker's limit.
False alarms, by `python -m pytest -m soak tests/test_endure_trends.py -s`: see `FALSE_ALARMS`. Detection, in the same
file: a feature that grows by 10 % in 1000 cycles under noise of 2 % is found within 400 cycles, a step of four
standard deviations within 10, the mock's vent drive with friction growing by 0.05 % a cycle within 150.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from enum import IntEnum, StrEnum
from statistics import median

from ramprig.errors import UsageError
from ramprig.quantity import digits
from ramprig.sequence.wear_limits import (
    BASELINE_LEAST,
    CHECKS_BASELINE_LEAST,
    Threshold,
    WearLimit,
    WearRules,
)
from ramprig.sequence.wear_words import FEATURE_WORDS, show_feature, word_of

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


NOW_OVER = {Sign.SUDDEN: 5, Sign.SLOW: 9, Sign.DRIFT: 25}
"""Of so many last values the median is told as the present value, by what found the change.

The charts look at values that are clipped, so what they hold is no measure of a large change. A step is found after
some five values (the CUSUM) or eight (the EWMA) at the default figures, so that most of these lie behind it; a drift is
found where noise is large beside it, and has more. One wild value among them moves a median little.
"""


@dataclass(frozen=True, slots=True, kw_only=True)
class TrendSettings:
    """Figures of the decision; see the module's first lines for what the defaults are worth.

    `run_in` cycles are not looked at, `baseline` ones give mean and spread. A feature without a limit of its own has
    `watch_change` and, where there is one, `fail_change` (shares of the baseline, either way) in `k` of `n` cycles;
    beyond such a limit of nobody's a value counts only where it is off by `least_sds` standard deviations, too. Without
    `detectors` limits are all that is looked at.

    CUSUM figures are in standard deviations, `ewma_width` in those of the weighted mean. A drift needs a Mann-Kendall
    Z of `drift_z` and a change over the test of `least_change`. Values further than `clip_sds` off count as that far,
    so that one outlier is no finding. `floor` is the least standard deviation, as a share of the baseline: it keeps a
    quiet feature's trifles from being findings. The run-in must outlast the winding's warming, or that is what will be
    found.
    """

    run_in: int = 20
    baseline: int = 100
    watch_change: float = 0.10
    fail_change: float | None = None
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
    detectors: bool = True

    def __post_init__(self) -> None:
        least = BASELINE_LEAST if self.detectors else CHECKS_BASELINE_LEAST
        if self.baseline < least or self.run_in < 0:
            found = f"a baseline of {self.baseline} cycles after {self.run_in}"
            raise UsageError(f"{found}; it needs at least {least} after 0")
        fail_change = math.inf if self.fail_change is None else self.fail_change
        if not 0.0 < self.watch_change <= fail_change:
            raise UsageError(
                f"limits of {self.watch_change:g} (watch) and {fail_change:g} (fail); the first must be above 0 "
                "and not above the second"
            )

    def limit_of(self, feature: str) -> WearLimit:
        """The limits of a feature that has none of its own."""
        watch, fail = (
            None if change is None else Threshold(text=f"+- {100.0 * change:g} %", low=-change, high=change)
            for change in (self.watch_change, self.fail_change)
        )
        return WearLimit(feature=feature, watch=watch, fail=fail, k=self.k, n=self.n)


@dataclass(frozen=True, slots=True, kw_only=True)
class Finding:
    """A change found at `cycle`: `now` is the median of the last `over` values, `change` its share off the baseline.

    `per_1000` is Sen's slope, the change in 1000 cycles as a share of the baseline; None until a drift was found, as a
    slope says nothing of a step.
    Where a limit found it, `now` is the last value, `limit` what it is beyond in `k` of the last `n` cycles, and
    `cycles` are those. With the `turn` check all of these are checks. `baseline` is NaN where a limit in the feature's
    unit found it before there was one, and `change` there and where the feature lies about zero.
    """

    feature: str
    cycle: int
    level: Level
    sign: Sign
    baseline: float
    now: float
    change: float
    per_1000: float | None
    limit: str = ""
    k: int = 0
    n: int = 0
    cycles: tuple[int, ...] = ()
    turn: str = "cycle"
    over: int = 1

    def __str__(self) -> str:
        """What was found, in one sentence."""
        value = show_feature(self.feature, self.now)
        text = f"{self.feature}: {self.level.name.lower()} limit" if self.limit else f"{self.feature}: {self.sign}"
        text += f" at {self.turn} {self.cycle}, {value}"
        text += f" over the last {self.over} {self.turn}s" if self.over > 1 else ""
        if not math.isnan(self.baseline):
            text += f" against {show_feature(self.feature, self.baseline)} at first"
        if not math.isnan(self.change):
            per_1000 = self.per_1000
            rising = "+" if per_1000 is not None and per_1000 > 0.0 else ""
            slope = "" if per_1000 is None else f", {rising}{digits(100.0 * per_1000, 2)} % in 1000 {self.turn}s"
            text += f" ({100.0 * self.change:+.1f} %{slope})"
        if self.limit:
            listed = ", ".join(map(str, self.cycles))
            text += f"; beyond {self.limit} in {len(self.cycles)} of the last {self.n} {self.turn}s: {listed}"
        return text


@dataclass(slots=True)
class FeatureTrend:
    """One feature's stream. `level` is the worst found so far; each sign and level is reported once.

    Two of them are equal where they will judge alike whatever comes.
    """

    feature: str
    settings: TrendSettings = field(default_factory=TrendSettings)
    limit: WearLimit | None = None
    turn: str = "cycle"
    level: Level = Level.OK
    baseline: Spread = field(default_factory=Spread)
    missing: int = 0
    _told: set[tuple[Sign, Level]] = field(default_factory=set)
    _seen: int = 0
    _sd: float = 0.0
    _correlated: float = 1.0
    _limit: WearLimit = field(init=False)
    _about_zero: bool = field(init=False)
    _detects: bool = field(init=False)
    _watch: KOfN = field(init=False)
    _fail: KOfN = field(init=False)
    _cusum: Cusum = field(init=False)
    _ewma: Ewma = field(init=False)
    _blocks: Blocks = field(default_factory=Blocks)
    _slope: float | None = None
    _last: deque[float] = field(default_factory=lambda: deque(maxlen=max(NOW_OVER.values())))

    def __post_init__(self) -> None:
        settings = self.settings
        self._limit = self.limit or settings.limit_of(self.feature)
        word = FEATURE_WORDS.get(word_of(self.feature))
        self._about_zero = word is not None and word.about_zero
        self._detects = settings.detectors and not self._about_zero
        self._watch = KOfN(self._limit.k, self._limit.n)
        self._fail = KOfN(self._limit.k, self._limit.n)
        self._cusum = Cusum(0.0, settings.cusum_slack, settings.cusum_limit)
        self._ewma = Ewma(0.0, settings.ewma_share)

    @property
    def established(self) -> bool:
        """Whether the baseline is complete."""
        return self.baseline.count >= self.settings.baseline

    @property
    def now(self) -> float:
        """The median of the last values, as many as for a sudden change; the last value where no detectors look on.
        NaN before the first value after the run-in."""
        return self._now(NOW_OVER[Sign.SUDDEN] if self._detects else 1)

    def change_of(self, value: float) -> float:
        """The share by which a value is off the baseline; NaN without a baseline, and where the feature lies about
        zero and has no share of itself."""
        mean = self.baseline.mean
        return (value - mean) / abs(mean) if self.established and mean and not self._about_zero else math.nan

    def _now(self, over: int) -> float:
        return median(list(self._last)[-over:]) if self._last else math.nan

    def limit_values(self) -> list[tuple[Level, float]]:
        """The values that its limits come to, those of changes only once the baseline is complete."""
        found = []
        for level, threshold in ((Level.WATCH, self._limit.watch), (Level.FAIL, self._limit.fail)):
            if threshold is not None and (self.established or not threshold.is_share):
                found += [(level, end) for end in threshold.ends(self.baseline.mean) if end is not None]
        return found

    def add(self, cycle: int, value: float) -> list[Finding]:
        """Take the value of one cycle and return what it newly shows. A value that is not finite counts as missing."""
        if not math.isfinite(value):
            self.missing += 1
            return []
        self._seen += 1
        if self._seen <= self.settings.run_in:
            return []
        self._last.append(value)
        finished = self._blocks.add(cycle, value)
        if not self.established:
            self.baseline.add(value)
            if self.baseline.count == self.settings.baseline:
                self._settle()
            found = self._limits(cycle, value, is_known=False)
        else:
            found = self._limits(cycle, value, is_known=True)
            if self._detects:
                found += self._charts(value)
                found += self._drift() if finished else []
        return [self._finding(cycle, sign, level) for sign, level in found if self._new(sign, level)]

    def _settle(self) -> None:
        """Fix the spread that later values are measured by, wider where the baseline's values hang together."""
        settings, baseline = self.settings, self.baseline
        together = min(max(baseline.autocorrelation, 0.0), 0.9)
        self._correlated = math.sqrt((1.0 + together) / (1.0 - together))
        self._sd = max(baseline.sd, settings.floor * abs(baseline.mean), 1e-300)

    def _limits(self, cycle: int, value: float, *, is_known: bool) -> list[tuple[Sign, Level]]:
        """What the limits say; those that need the baseline only where it `is_known`."""
        found = []
        sides = ((self._limit.watch, self._watch, Level.WATCH), (self._limit.fail, self._fail, Level.FAIL))
        for threshold, votes, level in sides:
            if threshold is None or (threshold.is_share and not is_known):
                continue
            beyond = threshold.is_beyond(value, self.baseline.mean)
            if not self._limit.place:  # nobody's limit must not call the feature's own noise a change
                beyond &= abs(value - self.baseline.mean) > self.settings.least_sds * self._sd
            if votes.add(beyond, cycle):
                found.append((Sign.LIMIT, level))
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
        if len(self._blocks.means) < self.settings.drift_blocks or not self.baseline.mean or self._about_zero:
            return None
        slope, _ = sen_slope(self._blocks.means, self._blocks.centres)
        return 1000.0 * slope / abs(self.baseline.mean)

    def _new(self, sign: Sign, level: Level) -> bool:
        if (sign, level) in self._told:
            return False
        self._told.add((sign, level))
        self.level = max(self.level, level)
        return True

    def _finding(self, cycle: int, sign: Sign, level: Level) -> Finding:
        over = 1 if sign is Sign.LIMIT else min(NOW_OVER[sign], len(self._last))
        now = self._now(over)
        found = Finding(
            feature=self.feature,
            cycle=cycle,
            level=level,
            sign=sign,
            baseline=self.baseline.mean if self.established else math.nan,
            now=now,
            change=self.change_of(now),
            per_1000=self.slope_per_1000() if (Sign.DRIFT, Level.WATCH) in self._told else None,
            turn=self.turn,
            over=over,
        )
        if sign is Sign.LIMIT:
            return self._with_limit(found)
        return found

    def _with_limit(self, found: Finding) -> Finding:
        """What a limit found, with that limit and the cycles beyond it."""
        level = found.level
        threshold = self._limit.fail if level is Level.FAIL else self._limit.watch
        votes = self._fail if level is Level.FAIL else self._watch
        assert threshold is not None  # it is what found it
        return replace(found, limit=self._said(threshold), k=votes.k, n=votes.n, cycles=votes.where)

    def _said(self, threshold: Threshold) -> str:
        """A threshold as it was written and, where it is a change, what it comes to."""
        if not threshold.is_share:
            return f"'{threshold.text}'"
        low, high = threshold.ends(self.baseline.mean)
        ends = [
            f"{what} {show_feature(self.feature, end)}"
            for what, end in (("below", low), ("above", high))
            if end is not None
        ]
        return f"{threshold.text} ({' or '.join(ends)})"


@dataclass(slots=True)
class TrendWatch:
    """All features of a test; features may be missing in some cycles. By `rules` where there are some, and those that
    these leave out are not looked at; else each by the settings' own limits."""

    settings: TrendSettings = field(default_factory=TrendSettings)
    rules: WearRules | None = None
    features: dict[str, FeatureTrend] = field(default_factory=dict)

    def add(self, cycle: int, values: Mapping[str, float]) -> list[Finding]:
        """Take the features of one cycle and return what they newly show, in the features' order."""
        found = []
        for name, value in values.items():
            trend = self.features.get(name) or self._begin(name)
            if trend is not None:
                found += trend.add(cycle, value)
        return found

    def _begin(self, name: str) -> FeatureTrend | None:
        """The stream of a feature that comes for the first time; None where it is not judged."""
        if self.rules is None:
            trend = FeatureTrend(name, self.settings)
        elif (limit := self.rules.limit_of(name)) is not None:
            trend = FeatureTrend(name, self.settings, limit, turn=self.rules.turn)
        else:
            return None
        self.features[name] = trend
        return trend

    @property
    def level(self) -> Level:
        """The worst of all features."""
        return max((trend.level for trend in self.features.values()), default=Level.OK)
