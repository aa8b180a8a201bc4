"""Opening: whatever the device was doing, its outputs are off and it is known before anything else is believed."""

from __future__ import annotations

import random

import pytest

from ramprig.errors import LinkLost, Refused, WrongDevice
from ramprig.mock import MockDevice, MockPort, MockSetup
from ramprig.session import Session, Wanted
from ramprig.session.events import LimitWritten, Opened, Tripped
from ramprig_link.words import State
from session_rig import LIMITS, MASK, Rig, wanted


def test_an_opened_device_is_known_off_and_has_the_limits_wanted() -> None:
    rig = Rig()
    reading = rig.session.state()
    assert reading.outputs_off
    assert reading.state is State.OFF
    assert rig.session.identity.board == rig.device.board.board
    assert {key: rig.session.limits[key] for key in LIMITS} == LIMITS
    assert rig.of(Opened)[0].limits_digest == rig.session.limits.digest
    rig.session.arm()  # the device compares the digest of all limits
    assert rig.session.armed


def test_only_the_limits_that_differ_are_written() -> None:
    rig = Rig(wanted=wanted({("trip_ticks", 0): 5, ("trip_ma", 0): 1234}))
    assert [(event.item, event.after) for event in rig.of(LimitWritten)] == [("trip_ma", 1234)]


@pytest.mark.parametrize("range_us", [(500, 900), (2000, 2400)])
def test_a_servo_range_beyond_the_old_one_is_written_in_the_order_the_device_allows(range_us: tuple[int, int]) -> None:
    limits = {("pulse_min_us", 0): range_us[0], ("pulse_max_us", 0): range_us[1]}
    rig = Rig(wanted=wanted(limits))
    assert (rig.session.limits["pulse_min_us", 0], rig.session.limits["pulse_max_us", 0]) == range_us


def test_a_limit_the_board_cannot_keep_is_refused_by_it() -> None:
    with pytest.raises(Refused) as caught:
        Rig(wanted=wanted({("pulse_min_us", 0): 1500, ("pulse_max_us", 0): 1400}))
    assert caught.value.reason == "range"


@pytest.mark.parametrize("fault", ["garbage_after_open", "reset_on_open", "delivery_grid", "bit_errors=0.003"])
def test_a_session_opens_through_what_a_port_meets_at_open(fault: str) -> None:
    rig = Rig(faults=(fault,))
    assert rig.session.valid
    rig.session.arm()
    assert rig.session.armed


def test_a_motor_left_running_by_an_earlier_host_is_stopped() -> None:
    first = Rig()
    first.session.log(2, MASK)
    first.session.arm()
    first.drive(3000)
    first.pump(0.5)
    assert first.bridge_duty() > 0
    second = Rig(device=first.device, tag_seed=9)
    assert second.bridge_duty() == 0
    assert not second.session.armed
    assert not second.session.logging


@pytest.mark.parametrize("last_word", ["who", "beat"])
def test_the_tag_an_earlier_host_used_last_is_no_hindrance(last_word: str) -> None:
    """The same body is answered from memory, another refused (TAG-3, TAG-4): neither is believed."""
    first = Rig()
    assert first.device.controller is not None
    tag = first.tag_of(last_word)
    seed = next(seed for seed in range(100_000) if random.Random(seed).randrange(255) == tag)
    first.silence(30.0)
    second = Rig(device=first.device, tag_seed=seed)
    assert second.session.valid
    true_tick = first.device.controller.age
    assert true_tick - 50 <= second.session.tick_now() <= true_tick


def test_another_board_is_named_with_both_sides_and_left_off() -> None:
    device = MockDevice(MockSetup(), seed=1)
    with pytest.raises(WrongDevice) as caught:
        Rig(device=device, wanted=Wanted(board="vent-board", serial="V-7"))
    assert device.board.board in str(caught.value)
    assert "vent-board" in str(caught.value)
    assert device.board.serial in str(caught.value)
    assert "V-7" in str(caught.value)


def test_a_board_with_too_few_axes_is_another_device() -> None:
    with pytest.raises(WrongDevice, match="1 axes, wanted 2"):
        Rig(wanted=Wanted(axes=2))


def test_a_second_board_under_the_same_port_name_is_told_apart() -> None:
    serial = MockSetup().board.serial
    with pytest.raises(WrongDevice, match=serial):
        Rig(faults=("second_board",), wanted=Wanted(serial=serial))


def test_a_deaf_device_is_not_opened_and_the_reason_says_what_was_heard() -> None:
    port = MockPort(MockDevice(MockSetup(faults=("deaf",)), seed=1))
    with pytest.raises(LinkLost, match="no device answers"):
        Session.open(port)
    with pytest.raises(LinkLost, match="closed"):
        port.read(0.0)


def test_a_trip_found_latched_is_told_and_not_cleared() -> None:
    first = Rig()
    first.session.arm(500)
    first.drive(2000)
    first.silence(3.0)
    second = Rig(device=first.device)
    assert [event.trip for event in second.of(Tripped)] == ["link_lost"]
    assert second.session.state().state is State.TRIPPED
    with pytest.raises(Refused):
        second.session.arm()
    second.session.clear()
    second.session.arm()
    assert second.session.armed
    assert second.session.trip is None


def test_a_trip_cleared_before_the_opening_is_not_told_as_new() -> None:
    first = Rig()
    first.session.arm(500)
    first.silence(3.0)
    Rig(device=first.device).session.clear()
    third = Rig(device=first.device)
    assert third.of(Tripped) == []
    third.session.why()
    assert third.of(Tripped) == []
