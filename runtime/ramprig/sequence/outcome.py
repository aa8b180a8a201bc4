"""How a run ended: the verdict with its exit code, the sentence why, and what became of every expectation."""

from __future__ import annotations

from dataclasses import dataclass, field
from enum import Enum

from ramprig.errors import Place

from .expect import Finding
from .plan import Judge

FAILURES_KEPT = 1000
"""So many failed expectations are kept with their values; later ones are counted."""


class Verdict(Enum):
    """How a run ended: the word of `run.json` and the exit code."""

    PASSED = ("passed", 0)
    FAILED = ("failed", 1)
    NOT_RECORDED = ("not recorded", 2)
    TRIPPED = ("tripped", 3)
    REFUSED = ("refused", 3)
    LINK_LOST = ("link lost", 4)
    STOPPED = ("stopped", 5)

    @property
    def word(self) -> str:
        """As `run.json` has it."""
        return self.value[0]

    @property
    def exit_code(self) -> int:
        """What the program ends with."""
        return self.value[1]


class Ended(Exception):
    """The run ends here, with this verdict and sentence, at this place."""

    def __init__(self, verdict: Verdict, sentence: str, place: Place | None) -> None:
        super().__init__(sentence)
        self.verdict = verdict
        self.sentence = sentence
        self.place = place


@dataclass(frozen=True, slots=True, kw_only=True)
class Judged:
    """An expectation that was judged: an event of the run. `place` is where it stands."""

    tick: int
    place: str
    expectation: str
    held: bool
    found: str
    value: float | None
    why: str

    @classmethod
    def of(cls, judge: Judge, tick: int, finding: Finding) -> Judged:
        """What came of an expectation."""
        return cls(
            tick=tick,
            place=str(judge.mark.place),
            expectation=str(judge.measure),
            held=finding.holds,
            found=finding.text,
            value=finding.value,
            why=finding.why,
        )

    @property
    def sentence(self) -> str:
        """What was expected and what was found."""
        why = f" ({self.why})" if self.why else ""
        return f"{self.expectation}: found {self.found}{why}"


@dataclass(slots=True)
class Tally:
    """The expectations of a run: how many held, how many not, those of this part of it, and the first in words."""

    held: int = 0
    failed: int = 0
    failures: list[Judged] = field(default_factory=list)
    first: str = ""

    def take(self, judged: Judged) -> None:
        """Count one."""
        if judged.held:
            self.held += 1
            return
        self.failed += 1
        self.first = self.first or judged.sentence
        if len(self.failures) < FAILURES_KEPT:
            self.failures.append(judged)


@dataclass(frozen=True, slots=True, kw_only=True)
class Counted:
    """The cycles of a run.

    `commanded` = `confirmed` + `failed` + `unjudged` + `interrupted` + the one under way. `interrupted` ones were
    broken off: each may or may not have moved.
    """

    commanded: int = 0
    confirmed: int = 0
    failed: int = 0
    unjudged: int = 0
    interrupted: int = 0

    @property
    def done(self) -> int:
        """Cycles carried out to their end."""
        return self.confirmed + self.failed + self.unjudged

    def __str__(self) -> str:
        text = f"{self.commanded} commanded, {self.confirmed} confirmed, {self.failed} failed"
        if self.unjudged:
            text += f", {self.unjudged} not judged"
        return text + (f", {self.interrupted} broken off" if self.interrupted else "")


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """The end of a run.

    `sentence` says why it ended; 'into the run' in it counts from `start_tick`, where the first step began. `place` is
    the step that it ended at or the first expectation that failed, None where no step had begun. `carried_out` is
    whether every step was, whatever came of it. `stop_confirmed` tells whether the device and its measurements say that
    all is off. `trip` is the word of the trip that ended it, `restarted` whether a restart of the device did. `cycles`
    are counted over all parts of the run, None where the sequence has none. `slept_s` are the times for which the host
    was found to have slept, `away_s` the longest for which it did not look after the board, whatever kept it.
    """

    verdict: Verdict
    sentence: str
    place: Place | None
    held: int
    failed: int
    failures: tuple[Judged, ...]
    passes: int
    elapsed_s: float
    stop_confirmed: bool
    overdue: int
    trip: str = ""
    restarted: bool = False
    carried_out: bool = False
    start_tick: int | None = None
    cycles: Counted | None = None
    slept_s: tuple[float, ...] = ()
    away_s: float = 0.0

    @property
    def exit_code(self) -> int:
        """What the program ends with."""
        return self.verdict.exit_code

    def __str__(self) -> str:
        where = f" [{self.place}]" if self.place is not None else ""
        return f"{self.verdict.word}: {self.sentence}{where}"
