"""The guard: each trip at its exact tick, which one wins, what may be cleared, and the thermal model by its formula."""

from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mock_host import Bench, Key
from ramprig.mock import Board, Controller, LimitStore, ScriptedInputs
from ramprig.mock.guard import Heat, apart
from ramprig_link.words import THERMAL_TICKS, Cause


def running(limits: dict[Key, int] | None = None, *, duty: int = 3000) -> Bench:
    """Armed under a long lease, at `duty` with no lock and no slew in the way, and counts that follow it."""
    loose: dict[Key, int] = {
        ("slew_up_duty", 0): 10000, ("slew_down_duty", 0): 10000, ("dwell_ticks", 0): 1, ("lease_ms", 0): 5000,
        ("stall_duty", 0): 0,
    }  # fmt: skip
    bench = Bench({**loose, **(limits or {})})
    bench.run(20)
    bench.arm(5000)
    bench.ramp(duty)
    bench.run(1)
    assert bench.duty == duty
    return bench


def trips(bench: Bench) -> list[tuple[int, tuple[str, ...]]]:
    return [(notice.tick, notice.fields) for notice in bench.told("trip")]


def test_overcurrent_trips_after_ticks_in_a_row() -> None:
    # SPEC TRIP-3, TRIP-1
    bench = running({("trip_ma", 0): 2000, ("trip_ticks", 0): 3})
    bench.inputs.set(current_ma=[-2001])
    bench.run(2)
    bench.inputs.set(current_ma=[-2000])
    bench.run(1)
    bench.inputs.set(current_ma=[-2001])
    told, before = len(bench.notices), bench.tick
    assert bench.run(2).duty == 3000
    assert bench.run(1).duty == 0
    assert trips(bench) == [(before + 3, ("overcurrent", "0", "-2001", "2000"))]
    assert bench.words_since(told) == ["trip overcurrent 0 -2001 2000", "off tripped"]
    assert bench.ok("why") == ("overcurrent", str(before + 3), "0", "-2001", "2000")


def test_the_offset_is_taken_off_before_anything_is_judged() -> None:
    bench = running({("trip_ma", 0): 2000, ("trip_ticks", 0): 1, ("offset_ma", 0): 150})
    bench.inputs.set(current_ma=[2150])
    bench.run(3)
    assert trips(bench) == []
    assert bench.ok("state")[7] == "2000"
    bench.inputs.set(current_ma=[2151])
    bench.run(1)
    assert trips(bench)[0][1] == ("overcurrent", "0", "2001", "2000")


@pytest.mark.parametrize(
    ("supply_mv", "fields"),
    [(16001, ("overvoltage", "0", "16001", "16000")), (8999, ("undervoltage", "0", "8999", "9000"))],
)
def test_the_supply_trips_after_ticks_in_a_row(supply_mv: int, fields: tuple[str, ...]) -> None:
    # SPEC TRIP-4
    bench = running({("supply_ticks", 0): 4})
    for mv in (16000, 9000, supply_mv, supply_mv, supply_mv, 12000):
        bench.inputs.set(supply_mv=mv)
        bench.run(1)
    assert trips(bench) == []
    bench.inputs.set(supply_mv=supply_mv)
    before = bench.tick
    bench.run(6)
    assert trips(bench) == [(before + 4, fields)]


def test_undervoltage_is_off_at_zero() -> None:
    bench = running({("under_mv", 0): 0})
    bench.inputs.set(supply_mv=0)
    bench.run(20)
    assert trips(bench) == []


def test_stall_trips_when_the_timer_reaches_its_ticks() -> None:
    # SPEC TRIP-5
    bench = running({("stall_duty", 0): 3000, ("stall_ticks", 0): 10, ("stall_counts", 0): 4})
    begin = bench.tick + 1  # the guard first sees the duty in the tick after it was set
    bench.run(12)
    assert trips(bench) == [(begin + 9, ("stall", "0", "3000", "10"))]


def test_a_stall_timer_begins_again_with_enough_counts() -> None:
    bench = running({("stall_duty", 0): 3000, ("stall_ticks", 0): 10, ("stall_counts", 0): 4})
    bench.run(8)
    bench.inputs.set(counts=[3])
    bench.run(1)
    bench.inputs.set(counts=[4])
    bench.run(1)
    begin = bench.tick
    bench.run(12)
    assert trips(bench) == [(begin + 9, ("stall", "0", "3000", "10"))]


def test_below_the_stall_duty_nothing_stalls_and_without_encoder_neither() -> None:
    for limits in ({("stall_duty", 0): 3001}, {("stall_duty", 0): 3000, ("sense", 0): 0}):
        bench = running({**limits, ("stall_ticks", 0): 5})
        bench.run(30)
        assert trips(bench) == []


@pytest.mark.parametrize(("sense", "duty"), [(1, 3000), (1, -3000), (-1, 3000), (-1, -3000)])
def test_counts_against_the_duty_are_the_wrong_way(sense: int, duty: int) -> None:
    # SPEC TRIP-6
    bench = running({("stall_duty", 0): 3000, ("wrong_counts", 0): 24, ("sense", 0): sense}, duty=duty)
    ahead = sense if duty > 0 else -sense
    for counts in (0, 10, 30, 20, 7):
        bench.inputs.set(counts=[counts * ahead])
        bench.run(1)
    assert trips(bench) == []
    bench.inputs.set(counts=[6 * ahead])
    bench.run(1)
    assert trips(bench) == [(bench.tick, ("wrong_way", "0", "24", "24"))]


def test_overspeed_is_judged_at_every_32nd_tick() -> None:
    # SPEC TRIP-7
    bench = running({("speed_counts", 0): 320})
    while bench.tick % 32:
        bench.run(1)
    mark = bench.inputs.counts[0]
    bench.inputs.set(counts=[mark - 320])
    bench.run(32)
    assert trips(bench) == []
    bench.inputs.set(counts=[mark - 641])
    bench.run(31)
    assert trips(bench) == []
    bench.run(1)
    assert trips(bench) == [(bench.tick, ("overspeed", "0", "321", "320"))]


def test_counts_that_wrap_are_no_jump() -> None:
    bench = running({("stall_duty", 0): 3000, ("stall_ticks", 0): 5})
    for counts in (2**30, 2**31 - 12, 2**31 - 2, -(2**31) + 8, -(2**31) + 18):
        bench.inputs.set(counts=[counts])
        bench.run(3)
    assert trips(bench) == []
    bench.inputs.set(counts=[2**31 - 8])
    bench.run(1)
    assert trips(bench)[0][1] == ("wrong_way", "0", "26", "24")


@given(a=st.integers(-(2**31), 2**31 - 1), way=st.integers(-(2**31) + 1, 2**31 - 1))
def test_counts_are_apart_by_the_short_way_round(a: int, way: int) -> None:
    assert apart((a + way + 2**31) % 2**32 - 2**31, a) == way


# ---- heat ----------------------------------------------------------------------------------------------------------


def ticks_to_trip(heat: Heat, current_ma: int) -> int:
    steps = 0
    while not heat.reached:
        heat.add(current_ma * current_ma * THERMAL_TICKS)
        steps += 1
    return steps * THERMAL_TICKS


@pytest.mark.parametrize("times", [1.05, 1.1, 1.2, 1.5, 2.0, 3.0, 5.0])
def test_the_thermal_model_trips_cold_when_iec_60255_149_says(times: float) -> None:
    # SPEC TRIP-8; IEC 60255-149:2013, cold curve t = tau ln(I^2 / (I^2 - (k I_B)^2)), as several relay manuals print it
    rated_ma, thermal_s = 1000, 60
    heat = Heat(tick_us=1000)
    heat.refresh(rated_ma=rated_ma, thermal_s=thermal_s)
    expected_s = thermal_s * math.log(times**2 / (times**2 - 1.0))
    got_s = ticks_to_trip(heat, round(times * rated_ma)) / 1000
    assert got_s == pytest.approx(expected_s, rel=0.01, abs=THERMAL_TICKS / 1000)


@pytest.mark.parametrize(("times", "per_tau"), [(1.05, 1.048602), (1.1, 0.644357), (1.2, 0.358945), (1.5, 0.141500)])
def test_the_thermal_model_trips_hot_when_iec_60255_149_says(times: float, per_tau: float) -> None:
    # IEC 60255-149:2013, hot curve t = tau ln((I^2 - Ip^2) / (I^2 - (k I_B)^2)) with Ip = 0.9 k I_B
    rated_ma, thermal_s = 1000, 600
    heat = Heat(tick_us=1000)
    heat.refresh(rated_ma=rated_ma, thermal_s=thermal_s)
    for _ in range(12 * thermal_s * 1000 // THERMAL_TICKS):
        heat.add(900 * 900 * THERMAL_TICKS)
    assert heat.root_ma == pytest.approx(900, abs=1)
    assert ticks_to_trip(heat, round(times * rated_ma)) / 1000 == pytest.approx(per_tau * thermal_s, rel=0.01)


def test_just_below_rated_it_never_trips() -> None:
    heat = Heat(tick_us=1000)
    heat.refresh(rated_ma=1000, thermal_s=1)
    for _ in range(10_000):
        heat.add(999 * 999 * THERMAL_TICKS)
    assert not heat.reached
    assert heat.root_ma in (997, 998, 999)


def test_overload_is_a_stop_under_power_and_clears_below_seven_eighths() -> None:
    # SPEC TRIP-8, TRIP-1, CLEAR-1
    bench = running({("rated_ma", 0): 1000, ("thermal_s", 0): 1, ("trip_ma", 0): 9000, ("slew_down_duty", 0): 1000})
    bench.inputs.set(current_ma=[3000])
    told = len(bench.notices)
    while not bench.told("trip"):
        bench.run(1)
    assert bench.tick % THERMAL_TICKS == 0
    value = int(bench.told("trip")[0].fields[2])
    assert 1000 <= value < 1256  # a step of 64 ms adds up to 0.064 x 3000^2
    assert bench.words_since(told) == [f"trip overload 0 {value} 1000", "stop 1 trip"]
    assert (bench.duty, bench.run(1).duty, bench.run(1).duty) == (2000, 1000, 0)
    assert bench.state == "tripped"
    bench.inputs.set(current_ma=[0])
    assert bench.refusal("clear") == "cause"
    while bench.controller.watches[0].heat.squared_ma2 * 8 > 7 * 1000 * 1000:
        bench.run(1)
    assert bench.ok("clear") == ()


def test_no_rated_current_no_overload() -> None:
    bench = running({("rated_ma", 0): 0, ("thermal_s", 0): 1, ("trip_ma", 0): 130000})
    bench.inputs.set(current_ma=[131071])
    bench.run(10)
    assert bench.told("trip")[0].fields[0] == "overcurrent"
    assert bench.controller.watches[0].heat.squared_ma2 <= 65535**2


# ---- which trip, and what then -------------------------------------------------------------------------------------


def test_of_several_in_one_tick_the_lowest_wins() -> None:
    # SPEC TRIP-1
    bench = running({("trip_ticks", 0): 1, ("supply_ticks", 0): 1})
    bench.inputs.set(current_ma=[9000], supply_mv=20000)
    bench.controller.line_break()
    bench.run(1)
    assert [fields[0] for _, fields in trips(bench)] == ["line_break"]


def test_the_lower_axis_wins_within_one_trip() -> None:
    store = {("trip_ticks", 0): 1, ("trip_ticks", 1): 1}
    bench = Bench(store, board=Board(axes=2))
    bench.run(30)
    bench.arm()
    bench.inputs.set(current_ma=[0, 5000])
    bench.run(1)
    assert trips(bench)[0][1][:2] == ("overcurrent", "1")


def test_a_trip_of_category_0_cuts_a_stop_short_and_is_the_one_latched() -> None:
    # SPEC TRIP-2
    bench = running({("slew_down_duty", 0): 10, ("trip_ticks", 0): 1})
    told = len(bench.notices)
    bench.refusal(f"ramp 0 0 0 {bench.tick}")
    bench.run(3)
    assert bench.state == "stopping"
    bench.inputs.set(current_ma=[5000])
    bench.run(1)
    words = bench.words_since(told)
    assert [word.split()[:2] for word in words] == [
        ["trip", "late_order"], ["stop", "1"], ["trip", "overcurrent"], ["off", "tripped"],
    ]  # fmt: skip
    assert bench.ok("why")[0] == "overcurrent"
    assert bench.ok("state")[:2] == ("tripped", "overcurrent")


def test_a_trip_of_category_1_is_passed_over_while_stopping() -> None:
    # SPEC TRIP-2
    bench = running({("slew_down_duty", 0): 10, ("rated_ma", 0): 1, ("thermal_s", 0): 1, ("stop_ticks", 0): 200})
    bench.ok("stop 1")
    bench.inputs.set(current_ma=[500])
    bench.run(150)
    assert bench.state == "stopping"
    assert trips(bench) == []


def test_nothing_trips_that_is_not_live() -> None:
    # SPEC TRIP-1
    bench = Bench({("trip_ticks", 0): 1})
    bench.inputs.set(current_ma=[9000], supply_mv=0, counts=[10000])
    bench.run(100)
    assert trips(bench) == []
    assert bench.ok("why") == ("none", "0", "0", "0", "0")


def test_a_current_too_high_before_arming_trips_at_once_after_it() -> None:
    bench = Bench()
    bench.inputs.set(current_ma=[9000])
    bench.run(30)
    bench.ask(f"arm 200 {bench.store.digest()}")
    assert trips(bench)[0][0] == bench.tick


@pytest.mark.parametrize(
    ("bad", "good"), [({"current_ma": [5000]}, {"current_ma": [100]}), ({"supply_mv": 7000}, {"supply_mv": 12000})]
)
def test_clear_waits_for_the_cause_to_go(bad: dict[str, int], good: dict[str, int]) -> None:
    # SPEC CLEAR-1, WHY-1
    bench = running()
    assert bench.refusal("clear") == "state"
    bench.inputs.set(**bad)  # type: ignore[arg-type]  # the keywords are of two types
    bench.run(10)
    assert bench.refusal("clear") == "cause"
    assert bench.refusal("arm 100 00000000") == "state"
    bench.inputs.set(**good)  # type: ignore[arg-type]  # as above
    bench.run(1)
    assert bench.ok("clear") == ()
    assert bench.state == "off"
    assert bench.ok("why")[0] in ("overcurrent", "undervoltage")
    assert bench.refusal("clear") == "state"
    bench.arm()


@pytest.mark.parametrize(("cause", "number"), [(Cause.BROWNOUT, "2"), (Cause.WATCHDOG, "3")])
def test_a_start_after_a_brownout_or_watchdog_is_tripped_until_cleared(cause: Cause, number: str) -> None:
    # SPEC RUN-1, WHY-1
    bench = Bench()
    bench.controller = Controller(bench.board, bench.inputs, bench.store, boot=7, cause=cause)
    bench.notices.clear()
    bench.run(1)
    assert bench.words_since(0) == [f"boot 7 {cause.word}", f"trip restarted 0 {number} 0", "off tripped"]
    assert bench.ok("why") == ("restarted", "0", "0", number, "0")
    assert bench.refusal("trail 0 0") == "gone"
    assert bench.ok("clear") == ()
    bench.arm()


def test_a_failed_self_test_never_clears() -> None:
    # SPEC CLEAR-1
    bench = Bench()
    bench.controller = Controller(bench.board, bench.inputs, bench.store, self_test=3)
    bench.run(1)
    assert bench.told("trip")[0].fields == ("self_test", "0", "3", "0")
    assert bench.refusal("clear") == "cause"


def test_a_board_without_sensors_trips_on_none_of_them() -> None:
    # SPEC TRIP-4
    from ramprig_link.words import Cap

    board = Board(caps=Cap.BREAK)
    inputs = ScriptedInputs(supply_mv=0)
    inputs.set(current_ma=[9000])
    bench = Bench(board=board)
    bench.controller = Controller(board, inputs, LimitStore(board, values={("sense", 0): 0}))
    bench.store = bench.controller.limits
    bench.run(1)
    bench.arm()
    bench.keep_alive(100)
    assert bench.state == "armed"
    assert bench.ok("state")[3:5] == ("0", "0")
    assert bench.refusal("log 10 2 packed") == "range"
    assert bench.refusal("log 10 65536 packed") == "range"
