"""Gives orders to the device as far ahead as its queue allows, and watches for the end of each."""

from __future__ import annotations

import heapq
from collections.abc import Callable
from dataclasses import dataclass

from ramprig.session.session import Session
from ramprig_link.words import Rest

from .happened import OrderOverdue
from .plan import Kind, Order

SOON_S = 0.25
"""An order that starts this soon may take the last places of the device's queue."""
QUEUE_SPARE = 2
"""Places of the device's queue that orders of a later time leave free."""
DONE_MARGIN_S = 1.0
"""An order whose end is not told so long after it is counted as overdue."""


@dataclass(frozen=True, slots=True)
class _Sent:
    order: Order
    tag: int


class Dispatch:
    """The orders of one run. `tell` takes OrderOverdue events; `overdue` counts them."""

    def __init__(self, session: Session, *, tick_s: float, tell: Callable[[object], None]) -> None:
        self.overdue = 0
        self._session = session
        self._tell = tell
        self._soon = round(SOON_S / tick_s)
        self._margin = round(DONE_MARGIN_S / tick_s)
        self._queued: list[int] = []
        self._sent: dict[tuple[Kind, int], _Sent] = {}

    @property
    def waiting(self) -> bool:
        """Whether the end of an order is still awaited."""
        return bool(self._sent)

    def has_room(self, order: Order, now: int) -> bool:
        """Whether the device's queue has a place for the order, by the ticks that have certainly gone by."""
        while self._queued and self._queued[0] < now:
            heapq.heappop(self._queued)
        depth = self._session.identity.queue
        return len(self._queued) < (depth if order.start <= now + self._soon else depth - QUEUE_SPARE)

    def give(self, order: Order) -> None:
        """Send the order; raises what the session raises."""
        session = self._session
        match order.kind:
            case Kind.RAMP:
                tag = session.ramp(order.index, order.value, order.ticks, order.start)
            case Kind.SWING:
                tag = session.swing(order.index, order.value, order.ticks, order.start)
            case Kind.REST:
                tag = session.rest(order.index, Rest(order.value), order.start)
        heapq.heappush(self._queued, order.start)
        # an order that follows directly replaces the one before, of which no end need be told
        self._sent[order.kind, order.index] = _Sent(order, tag)

    def done(self, tag: int) -> None:
        """The device has told the end of the order with this tag."""
        for key, sent in self._sent.items():
            if sent.tag == tag:
                del self._sent[key]
                return

    def note_overdue(self, now: int) -> None:
        """Count and tell the orders whose end should have been told by now."""
        for key, sent in tuple(self._sent.items()):
            order = sent.order
            end = order.start + order.ticks
            if now > end + self._margin:
                del self._sent[key]
                self.overdue += 1
                self._tell(OrderOverdue(tick=end, order=order.kind.value, index=order.index, value=order.value))
