"""Samples in order and accounted for: puts data lines in order of tick, asks for missing ones, counts what is lost.

A `SampleStream` is one logging, from the answer to `log` until the next. It knows the tick of the first sample and the
period, so every sample has one tick it must bear, and what is missing is exact. Lines that come after a hole are held
back until the hole is filled or given up, so blocks leave in order, each sample once.

    next_tick               held[0]                     every tick below next_tick is delivered or in a gap
       |....... hole ........|=== line ===| ... |=== line ===|
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

from ramprig.session.blocks import Block, Layout

HELD_LINES_MAX = 64
"""Most lines held back behind a hole; then the hole is given up."""
AGAIN_TRIES = 4
"""So often a missing line is asked for before it is given up."""
TAIL_LINES_MAX = 32
"""Most lines looked for behind the last one when a logging has ended short."""
GAPS_LISTED_MAX = 10_000
"""Most gaps an accounting lists; further ones are counted in full, and in `gaps_unlisted`."""
_NUMBERS = 256


class GapReason(StrEnum):
    """Why samples are lost."""

    NOT_KEPT = "the device no longer keeps the line"
    NOT_ARRIVED = "asked for again and not arrived"
    NOT_SENT = "no line is missing: the samples were never sent"
    HELD_FULL = "too many lines waited behind the hole"
    LINK_LOST = "the link was lost"
    RESTARTED = "the device restarted"
    LOGGING_ENDED = "the logging ended before the line could be asked for"


@dataclass(frozen=True, slots=True)
class Gap:
    """`count` samples lost for good, from the unwrapped tick `first_tick` on, one `period_ticks` apart."""

    first_tick: int
    count: int
    period_ticks: int
    reason: GapReason


@dataclass(frozen=True, slots=True)
class Filled:
    """`count` samples from `first_tick` on came late or were sent again."""

    first_tick: int
    count: int


Delivery = Block | Gap | Filled


@dataclass(frozen=True, slots=True)
class Accounting:
    """Where every sample of a logging is: `expected` = `received` + `lost`, and `lost` = the sum over all gaps.

    `made` is what the device says it made, None while it has not said; then the tail behind the last line received is
    not known and not in `expected`. `complete` tells that the device said so and that it is the same number.
    `recovered` are those of `received` that came late or again, `duplicates` samples that came twice and were dropped,
    `strange_lines` lines that fit no tick or layout of this logging and were dropped.
    """

    first_tick: int
    period_ticks: int
    expected: int
    received: int
    lost: int
    gaps: tuple[Gap, ...]
    gaps_unlisted: int
    made: int | None
    asked_again: int
    recovered: int
    duplicates: int
    strange_lines: int

    @property
    def complete(self) -> bool:
        """Whether the device has told how many it made, and all of those are received or in a gap."""
        return self.made == self.expected


@dataclass(frozen=True, slots=True)
class _Held:
    block: Block
    first_tick: int
    number: int
    late: bool


class SampleStream:
    """One logging, sans-I/O: takes lines, gives blocks and gaps in order, and says which line to ask for.

    `first_tick` is the unwrapped tick of the first sample, `keep` how many lines the device keeps for `again`,
    `number_before` the number of the data line before the logging's first, None where that is not known.
    """

    def __init__(self, *, first_tick: int, layout: Layout, keep: int, number_before: int | None = None) -> None:
        self.first_tick = first_tick
        self.layout = layout
        self.keep = min(keep, _NUMBERS - 1)
        self.next_tick = first_tick
        self._end_tick: int | None = None
        self._last_number = number_before
        self._newest = (first_tick - 1, number_before)
        self._held: list[_Held] = []
        self._asked: int | None = None
        self._tries: dict[int, int] = {}
        self._gone: set[int] = set()
        self._gaps: list[Gap] = []
        self._gaps_unlisted = 0
        self._made: int | None = None
        self._received = self._lost = self._asked_again = self._recovered = self._duplicates = self._strange = 0

    # ---- what comes in ------------------------------------------------------------------------------------------

    def take(self, block: Block, number: int) -> list[Delivery]:
        """A data line has come, in whatever order."""
        if number == self._asked:
            self._asked = None
        first, last = int(block.ticks[0]), int(block.ticks[-1])
        fits = block.layout is self.layout or block.layout == self.layout
        if fits and first == self.next_tick and first > self._newest[0] and not self._held:  # as nearly every line
            self._newest = last, number
            self._pass(block, last, number)
            return [block]
        offset = first - self.first_tick
        if not fits or offset < 0 or offset % self.layout.period_ticks:
            self._strange += 1
            return self._release()
        late = first <= self._newest[0]
        if not late:
            self._newest = last, number
        if any(held.first_tick == first for held in self._held) or last < self.next_tick:
            self._duplicates += len(block)
            return self._release()
        self._held.append(_Held(block, first, number, late))
        if len(self._held) > 1:
            self._held.sort(key=lambda held: held.first_tick)
        return self._release()

    def end(self, made: int) -> list[Delivery]:
        """The device has ended the logging and says how many samples it made in all."""
        self._made = made
        self._end_tick = self.first_tick + made * self.layout.period_ticks
        return self._release()

    def abandon(self, reason: GapReason) -> list[Delivery]:
        """Nothing more will come: deliver what is held, every hole a gap."""
        self._asked = None
        return self._release(give_up=reason)

    # ---- what to ask for ----------------------------------------------------------------------------------------

    @property
    def done(self) -> bool:
        """Whether the logging has ended and all its samples are delivered or in a gap."""
        return self._end_tick is not None and not self._held and self.next_tick >= self._end_tick

    def wanted(self) -> int | None:
        """The number of the line to ask for now; None where none is missing or one is already asked for."""
        if self._asked is not None:
            return None
        return next(iter(self._candidates()), None)

    @property
    def waiting_for(self) -> int | None:
        """The number of the line that is asked for and has not come."""
        return self._asked

    def asked(self, number: int) -> None:
        """The device has been asked for this line; next comes `take`, `refused` or `unarrived`."""
        self._asked = number
        self._tries[number] = self._tries.get(number, 0) + 1
        self._asked_again += 1

    def refused(self, number: int) -> list[Delivery]:
        """The device does not keep this line."""
        self._gone.add(number)
        return self.unarrived(number)

    def unarrived(self, number: int) -> list[Delivery]:
        """The line did not come in the time it should have."""
        if self._asked == number:
            self._asked = None
        return self._release()

    def _candidates(self) -> list[int]:
        """Numbers of the lines that may fill the hole in front, the most likely first."""
        if not self.has_hole:
            return []
        return [n for n in self._missing() if n not in self._gone and self._tries.get(n, 0) < AGAIN_TRIES]

    @property
    def has_hole(self) -> bool:
        """Whether samples before those held, or before the end of a logging that is over, are missing."""
        if self._held:
            return self._held[0].first_tick > self.next_tick
        return self._end_tick is not None and self.next_tick < self._end_tick

    def _missing(self) -> list[int]:
        before, newest = self._last_number, self._newest[1]
        if self._held:
            stop = self._held[0].number
            if before is None:  # where the logging's first line is the missing one: backwards from the next
                numbers = [(stop - 1 - i) % _NUMBERS for i in range(self.keep)]
            else:
                numbers = [(before + 1 + i) % _NUMBERS for i in range((stop - before - 1) % _NUMBERS)]
            return [n for n in numbers if newest is None or (newest - n) % _NUMBERS < self.keep]
        if before is None:
            return []
        return [(before + 1 + i) % _NUMBERS for i in range(min(self.keep, TAIL_LINES_MAX))]

    # ---- what goes out ------------------------------------------------------------------------------------------

    def _release(self, *, give_up: GapReason | None = None) -> list[Delivery]:
        out: list[Delivery] = []
        while self._held:
            if self.has_hole:
                reason = give_up or self._hopeless()
                if reason is None:
                    return out
                out.append(self._lose(self._held[0].first_tick, reason))
            out.extend(self._deliver(self._held.pop(0)))
        if self.has_hole and self._end_tick is not None:
            reason = give_up or self._hopeless()
            if reason is not None:
                out.append(self._lose(self._end_tick, reason))
        return out

    def _hopeless(self) -> GapReason | None:
        """Why the hole in front can never be filled; None while it may."""
        if len(self._held) > HELD_LINES_MAX:
            return GapReason.HELD_FULL
        if self._asked is not None or self._candidates():
            return None
        if any(tries >= AGAIN_TRIES for tries in self._tries.values()):
            return GapReason.NOT_ARRIVED
        if self._held and self._last_number is not None and self._held[0].number == (self._last_number + 1) % _NUMBERS:
            return GapReason.NOT_SENT
        return GapReason.NOT_KEPT

    def _lose(self, stop_tick: int, reason: GapReason) -> Gap:
        period = self.layout.period_ticks
        gap = Gap(self.next_tick, (stop_tick - self.next_tick) // period, period, reason)
        self._lost += gap.count
        self.next_tick = stop_tick
        self._tries.clear()
        self._gone.clear()
        if len(self._gaps) < GAPS_LISTED_MAX:
            self._gaps.append(gap)
        else:
            self._gaps_unlisted += 1
        return gap

    def _deliver(self, held: _Held) -> list[Delivery]:
        part = held.block.after(self.next_tick - 1)
        self._duplicates += len(held.block) - (len(part) if part else 0)
        if part is None:
            return []
        first = self.next_tick
        self._pass(part, int(part.ticks[-1]), held.number)
        if not held.late:
            return [part]
        self._recovered += len(part)
        return [Filled(first, len(part)), part]

    def _pass(self, part: Block, last_tick: int, number: int) -> None:
        self.next_tick = last_tick + self.layout.period_ticks
        self._last_number = number
        self._received += len(part)
        self._tries.clear()
        self._gone.clear()

    def accounting(self) -> Accounting:
        """Where every sample is by now; samples held back count as neither received nor lost yet."""
        return Accounting(
            first_tick=self.first_tick,
            period_ticks=self.layout.period_ticks,
            expected=self._received + self._lost,
            received=self._received,
            lost=self._lost,
            gaps=tuple(self._gaps),
            gaps_unlisted=self._gaps_unlisted,
            made=self._made,
            asked_again=self._asked_again,
            recovered=self._recovered,
            duplicates=self._duplicates,
            strange_lines=self._strange,
        )

    @property
    def last_number(self) -> int | None:
        """The number of the newest line seen."""
        return self._newest[1]
