"""What a bring-up meets: a board that restarts under the shell, and one that takes only a part of what is asked."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import pytest

from ramprig.errors import Refused, Tripped
from ramprig.mock.device import MockDevice
from ramprig.mock.port import MockPort
from ramprig.mock.url import make_setup, parse_mock
from ramprig.shell import commands as c
from ramprig.shell.hold import Hold
from ramprig_link.words import Cause
from shell_bench import BENCH, BENCH_FILE, DeskBench

TURNS_MAX = 20_000
"""Far more turns of the desk than any of these tests needs."""


class Bounded:
    """Fails where the desk goes on for ever."""

    def __init__(self) -> None:
        self.turns = 0

    def __call__(self) -> None:
        self.turns += 1
        assert self.turns < TURNS_MAX, "the desk waits for what does not come"


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[DeskBench]:
    desk_bench = DeskBench(tmp_path / "runs", aside=Bounded())
    yield desk_bench
    if not desk_bench.desk.dead:
        assert desk_bench.desk.close()
    assert desk_bench.duty == 0


# ---- a board that restarts -------------------------------------------------------------------------------------------


@pytest.mark.parametrize("logging", [False, True])
def test_a_board_that_browns_out_at_the_motors_start_is_explained_at_once(bench: DeskBench, logging: bool) -> None:
    bench.fault("brownout_on_start", 3.0)
    if logging:
        bench.type("log start")
    bench.type("arm")
    with pytest.raises(Tripped):
        bench.type("jog vent 30 % for 1 s")
    said = [*bench.hear(), *bench.let_pass(1.0)]
    assert "the device has restarted (brownout); it is disarmed. 'reopen' opens it anew." in said
    assert "likely   the board browned out: its supply fell too low." in said
    assert any(line.startswith("next     Feed the board apart from the motors") for line in said)
    assert bench.let_pass(2.0) == []


def test_the_end_does_not_wait_for_the_trail_of_a_board_that_has_restarted(tmp_path: Path) -> None:
    bench = DeskBench(tmp_path / "runs", "brownout_on_start", aside=Bounded())
    bench.type("arm")
    with pytest.raises(Tripped):
        bench.type("jog vent 30 % for 1 s")
    assert bench.desk.close()
    assert "likely   the board browned out: its supply fell too low." in bench.hear()


def test_a_board_that_is_reset_while_nothing_runs_is_explained_too(bench: DeskBench) -> None:
    bench.let_pass(0.5)
    bench.port.device.restart(Cause.EXTERNAL)
    said = bench.let_pass(2.0)
    assert "the device has restarted (external); it is disarmed. 'reopen' opens it anew." in said
    assert "likely   the board lost its power, or was reset by its button or by opening the port." in said
    bench.type("reopen")
    bench.type("arm")


# ---- a board whose queue is full -------------------------------------------------------------------------------------


@pytest.fixture
def short_queue(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[DeskBench]:
    def port(*faults: str) -> MockPort:
        setup, seed = make_setup(parse_mock(f"mock:?bench={BENCH_FILE}"))
        device = MockDevice(replace(setup, board=replace(setup.board, queue=8)), seed=seed)
        return MockPort(device, pace="virtual")

    monkeypatch.setattr("shell_bench.mock_port", port)
    desk_bench = DeskBench(tmp_path / "runs", aside=Bounded())
    desk_bench.type("arm")
    yield desk_bench
    assert desk_bench.desk.close()


def test_a_jog_whose_end_finds_no_place_in_the_queue_is_stopped(short_queue: DeskBench) -> None:
    bench = short_queue
    for at in range(7):
        bench.type(f"move latch {at % 3} deg")
    with pytest.raises(Refused, match="full"):
        bench.type("jog vent 20 % for 1 s")
    said = bench.let_pass(3.0)
    assert bench.duty == 0
    assert any(line.startswith("stop confirmed: outputs off") for line in said)


def test_a_held_jog_whose_end_finds_no_place_in_the_queue_is_stopped(short_queue: DeskBench) -> None:
    bench = short_queue
    hold = Hold(ceiling_duty=8000)
    started_s = bench.port.clock.now()
    hold.press(1, started_s)

    def fill() -> None:
        """Take all places of the queue shortly before the key counts as let go."""
        session = bench.desk._session
        assert session is not None
        if 0.5 < bench.port.clock.now() - started_s < 0.6:
            while session.state().queued < 8:
                session.swing(0, 1500, 0, session.start_in(5.0))

    bench.desk._aside = fill
    with pytest.raises(Refused, match="full"):
        bench.perform(c.JogHold(BENCH.motor("vent"), hold))
    said = bench.let_pass(3.0)
    assert bench.duty == 0
    assert any(line.startswith("stop confirmed: outputs off") for line in said)
