"""How a run begins and ends at its edges: small queues, latched trips, restarts, another tick, a disk that is full."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from ramprig.errors import Bug, FileError, LinkLost, RecordError
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.mock.setup import MockSetup
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.ending import run_plan
from ramprig.sequence.executive import Progress
from ramprig.sequence.listeners import EARLY_MAX, Listeners
from ramprig.sequence.outcome import FAILURES_KEPT, Judged, Tally, Verdict
from ramprig.sequence.rig import Rig
from ramprig.sequence.running import RunWish, _end_of, run_sequence, wanted_of
from ramprig.session.blocks import Block
from ramprig.session.events import LateHost, Opened
from ramprig.session.session import Session
from ramprig_link.words import QUEUE_MIN
from sequence_rig import EventKeeper, rehearse, sequence_of, small_bench

BUSY = """
- together:
    - - sweep: {servo: latch, shape: sine, from: -20 deg, to: 20 deg, period: 2200 ms, passes: 2}
    - - sweep: {servo: flap, shape: sine, from: -30 deg, to: 30 deg, period: 3300 ms, passes: 1}
    - - ramp: {motor: vent, to: 40 %, in: 500 ms}
      - reverse: {motor: vent, to: -40 %, in: 500 ms}
      - coast: vent
    - - sweep: {motor: fan, shape: sine, from: 10 %, to: 50 %, period: 1500 ms, passes: 2}
"""


def small_queue(setup: MockSetup) -> MockSetup:
    """The smallest queue that the protocol allows."""
    return replace(setup, board=replace(setup.board, queue=QUEUE_MIN))


@pytest.mark.parametrize("small", [False, True])
def test_branches_share_the_queue_of_the_device(small: bool, tmp_path: Path) -> None:
    change = small_queue if small else (lambda setup: setup)
    run = rehearse(tmp_path, BUSY, head="log: {period: 10 ms}\n", change=change)
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    assert run.outcome.overdue == 0


def test_any_other_exception_stops_the_motors_before_it_leaves_the_run(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def closes_no_more_than_the_port(session: Session, *_: object) -> None:
        session._core.pump.port.close()

    duties: list[int] = []
    devices: list[MockDevice] = []

    def fails(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        controller = device.controller
        if now.elapsed_s > 1.0 and controller is not None:
            duties.append(controller.drives[0].duty)
            devices.append(device)
            raise ArithmeticError("a fault of ours")

    monkeypatch.setattr(Session, "__exit__", closes_no_more_than_the_port)
    with pytest.raises(ArithmeticError, match="a fault of ours"):
        rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 500 ms}\n- hold: 5 s", meddle=fails)
    assert duties == [4000]
    assert devices[0].controller is not None
    assert devices[0].controller.drives[0].duty == 0


def session_on(device: MockDevice, listeners: Listeners) -> tuple[Session, MockPort]:
    """A session with the small bench's limits."""
    port = MockPort(device, pace="virtual", seed=1)
    session = Session.open(
        port, wanted=wanted_of(small_bench()), seed=1, on_block=listeners.on_block, on_event=listeners.on_event
    )
    return session, port


def test_a_trip_latched_from_before_is_shown_and_nothing_moves(tmp_path: Path) -> None:
    device = MockDevice(setup_of_bench(small_bench()), seed=1)
    listeners = Listeners()
    bench = small_bench()
    plan = compile_plan(sequence_of(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 500 ms}\n- hold: 1 s"), bench)
    session, port = session_on(device, listeners)
    with session:
        session.arm(500)
        device.send_break()
        for _ in range(5):
            session.pump(port.clock.now() + 0.05)
        assert session.trip is not None
        outcome = run_plan(session, plan, Rig.of(bench), clock=port.clock, listeners=listeners)
        assert outcome.verdict is Verdict.TRIPPED
        assert "still tripped from before (line break" in outcome.sentence
        assert outcome.place is None
        session.clear()
        again = run_plan(session, plan, Rig.of(bench), clock=port.clock, listeners=listeners)
        assert again.verdict is Verdict.PASSED, again


def test_a_device_that_restarts_ends_the_run(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        "- ramp: {motor: vent, to: 60 %, in: 700 ms}\n- hold: 3 s",
        faults=("brownout_on_start",),
    )
    assert run.outcome.verdict is Verdict.TRIPPED
    assert "the device restarted (brownout)" in run.outcome.sentence
    assert run.outcome.place is not None
    assert run.outcome.place.line == 4
    assert run.column("duty")[-1] == 0


def test_a_plan_for_another_tick_is_not_run(tmp_path: Path) -> None:
    bench, listeners = small_bench(), Listeners()
    plan = compile_plan(sequence_of(tmp_path, "- hold: 1 s"), bench, tick_us=500)
    assert plan.totals.least == 2000
    session, port = session_on(MockDevice(setup_of_bench(bench), seed=1), listeners)
    with session:
        outcome = run_plan(session, plan, Rig.of(bench), clock=port.clock, listeners=listeners)
    assert outcome.verdict is Verdict.LINK_LOST
    assert outcome.sentence == "the board's tick is 1000 us, and the plan was made for 500 us"


def run_with(tmp_path: Path, listener: object) -> tuple[object, MockDevice]:
    """A run that one more listener hears, and what came of it."""
    bench, listeners = small_bench(), Listeners()
    device = MockDevice(setup_of_bench(bench), seed=1)
    steps = "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 3 s"
    plan = compile_plan(sequence_of(tmp_path, steps), bench)
    session, port = session_on(device, listeners)
    assert callable(listener)
    listeners.add(on_block=listener)
    with session:
        outcome = run_plan(session, plan, Rig.of(bench), clock=port.clock, listeners=listeners, keeper=EventKeeper([]))
    return outcome, device


def test_a_log_that_cannot_be_written_stops_the_motors_and_is_the_reason(tmp_path: Path) -> None:
    blocks = 0

    def full(block: Block) -> None:
        nonlocal blocks
        blocks += 1
        if 5 < blocks < 8:  # blocks, not rows: how many rows come together is the link's affair
            raise RecordError("no space left on the device")

    outcome, device = run_with(tmp_path, full)
    assert getattr(outcome, "verdict", None) is Verdict.NOT_RECORDED
    assert "no space left" in str(outcome)
    assert device.controller is not None
    assert [drive.duty for drive in device.controller.drives] == [0, 0]


def test_a_bug_stops_the_motors_before_it_is_raised(tmp_path: Path) -> None:
    devices: list[Block] = []

    def broken(block: Block) -> None:
        devices.append(block)
        if len(devices) == 12:
            raise Bug("a promise was broken")

    with pytest.raises(Bug, match="a promise was broken"):
        run_with(tmp_path, broken)
    duty = devices[-1].column("duty", 0)
    assert duty[-1] == 0


def test_a_host_that_is_a_little_late_is_noted_and_goes_on(tmp_path: Path) -> None:
    naps: list[float] = []

    def nap(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.elapsed_s > 1.0 and not naps:
            naps.append(now.elapsed_s)
            end_s = port.clock.now() + 0.3
            while port.clock.now() < end_s:
                port.read(end_s - port.clock.now())

    steps = "- sweep: {motor: vent, shape: sine, from: 10 %, to: 40 %, period: 2 s, passes: 2}"
    run = rehearse(tmp_path, steps, meddle=nap)
    assert naps
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    assert run.of(LateHost)


def test_events_from_before_anyone_listened_are_handed_on_once_and_bounded() -> None:
    listeners = Listeners()
    event = Opened(tick=1, host_s=0.0, firmware="f", board="b", serial="s", boot=1, limits_digest="0")
    for _ in range(EARLY_MAX + 5):
        listeners.on_event(event)
    heard: list[object] = []
    later: list[object] = []
    listeners.add(on_event=heard.append)
    listeners.add(on_event=later.append)
    assert len(heard) == EARLY_MAX
    assert not later
    listeners.on_event(event)
    assert len(later) == 1
    listeners.remove(on_event=later.append)
    listeners.on_event(event)
    assert len(later) == 1


def test_a_tally_keeps_a_bounded_number_of_failures() -> None:
    tally = Tally()
    failure = Judged(tick=1, place="x:1:1", expectation="e", held=False, found="f", value=None, why="")
    for _ in range(FAILURES_KEPT + 3):
        tally.take(failure)
    assert (tally.failed, len(tally.failures)) == (FAILURES_KEPT + 3, FAILURES_KEPT)


def test_the_port_is_closed_where_the_sequence_cannot_be_carried_out(tmp_path: Path) -> None:
    bench = small_bench()
    port = MockPort(MockDevice(setup_of_bench(bench), seed=1), pace="virtual", seed=1)
    sequence = sequence_of(tmp_path, "- ramp: {motor: vant, to: 40 %, in: 400 ms}")
    with pytest.raises(FileError, match="vant"):
        run_sequence(RunWish(sequence=sequence, bench=bench), port)
    with pytest.raises(LinkLost, match="closed"):
        port.read(0.0)


def test_the_end_of_a_run_is_written_down_though_the_clocks_are_not_fitted_and_the_board_must_not_be_asked(
    tmp_path: Path,
) -> None:
    bench, listeners = small_bench(), Listeners()
    plan = compile_plan(sequence_of(tmp_path, "- hold: 1 s"), bench)
    session, port = session_on(MockDevice(setup_of_bench(bench), seed=1), listeners)
    with session:
        outcome = run_plan(session, plan, Rig.of(bench), clock=port.clock, listeners=listeners)
        session._core.new_clocks(0.001)  # as where the host has slept
        session._core.pump.hush()  # as after a stop that is not confirmed
        assert _end_of(session, plan, outcome, port.clock).end is None
        session._core.pump.speak()
