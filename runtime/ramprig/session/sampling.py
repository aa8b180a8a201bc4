"""The loggings of a session: which one a data line belongs to, when to ask for a lost one, and what became of each."""

from __future__ import annotations

from collections.abc import Callable

from ramprig.session.blocks import Block, Layout
from ramprig.session.gaps import Accounting, Delivery, GapReason, SampleStream

AGAIN_WAIT_S = 0.3
"""A line asked for comes within this time of the device's `ok`, or counts as lost once more."""
HOLD_LINES_MAX = 64
"""Most lines kept while an answer to `log` is awaited: until it comes, it is not known which logging they belong to."""
LOGGINGS_KEPT = 100
"""Accountings of so many ended loggings are kept."""


class Sampling:
    """Takes data lines in whatever order and gives blocks, gaps and filled gaps in order of tick to `deliver`.

    `keep` is the number of lines the device keeps. Lines that belong to no logging of this session are counted in
    `unasked`.
    """

    def __init__(self, keep: int, deliver: Callable[[Delivery], None]) -> None:
        self.keep = keep
        self.unasked = 0
        self.ended: list[Accounting] = []
        self.stream: SampleStream | None = None
        self._deliver = deliver
        self._holding: list[tuple[Block, int]] | None = None
        self._number: int | None = None
        self._awaited: tuple[int, float] | None = None

    # ---- the logging itself --------------------------------------------------------------------------------------

    def hold(self) -> None:
        """A `log` request goes out: keep lines back until its answer tells which logging they belong to."""
        self._holding = []

    def resume(self) -> None:
        """The `log` request was refused: the old logging goes on."""
        held, self._holding = self._holding or [], None
        for block, number in held:
            self.line(block, number)

    def ended_with(self, made: int) -> None:
        """The device ended the present logging, having made `made` samples, and has sent all of them before."""
        self.resume()
        if self.stream is not None:
            self._out(self.stream.end(made))
            self._close_if_done()

    def begin(self, first_tick: int, layout: Layout) -> None:
        """A new logging has begun; what is left of an old one is given up."""
        self.abandon(GapReason.LOGGING_ENDED)
        held, self._holding = self._holding or [], None
        early = [number for block, number in held if int(block.ticks[0]) < first_tick]
        self.unasked += len(early)
        self._number = early[-1] if early else self._number
        self.stream = SampleStream(first_tick=first_tick, layout=layout, keep=self.keep, number_before=self._number)
        for block, number in held[len(early) :]:
            self._take(block, number)

    def abandon(self, reason: GapReason) -> None:
        """Nothing more will come of the present logging: every hole is a gap."""
        if self.stream is None:
            return
        self._out(self.stream.abandon(reason))
        self._close()

    def restart(self) -> None:
        """The device has restarted: the logging is over, and lines are numbered anew."""
        self.abandon(GapReason.RESTARTED)
        self._holding = None
        self._number = None

    @property
    def settled(self) -> bool:
        """Whether no logging is under way and all of the last one is delivered or in a gap."""
        return self.stream is None

    @property
    def accounting(self) -> Accounting | None:
        """Of the present logging, else of the last one; None before the first."""
        if self.stream is not None:
            return self.stream.accounting()
        return self.ended[-1] if self.ended else None

    # ---- lines ---------------------------------------------------------------------------------------------------

    def line(self, block: Block, number: int) -> None:
        """A data line has come."""
        if self._holding is not None and len(self._holding) < HOLD_LINES_MAX:
            self._holding.append((block, number))
        else:
            self._take(block, number)

    def _take(self, block: Block, number: int) -> None:
        if self._awaited is not None and self._awaited[0] == number:
            self._awaited = None
        if self.stream is None:
            self.unasked += 1
            self._number = number
            return
        self._out(self.stream.take(block, number))
        self._number = self.stream.last_number
        self._close_if_done()

    # ---- asking again --------------------------------------------------------------------------------------------

    @property
    def wanting(self) -> bool:
        """Whether `to_ask` may have something to say: a line is missing or awaited."""
        return self.stream is not None and (self.stream.has_hole or self._awaited is not None)

    def to_ask(self, now_s: float) -> int | None:
        """The number of the line to ask for now, which is then held to be asked for."""
        stream = self.stream
        if stream is None or self._holding is not None:
            return None
        if self._awaited is not None:
            number, until_s = self._awaited
            if now_s < until_s:
                return None
            self._awaited = None
            self._out(stream.unarrived(number))
            self._close_if_done()
        number_wanted = stream.wanted()
        if number_wanted is not None:
            stream.asked(number_wanted)
        return number_wanted

    def asked(self, number: int, *, kept: bool, now_s: float) -> None:
        """The device's answer to `again`: the line follows, or is no longer kept."""
        if self.stream is None:
            return
        if kept:
            if self.stream.waiting_for == number:  # else it came before the answer, which was lost and repeated
                self._awaited = (number, now_s + AGAIN_WAIT_S)
        else:
            self._out(self.stream.refused(number))
            self._close_if_done()

    def unask(self) -> None:
        """The request for a line was given up with all others: its answer will not come."""
        if self.stream is not None and self.stream.waiting_for is not None:
            self._awaited = None
            self._out(self.stream.unarrived(self.stream.waiting_for))
            self._close_if_done()

    def _out(self, deliveries: list[Delivery]) -> None:
        for delivery in deliveries:
            self._deliver(delivery)

    def _close_if_done(self) -> None:
        if self.stream is not None and self.stream.done:
            self._close()

    def _close(self) -> None:
        if self.stream is not None:
            self.ended.append(self.stream.accounting())
            del self.ended[:-LOGGINGS_KEPT]
        self.stream = None
        self._awaited = None
