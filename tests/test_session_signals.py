"""Signals end in a stop: sent by the handler itself, confirmed by the main flow."""

from __future__ import annotations

import os
import signal
import sys

import pytest

from ramprig.errors import StoppedByUser
from ramprig.session import StopOnSignals
from ramprig.session.events import StopAsked
from ramprig.session.signals import interrupted_by_signals
from session_rig import Rig

POSIX = pytest.mark.skipif(sys.platform == "win32", reason="POSIX signals are sent to the own process")


class Panicked:
    def __init__(self) -> None:
        self.categories: list[int] = []

    def panic(self, category: int) -> bool:
        self.categories.append(category)
        return True


@POSIX
@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT"])
def test_a_signal_stops_and_the_next_pump_says_so(name: str) -> None:
    rig = Rig()
    rig.session.arm()
    rig.drive(3000)
    rig.pump(1.0)
    with StopOnSignals(rig.session) as signals:
        os.kill(os.getpid(), getattr(signal, name))
        with pytest.raises(StoppedByUser):
            rig.pump(1.0)
        assert rig.session.stop(1).confirmed
    assert signals.received == [name]
    assert rig.bridge_duty() == 0
    assert rig.of(StopAsked)[0].category == 1


@POSIX
def test_a_second_signal_within_a_second_cuts_at_once() -> None:
    target, now = Panicked(), [10.0]
    with StopOnSignals(target, now=lambda: now[0]):
        for at_s in (10.0, 10.9, 15.0):
            now[0] = at_s
            os.kill(os.getpid(), signal.SIGTERM)
    assert target.categories == [1, 0, 1]


@POSIX
def test_a_hang_up_that_was_ignored_before_stays_ignored() -> None:
    target = Panicked()
    before = signal.signal(signal.SIGHUP, signal.SIG_IGN)
    try:
        with StopOnSignals(target) as signals:
            os.kill(os.getpid(), signal.SIGHUP)
            os.kill(os.getpid(), signal.SIGTERM)
        assert signal.getsignal(signal.SIGHUP) is signal.SIG_IGN
    finally:
        signal.signal(signal.SIGHUP, before)
    assert signals.received == ["SIGTERM"]
    assert target.categories == [1]


@POSIX
@pytest.mark.parametrize("name", ["SIGINT", "SIGTERM", "SIGHUP", "SIGQUIT"])
def test_where_nothing_is_driven_a_signal_interrupts_and_a_guard_takes_its_place(name: str) -> None:
    target, number = Panicked(), getattr(signal, name)
    before = signal.getsignal(number)
    with interrupted_by_signals():
        with StopOnSignals(target) as signals:
            os.kill(os.getpid(), number)
        with pytest.raises(KeyboardInterrupt):
            os.kill(os.getpid(), number)
    assert (signals.received, target.categories) == ([name], [1])
    assert signal.getsignal(number) == before


def test_the_earlier_handlers_come_back() -> None:
    before = signal.getsignal(signal.SIGTERM)
    with StopOnSignals(Panicked()):
        assert signal.getsignal(signal.SIGTERM) != before
    assert signal.getsignal(signal.SIGTERM) == before
