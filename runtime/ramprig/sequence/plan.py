"""The plan: a tree of parts with known lengths, and the named waits between them, compiled before anything moves.

A repeat is one part, whatever its number of passes: lengths and numbers of orders are computed, not counted, and
orders are made only as they are sent. Times in a part are ticks relative to its begin.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from enum import Enum

from ramprig.record.keeping import Keeping
from ramprig.yamlfile import Mark

from .steps import AtZero, Measure
from .wear_limits import WearRules


class Kind(Enum):
    """What an order does, by the protocol's word."""

    RAMP = "ramp"
    SWING = "swing"
    REST = "rest"


@dataclass(frozen=True, slots=True)
class Order:
    """One order to the device: at `start` ticks, axis or servo `index`.

    `value` is a duty (1/10000), a pulse (us, 0 = none) or, for rest, 0 to coast and 1 to brake.
    """

    start: int
    kind: Kind
    index: int
    value: int
    ticks: int


@dataclass(frozen=True, slots=True)
class Stroke:
    """A piece of motion: from `after` ticks in a pass on, linearly to `value` over `ticks`."""

    after: int
    ticks: int
    value: int


@dataclass(frozen=True, slots=True)
class Motion:
    """Strokes of one motor or servo, `passes` times, one pass every `pass_ticks`; all strokes of a pass in order."""

    kind: Kind
    index: int
    strokes: tuple[Stroke, ...]
    pass_ticks: int
    passes: int = 1

    @property
    def orders(self) -> int:
        """How many orders it takes."""
        return len(self.strokes) * self.passes

    def at(self, start: int) -> Iterator[Order]:
        """The orders of a motion that begins at the tick `start`."""
        for number in range(self.passes):
            begin = start + number * self.pass_ticks
            for stroke in self.strokes:
                yield Order(begin + stroke.after, self.kind, self.index, stroke.value, stroke.ticks)


@dataclass(frozen=True, slots=True)
class Totals:
    """What a part adds up to.

    `least` ticks it takes when no wait takes time, `most` when every wait takes all it may. `peak_duty` is the
    greatest duty asked for, by motor name; `starts` counts departures from zero duty, by motor name.
    """

    least: int = 0
    most: int = 0
    orders: int = 0
    waits: int = 0
    judgements: int = 0
    reversals: int = 0
    starts: dict[str, int] = field(default_factory=dict)
    peak_duty: dict[str, int] = field(default_factory=dict)

    def then(self, other: Totals) -> Totals:
        """One after the other."""
        return self._with(other, self.least + other.least, self.most + other.most)

    def beside(self, other: Totals) -> Totals:
        """Side by side."""
        return self._with(other, max(self.least, other.least), max(self.most, other.most))

    def times(self, number: int) -> Totals:
        """`number` of them in a row."""
        if number == 0:
            return Totals()
        return Totals(
            least=self.least * number,
            most=self.most * number,
            orders=self.orders * number,
            waits=self.waits * number,
            judgements=self.judgements * number,
            reversals=self.reversals * number,
            starts={name: count * number for name, count in self.starts.items()},
            peak_duty=dict(self.peak_duty),
        )

    def _with(self, other: Totals, least: int, most: int) -> Totals:
        names = self.starts.keys() | other.starts.keys()
        peaks = self.peak_duty.keys() | other.peak_duty.keys()
        return Totals(
            least=least,
            most=most,
            orders=self.orders + other.orders,
            waits=self.waits + other.waits,
            judgements=self.judgements + other.judgements,
            reversals=self.reversals + other.reversals,
            starts={name: self.starts.get(name, 0) + other.starts.get(name, 0) for name in names},
            peak_duty={name: max(self.peak_duty.get(name, 0), other.peak_duty.get(name, 0)) for name in peaks},
        )


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """Root of all parts: where it comes from, what it does in words, and what it adds up to."""

    mark: Mark = field(repr=False, compare=False)
    text: str
    totals: Totals


@dataclass(frozen=True, slots=True, kw_only=True)
class Run(Part):
    """Motions side by side for a known time; without motions it is a hold.

    `ramped` is the motor whose settling time is counted from the end of this part, empty where there is none.
    """

    motions: tuple[Motion, ...] = ()
    length: int
    ramped: str = ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Standstill(Part):
    """Waits, `dwell` ticks at least, until the counts of an axis stay in a band; fails after `limit` ticks.

    Without an encoder (`still_ticks` 0) the dwell is all.
    """

    motor: str
    axis: int
    dwell: int
    still_counts: int
    still_ticks: int
    limit: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Await(Part):
    """Waits until a measurement holds; fails after `limit` ticks."""

    measure: Measure
    limit: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Judge(Part):
    """Judges a measurement at this tick, in no time; `confirms` the cycle it stands in."""

    measure: Measure
    stop_on_failure: bool
    confirms: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Moment(Part):
    """Marks this tick by a name, in no time."""

    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Series(Part):
    """Parts one after the other; `heading` where the report shows its text, as for an included file."""

    parts: tuple[Part, ...]
    heading: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Branches(Part):
    """Parts side by side; over when the last one is."""

    parts: tuple[Part, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Loop(Part):
    """`first` once and `later` for every pass after it, which may differ by how things stand at their begin.

    At most `times` passes. With `for_ticks` a pass begins only while less has gone by since the loop's begin; with
    `until` the measurement is looked at after each pass, and one that never holds is a failure.
    """

    first: Part
    later: Part
    times: int
    for_ticks: int | None = None
    until: Measure | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Cycles(Part):
    """The cycles of one `cycle` step, the `block`-th of the sequence, counted from 1; times in ticks.

    A part may depend on what came before it, so there are several of each: `first` follows the first check or
    `before`, `later` another cycle, `checked` a check. `starts` are the departures from zero in one cycle, the greatest
    number of any of these parts, by motor; `check_starts` those of a check. `pause` and `check_pause` are planned
    between the end of a cycle or check and the next turn: the rest, or longer where starts are spaced. `confirmed`
    tells whether the cycle has a `confirm` at all. `wear` are the rules by which the turns are judged for drift, none
    where they are not.
    """

    block: int
    name: str
    before: Part | None
    first_check: Part | None
    check: Part | None
    first: Part
    later: Part
    checked: Part
    check_every: int | None
    times: int | None
    for_ticks: int | None
    rest: int
    pause: int
    check_pause: int
    starts_per_hour: int | None
    starts: Mapping[str, int]
    check_starts: Mapping[str, int]
    failed_most: int | None
    confirmed: bool
    wear: tuple[WearRules, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class Plan:
    """A whole sequence, ready to run: `root` is the tree, its last part brings every motor to zero.

    `period_ticks` and `mask` are how it is logged. `longest_window` is the longest time back, in ticks, that an
    expectation looks. `remarks` are sentences for the user. `cycles` are those of the tree, in order. `keeping` is how
    the log is kept.
    """

    name: str
    about: str
    tick_us: int
    root: Series
    period_ticks: int
    mask: int
    longest_window: int
    remarks: tuple[str, ...]
    cycles: tuple[Cycles, ...] = ()
    counts_cycles: bool = False
    keeping: Keeping = field(default_factory=Keeping)

    @property
    def totals(self) -> Totals:
        """What it all adds up to."""
        return self.root.totals

    @property
    def wear(self) -> tuple[WearRules, ...]:
        """The rules by which its cycles are judged, a block after the other."""
        return tuple(rules for part in self.cycles for rules in part.wear)


REST_VALUES = {AtZero.COAST: 0, AtZero.BRAKE: 1}
