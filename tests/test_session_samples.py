"""Samples of a whole run over a bad wire: each one arrives once and in order, or is in exactly one gap."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from ramprig.errors import LinkLost
from ramprig.mock import MockPort
from ramprig.port.base import Port
from ramprig.port.faulty import FaultyPort
from ramprig.session.events import GapFilled, GapFound, LinkTrouble, OrderDone, Tripped
from ramprig.session.gaps import Accounting, GapReason
from ramprig_link.host import RetryPolicy
from ramprig_link.words import Form
from session_rig import MASK, Rig

PERIOD = 2


def check_accounting(rig: Rig, account: Accounting | None, first_tick: int) -> Accounting:
    """Every tick of the logging is in exactly one block or gap, and all numbers add up."""
    assert account is not None
    assert account.complete
    assert account.made == account.expected == account.received + account.lost
    assert account.lost == sum(gap.count for gap in account.gaps) == sum(gap.count for gap in rig.of(GapFound))
    lost = [gap.first_tick + PERIOD * np.arange(gap.count) for gap in account.gaps]
    ticks = rig.ticks()
    assert np.all(np.diff(ticks) > 0)
    every = np.sort(np.concatenate([ticks, *lost]))
    assert np.array_equal(every, first_tick + PERIOD * np.arange(account.made))
    return account


def bad_wire(seed: int, rate: float = 1e-4) -> Rig:
    rig = Rig(wrap=lambda port: FaultyPort(port, seed=seed))
    assert isinstance(rig.port, FaultyPort)
    rig.port.set_rates(flip=rate, drop=rate)
    return rig


def run_to_and_fro(rig: Rig, duration_s: float) -> tuple[Accounting, list[int]]:
    """Drive forwards and backwards for so long at 500 samples/s; the tags of all orders."""
    first_tick = rig.session.log(PERIOD, MASK)
    rig.session.arm(2000)
    tags = []
    end_s = rig.now + duration_s
    duty = 3000
    while rig.now < end_s:
        tags.append(rig.session.ramp(0, duty, 400, rig.session.start_in(0.5)))
        rig.pump(3.0)
        duty = -duty
    assert rig.session.stop(1).confirmed
    return check_accounting(rig, rig.session.stop_log(), first_tick), tags


@pytest.mark.parametrize("seed", [1, 2])
def test_a_minute_at_one_bad_byte_in_ten_thousand_loses_nothing(seed: int) -> None:
    rig = bad_wire(seed)
    account, tags = run_to_and_fro(rig, 60.0)
    assert account.lost == 0
    assert account.recovered > 0
    assert sum(filled.count for filled in rig.of(GapFilled)) == account.recovered
    assert rig.of(Tripped) == []
    assert len(rig.of(LinkTrouble)) > 5
    done = [event.tag for event in rig.of(OrderDone)]
    assert len(done) == len(set(zip(done, range(len(done)), strict=True)))
    assert len(done) <= len(tags)


@pytest.mark.soak
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_ten_minutes_at_one_bad_byte_in_ten_thousand_lose_nothing(seed: int) -> None:
    rig = bad_wire(seed)
    account, tags = run_to_and_fro(rig, 600.0)
    assert account.lost == 0
    assert account.received > 290_000
    assert rig.of(Tripped) == []
    assert len(rig.of(OrderDone)) <= len(tags)


def test_no_order_is_carried_out_twice_on_a_very_bad_wire() -> None:
    """The device answers a repeat from memory: as many orders are in the queue as were given."""
    rig = bad_wire(seed=7, rate=4e-3)
    rig.session.arm(5000)
    start = rig.session.start_in(20.0)
    controller = rig.device.controller
    assert controller is not None
    for given in range(1, 13):
        rig.session.ramp(0, 100 * given, 10, start + 100 * given)
        assert rig.session.state().queued == given
    assert rig.session.health.repeats > 0
    assert rig.session.counters().repeats > 0


@pytest.mark.parametrize("rate", [2e-3, 6e-3])
def test_on_a_very_bad_wire_every_loss_is_accounted_for(rate: float) -> None:
    rig = bad_wire(seed=3, rate=rate)
    first_tick = rig.session.log(PERIOD, MASK)
    rig.pump(20.0)
    account = check_accounting(rig, rig.session.stop_log(), first_tick)
    assert account.asked_again > 0


def test_a_line_that_cannot_keep_up_loses_samples_that_are_accounted_for() -> None:
    """At 9600 baud 1000 plain samples/s do not fit: the device drops whole lines and says how many it made."""
    from ramprig.mock import MockSetup

    rig = Rig(setup=MockSetup(baud=9600))
    first_tick = rig.session.log(PERIOD, MASK, Form.PLAIN)
    rig.pump(3.0)
    account = check_accounting(rig, rig.session.stop_log(), first_tick)
    assert account.lost > 0
    assert rig.session.counters().dropped > 0


def test_a_change_of_logging_closes_the_books_of_the_old_one() -> None:
    rig = bad_wire(seed=5, rate=1e-3)
    first = rig.session.log(PERIOD, MASK)
    rig.pump(5.0)
    second = rig.session.log(5, 0b111)
    rig.pump(5.0)
    last = rig.session.stop_log()
    old = rig.session._core.sampling.ended[0]
    assert last is not None
    for account, period in ((old, PERIOD), (last, 5)):
        assert account.complete
        assert account.expected == account.received + account.lost
        assert account.period_ticks == period
    assert old.first_tick == first
    assert last.first_tick == second > first + PERIOD * old.expected
    assert old.lost == last.lost == 0
    counted = {period: sum(len(b) for b in rig.blocks if b.layout.period_ticks == period) for period in (PERIOD, 5)}
    assert counted == {PERIOD: old.received, 5: last.received}


def test_blocks_hold_what_the_device_measured() -> None:
    rig = Rig()
    rig.session.log(PERIOD, MASK)
    rig.session.arm()
    rig.drive(3000)
    rig.pump(2.0)
    reading = rig.session.state()
    rig.session.stop_log()
    last = rig.blocks[-1]
    assert last.values.dtype == np.int32
    assert last.ticks.dtype == np.int64
    assert last.column("duty")[-1] == 3000
    assert abs(int(last.column("counts")[-1]) - reading.axes[0].counts) < 200
    assert last.column("supply_mv")[-1] == pytest.approx(12_000, abs=500)
    with pytest.raises(KeyError):
        last.column("pulse_us")
    with pytest.raises(ValueError, match="read-only"):
        last.values[0, 0] = 1


def test_plain_and_packed_samples_are_the_same() -> None:
    columns = {}
    for form in Form:
        rig = Rig()
        rig.session.log(5, MASK, form)
        rig.session.arm()
        rig.session.ramp(0, 2000, 300, 2000)
        rig.pump(3.0)
        account = rig.session.stop_log()
        assert account is not None
        assert account.lost == 0
        ticks, values = rig.ticks(), np.concatenate([block.values for block in rig.blocks])
        columns[form] = {int(tick): tuple(map(int, row)) for tick, row in zip(ticks, values, strict=True)}
    shared = columns[Form.PACKED].keys() & columns[Form.PLAIN].keys()
    assert len(shared) > 400
    duty = {form: [columns[form][tick][0] for tick in sorted(shared)] for form in Form}
    assert duty[Form.PACKED] == duty[Form.PLAIN]


def test_a_wrapper_passes_for_the_port() -> None:
    def keep(port: MockPort) -> Port:
        return FaultyPort(port, seed=1, delay_grid_s=0.016)

    rig = Rig(wrap=keep)
    first_tick = rig.session.log(PERIOD, MASK)
    rig.session.arm()
    rig.drive(2000)
    rig.pump(10.0)
    assert rig.session.armed
    assert rig.session.health.round_trip_worst_s <= 0.04
    check_accounting(rig, rig.session.stop_log(), first_tick)


@pytest.mark.parametrize("ask", [lambda rig: rig.drive(0), lambda rig: rig.session.stop_log()], ids=["ramp", "log"])
def test_samples_behind_a_hole_are_delivered_when_a_request_finds_the_link_lost(
    monkeypatch: pytest.MonkeyPatch, ask: Callable[[Rig], object]
) -> None:
    rig = Rig()
    rig.session.log(2, MASK)
    rig.pump(0.5)
    read, spoilt = rig.mock.read_until, [0]

    def spoil(until_s: float) -> bytes:
        data = read(until_s)
        if b"\nD" in data and not spoilt[0] and rig.now > begin_s + RetryPolicy().first_s * 30.5:  # of 31
            spoilt[0] = 1
            data = data.replace(b"\nD", b"\nX", 1)
        return data

    rig.device.faults.set("deaf")
    monkeypatch.setattr(rig.session._core.pump, "_read_until", spoil)
    begin_s = rig.now
    with pytest.raises(LinkLost):
        ask(rig)
    assert spoilt[0]
    assert not rig.session.valid
    assert not rig.session.logging
    accounting = rig.session.accounting
    assert accounting is not None
    assert [gap.reason for gap in accounting.gaps] == [GapReason.LINK_LOST]
    assert accounting.received == len(rig.ticks())
    assert rig.ticks()[-1] > accounting.gaps[0].first_tick


def test_samples_that_waited_for_more_are_delivered_when_the_link_is_lost(monkeypatch: pytest.MonkeyPatch) -> None:
    rig = Rig()
    rig.session.log(2, MASK)
    rig.session.arm(500)
    read, turns = rig.mock.read_until, [0]

    def lose(until_s: float) -> bytes:
        turns[0] += 1
        if turns[0] > 12:
            raise LinkLost("cut")
        return read(until_s)

    monkeypatch.setattr(rig.session._core.pump, "_read_until", lose)
    begin_s, before = rig.now, len(rig.blocks)
    with pytest.raises(LinkLost):
        rig.pump(5.0)
    accounting = rig.session.accounting
    assert accounting is not None
    assert accounting.received == len(rig.ticks())
    assert rig.now - begin_s > 0.5
    assert sum(map(len, rig.blocks[before:])) == pytest.approx((rig.now - begin_s) / 0.002, abs=60)


def test_samples_of_a_longer_pump_come_in_few_blocks() -> None:
    """Nothing is late in virtual time, so they are read together; the same samples as in many short pumps."""
    long, short = Rig(), Rig()
    for rig in (long, short):
        rig.session.log(10, MASK)
        rig.session.arm(500)
    long.pump(2.0)
    for _ in range(200):
        short.session.pump(short.now + 0.01)
    assert np.array_equal(long.ticks(), short.ticks()[: len(long.ticks())])
    values = [np.concatenate([block.values for block in rig.blocks]) for rig in (long, short)]
    assert np.array_equal(values[0], values[1][: len(values[0])])
    assert len(long.blocks) <= 3 < len(short.blocks)
