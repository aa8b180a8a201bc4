"""Computes the features of each cycle of a run while it is under way, and has them judged as it ends.

The numbers are those that the log holds, digit by digit, so the features are those that a reader of the log gets.
Memory is that of one cycle, bounded as there: see `features.CYCLE_ROWS_MAX`.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np

from ramprig.errors import Place
from ramprig.record.columns import Columns
from ramprig.record.rows import RowPrinter
from ramprig.record.scan import Piece
from ramprig.sequence.cycle_watch import Seen, TurnDone, Unjudged, Watched, Watching, place_of
from ramprig.session.blocks import Block

from . import features
from .trends import Finding
from .unfailing import UnfailingWatch
from .wear import Cycle, WearJudge, as_recorded, listed

BATCH_ROWS = 4096
"""So many rows are turned into numbers together; fewer where a cycle ends."""
LATE_PIECES = 4
"""Of a cycle beyond its bound so many of the last pieces are kept: some of their rows may be later than its end."""


@dataclass(frozen=True, slots=True, kw_only=True)
class WearFound:
    """A feature of the cycles has changed: an event of the run. `level` is `watch` or `fail`, `sign` what found it.

    `turn` is cycle or check, `number` the cycle's or the check's count; `baseline`, `now` and `change` (a share) are as
    in `trends.Finding`; `cycles` are those beyond `limit`. `text` says it all in a sentence.
    """

    tick: int
    turn: str
    number: int
    block: int
    feature: str
    level: str
    sign: str
    baseline: float
    now: float
    change: float
    limit: str
    cycles: tuple[int, ...]
    text: str

    @classmethod
    def of(cls, finding: Finding, turn: TurnDone) -> WearFound:
        """The event of what a cycle that is over showed."""
        return cls(
            tick=turn.end_tick,
            turn=finding.turn,
            number=finding.cycle,
            block=turn.block,
            feature=finding.feature,
            level=finding.level.name.lower(),
            sign=finding.sign.value,
            baseline=finding.baseline,
            now=finding.now,
            change=finding.change,
            limit=finding.limit,
            cycles=finding.cycles,
            text=str(finding),
        )


class LiveWatch:
    """Looks on at one part of a run: see `sequence.cycle_watch.CycleWatch`. `say` tells the user what was found.

    What earlier parts have recorded is judged again first, so that it is as if the run had never been interrupted.
    """

    def __init__(self, watched: Watched, *, say: Callable[[str], None]) -> None:
        self.judge = WearJudge.of(watched.rules, tick_us=watched.tick_us)
        for _ in self.judge.replay(watched.lines):
            pass
        self._say = say
        self._part = watched.part
        self._tick_us = watched.tick_us
        self._columns = watched.columns
        walk = self._walk(())
        fields = tuple(field for field in watched.columns.fields if field.name in walk.columns)
        self._printer = RowPrinter(Columns(fields), tick_us=watched.tick_us, tick_zero=0)
        self._blocks: list[Block] = []
        self._rows = 0
        self._begun_tick: int | None = None
        self._is_on = False
        self._pieces: list[Piece] = []
        self._kept_rows = 0
        self._late: deque[Piece] = deque()
        self._beyond = 0

    # ---- samples -----------------------------------------------------------------------------------------------------

    def on_block(self, block: Block) -> None:
        """Samples have come."""
        self._blocks.append(block)
        self._rows += len(block)
        if self._rows >= BATCH_ROWS:
            self._take()

    def _take(self) -> None:
        """Turn what is waiting into numbers: speeds need every sample, those between cycles too."""
        blocks, self._blocks, self._rows = self._blocks, [], 0
        if not self._is_on:
            self._printer.pass_over(blocks)
            return
        for ticks, cells in self._printer.numbers(blocks):
            self._keep(Piece(ticks, {name: column.values() for name, column in cells.items()}))

    def _keep(self, piece: Piece) -> None:
        if self._kept_rows <= features.CYCLE_ROWS_MAX:
            self._pieces.append(piece)
            self._kept_rows += len(piece)
            return
        self._late.append(Piece(piece.ticks))  # only counted
        if len(self._late) > LATE_PIECES:
            self._beyond += len(self._late.popleft())

    # ---- turns -------------------------------------------------------------------------------------------------------

    def commanded(self) -> None:
        """A turn is about to begin."""
        self._take()
        self._is_on = True

    def begun(self, tick: int) -> None:
        """It has begun: what came before is let go, so that the bound counts the turn's own samples."""
        self._take()
        self._pieces = [_since(piece, tick) for piece in self._pieces if piece.ticks[-1] >= tick]
        self._kept_rows = sum(len(piece) for piece in self._pieces)
        self._late.clear()
        self._beyond = 0

    def done(self, turn: TurnDone) -> Seen:
        """It is over: its features, and what it newly shows."""
        self._take()
        self._is_on = False
        found = self._features(turn)
        recorded = as_recorded(found.values())
        cycle = Cycle(
            number=turn.number,
            block=turn.block,
            part=self._part,
            begin_tick=turn.begin_tick,
            end_tick=turn.end_tick,
            features=recorded,
        )
        findings = self.judge.take(cycle)
        for finding in findings:
            self._say(str(finding))
        events = tuple(WearFound.of(finding, turn) for finding in findings)
        return Seen(features=recorded, samples=found.samples, left_out=found.left_out, found=events)

    def _walk(self, spans: Sequence[features.Span]) -> features.FeatureWalk:
        columns = self._columns
        return features.FeatureWalk(columns.names, spans, tick_us=self._tick_us, on_output=columns.on_output)

    def _features(self, turn: TurnDone) -> features.CycleFeatures:
        """By the same walk as over a file."""
        span = features.Span(
            number=turn.number, part=self._part, begin_tick=turn.begin_tick, end_tick=turn.end_tick, after=turn.after
        )
        walk = self._walk([span])
        found: list[features.CycleFeatures] = []
        for piece in (*self._pieces, *self._late):
            found += walk.take(self._part, piece)
        found += walk.close_part(self._part)
        beyond, self._beyond = self._beyond, 0
        self._pieces, self._kept_rows = [], 0
        self._late.clear()
        if not found:  # no sample has come
            return features.CycleFeatures(
                span=span, samples=0, left_out=0, duration_s=math.nan, lowest_supply_v=math.nan, motors={}
            )
        return replace(found[0], left_out=found[0].left_out + beyond)

    # ---- what the run must know --------------------------------------------------------------------------------------

    def too_worn(self) -> tuple[str, Place | None]:
        """Why the run must end, and the place of the limit."""
        failing = self.judge.failing
        if self.judge.worst is None or failing is None:
            return "", None
        return str(self.judge.worst), place_of(failing.place)

    def to_watch(self) -> str:
        """The features to be watched."""
        return listed(self.judge.to_watch())

    def unjudged(self) -> Unjudged:
        """Nothing: see `UnfailingWatch`."""
        return Unjudged()


def _since(piece: Piece, tick: int) -> Piece:
    """Its rows from this tick on."""
    first = int(np.searchsorted(piece.ticks, tick, side="left"))
    return Piece(piece.ticks[first:], {name: column[first:] for name, column in piece.numbers.items()})


def watching(say: Callable[[str], None]) -> Watching:
    """Makes who looks on at a run; what is found is said to the user by `say`. No fault of it ends a run by itself."""
    return lambda watched: UnfailingWatch(watched, lambda: LiveWatch(watched, say=say), say=say)
