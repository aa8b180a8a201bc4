"""What happens in a run beyond what the session tells: events for `events.jsonl`."""

from __future__ import annotations

from dataclasses import dataclass


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
