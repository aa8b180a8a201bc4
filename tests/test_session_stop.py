"""Stopping: confirmed by the device and by measurement, or said not to be; and every way a run can end."""

from __future__ import annotations

import threading
from dataclasses import replace

import numpy as np
import pytest

from ramprig.errors import Bug, LinkError, LinkLost, StoppedByUser
from ramprig.port.clock import VirtualClock
from ramprig.port.faulty import FaultyPort
from ramprig.session import NOT_CONFIRMED
from ramprig.session.events import LateHost, StopAsked, StopJudged, Stopped, Tripped
from ramprig.session.stop import StopRun
from ramprig_link.host import Answered, HostLink
from ramprig_link.words import State, Trip
from session_rig import LIMITS, MASK, Rig, wanted


def running(rig: Rig, duty: int = 3000) -> Rig:
    rig.session.log(2, MASK)
    rig.session.arm(500)
    rig.drive(duty)
    rig.pump(1.5)
    assert rig.bridge_duty() == duty
    return rig


@pytest.mark.parametrize("category", [0, 1])
def test_a_stop_is_confirmed_by_the_device_and_by_current_and_speed(category: int) -> None:
    rig = running(Rig())
    report = rig.session.stop(category)
    assert report.confirmed
    assert report.verdict == "confirmed"
    assert rig.bridge_duty() == 0
    times = (report.acknowledged_s, report.off_s, report.quiet_s, report.still_s)
    assert all(time is not None and 0.0 <= time < 5.0 for time in times)
    assert report.acknowledged_s is not None
    assert report.acknowledged_s < 0.05
    assert report.off_s is not None
    assert report.off_s < (0.05 if category == 0 else 0.2)
    assert [event.confirmed for event in rig.of(StopJudged)] == [True]
    assert not rig.session.armed


def test_category_1_falls_by_slope_and_category_0_cuts() -> None:
    between = {}
    for category in (0, 1):
        rig = running(Rig())
        stopped_at = rig.session.tick_now()
        rig.session.stop(category)
        rig.session.stop_log()
        duties = np.concatenate([block.column("duty")[block.ticks >= stopped_at] for block in rig.blocks])
        between[category] = int(np.count_nonzero((duties > 0) & (duties < 3000)))
    assert between[0] == 0
    assert between[1] == pytest.approx(3000 / LIMITS["slew_down_duty", 0] / 2, abs=2)  # a sample every 2 ticks


def test_a_deaf_device_gives_not_confirmed_and_its_lease_ends_the_run() -> None:
    rig = running(Rig())
    rig.device.faults.set("deaf")
    begin = rig.now
    report = rig.session.stop(1)
    assert not report.confirmed
    assert report.verdict.startswith(NOT_CONFIRMED)
    assert "the device does not answer" in report.verdict
    assert rig.now - begin < 2.0
    assert rig.bridge_duty() == 0  # by its own link_lost trip
    assert report.sendings >= 5


def test_after_a_stop_that_is_not_confirmed_nothing_renews_the_lease(monkeypatch: pytest.MonkeyPatch) -> None:
    rig = running(Rig())
    rig.device.faults.set("deaf")
    rig.session.stop(1)
    rig.device.faults.set("deaf", False)
    sent: list[bytes] = []
    monkeypatch.setattr(rig.mock, "write", sent.append)
    rig.pump(2.0)
    with pytest.raises(LinkError, match="not confirmed"):
        rig.session.ask("beat")
    assert sent == []
    monkeypatch.undo()
    rig.session.reopen()
    assert rig.session.valid
    rig.pump(1.0)
    assert rig.session.state().trip is Trip.LINK_LOST


def test_unplugged_gives_not_confirmed_and_link_lost() -> None:
    rig = running(Rig())
    rig.device.faults.set("unplug")
    with pytest.raises(LinkLost):
        rig.pump(0.5)
    report = rig.session.stop(1)
    assert not report.confirmed
    assert any("cable" in reason for reason in report.missing)
    account = rig.session.accounting
    assert account is not None
    assert account.expected == account.received + account.lost


def test_a_shaft_that_never_comes_to_rest_is_not_confirmed() -> None:
    rig = running(Rig())
    axis = rig.device.plant.axes[0]
    axis.load_nm = -3 * axis.static_nm * axis.parameters.motor.gear_ratio  # a vent that drags the motor on
    report = rig.session.stop(0, run_down_s=1.0)
    assert not report.confirmed
    assert report.off_s is not None
    assert report.missing == ("the shaft has not come to rest",)


def test_a_current_that_does_not_fall_is_not_confirmed() -> None:
    rig = running(Rig())
    rig.device.faults.set("current_offset", 700.0)
    report = rig.session.stop(0, run_down_s=1.0)
    assert report.missing == ("the motor current has not fallen",)


def test_a_current_that_falls_and_rises_again_is_not_confirmed(monkeypatch: pytest.MonkeyPatch) -> None:
    rig = running(Rig())
    begin_s, read = rig.now, rig.session._core.pump._read_until

    def rising(until_s: float) -> bytes:
        if rig.now > begin_s + 0.08 and not rig.device.faults.on():
            rig.device.faults.set("current_offset", 700.0)
        return read(until_s)

    monkeypatch.setattr(rig.session._core.pump, "_read_until", rising)
    report = rig.session.stop(0, run_down_s=1.0)
    assert report.still_s is not None
    assert report.missing == ("the motor current has not fallen",)


def test_a_lost_stop_is_sent_again() -> None:
    rig = running(Rig(wrap=lambda port: FaultyPort(port, seed=4)))
    port = rig.port
    assert isinstance(port, FaultyPort)
    port.set_rates(drop=0.08)
    report = rig.session.stop(1)
    port.set_rates()
    assert report.sendings >= 1
    assert rig.bridge_duty() == 0


def test_a_panic_stops_from_another_thread_and_the_owner_learns_of_it() -> None:
    rig = running(Rig())
    thread = threading.Thread(target=rig.session.panic, args=(0,))
    thread.start()
    thread.join()
    with pytest.raises(StoppedByUser):
        rig.pump(1.0)
    report = rig.session.stop(0)
    assert report.confirmed
    assert rig.of(StopAsked)[0].category == 0
    rig.pump(0.1)
    assert rig.session.state().state is State.OFF


def test_no_beat_goes_out_after_a_panic() -> None:
    rig = running(Rig())
    rig.device.faults.set("deaf")
    rig.session.panic(1)
    rig.silence(0.01)  # the stop itself is lost on the way
    rig.device.faults.set("deaf", False)
    for _ in range(100):
        with pytest.raises(StoppedByUser):
            rig.pump(0.02)
        rig.silence(0.02)
    assert rig.bridge_duty() == 0
    assert rig.session.stop(0).confirmed
    record = rig.session.why()
    assert record is not None
    assert record.trip is Trip.LINK_LOST


def test_a_hung_runner_is_stopped_by_the_lease_and_said_to_have_been_late() -> None:
    rig = running(Rig())
    rig.silence(2.0)
    assert rig.bridge_duty() == 0
    rig.pump(0.2)
    assert [event.trip for event in rig.of(Tripped)] == ["link_lost"]
    assert rig.of(LateHost)[0].late_s == pytest.approx(2.0, abs=0.01)
    assert rig.session.health.worst_late_s == pytest.approx(2.0, abs=0.01)
    assert not rig.session.armed


def test_pumping_keeps_the_lease() -> None:
    rig = running(Rig())
    rig.pump(5.0)
    assert rig.session.armed
    assert rig.of(Tripped) == []
    assert rig.bridge_duty() == 3000


def test_leaving_with_an_exception_stops_first_and_closes_the_port() -> None:
    rig = running(Rig())
    with pytest.raises(RuntimeError, match="mine"), rig.session:
        raise RuntimeError("mine")
    assert rig.session.last_stop is not None
    assert rig.session.last_stop.confirmed
    assert rig.bridge_duty() == 0
    with pytest.raises(LinkLost):
        rig.mock.read(0.0)


def test_leaving_in_order_leaves_the_outputs_off() -> None:
    rig = running(Rig())
    with rig.session:
        pass
    assert rig.bridge_duty() == 0
    assert rig.session.last_stop is not None
    assert rig.session.last_stop.confirmed


def test_a_callback_that_calls_the_session_is_a_bug() -> None:
    rig = Rig()
    rig.session._core.on_event = lambda event: rig.session.pump(rig.now + 1.0)
    rig.session.panic(0)
    with pytest.raises(Bug, match="callbacks"):
        rig.session.stop(0)


def test_another_thread_may_not_pump() -> None:
    rig = Rig()
    caught: list[BaseException] = []

    def pump() -> None:
        try:
            rig.pump(0.1)
        except Bug as bug:
            caught.append(bug)

    thread = threading.Thread(target=pump)
    thread.start()
    thread.join()
    assert len(caught) == 1


def test_a_stop_in_no_state_to_stop_is_confirmed_too() -> None:
    assert Rig().session.stop(1).confirmed


def test_what_waits_to_be_sent_when_a_stop_is_asked_for_is_never_sent() -> None:
    rig = running(Rig())
    answers: list[Answered] = []
    assert rig.session._core.pump.post("counters", then=answers.append)
    assert rig.session.stop(1).confirmed
    rig.pump(0.5)
    assert answers == []


def test_a_stop_by_slope_that_is_not_over_in_its_time_is_cut(monkeypatch: pytest.MonkeyPatch) -> None:
    slow = {**LIMITS, ("slew_down_duty", 0): 4}  # by slope it takes 0.75 s
    rig = running(Rig(wanted=wanted(slow)))
    begin_s = rig.now
    monkeypatch.setattr(StopRun, "_stop_time_s", lambda _: 0.2)
    report = rig.session.stop(1)
    assert (report.confirmed, report.escalated, report.category) == (True, True, 1)
    assert 0.2 < rig.of(Stopped)[-1].host_s - begin_s < 0.35


def test_a_shaft_is_at_rest_within_what_the_board_takes_for_rest() -> None:
    rig = Rig(wanted=wanted({**LIMITS, ("still_counts", 0): 50}))
    here = rig.session.state()
    (axis,) = here.axes
    stop = StopRun(rig.session._core, 1, run_down_s=1.0)
    crept = [replace(here, axes=(replace(axis, counts=axis.counts + counts),)) for counts in (50, 51)]
    assert [stop._moved(here, later) for later in crept] == [[False], [True]]


@pytest.mark.parametrize(("away_s", "told"), [(0.15, 1), (0.05, 0)])
def test_a_runner_that_calls_in_late_while_armed_is_told_from_a_tenth_of_a_second_on(away_s: float, told: int) -> None:
    rig = running(Rig())
    rig.silence(away_s)
    rig.pump(0.2)
    assert len(rig.of(LateHost)) == told
    assert rig.session.armed


def test_several_beats_fall_into_one_lease_while_armed(monkeypatch: pytest.MonkeyPatch) -> None:
    rig = running(Rig())
    plain = rig.mock.write
    beats: list[bool] = []

    def write(data: bytes) -> None:
        beats.append(b" beat " in data)
        plain(data)

    monkeypatch.setattr(rig.mock, "write", write)
    rig.pump(0.5)  # the lease of `running`
    assert sum(beats) >= 4


def test_a_stop_asked_for_while_a_request_is_made_ready_is_followed_by_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    """As by a signal handler between the pump's look at the stop and its writing."""
    rig = running(Rig())
    pump = rig.session._core.pump
    ask = pump.link.ask
    sent: list[bytes] = []

    def interrupted(word: str, *args: object, now_s: float) -> bytes:
        rig.session.panic(1)
        return ask(word, *args, now_s=now_s)

    monkeypatch.setattr(pump.link, "ask", interrupted)
    monkeypatch.setattr(rig.mock, "write", sent.append)
    with pytest.raises(StoppedByUser):
        rig.session.ask("beat")
    assert sent == []
    monkeypatch.undo()
    assert rig.session.stop(1).confirmed


def test_a_session_that_is_left_after_a_stop_that_is_not_confirmed_sends_nothing_and_raises_nothing(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    rig = running(Rig())
    monkeypatch.setattr(StopRun, "_moved", lambda *_: [True])
    assert not rig.session.stop(1, run_down_s=0.2).confirmed
    assert rig.session.logging
    sent: list[bytes] = []
    monkeypatch.setattr(rig.mock, "write", sent.append)
    rig.session.close()
    assert sent == []


def duties_between(rig: Rig, at_tick: int) -> int:
    """Samples since the tick with a duty between that of `running` and none: a stop by slope has some, a cut none."""
    rig.session.stop_log()
    duties = np.concatenate([block.column("duty")[block.ticks >= at_tick] for block in rig.blocks])
    return int(np.count_nonzero((duties > 0) & (duties < 3000)))


def test_a_cut_that_is_asked_for_right_after_a_stop_is_not_undone_by_the_confirming_of_the_stop() -> None:
    rig = running(Rig())
    at_tick = rig.session.tick_now()
    rig.session.panic(1)
    rig.session.panic(0)
    report = rig.session.stop(1)
    assert report.confirmed
    assert report.category == 0
    assert duties_between(rig, at_tick) == 0


@pytest.mark.parametrize("after_s", [0.0, 0.1])
def test_a_cut_that_the_system_did_not_take_is_sent_again_until_it_is_acknowledged(
    monkeypatch: pytest.MonkeyPatch, after_s: float
) -> None:
    slow = {**LIMITS, ("slew_down_duty", 0): 4}  # by slope it takes 0.75 s
    rig = running(Rig(wanted=wanted(slow)))
    begin_s, send, read, cuts = rig.now, rig.mock.urgent, rig.mock.read_until, [0]

    def urgent(data: bytes) -> bool:
        if data != HostLink.urgent_stop(0):
            return send(data)
        cuts[0] += 1
        return cuts[0] > 1 and send(data)

    def press_again(until_s: float) -> bytes:
        if rig.now >= begin_s + after_s and not cuts[0]:
            rig.session.panic(0)
        return read(until_s)

    monkeypatch.setattr(rig.mock, "urgent", urgent)
    monkeypatch.setattr(rig.session._core.pump, "_read_until", press_again)
    report = rig.session.stop(1)
    assert report.confirmed
    assert report.escalated
    off = rig.of(Stopped)[-1]
    assert off.host_s - begin_s < after_s + 0.2
    assert cuts[0] == 2


def test_a_stop_is_confirmed_though_every_block_and_event_raises_and_then_that_is_raised() -> None:
    rig = running(Rig())

    def broken(what: object) -> None:
        raise ArithmeticError("a listener is broken")

    rig.session._core.on_block = rig.session._core.on_event = broken
    with pytest.raises(ArithmeticError, match="a listener is broken"):
        rig.session.stop(1)
    assert rig.session.last_stop is not None
    assert rig.session.last_stop.confirmed
    assert rig.bridge_duty() == 0


def test_a_host_that_is_held_up_within_a_read_is_noticed() -> None:
    """As by SIGSTOP, or a computer that sleeps: a session is inside a read nearly all the time."""
    rig = Rig()
    rig.session.arm()
    rig.pump(0.5)
    pump, clock = rig.session._core.pump, rig.mock.clock
    assert isinstance(clock, VirtualClock)
    read = pump._read_until

    def held_up(until_s: float) -> bytes:
        pump._read_until = read
        clock.advance(8.0)
        return read(until_s)

    pump._read_until = held_up
    rig.pump(1.0)
    assert [event.late_s for event in rig.of(LateHost)] == [pytest.approx(7.5, abs=0.5)]  # the read itself took some
    assert rig.of(Tripped)[0].trip == "link_lost"
