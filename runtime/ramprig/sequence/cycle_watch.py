"""Who looks on at the cycles of a run: what it is given, what it tells, and when the run must end for it.

The run itself knows nothing of features and trends; it tells when a cycle is commanded, begun and over, and writes down
what it is told, in the same line as the cycle, so that the one is never on the disk without the other.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Protocol

from ramprig.errors import Place
from ramprig.record.columns import Columns
from ramprig.session.blocks import Block

from .wear_limits import WearRules

Line = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used


@dataclass(frozen=True, slots=True, kw_only=True)
class Watched:
    """A run to be watched: the rules of its blocks of cycles, the columns of its samples, its tick, the number of its
    part, and the lines of the count of cycles that earlier parts have left."""

    rules: Sequence[WearRules]
    columns: Columns
    tick_us: int
    part: int = 1
    lines: Sequence[Line] = ()


@dataclass(frozen=True, slots=True, kw_only=True)
class TurnDone:
    """A cycle, or a check with the number 0, that is over: ticks, ends included; `after` cycles were done before."""

    number: int
    block: int
    begin_tick: int
    end_tick: int
    after: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Seen:
    """What a turn showed: its features by name, those that are missing left out, the samples they are from, and how
    many samples were beyond the bound of one cycle; and events of what was found in them."""

    features: Mapping[str, float] = field(default_factory=dict)
    samples: int = 0
    left_out: int = 0
    found: tuple[object, ...] = ()


@dataclass(frozen=True, slots=True)
class Unjudged:
    """Since when, and why, wear is no longer judged, empty where it is; `ends_run` where the run is to end for it."""

    text: str = ""
    ends_run: bool = False


class CycleWatch(Protocol):
    """Looks on at one part of a run. All is called in the session's thread."""

    def on_block(self, block: Block) -> None:
        """Samples have come, in order of tick."""
        ...

    def commanded(self) -> None:
        """A turn is about to begin: its samples come from now on."""
        ...

    def begun(self, tick: int) -> None:
        """It has begun at this tick; samples from before are not of it."""
        ...

    def done(self, turn: TurnDone) -> Seen:
        """It is over and all its samples have come."""
        ...

    def too_worn(self) -> tuple[str, Place | None]:
        """Why the run must end, and which limit of the file says so; empty where it need not."""
        ...

    def to_watch(self) -> str:
        """What is to be watched at the end of the run, for the end of its sentence; empty where nothing is."""
        ...

    def unjudged(self) -> Unjudged:
        """Since when, and why, wear is no longer judged."""
        ...


Watching = Callable[[Watched], CycleWatch]
"""Makes who looks on at a run."""


def place_of(text: str) -> Place | None:
    """The place that `file:line:column` names; None where it names none."""
    head, _, column = text.rpartition(":")
    file, _, line = head.rpartition(":")
    return Place(file, int(line), int(column)) if file and line.isdigit() and column.isdigit() else None
