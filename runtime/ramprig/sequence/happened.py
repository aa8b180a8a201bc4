"""What happens in a run beyond what the session tells: events for `events.jsonl`."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True, slots=True, kw_only=True)
class PassBegun:
    """Pass `number` of the repeat at `place` has begun, of at most `of`."""

    tick: int
    place: str
    number: int
    of: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Marked:
    """The sequence marked this moment."""

    tick: int
    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class WaitEnded:
    """A wait came true: the plan goes on at `tick`."""

    tick: int
    place: str
    waited_ticks: int
    found: str


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderOverdue:
    """The end of an order was not told in time: it was held back, or the notice was lost."""

    tick: int
    order: str
    index: int
    value: int


# ---- cycles: the first two go to the event log, the others, one line each, to the count of cycles ------------------


@dataclass(frozen=True, slots=True, kw_only=True)
class CycleBegun:
    """Cycle `number` of the run begins at this tick."""

    tick: int
    number: int
    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckBegun:
    """A check begins at this tick, after so many cycles done."""

    tick: int
    after: int
    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class CycleCommanded:
    """Cycle `number` of the run, of this block, is about to be commanded; written down before its first order.

    `starts` are those of each motor in it, which count against its starts per hour though it be broken off.
    """

    tick: int | None
    number: int
    block: int
    name: str
    part: int
    starts: Mapping[str, int] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckCommanded:
    """A check of this block, after so many cycles done, is about to be commanded; as of a cycle."""

    tick: int | None
    after: int
    block: int
    name: str
    part: int
    starts: Mapping[str, int]


@dataclass(frozen=True, slots=True, kw_only=True)
class CycleDone:
    """A cycle is over at `tick`; `outcome` is confirmed, failed, or commanded where nothing in it is confirmed.

    `run_s` is how long the block has been run, over all parts of the run; `starts` the starts of each motor. `found`
    says what its confirmations found. The counts are those of the whole run, this cycle included. `features` are what
    it showed, by name, from so many `samples`; `left_out` ones were beyond the bound of one cycle.
    """

    tick: int
    begin_tick: int
    number: int
    block: int
    name: str
    part: int
    outcome: str
    found: tuple[str, ...]
    expectations_held: int
    expectations_failed: int
    run_s: float
    starts: Mapping[str, int]
    commanded: int
    confirmed: int
    failed: int
    interrupted: int
    samples: int = 0
    left_out: int = 0
    features: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class CheckDone:
    """A check of this block is over at `tick`, after so many cycles done; the last three as in a cycle."""

    tick: int
    begin_tick: int
    after: int
    block: int
    name: str
    part: int
    expectations_held: int
    expectations_failed: int
    run_s: float
    starts: Mapping[str, int]
    samples: int = 0
    left_out: int = 0
    features: Mapping[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True, kw_only=True)
class CycleInterrupted:
    """Cycle `number` was commanded and broken off: whether it moved is not known, and it counts as not done."""

    tick: int | None
    number: int
    block: int
    part: int
    why: str


@dataclass(frozen=True, slots=True, kw_only=True)
class BlockOver:
    """All cycles of this block are done."""

    tick: int
    block: int
    part: int
    run_s: float
