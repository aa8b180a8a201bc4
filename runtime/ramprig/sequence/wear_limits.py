"""The limits to wear in the cycles of a run: what is judged, against what, and when it is too much.

The one place where they are stated: `check`, the door sheet, the judge of a run under way and the report all read these
rules, which lie in `run.json` as they were in force. The default figures are choices of this program and no standard.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from fractions import Fraction
from typing import Any

from ramprig.errors import RecordError
from ramprig.quantity import format_duration
from ramprig.yamlfile import Mark

from .wear_words import FEATURE_WORDS, Way, drive_of, word_of

RUN_IN_CYCLES = 20
RUN_IN_TIME_CONSTANTS = 5
"""The default run-in lasts so many thermal time constants of the slowest winding: by then it has warmed to within 1 %
of the warming (e^-5), and copper's resistance, which grows by 0.393 % a kelvin (IEC 60028), is steady with it."""
BASELINE_CYCLES = 100
BASELINE_LEAST = 10
CHECKS_RUN_IN = 1
"""The first check comes before the first cycle, with everything cold."""
CHECKS_BASELINE = 10
CHECKS_BASELINE_LEAST = 3
K_DEFAULT, N_DEFAULT = 3, 5
WATCH_DEFAULT_SHARE = 0.10


@dataclass(frozen=True, slots=True, kw_only=True)
class Threshold:
    """Values below `low` or above `high` are beyond it; None leaves a side open. `text` is how it was written.

    With `is_share` both are changes as shares of the baseline's size, else values in the feature's unit.
    """

    text: str
    low: float | None = None
    high: float | None = None
    is_share: bool = True

    def ends(self, baseline: float) -> tuple[float | None, float | None]:
        """The least and the greatest value that is not beyond, in the feature's unit."""
        if not self.is_share:
            return self.low, self.high
        low = None if self.low is None else baseline + self.low * abs(baseline)
        return low, None if self.high is None else baseline + self.high * abs(baseline)

    def is_beyond(self, value: float, baseline: float) -> bool:
        """Whether a value counts; of a share only once the baseline is known."""
        low, high = self.ends(baseline)
        return (low is not None and value < low) or (high is not None and value > high)


@dataclass(frozen=True, slots=True, kw_only=True)
class WearLimit:
    """The limits of one feature by its full name; beyond one in `k` of the last `n` turns is a finding.

    `place` is where the file says it; empty for the default, which a noisy feature must also pass by some of its
    standard deviations.
    """

    feature: str
    watch: Threshold | None
    fail: Threshold | None
    k: int = K_DEFAULT
    n: int = N_DEFAULT
    place: str = ""

    def __str__(self) -> str:
        said = [
            f"{name} {each.text}" for name, each in (("watch", self.watch), ("fail", self.fail)) if each is not None
        ]
        return f"{', '.join(said)}, {self.k} of {self.n}"


WATCH_DEFAULT = Threshold(text="+- 10 %", low=-WATCH_DEFAULT_SHARE, high=WATCH_DEFAULT_SHARE)
OTHERS_DEFAULT = WearLimit(feature="", watch=WATCH_DEFAULT, fail=None)


@dataclass(frozen=True, slots=True, kw_only=True)
class SaidLimit:
    """A limit as the file says it: of a word, of the motor or servo `drive` ("" for the cycle's own), in one direction
    or both."""

    mark: Mark
    word: str
    drive: str
    drive_mark: Mark
    way: Way | None
    watch: Threshold | None
    fail: Threshold | None
    k: int
    n: int


@dataclass(frozen=True, slots=True, kw_only=True)
class ChecksWish:
    """What a cycle says of wear in its checks: as for the cycles themselves. Checks are few, so that nothing but limits
    is looked at."""

    baseline: int = CHECKS_BASELINE
    limits: tuple[SaidLimit, ...] = ()
    others: WearLimit | None = OTHERS_DEFAULT


@dataclass(frozen=True, slots=True, kw_only=True)
class WearWish:
    """What a cycle says of wear. `run_in_s` None is what the windings need; `others` are the limits of the features
    that `limits` do not name, None where those are not judged at all. `checks` None judges no check."""

    run_in_cycles: int = RUN_IN_CYCLES
    run_in_s: Fraction | None = None
    baseline: int = BASELINE_CYCLES
    detectors: bool = True
    limits: tuple[SaidLimit, ...] = ()
    others: WearLimit | None = OTHERS_DEFAULT
    checks: ChecksWish | None = field(default_factory=ChecksWish)


class TurnKind(StrEnum):
    """What is judged: the cycles of a block, or the checks between them."""

    CYCLE = "cycle"
    CHECK = "check"


@dataclass(frozen=True, slots=True, kw_only=True)
class WearRules:
    """The rules for the turns of one kind in one block of cycles, as they are in force on a bench.

    Turns are not judged while fewer than `run_in_turns` are done or less than `run_in_s` has gone by since the first
    one, or the first after an interruption; the next `baseline` ones are what later ones are judged against. With
    `detectors`, sudden changes, slow ones and drifts of the features that have limits are looked for too. `others` are
    the limits of features that have none of their own, of the whole cycle or of one of the `drives`: the motors that it
    drives, and the servos.
    """

    block: int
    name: str
    turn: TurnKind
    run_in_turns: int
    run_in_s: float
    baseline: int
    detectors: bool
    drives: tuple[str, ...]
    limits: tuple[WearLimit, ...]
    others: WearLimit | None

    def limit_of(self, feature: str) -> WearLimit | None:
        """The limits of a feature; None where it is not judged."""
        own = next((limit for limit in self.limits if limit.feature == feature), None)
        if own is not None:
            return own
        word = FEATURE_WORDS.get(word_of(feature))
        drive = drive_of(feature)
        is_left_out = (word is not None and word.on_request) or (drive and drive not in self.drives)
        return None if is_left_out else self.others

    def lines(self) -> Iterator[str]:
        """The rules in words."""
        plural = "" if self.run_in_turns == 1 else "s"
        run_in = f"{self.run_in_turns} {self.turn}{plural} and {format_duration(self.run_in_s)}"
        whose = f"'{self.name}'" if self.turn is TurnKind.CYCLE else f"checks of '{self.name}'"
        yield f"{whose} after a run-in of {run_in}, against the {self.baseline} {self.turn}s after it"
        for limit in self.limits:
            yield f"{limit.feature}: {limit} {self.turn}s"
        what = "every other feature" if self.limits else "every feature"
        if self.others is not None:
            yield f"{what}: {self.others} {self.turn}s"
        if self.detectors:
            yield "sudden changes, slow ones and drifts: watch (figures of this program, no standard)"
        if not self.can_fail:
            yield "none of these ends the run"

    @property
    def can_fail(self) -> bool:
        """Whether a limit may end the run."""
        others = () if self.others is None else (self.others,)
        return any(limit.fail is not None for limit in (*self.limits, *others))


Document = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used


def rules_of(documents: object) -> tuple[WearRules, ...]:
    """The rules as `run.json` has them; none where `documents` is None. Raises RecordError where they cannot be
    read."""
    if documents is None:
        return ()
    try:
        assert isinstance(documents, list)
        return tuple(_rules(each) for each in documents)
    except (AssertionError, KeyError, TypeError, ValueError) as error:
        raise RecordError(f"the wear limits in run.json cannot be read: {error!r}") from error


def _rules(found: Document) -> WearRules:
    return WearRules(
        block=int(found["block"]),
        name=str(found["name"]),
        turn=TurnKind(found["turn"]),
        run_in_turns=int(found["run_in_turns"]),
        run_in_s=float(found["run_in_s"]),
        baseline=int(found["baseline"]),
        detectors=bool(found["detectors"]),
        drives=tuple(map(str, found["drives"])),
        limits=tuple(_limit(each) for each in found["limits"]),
        others=None if found["others"] is None else _limit(found["others"]),
    )


def _limit(found: Document) -> WearLimit:
    return WearLimit(
        feature=str(found["feature"]),
        watch=_threshold(found["watch"]),
        fail=_threshold(found["fail"]),
        k=int(found["k"]),
        n=int(found["n"]),
        place=str(found["place"]),
    )


def _threshold(found: Document | None) -> Threshold | None:
    if found is None:
        return None
    low, high = (None if found[end] is None else float(found[end]) for end in ("low", "high"))
    return Threshold(text=str(found["text"]), low=low, high=high, is_share=bool(found["is_share"]))
