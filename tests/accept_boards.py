"""Boards for the acceptance's tests: the mock and the core in this process, in virtual time, with seeded bugs too."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import pytest

from ramprig.accept.examine import Verdict, accept
from ramprig.accept.trial import Wish
from ramprig.mock import Board, MockDevice, MockSetup
from ramprig.mock.core import library
from ramprig.mock.core.device import SimulatedDevice
from ramprig.mock.core.url import CorePort
from ramprig.mock.port import MockPort
from ramprig.port.base import Port
from ramprig_link.words import Cause

SEED = 4


def mock_port(setup: MockSetup | None = None) -> MockPort:
    return MockPort(MockDevice(setup or MockSetup(), seed=SEED), seed=SEED)


def core_port(setup: MockSetup | None = None) -> CorePort:
    return CorePort(SimulatedDevice(setup or MockSetup(), seed=SEED), seed=SEED)


def bugged_core_port(number: int, monkeypatch: pytest.MonkeyPatch) -> CorePort:
    """The core with the seeded bug of that number; built quickly rather than well."""
    right = library.defines

    def defines(board: Board) -> tuple[str, ...]:
        return (*right(board), f"-DRR_SEEDED_BUG={number}", "-O0")

    monkeypatch.setattr(library, "defines", defines)
    return core_port()


def restarter(port: MockPort | CorePort) -> Callable[[], bool]:
    def restart() -> bool:
        port.device.restart(Cause.EXTERNAL)
        return True

    return restart


def accepted(
    port: Port, *, only: str = "", energise: bool = True, restart: Callable[[], bool] | None = None
) -> Verdict:
    wish = Wish(energise=lambda trial: energise, only=only, restart=restart)
    return accept(port, wish, tell=lambda text: None)


def no_axes() -> MockSetup:
    """A board of servos alone."""
    setup = MockSetup()
    return MockSetup(board=Board(axes=0), plant=replace(setup.plant, axes=()))


def two_axes() -> MockSetup:
    """Two motors and two servos, and a tick of another length."""
    setup = MockSetup()
    plant = replace(setup.plant, axes=setup.plant.axes * 2, servos=setup.plant.servos * 2)
    return MockSetup(board=Board(axes=2, servos=2, tick_us=1250), plant=plant, baud=500_000)
