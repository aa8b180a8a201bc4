"""How a file says what a cycle of a test is, when it counts, and what an interruption of the run leads to.

    on interruption: {resume at most: 3, within: 2 min}
    steps:
      - cycle:
          name: open and close
          times: 5000
          rest: 20 s
          starts per hour: 150
          failed at most: 3
          before: [{move: {servo: latch, to: 0 deg, in: 1 s}}]
          check every: 250
          check: [...]
          wear: {limits: [{feature: steady current, of: vent, fail: +25 %}]}
          steps:
            - ramp: {motor: vent, to: 60 %, in: 500 ms}
            - hold: 4 s
            - confirm: {position of: vent, is: at least 500 deg}
            - coast: {motor: vent, in: 700 ms}

What a cycle says of wear is in `wear_shape`.
"""

from __future__ import annotations

from dataclasses import replace
from fractions import Fraction

from ramprig.quantity import DURATION
from ramprig.yamlfile import (
    Built,
    CountShape,
    Fields,
    FlagShape,
    Key,
    Mark,
    QuantityShape,
    Reader,
    Record,
    ScalarOr,
    Schema,
    Shape,
    TextShape,
    WordShape,
)

from .measures import MeasureShape
from .names import CYCLE_BEGIN
from .steps import Confirm, Cycle, Interruptions, Step, What
from .wear_limits import WearWish
from .wear_shape import WEAR

CYCLES_MAX = 10_000_000
STARTS_MAX = 100_000
RESUMES_MAX = 1000
NAME_DEFAULT = "cycle"

NAME = Key("name", TextShape(), "what one cycle is called", default=NAME_DEFAULT)
TIMES = Key("times", CountShape(1, CYCLES_MAX), "how many cycles are to be done")
FOR = Key(
    "for",
    QuantityShape(DURATION, least="1 s", most="10000 h"),
    "begin another cycle as long as less than this has been run",
)
REST = Key("rest", QuantityShape(DURATION, least="0 s", most="24 h"), "outputs at zero after each cycle and check")
STARTS = Key(
    "starts per hour",
    CountShape(1, STARTS_MAX),
    "most starts of each motor in any 60 minutes; cycles and checks are spaced evenly for it",
)
FAILED = Key("failed at most", CountShape(0, CYCLES_MAX), "the run ends once more cycles than this have failed")
CHECK_EVERY = Key("check every", CountShape(1, CYCLES_MAX), "cycles between two checks")

RESUMES = Key("resume at most", CountShape(1, RESUMES_MAX), "how often the run goes on by itself", required=True)
WITHIN = Key(
    "within", QuantityShape(DURATION, least="1 s", most="24 h"), "the board must be back so soon after an interruption"
)
AFTER_TRIP = Key("after a trip", FlagShape(), "go on also after a trip other than a lost link's", default=False)


def cycle_shape(steps: Shape[tuple[Step, ...]]) -> Shape[Step]:
    """The shape of what follows `cycle:`; `steps` is that of a list of steps."""
    inner: Key[tuple[Step, ...]] = Key("steps", steps, "what one cycle is", required=True)
    before: Key[tuple[Step, ...]] = Key("before", steps, "done before the first cycle and again after an interruption")
    check: Key[tuple[Step, ...]] = Key("check", steps, "a short reference, so that trends do not depend on the load")

    keys: tuple[Key[object], ...] = (NAME, TIMES, FOR, REST, STARTS, FAILED, before, CHECK_EVERY, check, WEAR, inner)

    def build(f: Fields) -> Step:
        _check_said(f)
        if f.said(check) != f.said(CHECK_EVERY):
            missing = CHECK_EVERY.name if f.said(check) else check.name
            raise f.mark.error(f"'{missing}' is missing in this cycle", "'check' and 'check every' go together")
        length, rest = f.get(FOR), f.get(REST)
        return Cycle(
            mark=f.mark,
            marks={key.name: f.at(key) for key in keys if f.said(key)},
            name=f[NAME],
            steps=f[inner],
            before=f.get(before) or (),
            check=f.get(check) or (),
            check_every=f.get(CHECK_EVERY),
            times=f.get(TIMES),
            for_s=None if length is None else length.value,
            rest_s=Fraction(0) if rest is None else rest.value,
            starts_per_hour=f.get(STARTS),
            failed_most=f.get(FAILED),
            wear=f.get(WEAR) if f.said(WEAR) else WearWish(),
        )

    return Record(keys, build)


def _check_said(f: Fields) -> None:
    wanted = "a cycle has one of 'times' and 'for'"
    if f.said(TIMES) and f.said(FOR):
        raise f.error(FOR, "'for' stands beside 'times'", wanted)
    if not f.said(TIMES) and not f.said(FOR):
        raise f.mark.error("this cycle does not say how often", wanted)


class ConfirmShape(Shape[Step]):
    """A travel that the encoder must have seen, counted from the cycle's begin where no mark is given."""

    measure = MeasureShape(whats=(What.COUNTS, What.POSITION))

    def read(self, reader: Reader) -> Step:  # noqa: D102  (the base class says it, here and below)
        measure = self.measure.read(reader)
        return Confirm(
            mark=reader.mark, marks=measure.marks, measure=replace(measure, since=measure.since or CYCLE_BEGIN)
        )

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return self.measure.schema(names=names)


def _interruptions(f: Fields) -> Interruptions:
    within = f.get(WITHIN)
    default = Interruptions()
    return Interruptions(
        resumes=f[RESUMES],
        within_s=default.within_s if within is None else within.value,
        after_trip=f[AFTER_TRIP],
        said=True,
    )


def _stop(word: str, mark: Mark) -> Interruptions:
    return Interruptions(said=True)


ON_INTERRUPTION: Key[Interruptions] = Key(
    "on interruption",
    ScalarOr(Built(WordShape(("stop",)), _stop), Record((RESUMES, WITHIN, AFTER_TRIP), _interruptions)),
    "what a lost link or a restarted board leads to: stop, or going on at the next cycle at most so often",
)
"""A key of the sequence file itself."""
