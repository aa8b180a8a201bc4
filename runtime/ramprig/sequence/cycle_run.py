"""Counts the cycles of a run and says which turn comes next, and when: a cycle, a check, or none.

Nothing is counted twice or lost because each turn waits for the disk:

    the turn is written down as commanded     ->  on the disk  ->  its orders go out
    its samples have come, it is judged       ->  written down as done, on the disk  ->  the next is commanded

So whatever breaks off, what has really been done is at least the count of cycles done and at most one more.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from enum import StrEnum

from .cycle_plan import BlockSoFar
from .cycle_watch import CycleWatch, Seen, TurnDone
from .happened import (
    BlockOver,
    CheckBegun,
    CheckCommanded,
    CheckDone,
    CycleBegun,
    CycleCommanded,
    CycleDone,
    CycleInterrupted,
)
from .outcome import Counted, Judged
from .plan import Cycles
from .spacing import StartsGuard
from .strands import Turn

ROUNDING_TICKS = 1e-3
"""A begin reckoned in s may be off by so much of a tick."""
FOUND_MAX = 20
"""Confirmations of one cycle whose findings are written down."""


class CycleOutcome(StrEnum):
    """What became of a cycle that was done."""

    CONFIRMED = "confirmed"
    FAILED = "failed"
    COMMANDED = "commanded"


@dataclass(frozen=True, slots=True)
class PastStarts:
    """So many starts of a motor, at the latest so long ago."""

    motor: str
    count: int
    age_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class RunSoFar:
    """What the earlier parts of a run leave to the next one; `part` is the number of the next one.

    `open_number` is a cycle of the block `open_block` that was broken off without a word, None where there is none:
    `counted` has it as interrupted, and the next part writes that down.
    """

    part: int = 1
    counted: Counted = field(default_factory=Counted)
    blocks: Mapping[int, BlockSoFar] = field(default_factory=dict)
    starts: tuple[PastStarts, ...] = ()
    held: int = 0
    failed: int = 0
    first_failure: str = ""
    open_number: int | None = None
    open_block: int = 0


@dataclass(slots=True)
class _UnderWay:
    """The turn under way: its number (0 for a check), where it began, and what was judged in it."""

    turn: Turn
    number: int
    begin_tick: int | None = None
    confirms: int = 0
    unconfirmed: int = 0
    held: int = 0
    failed: int = 0
    found: list[str] = field(default_factory=list)
    seen: Seen = field(default_factory=Seen)


@dataclass(frozen=True, slots=True)
class Due:
    """The next turn, and the tick at which it may begin at the earliest."""

    turn: Turn
    tick: int


class CycleBook:
    """The count of one run. `write` takes an event for the count of cycles, `pending` tells how many of those are not
    yet on the disk. `watch` looks on at the cycles."""

    def __init__(
        self,
        so_far: RunSoFar,
        *,
        tick_s: float,
        write: Callable[[object], None],
        pending: Callable[[], int],
        watch: CycleWatch | None = None,
    ) -> None:
        self.counted = so_far.counted
        self.watch = watch
        self.pending = pending
        self._so_far = so_far
        self._tick_s = tick_s
        self._write = write
        self._part: Cycles | None = None
        self._under_way: _UnderWay | None = None
        self._guard: StartsGuard | None = None  # made at the first block, when the tick is known
        self._block = BlockSoFar()
        self._begin_tick = 0
        self._since_check: int | None = None
        self._turned = False
        self.pause = 0
        """Planned between the turn that was closed last and the next one, in ticks."""
        if so_far.open_number is not None:
            write(
                CycleInterrupted(
                    tick=None,
                    number=so_far.open_number,
                    block=so_far.open_block,
                    part=so_far.part,
                    why="found when the run was resumed: its end was never written down",
                )
            )

    @property
    def under_way(self) -> bool:
        """Whether a turn has begun that is not over."""
        return self._under_way is not None

    @property
    def number(self) -> int:
        """The cycle under way, else 0."""
        return 0 if self._under_way is None else self._under_way.number

    # ---- one block -----------------------------------------------------------------------------------------------

    def enter(self, part: Cycles, tick: int) -> None:
        """Begin, or go on, with this block from `tick` on; does nothing where it is under way."""
        if self._part is part:
            return
        self._part = part
        self._block = self._so_far.blocks.get(part.block, BlockSoFar())
        self._begin_tick = tick
        self._since_check = None
        self._turned = False
        if self._guard is None:
            self._guard = StartsGuard()
            for past in sorted(self._so_far.starts, key=lambda past: -past.age_s):
                self._guard.note({past.motor: past.count}, tick * self._tick_s - past.age_s)
        if part.before is not None:
            self._guard.note(part.before.totals.starts, tick * self._tick_s)

    def due(self, tick: int) -> Due:
        """What comes after the turn that was over at `tick`."""
        part = self._known_part()
        earliest = tick + (part.rest if self._turned else 0)
        if part.check is not None and (self._since_check is None or self._since_check >= (part.check_every or 1)):
            return Due(Turn.CHECK, self._allowed(part.check_starts, earliest))
        if part.times is not None and self._block.done >= part.times:
            return Due(Turn.OVER, tick)
        allowed = self._allowed(part.starts, earliest)
        if part.for_ticks is not None and self._run_s(allowed) >= part.for_ticks * self._tick_s:
            return Due(Turn.OVER, tick)
        return Due(Turn.CYCLE, allowed)

    def _allowed(self, starts: Mapping[str, int], earliest: int) -> int:
        per_hour = self._known_part().starts_per_hour
        if self._guard is None or per_hour is None:
            return earliest
        allowed_s = self._guard.earliest_s(starts, earliest * self._tick_s, per_hour=per_hour)
        return max(earliest, math.ceil(allowed_s / self._tick_s - ROUNDING_TICKS))

    def _run_s(self, tick: int) -> float:
        return self._block.run_s + (tick - self._begin_tick) * self._tick_s

    def command(self, turn: Turn) -> None:
        """The turn is about to begin: it is written down, and must be on the disk before its first order."""
        part = self._known_part()
        self._turned = True
        if self.watch is not None:
            self.watch.commanded()
        if turn is Turn.CHECK:
            self._under_way = _UnderWay(turn, 0)
            self._write(
                CheckCommanded(
                    tick=None,
                    after=self.counted.done,
                    block=part.block,
                    name=part.name,
                    part=self._so_far.part,
                    starts=part.check_starts,
                )
            )
            return
        self.counted = replace(self.counted, commanded=self.counted.commanded + 1)
        self._under_way = _UnderWay(turn, self.counted.commanded)
        self._write(
            CycleCommanded(
                tick=None,
                number=self.counted.commanded,
                block=part.block,
                name=part.name,
                part=self._so_far.part,
                starts=part.starts,
            )
        )

    def begin(self, tick: int) -> CycleBegun | CheckBegun:
        """The turn that was commanded begins at `tick`; the event that tells of it."""
        assert self._under_way is not None  # it was commanded
        self._under_way.begin_tick = tick
        if self.watch is not None:
            self.watch.begun(tick)
        name = self._known_part().name
        if self._under_way.turn is Turn.CHECK:
            return CheckBegun(tick=tick, after=self.counted.done, name=name)
        return CycleBegun(tick=tick, number=self._under_way.number, name=name)

    def take(self, judged: Judged, *, confirms: bool) -> None:
        """An expectation was judged in the turn under way, if there is one."""
        turn = self._under_way
        if turn is None:
            return
        turn.held += judged.held
        turn.failed += not judged.held
        if confirms:
            turn.confirms += 1
            turn.unconfirmed += not judged.held
            if len(turn.found) < FOUND_MAX:
                turn.found.append(judged.found)

    def look(self, tick: int) -> tuple[object, ...]:
        """Have the turn under way, which is over at `tick`, looked at; events of what was found. Then it is closed."""
        turn = self._under_way
        assert turn is not None  # whoever asks has seen that it is under way
        if self.watch is None or turn.begin_tick is None:
            return ()
        block = self._known_part().block
        turn.seen = self.watch.done(
            TurnDone(
                number=turn.number, block=block, begin_tick=turn.begin_tick, end_tick=tick, after=self.counted.done
            )
        )
        return turn.seen.found

    def close(self, tick: int) -> CycleOutcome | None:
        """The turn under way is over at `tick`, everything in it judged; what became of a cycle, None for a check."""
        part, turn = self._known_part(), self._under_way
        assert turn is not None  # whoever closes has seen that it is under way
        assert turn.begin_tick is not None  # and it has begun
        self._under_way = None
        starts = part.check_starts if turn.turn is Turn.CHECK else part.starts
        self.pause = part.check_pause if turn.turn is Turn.CHECK else part.pause
        if self._guard is not None:
            took_s = (tick - turn.begin_tick) * self._tick_s
            self._guard.note(starts, tick * self._tick_s, took_s=took_s)
        if turn.turn is Turn.CHECK:
            self._since_check = 0
            self._write(
                CheckDone(
                    tick=tick,
                    begin_tick=turn.begin_tick,
                    after=self.counted.done,
                    block=part.block,
                    name=part.name,
                    part=self._so_far.part,
                    expectations_held=turn.held,
                    expectations_failed=turn.failed,
                    run_s=round(self._run_s(tick), 6),
                    starts=starts,
                    samples=turn.seen.samples,
                    left_out=turn.seen.left_out,
                    features=turn.seen.features,
                )
            )
            return None
        outcome = _outcome(turn)
        self._count(outcome)
        self._write(self._done(part, turn, turn.begin_tick, tick, outcome))
        return outcome

    def _count(self, outcome: CycleOutcome) -> None:
        counted, failed = self.counted, outcome is CycleOutcome.FAILED
        self.counted = replace(
            counted,
            confirmed=counted.confirmed + (outcome is CycleOutcome.CONFIRMED),
            failed=counted.failed + failed,
            unjudged=counted.unjudged + (outcome is CycleOutcome.COMMANDED),
        )
        self._block = replace(self._block, done=self._block.done + 1, failed=self._block.failed + failed)
        if self._since_check is not None:
            self._since_check += 1

    def _done(self, part: Cycles, turn: _UnderWay, begin_tick: int, tick: int, outcome: CycleOutcome) -> CycleDone:
        return CycleDone(
            tick=tick,
            begin_tick=begin_tick,
            number=turn.number,
            block=part.block,
            name=part.name,
            part=self._so_far.part,
            outcome=outcome.value,
            found=tuple(turn.found),
            expectations_held=turn.held,
            expectations_failed=turn.failed,
            run_s=round(self._run_s(tick), 6),
            starts=part.starts,
            commanded=self.counted.commanded,
            confirmed=self.counted.confirmed,
            failed=self.counted.failed,
            interrupted=self.counted.interrupted,
            samples=turn.seen.samples,
            left_out=turn.seen.left_out,
            features=turn.seen.features,
        )

    def too_many_failed(self) -> str:
        """Why the run must end for the cycles that have failed; empty where it need not."""
        part = self._known_part()
        if part.failed_most is None or self._block.failed <= part.failed_most:
            return ""
        return f"{self._block.failed} cycles of '{part.name}' have failed, {part.failed_most} are allowed"

    def finish_block(self, tick: int) -> None:
        """All cycles of the block are done."""
        part = self._known_part()
        self._write(BlockOver(tick=tick, block=part.block, part=self._so_far.part, run_s=round(self._run_s(tick), 6)))

    def abandon(self, why: str) -> None:
        """The run is over: a cycle under way is written down as broken off. Never raises."""
        turn, self._under_way = self._under_way, None
        if turn is None or turn.turn is not Turn.CYCLE:
            return
        self.counted = replace(self.counted, interrupted=self.counted.interrupted + 1)
        part = self._known_part()
        self._write(CycleInterrupted(tick=None, number=turn.number, block=part.block, part=self._so_far.part, why=why))

    def _known_part(self) -> Cycles:
        assert self._part is not None  # `enter` comes first
        return self._part


def _outcome(turn: _UnderWay) -> CycleOutcome:
    if turn.unconfirmed:
        return CycleOutcome.FAILED
    return CycleOutcome.CONFIRMED if turn.confirms else CycleOutcome.COMMANDED
