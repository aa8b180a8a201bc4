"""The clocks ports are read by."""

from __future__ import annotations

import time

import pytest

from ramprig.port.clock import Clock, SystemClock, VirtualClock


def test_a_virtual_clock_stands_still_until_advanced() -> None:
    clock = VirtualClock(start_s=5.0, wall_s=1_700_000_000.0)
    assert (clock.now(), clock.wall()) == (5.0, 1_700_000_000.0)
    clock.advance(2.5)
    assert (clock.now(), clock.wall()) == (7.5, 1_700_000_002.5)


def test_a_million_small_steps_add_up_exactly() -> None:
    clock = VirtualClock()
    for _ in range(1_000_000):
        clock.advance(0.001)
    assert clock.now() == 1000.0


@pytest.mark.parametrize("duration_s", [-0.001, float("nan")])
def test_time_never_runs_backwards(duration_s: float) -> None:
    clock = VirtualClock(start_s=1.0)
    with pytest.raises(ValueError, match="cannot be advanced"):
        clock.advance(duration_s)
    assert clock.now() == 1.0


def test_the_system_clock_is_the_computers() -> None:
    clock: Clock = SystemClock()
    before, wall_before = time.monotonic(), time.time()
    assert before <= clock.now() <= time.monotonic()
    assert wall_before <= clock.wall() <= time.time()


def test_many_waits_told_at_once_end_where_they_would_one_by_one() -> None:
    told, waited = VirtualClock(start_s=0.123456789), VirtualClock(start_s=0.123456789)
    for wait_s in (0.05, 0.0503, 1e-9, 1 / 3):
        end_s = told.end_of_waits_s(wait_s, 200)
        for _ in range(200):
            until_s = waited.now() + wait_s
            waited.now_ns = waited.end_of_wait_ns(until_s)
            assert until_s <= waited.now() <= until_s + 1.1e-6
        assert end_s == waited.now()
        told.now_ns = told.end_of_wait_ns(end_s)
        assert told.now_ns == waited.now_ns


def test_a_wait_for_what_is_past_ends_at_once() -> None:
    clock = VirtualClock(start_s=2.0)
    assert clock.end_of_wait_ns(2.0) == clock.end_of_wait_ns(1.0) == clock.now_ns
