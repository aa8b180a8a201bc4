"""Keeps a fault of the live judge from ending a run: the motor test goes on, and since when nothing was judged is told.

Only limits that are to end the run change that: nobody can rely on them any more, so the run is stopped in order.
"""

from __future__ import annotations

import traceback
from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeVar

from ramprig.errors import Place
from ramprig.sequence.cycle_watch import CycleWatch, Seen, TurnDone, Unjudged, Watched
from ramprig.session.blocks import Block

T = TypeVar("T")

TRACE_MAX = 4000
"""Characters of a traceback that the event keeps; its end is the place of the fault."""


@dataclass(frozen=True, slots=True, kw_only=True)
class WearUnjudged:
    """From this turn on wear is not judged, and no features are recorded: an event of the run.

    `turn` is cycle or check, `number` the cycle's (of a check: those done before it). `text` says it in a sentence,
    `trace` is for whoever mends the fault.
    """

    tick: int
    turn: str
    number: int
    text: str
    trace: str


class UnfailingWatch:
    """Looks on as the watch that `make` makes does, until that raises; from then on it sees nothing and says so once.

    See `sequence.cycle_watch.CycleWatch`. `say` tells the user.
    """

    def __init__(self, watched: Watched, make: Callable[[], CycleWatch], *, say: Callable[[str], None]) -> None:
        self._say = say
        self._ends_run = any(limit.fail is not None for rules in watched.rules for limit in rules.limits)
        self._watch: CycleWatch | None = None
        self._fault: Exception | None = None
        self._unjudged = Unjudged()
        try:
            self._watch = make()
        except Exception as fault:  # whatever it is, it is ours and no reason to end a motor test
            self._fail(fault, "from here on")

    def _fail(self, fault: Exception, since: str) -> None:
        self._watch, self._fault = None, fault
        text = f"wear is not judged {since}, by a fault of this program ({type(fault).__name__}: {fault})"
        if self._ends_run:
            text += "; the limits that are to end the run cannot be relied on"
        self._unjudged = Unjudged(text=text, ends_run=self._ends_run)
        self._say(text)

    def on_block(self, block: Block) -> None:
        """Samples have come."""
        self._guarded(lambda watch: watch.on_block(block))

    def commanded(self) -> None:
        """A turn is about to begin."""
        self._guarded(lambda watch: watch.commanded())

    def begun(self, tick: int) -> None:
        """It has begun."""
        self._guarded(lambda watch: watch.begun(tick))

    def _guarded(self, call: Callable[[CycleWatch], T]) -> T | None:
        """What the watch answers; None where it is gone, or fails at this."""
        if self._watch is None:
            return None
        try:
            return call(self._watch)
        except Exception as fault:  # as above
            self._fail(fault, "from the present cycle on")
            return None

    def done(self, turn: TurnDone) -> Seen:
        """It is over; at the first turn that is not judged there is an event for it."""
        if self._watch is not None:
            try:
                return self._watch.done(turn)
            except Exception as fault:  # as above
                self._fail(fault, f"from {_named(turn)} on")
        if self._fault is None:
            return Seen()
        trace = "".join(traceback.format_exception(self._fault))[-TRACE_MAX:]
        self._fault = None
        kind = "cycle" if turn.number else "check"
        number = turn.number or turn.after
        return Seen(
            found=(WearUnjudged(tick=turn.end_tick, turn=kind, number=number, text=self._unjudged.text, trace=trace),)
        )

    def too_worn(self) -> tuple[str, Place | None]:
        """Why the run must end for wear."""
        return self._guarded(lambda watch: watch.too_worn()) or ("", None)

    def to_watch(self) -> str:
        """What is to be watched."""
        return self._guarded(lambda watch: watch.to_watch()) or ""

    def unjudged(self) -> Unjudged:
        """Since when, and why, nothing is judged."""
        return self._unjudged


def _named(turn: TurnDone) -> str:
    return f"cycle {turn.number}" if turn.number else f"the check after cycle {turn.after}"
