"""A mock, its port in virtual time and a session on it, with everything that was delivered kept for the test."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TypeVar

import numpy as np

from ramprig.mock import MockDevice, MockPort, MockSetup
from ramprig.port.base import Port
from ramprig.session import Block, Session, Wanted
from ramprig.session.events import Event

E = TypeVar("E", bound=Event)

MASK = 0b111 | 1 << 16 | 1 << 18
"""Duty, counts and current of axis 0, supply, state."""

LIMITS: dict[tuple[str, int], int] = {
    ("ceiling_duty", 0): 6000, ("slew_up_duty", 0): 20, ("slew_down_duty", 0): 40, ("trip_ma", 0): 4000,
    ("stall_duty", 0): 2500, ("stop_ticks", 0): 800, ("lease_ms", 0): 5000,
}  # fmt: skip


class Rig:
    """Opens a session; `blocks` and `events` have what came, in order."""

    def __init__(
        self,
        *,
        faults: tuple[str, ...] = (),
        seed: int = 1,
        setup: MockSetup | None = None,
        device: MockDevice | None = None,
        wanted: Wanted | None = None,
        wrap: Callable[[MockPort], Port] | None = None,
        tag_seed: int = 5,
    ) -> None:
        self.device = device or MockDevice(setup or MockSetup(faults=faults), seed=seed)
        self.mock = MockPort(self.device, seed=seed)
        self.port: Port = wrap(self.mock) if wrap is not None else self.mock
        self.blocks: list[Block] = []
        self.events: list[Event] = []
        self.session = Session.open(
            self.port,
            wanted=wanted or Wanted(limits=lambda identity: LIMITS),
            seed=tag_seed,
            on_block=self.blocks.append,
            on_event=self.events.append,
        )

    @property
    def now(self) -> float:
        return self.port.clock.now()

    def pump(self, duration_s: float) -> None:
        self.session.pump(self.now + duration_s)

    def drive(self, duty: int, *, ticks: int = 300, axis: int = 0) -> int:
        return self.session.ramp(axis, duty, ticks, self.session.start_in())

    def tag_of(self, word: str) -> int:
        """Ask for `word`; the tag that it had."""
        return self.session._core.request(word).request.tag

    def of(self, kind: type[E]) -> list[E]:
        return [event for event in self.events if isinstance(event, kind)]

    def ticks(self) -> np.ndarray:
        return np.concatenate([block.ticks for block in self.blocks])

    def bridge_duty(self) -> int:
        """The duty at the bridge of axis 0, read from the device itself; 0 while it boots."""
        controller = self.device.controller
        return 0 if controller is None else int(controller.drives[0].duty)

    def silence(self, duration_s: float) -> None:
        """Let the device's time pass while nobody pumps."""
        until_s = self.now + duration_s
        while self.now < until_s:
            self.mock.read(max(until_s - self.now, 1e-6))


def wanted(limits: Mapping[tuple[str, int], int], *, board: str | None = None, serial: str | None = None) -> Wanted:
    return Wanted(board=board, serial=serial, limits=lambda identity: limits)
