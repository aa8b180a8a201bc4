"""Orders: their queue, when they start, how they move, what replaces what, and what is told at their end."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from mock_host import Bench
from ramprig.mock.orders import Motion, OrderQueue
from ramprig_link.words import HORIZON_TICKS


def flat(bench: Bench) -> Bench:
    """Past the first dwell, so that a duty may leave zero."""
    bench.run(30)
    return bench.arm()


DUTY = st.integers(-10000, 10000)


@given(begin=DUTY, goal=DUTY, ticks=st.integers(1, 5000), at=st.integers(0, 6000))
def test_a_motion_is_the_formula(begin: int, goal: int, ticks: int, at: int) -> None:
    # SPEC ORDER-4
    motion = Motion()
    motion.set(begin)
    motion.begin(goal, ticks=ticks, age=100)
    motion.advance(100 + at)
    way = 1 if goal > begin else -1
    assert motion.value == (begin + way * (abs(goal - begin) * at // ticks) if at < ticks else goal)
    assert motion.moving == (at < ticks)


def test_a_new_motion_begins_where_the_old_one_is_at_that_tick() -> None:
    motion = Motion()
    motion.begin(100, ticks=10, age=0)
    motion.begin(0, ticks=5, age=5)
    assert motion.value == 50
    motion.advance(6)
    assert motion.value == 40


def test_orders_leave_the_queue_by_start_and_then_by_arrival() -> None:
    # SPEC ORDER-1, ORDER-3
    queue = OrderQueue(8)
    for tag, start in enumerate((30, 10, 20, 10)):
        queue.add("ramp", 0, goal=0, ticks=0, start=start, tag=tag)
    assert queue.due == 10
    assert [order.tag for order in queue.take(20)] == [1, 3, 2]
    assert (queue.due, queue.free) == (30, 7)


def test_an_order_waits_for_its_tick_and_moves_linearly() -> None:
    # SPEC ORDER-4, ORDER-7
    bench = flat(Bench({("slew_up_duty", 0): 10000}))
    tag = bench.ramp(1000, ticks=10, ahead=5)
    start = bench.tick + 5
    assert (bench.run(4).duty, bench.run(1).duty) == (0, 0)
    assert [bench.run(1).duty for _ in range(11)] == [*range(100, 1001, 100), 1000]
    assert [(notice.tick, notice.fields) for notice in bench.told("done")] == [(start + 10, (f"{tag:02x}",))]


def test_done_waits_for_the_bridge() -> None:
    bench = flat(Bench())
    bench.ramp(1000)
    bench.run(9)
    assert (bench.duty, bench.told("done")) == (900, [])
    bench.run(1)
    assert (bench.duty, len(bench.told("done"))) == (1000, 1)


def test_a_replaced_order_gets_no_done() -> None:
    # SPEC ORDER-3, ORDER-7
    bench = flat(Bench())
    bench.ramp(3000, ticks=50)
    bench.run(10)
    tag = bench.ramp(0)
    bench.run(40)
    assert [notice.fields for notice in bench.told("done")] == [(f"{tag:02x}",)]


def test_a_late_order_is_refused_and_trips() -> None:
    # SPEC ORDER-2
    bench = flat(Bench())
    told = len(bench.notices)
    answer = bench.ask(f"ramp 0 100 0 {bench.tick - 3}")
    assert (answer.ok, answer.reason) == (False, "late")
    assert bench.words_since(told) == ["trip late_order 0 4 0", "stop 1 trip", "off tripped"]
    assert bench.notices[-1].tick == answer.tick


def test_an_order_for_the_present_tick_is_late_and_for_the_next_is_not() -> None:
    bench = flat(Bench())
    assert bench.ask(f"rest 0 brake {bench.tick + 2}").ok
    assert bench.refusal(f"rest 0 brake {bench.tick + 1}") == "late"


def test_beyond_the_horizon_is_far_and_the_other_half_is_late() -> None:
    bench = flat(Bench())
    assert bench.ask(f"rest 0 brake {bench.tick + 1 + HORIZON_TICKS}").ok
    assert bench.refusal(f"rest 0 brake {bench.tick + 2 + HORIZON_TICKS}") == "far"
    assert bench.state == "armed"
    assert bench.refusal(f"rest 0 brake {bench.tick + 1 + 2**31}") == "late"
    assert bench.told("trip")[0].fields == ("late_order", "0", str(2**31 - 1), "0")


def test_a_full_queue_refuses() -> None:
    # SPEC ORDER-1
    bench = flat(Bench())
    depth = bench.board.queue
    free = [bench.ok(f"rest 0 coast {bench.tick + 500}")[0] for _ in range(depth)]
    assert free == [str(n) for n in range(depth - 1, -1, -1)]
    assert bench.refusal(f"rest 0 coast {bench.tick + 500}") == "full"
    assert bench.state == "armed"


@pytest.mark.parametrize(
    ("body", "reason"),
    [
        ("ramp 1 0 0 500", "index"),
        ("ramp 0 6001 0 500", "range"),
        ("ramp 0 -6001 0 500", "range"),
        (f"ramp 0 0 {HORIZON_TICKS + 1} 500", "range"),
        ("ramp 0 0 0", "args"),
        ("ramp 0 +5 0 500", "args"),
        ("swing 0 1099 0 500", "range"),
        ("swing 0 1901 0 500", "range"),
        ("swing 0 0 1 500", "range"),
        ("swing 1 1500 0 500", "index"),
        ("rest 0 hold 500", "args"),
        ("rest 4 brake 500", "index"),
    ],
)
def test_orders_are_refused_by_index_and_range_before_the_state(body: str, reason: str) -> None:
    # SPEC ORDER-4, ORDER-5, BAD-5
    assert Bench().refusal(body) == reason
    assert flat(Bench()).refusal(body) == reason


def test_orders_need_the_state_armed() -> None:
    assert Bench().refusal("ramp 0 100 0 500") == "state"


def test_a_ceiling_above_the_boards_own_does_not_let_more_through() -> None:
    bench = Bench()
    assert bench.ok("limit ceiling_duty 0 6000") == ("6000",)
    assert flat(bench).ask(f"ramp 0 6000 0 {bench.tick + 50}").ok


def pulse_of(bench: Bench) -> int:
    return bench.controller.pulses[0].pulse_ns


def test_the_first_pulse_is_home_and_the_swing_keeps_to_the_slew() -> None:
    # SPEC ORDER-5
    bench = flat(Bench())
    answer = bench.ask(f"swing 0 1510 0 {bench.tick + 2}")
    pulses = [(bench.run(1), pulse_of(bench))[1] for _ in range(5)]
    assert pulses == [1_500_000, 1_504_000, 1_508_000, 1_510_000, 1_510_000]
    assert bench.told("done")[0].fields == (f"{answer.tag:02x}",)
    assert bench.told("done")[0].tick == answer.tick + 4


def test_pulses_taken_away_and_asked_for_in_one_tick_go_on() -> None:
    bench = flat(Bench())
    bench.ok(f"swing 0 1800 0 {bench.tick + 2}")
    bench.run(100)
    start = bench.tick + 10
    bench.ok(f"swing 0 0 0 {start}")
    bench.ok(f"swing 0 1600 0 {start}")
    assert (bench.run(7).tick, pulse_of(bench)) == (start - 1, 1_800_000)
    bench.run(1)
    assert pulse_of(bench) == 1_796_000


def test_a_pulse_of_zero_takes_it_away() -> None:
    bench = flat(Bench())
    bench.ok(f"swing 0 1800 0 {bench.tick + 2}")
    bench.run(10)
    tag = bench.ask(f"swing 0 0 0 {bench.tick + 2}").tag
    bench.run(1)
    assert pulse_of(bench) == 0
    assert bench.told("done")[-1].fields == (f"{tag:02x}",)


def test_a_servo_limit_tightened_while_armed_cuts_at_once() -> None:
    bench = flat(Bench())
    bench.ok(f"swing 0 1800 0 {bench.tick + 2}")
    bench.run(100)
    bench.ok("limit pulse_max_us 0 1600")
    assert pulse_of(bench) == 1_800_000
    assert bench.run(1) is bench
    assert pulse_of(bench) == 1_600_000


def braking(bench: Bench) -> bool:
    return bench.controller.drives[0].brake


def test_rest_brakes_at_zero_until_the_outputs_are_off() -> None:
    # SPEC ORDER-6, ARM-3
    bench = flat(Bench())
    tag = bench.ask(f"rest 0 brake {bench.tick + 3}").tag
    assert not braking(bench)
    bench.run(2)
    assert braking(bench)
    assert bench.told("done")[0].fields == (f"{tag:02x}",)
    bench.ok("disarm")
    assert not braking(bench)


@pytest.mark.parametrize("stop", ["stop 0", "stop 1"])
def test_a_stop_empties_the_queue_and_ends_all_orders(stop: str) -> None:
    # SPEC ORDER-8
    bench = flat(Bench())
    bench.ramp(2000, ticks=5)
    bench.ramp(2000, ahead=20)
    bench.run(8)
    bench.ok(stop)
    bench.run(60)
    assert len(bench.controller.orders) == 0
    assert bench.ok("state")[:3] == ("off", "none", "0")
    assert bench.duty == 0
    assert bench.told("done") == []


def test_orders_find_their_tick_across_the_wrap() -> None:
    bench = Bench(start_tick=2**32 - 40)
    flat(bench)
    bench.ramp(500, ahead=20)
    assert bench.tick > 2**32 - 20
    bench.run(19)
    assert (bench.duty, bench.tick) == (0, bench.tick)
    bench.run(1)
    assert bench.tick < 20
    assert bench.duty == 100
