"""Hands a session's blocks and events on to several listeners: recorder, expectations, live status."""

from __future__ import annotations

from collections.abc import Callable

from ramprig.session.blocks import Block
from ramprig.session.events import Event

EARLY_MAX = 1000
"""Events kept for listeners that come later: what happened while the device was opened."""


class Listeners:
    """Give `on_block` and `on_event` to `Session.open`, and add whoever wants to listen, before or after.

    Events that came while nobody listened go to the first listener that comes. All run in the session's thread, inside
    the pump: they must be quick and must not call the session.
    """

    def __init__(self) -> None:
        self._blocks: list[Callable[[Block], None]] = []
        self._events: list[Callable[[Event], None]] = []
        self._early: list[Event] = []

    def add(
        self, *, on_block: Callable[[Block], None] | None = None, on_event: Callable[[Event], None] | None = None
    ) -> None:
        """Listen from now on."""
        if on_block is not None:
            self._blocks.append(on_block)
        if on_event is not None:
            early, self._early = self._early, []
            for event in early:
                on_event(event)
            self._events.append(on_event)

    def remove(
        self, *, on_block: Callable[[Block], None] | None = None, on_event: Callable[[Event], None] | None = None
    ) -> None:
        """Listen no longer."""
        if on_block in self._blocks:
            self._blocks.remove(on_block)
        if on_event in self._events:
            self._events.remove(on_event)

    def on_block(self, block: Block) -> None:
        """For the session."""
        for listener in self._blocks:
            listener(block)

    def on_event(self, event: Event) -> None:
        """For the session."""
        if not self._events and len(self._early) < EARLY_MAX:
            self._early.append(event)
        for listener in self._events:
            listener(event)
