"""`ramprig accept` accepts the boards there are, puts their limits back, and finds what is wrong with a bench."""

from __future__ import annotations

import os

import pytest

from accept_boards import accepted, core_port, mock_port, no_axes, restarter, two_axes
from posix_board import PosixBoard
from ramprig.accept.examine import Verdict, accept
from ramprig.accept.report import verdict_sentence
from ramprig.accept.talk import Talk
from ramprig.accept.trial import Power, Wish
from ramprig.mock import MockSetup
from ramprig.mock.core import why_not
from ramprig.mock.setup import TimedFault
from ramprig.port.open import open_port
from ramprig_link.words import LIMITS

needs_core = pytest.mark.skipif(why_not() is not None, reason=why_not() or "")
needs_terminals = pytest.mark.skipif(not hasattr(os, "openpty"), reason="this system has no pseudo-terminals")

OWN = {("ceiling_duty", 0): 2600, ("dwell_ticks", 0): 180, ("stop_ticks", 0): 300, ("pulse_max_us", 0): 1850}
"""Limits that are nobody's default."""


def untested(verdict: Verdict) -> list[str]:
    return [f"{result.check.name}: {result.untested}" for result in verdict.results if result.word == "not tested"]


def test_the_mock_is_accepted_and_every_check_is_made() -> None:
    port = mock_port(MockSetup(limits=OWN))
    verdict = accepted(port, restart=restarter(port))
    assert verdict.failed == {}
    assert untested(verdict) == []
    assert verdict.exit_code == 0
    assert verdict_sentence(verdict) == "ACCEPTED: ramprig-mock MOCK-0001."
    assert port.device.controller is not None
    left = port.device.controller.limits
    assert {key: left[key] for key in left} == {key: OWN.get(key, LIMITS[key[0]].default) for key in left}


@needs_core
def test_the_firmware_core_is_accepted_and_every_check_is_made() -> None:
    port = core_port()
    verdict = accepted(port, restart=restarter(port))
    assert verdict.failed == {}
    assert untested(verdict) == []
    assert verdict.unrestored == []


@needs_core
@needs_terminals
@pytest.mark.process
def test_the_posix_program_is_accepted() -> None:
    with PosixBoard("--lockstep") as board, open_port(f"lockstep:{board.port}") as port:
        verdict = accepted(port)
    assert verdict.failed == {}
    assert [text.split(":")[0] for text in untested(verdict)] == ["restart", "line-break"]


def test_a_board_of_two_axes_and_another_tick_is_accepted() -> None:
    verdict = accepted(mock_port(two_axes()))
    assert verdict.failed == {}
    assert untested(verdict) == ["restart: it was not asked for: --restart"]


def test_a_board_without_axes_is_accepted_and_no_check_with_a_motor_is_called_passed() -> None:
    verdict = accepted(mock_port(no_axes()))
    assert verdict.failed == {}
    by_motor = {result.check.name for result in verdict.results if result.check.power is Power.MOTOR}
    without = {result.check.name for result in verdict.results if "has no axis" in result.untested}
    assert without == by_motor | {"late-orders", "order-queue", "overload"}
    assert verdict_sentence(verdict).startswith("ACCEPTED: ramprig-mock MOCK-0001, as a board without motors; ")


def test_without_power_nothing_is_armed_and_nothing_moves() -> None:
    port = mock_port()
    talk = Talk(port)
    verdict = accept(port, Wish(energise=lambda trial: False), tell=lambda text: None, talk=talk)
    assert verdict.failed == {}
    assert "not accepted for a motor" in verdict_sentence(verdict)
    states = {line for _, way, line in talk.trace if way == "<" and b" armed " in line}
    assert states == set()
    assert not [line for _, way, line in talk.trace if way == ">" and b" arm " in line]


@pytest.mark.parametrize(
    ("fault", "what"),
    [
        ("leads_swapped:0", "the board tripped: wrong_way"),
        ("jammed_shaft:0", "the board tripped: stall"),
        ("lead_open:0", "the board tripped: stall"),
    ],
)
def test_a_bench_that_is_wired_wrongly_is_not_accepted(fault: str, what: str) -> None:
    verdict = accepted(mock_port(MockSetup(faults=(fault,))), only="ramps-and-slew")
    assert verdict.exit_code == 1
    assert any(what in sentence for sentence in verdict.failed[""])


def test_a_tick_of_another_length_than_told_is_found() -> None:
    verdict = accepted(mock_port(MockSetup(faults=("clock_drift=30000",))), only="time", energise=False)
    assert list(verdict.failed) == ["WHO-1"]


def test_a_link_that_goes_in_the_midst_ends_with_what_was_found() -> None:
    setup = MockSetup(limits=OWN, timed_faults=(TimedFault(text="unplug", from_s=20.0),))
    verdict = accepted(mock_port(setup))
    assert "unplug" in verdict.lost
    assert verdict.results
    assert "could not be left as it was" in verdict.unrestored[0]
    assert verdict_sentence(verdict).startswith("NOT ACCEPTED")


def test_a_noisy_line_is_told_and_not_taken_for_a_fault_of_the_words() -> None:
    verdict = accepted(mock_port(MockSetup(faults=("bit_errors=0.0003",))), only="identity", energise=False)
    assert verdict.results[1].check.name == "identity"
    assert verdict.exit_code in (0, 1)


def test_a_stop_from_the_user_ends_it_with_all_off_and_the_limits_as_they_were() -> None:
    port = mock_port(MockSetup(limits=OWN))
    talk = Talk(port)

    def running(text: str) -> None:
        if text == "passed      first-motion":
            talk.panic(0)

    verdict = accept(port, Wish(energise=lambda trial: True), tell=running, talk=talk)
    assert verdict.exit_code == 5
    assert verdict.unrestored == []
    assert verdict.results[-1].check.name == "ramps-and-slew"
    assert port.device.controller is not None
    left = port.device.controller.limits
    assert {key: left[key] for key in OWN} == OWN
    assert port.device.controller.state.word == "off"


def test_a_second_stop_while_the_board_is_put_back_costs_neither_the_report_nor_the_limits() -> None:
    port = mock_port(MockSetup(limits=OWN))

    class Twice(Talk):
        """Is stopped again as soon as the first stop was taken note of."""

        let_go_count = 0

        def let_go(self) -> None:
            super().let_go()
            self.let_go_count += 1
            if self.let_go_count < 6:  # whoever is afraid presses more than once
                self.panic(self.let_go_count % 2)

    talk = Twice(port)

    def running(text: str) -> None:
        if text == "passed      first-motion":
            talk.panic(1)

    verdict = accept(port, Wish(energise=lambda trial: True), tell=running, talk=talk)
    assert (verdict.exit_code, verdict.unrestored, verdict.failed) == (5, [], {})
    assert verdict.stopped == "Stopped by the user; the report has what was checked before."
    assert port.device.controller is not None
    left = port.device.controller.limits
    assert {key: left[key] for key in OWN} == OWN


def test_the_answer_to_a_stop_from_the_user_is_no_fault_of_the_board(monkeypatch: pytest.MonkeyPatch) -> None:
    """A signal comes while the port is read, mostly, and the answer may come with the same bytes."""
    port = mock_port()
    talk, read, count = Talk(port), port.read, [0]

    def stopped_within(timeout_s: float) -> bytes:
        count[0] += talk.beat_s is not None
        if count[0] != 40:
            return read(timeout_s)
        count[0] += 1
        talk.panic(0)
        return read(0.05) + read(0.05) + read(0.05)

    monkeypatch.setattr(port, "read", stopped_within)
    verdict = accept(port, Wish(energise=lambda trial: True), tell=lambda text: None, talk=talk)
    assert count[0] > 40
    assert (verdict.exit_code, verdict.failed) == (5, {})
