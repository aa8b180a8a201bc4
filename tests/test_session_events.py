"""What happens to a device is told: trips, restarts, another board, lost notices, a host that slept."""

from __future__ import annotations

import math

import pytest

from ramprig.errors import LinkError, RecordError, Refused, WrongDevice
from ramprig.mock import MockSetup
from ramprig.port.clock import VirtualClock
from ramprig.port.faulty import FaultyPort
from ramprig.session.blocks import Block
from ramprig.session.events import (
    DeviceExchanged,
    HostSlept,
    Learned,
    LinkTrouble,
    NoticesMissed,
    OrderDone,
    Restarted,
    StopBegun,
    Stopped,
    Tripped,
    Trouble,
    WallClockSet,
)
from ramprig.session.watch import WALL_LOOK_S, Fit, TickWatch, WallWatch
from ramprig_link.words import Cause, Rest, State
from session_rig import MASK, Rig


def running(rig: Rig, duty: int = 3000) -> Rig:
    rig.session.log(2, MASK)
    rig.session.arm(500)
    rig.drive(duty)
    rig.pump(1.5)
    return rig


def test_a_trip_is_told_with_its_values_once() -> None:
    rig = running(Rig())
    rig.device.faults.set("jammed_shaft")
    rig.pump(2.0)
    trips = rig.of(Tripped)
    assert [trip.trip for trip in trips] in (["stall"], ["overcurrent"])
    assert trips[0].learned is Learned.NOTICE
    record = rig.session.why()
    assert record is not None
    assert (record.trip.word, record.tick, record.value) == (trips[0].trip, trips[0].tick, trips[0].value)
    assert len(rig.of(Tripped)) == 1
    assert rig.session.trip == trips[0]
    assert not rig.session.armed


def test_a_listener_that_fails_at_samples_costs_no_notice_that_came_with_them() -> None:
    rig = Rig(setup=MockSetup(baud=0))
    rig.session.log(10, MASK)
    rig.session.arm()
    rig.drive(4000)
    rig.pump(0.5)
    rig.device.faults.set("jammed_shaft")
    failed_at: list[int] = []

    def on_block(block: Block) -> None:
        controller = rig.device.controller
        if controller is not None and controller.latched.trip and not failed_at:
            failed_at.append(len(rig.of(Tripped)))
            raise RecordError("the disk is full")

    rig.session._core.on_block = on_block
    with pytest.raises(RecordError, match="the disk is full"):
        rig.pump(10.0)
    assert failed_at == [0]  # the samples come before the notice
    assert [event.trip for event in rig.of(Tripped)] == ["stall"]
    assert rig.session.stop().confirmed


def test_the_trail_holds_the_ticks_around_the_trip() -> None:
    rig = running(Rig())
    assert rig.session.trail(0) is None
    rig.device.faults.set("jammed_shaft")
    rig.pump(3.0)
    trail = rig.session.trail(0)
    assert trail is not None
    assert len(trail) == rig.session.identity.trail
    assert trail.layout.period_ticks == 1
    trip_tick = rig.of(Tripped)[0].tick
    assert trip_tick is not None
    assert trail.ticks[0] < trip_tick <= trail.ticks[-1]
    assert set(trail.column("duty")[trail.ticks >= trip_tick + 1]) == {0}


def test_a_trip_whose_notice_was_lost_is_found_by_asking() -> None:
    rig = running(Rig(wrap=lambda port: FaultyPort(port, seed=1)))
    port = rig.port
    assert isinstance(port, FaultyPort)
    rig.device.faults.set("jammed_shaft")
    port.set_rates(drop=1.0)
    while rig.bridge_duty():
        rig.pump(0.01)
    rig.pump(0.1)  # the notices are on the wire by now
    port.set_rates()
    rig.pump(2.0)
    assert [trip.learned for trip in rig.of(Tripped)] == [Learned.ASKED]
    assert not rig.session.armed
    rig.session.clear()
    rig.pump(1.0)
    assert len(rig.of(Tripped)) == 1


def test_missing_notices_are_counted_and_the_state_is_asked_for() -> None:
    rig = Rig(wrap=lambda port: FaultyPort(port, seed=1))
    port = rig.port
    assert isinstance(port, FaultyPort)
    rig.session.arm()
    start = rig.session.start_in(0.5)
    for order in range(4):
        rig.session.ramp(0, 100 * order, 10, start + 100 * order)
    port.set_rates(drop=1.0)
    rig.pump(0.75)  # the first three are done by now
    port.set_rates()
    rig.pump(1.0)
    assert [event.count for event in rig.of(NoticesMissed)] == [3]
    assert len(rig.of(OrderDone)) == 1
    reading = rig.session.latest.reading
    assert reading is not None
    assert reading.tick > start + 300


def test_a_restart_is_told_by_the_boot_notice_and_disarms_for_good() -> None:
    rig = running(Rig())
    rig.device.restart(Cause.WATCHDOG)
    rig.pump(2.0)
    restarts = rig.of(Restarted)
    assert [(event.boot_before, event.boot_after, event.cause) for event in restarts] == [(1, 2, "watchdog")]
    assert not rig.session.armed
    assert not rig.session.valid
    with pytest.raises(LinkError, match="opened again"):
        rig.session.arm()
    account = rig.session.accounting
    assert account is not None
    assert account.expected == account.received + account.lost


def test_a_session_opened_again_after_a_restart_is_disarmed_and_knows_why() -> None:
    rig = running(Rig())
    rig.device.restart(Cause.WATCHDOG)
    rig.pump(2.0)
    rig.session.reopen()
    assert rig.session.valid
    assert not rig.session.armed
    assert [trip.trip for trip in rig.of(Tripped)] == ["restarted"]


def test_a_restart_whose_boot_notice_was_lost_is_found_by_its_ticks() -> None:
    rig = Rig(wrap=lambda port: FaultyPort(port, seed=1))
    port = rig.port
    assert isinstance(port, FaultyPort)
    rig.pump(3.0)
    port.set_rates(drop=1.0)
    rig.device.restart(Cause.POWER)
    rig.pump(0.4)
    port.set_rates()
    rig.pump(2.0)
    restarts = rig.of(Restarted)
    assert len(restarts) == 1
    assert restarts[0].boot_after == 2
    assert restarts[0].seen_by != "its notice"


def test_another_number_of_starts_is_a_restart_though_the_ticks_fit() -> None:
    """As after a restart within moments of the opening, whose notice was lost."""
    rig = Rig()
    controller = rig.device.controller
    assert controller is not None
    controller.boot += 1
    rig.session._core.suspect("what a line says")
    rig.pump(0.5)
    assert [(event.boot_after, event.seen_by) for event in rig.of(Restarted)] == [(2, "what a line says")]
    assert not rig.session.valid


def test_a_beat_that_finds_the_outputs_off_has_the_number_of_starts_asked_for() -> None:
    """As after a restart within moments of the opening: the ticks fit, and no notice has come."""
    rig = running(Rig())
    controller = rig.device.controller
    assert controller is not None
    controller.boot += 1
    controller._enter(State.OFF)
    rig.pump(0.5)
    assert [event.seen_by for event in rig.of(Restarted)] == ["outputs off without a notice"]
    assert not rig.session.armed


def test_a_brown_out_on_start_is_a_restart_with_its_cause() -> None:
    rig = Rig(faults=("brownout_on_start",))
    rig.session.arm()
    rig.drive(3000)
    rig.pump(2.0)
    assert [event.cause for event in rig.of(Restarted)] == ["brownout"]


def test_another_board_in_mid_session_is_told_and_ends_it() -> None:
    rig = Rig()
    rig.pump(3.0)
    rig.device.faults.set("second_board")
    with pytest.raises(WrongDevice, match="second"):
        rig.pump(5.0)
    assert len(rig.of(DeviceExchanged)) == 1
    assert not rig.session.valid


def test_a_stop_by_another_hand_is_told() -> None:
    """Somebody at a terminal on the same line types `stop`."""
    rig = running(Rig())
    rig.mock.write(b"stop\n")
    rig.pump(0.5)
    assert [(event.category, event.source) for event in rig.of(StopBegun)] == [(0, "bare")]
    assert [event.state for event in rig.of(Stopped)] == ["off"]
    assert not rig.session.armed


def test_garbled_lines_are_told_both_ways() -> None:
    rig = Rig(wrap=lambda port: FaultyPort(port, seed=2))
    port = rig.port
    assert isinstance(port, FaultyPort)
    port.set_rates(flip=3e-3)
    rig.session.log(2, MASK)
    rig.pump(20.0)
    kinds = {event.trouble for event in rig.of(LinkTrouble)}
    assert {Trouble.GARBLED_HERE, Trouble.GARBLED_THERE, Trouble.REPEATED} <= kinds
    assert rig.of(Restarted) == []


def test_a_host_that_slept_is_told_by_the_ticks() -> None:
    """The monotonic clock of some systems stands still in sleep, the device's ticks do not."""
    rig = Rig()
    rig.pump(3.0)
    rig.device.advance(40_000)
    rig.device.transmit()
    rig.pump(3.0)
    slept = rig.of(HostSlept)
    assert len(slept) == 1
    assert slept[0].slept_s == pytest.approx(40.0, abs=0.3)
    assert rig.of(Restarted) == []
    assert rig.session.valid
    assert rig.device.controller is not None
    assert abs(rig.session.tick_now() - rig.device.controller.age) < 50


def test_a_wall_clock_that_is_set_is_told() -> None:
    class Settable(VirtualClock):
        set_by_s = 0.0

        def wall(self) -> float:
            return super().wall() + self.set_by_s

    clock = Settable()
    watch = WallWatch(clock)
    clock.advance(5.0)
    assert watch.moved_s(clock.now()) is None
    clock.set_by_s = -3600.0
    clock.advance(5.0)
    assert watch.moved_s(clock.now()) == pytest.approx(-3600.0)
    assert watch.look_s == clock.now() + WALL_LOOK_S
    clock.advance(5.0)
    assert watch.moved_s(clock.now()) is None
    assert WallClockSet(tick=None, host_s=0.0, moved_s=-3600.0).moved_s == -3600.0


def test_a_tick_is_judged_by_the_last_good_exchange() -> None:
    watch = TickWatch(0.001)
    assert watch.judge(5, 0.0, 0.0)[0] is Fit.RIGHT
    watch.take(10_000, 100.0, 100.01)
    assert watch.judge(11_000, 101.0, 101.01)[0] is Fit.RIGHT
    assert watch.judge(400, 101.0, 101.01)[0] is Fit.BEHIND
    fit, off_s = watch.judge(71_000, 101.0, 101.01)
    assert fit is Fit.AHEAD
    assert off_s == pytest.approx(60.0, abs=0.1)


def test_orders_are_carried_out_at_their_tick_and_told_when_done() -> None:
    rig = Rig()
    rig.session.log(1, MASK | 1 << 12)
    rig.session.arm()
    start = rig.session.start_in(0.3)
    tags = [
        rig.session.ramp(0, 2000, 200, start),
        rig.session.swing(0, 1400, 500, start + 50),
        rig.session.rest(0, Rest.BRAKE, start + 100),
    ]
    rig.pump(3.0)
    rig.session.stop_log()
    assert sorted(event.tag for event in rig.of(OrderDone)) == sorted(tags)
    duty = {int(t): int(d) for b in rig.blocks for t, d in zip(b.ticks, b.column("duty"), strict=True)}
    assert duty[start] == 0
    assert duty[start + 1] == 10
    assert duty[start + 200] == 2000


def test_what_is_refused_says_why_in_words() -> None:
    rig = Rig()
    with pytest.raises(Refused, match="not in this state") as caught:
        rig.session.ramp(0, 1000, 10, rig.session.start_in())
    assert (caught.value.word, caught.value.reason) == ("ramp", "state")
    rig.session.arm()
    with pytest.raises(Refused) as caught:
        rig.session.write_limits({("ceiling_duty", 0): 9000})
    assert caught.value.reason == "armed"
    rig.session.disarm()
    rig.session.write_limits({("ceiling_duty", 0): 9000})
    rig.session.arm()
    assert rig.session.armed


@pytest.mark.parametrize("drift_ppm", [-3000.0, 0.0, 150.0, 3000.0])
@pytest.mark.parametrize("grid", [False, True])
def test_the_present_tick_is_never_taken_too_late_and_the_drift_is_found(drift_ppm: float, grid: bool) -> None:
    faults = (f"clock_drift={drift_ppm}",) * bool(drift_ppm) + ("delivery_grid",) * grid
    rig = Rig(setup=MockSetup(faults=faults))
    for _ in range(600):
        rig.pump(0.5)
        controller = rig.device.controller
        assert controller is not None
        assert controller.age - 60 <= rig.session.tick_now() <= controller.age
    fit = rig.session.clock_fit
    assert fit is not None
    assert fit.drift_ppm == pytest.approx(drift_ppm, abs=25.0)
    assert abs(fit.drift_ppm - drift_ppm) <= fit.drift_error_ppm


@pytest.mark.parametrize("fault", ["delivery_grid", "delivery_grid=60"])
def test_the_lead_of_an_order_grows_with_the_round_trip(fault: str) -> None:
    rig = Rig(faults=(fault,))
    rig.session.arm()
    for step in range(50):
        rig.session.ramp(0, 100 * (step % 5), 10, rig.session.start_in(0.0))
        rig.pump(0.05 + 0.001 * step)
    assert rig.of(Tripped) == []
    assert rig.session.armed
    worst_s = rig.session.health.round_trip_worst_s
    lead_ticks = rig.session.start_in(0.0) - rig.session.tick_now()
    assert lead_ticks >= math.floor(2 * worst_s / 0.001)
