"""How long the host was away from a run, by clocks of which one stands still in a sleep and the other can be set."""

from __future__ import annotations

import pytest

from ramprig.port.clock import VirtualClock
from ramprig.sequence.absence import RECENT_S, SLEEPS_MAX, Absence
from ramprig.session.events import HostSlept, LateHost, OrderDone, WallClockSet


class TwoClocks(VirtualClock):
    """A wall clock that can be moved against the other."""

    moved_s = 0.0

    def wall(self) -> float:
        return super().wall() + self.moved_s


def test_a_run_that_was_looked_after_all_the_time_has_no_absence() -> None:
    clock = TwoClocks(wall_s=1.8e9)
    absence = Absence(clock)
    clock.advance(8 * 3600.0)
    assert absence.longest_s() == pytest.approx(0.0, abs=1e-3)


def test_the_longest_of_what_was_told_counts() -> None:
    absence = Absence(TwoClocks())
    absence.on_event(LateHost(tick=1, host_s=0.0, late_s=0.4))
    absence.on_event(HostSlept(tick=1, host_s=0.0, slept_s=20.04))
    absence.on_event(LateHost(tick=1, host_s=0.0, late_s=3.0))
    assert absence.longest_s() == 20.04
    assert absence.slept_s == [20.0]


def test_a_sleep_that_the_port_did_not_survive_is_seen_by_the_wall_clock_alone() -> None:
    clock = TwoClocks(wall_s=1.8e9)
    absence = Absence(clock)
    clock.moved_s = 6 * 3600.0
    assert absence.longest_s() == pytest.approx(6 * 3600.0)


@pytest.mark.parametrize(("since_s", "away_s"), [(RECENT_S - 1.0, 3600.0), (RECENT_S + 1.0, 0.0)])
def test_a_wall_clock_that_was_set_while_the_run_went_on_is_no_absence(since_s: float, away_s: float) -> None:
    """Shortly before a lost link it is taken for a sleep, from which the first look was still made."""
    clock = TwoClocks(wall_s=1.8e9)
    absence = Absence(clock)
    clock.moved_s = 3600.0
    absence.on_event(WallClockSet(tick=1, host_s=clock.now(), moved_s=3600.0))
    clock.advance(since_s)
    assert absence.longest_s() == pytest.approx(away_s, abs=1e-3)


def test_a_wall_clock_that_was_set_back_is_no_absence() -> None:
    clock = TwoClocks(wall_s=1.8e9)
    absence = Absence(clock)
    clock.moved_s = -3600.0
    assert absence.longest_s() == 0.0


def test_clocks_that_drift_apart_over_a_week_are_no_absence() -> None:
    clock = TwoClocks(wall_s=1.8e9)
    absence = Absence(clock)
    for _ in range(7 * 24):
        clock.advance(3600.0)
        clock.moved_s += 0.18  # 50 ppm
        absence.on_event(OrderDone(tick=1, host_s=clock.now(), tag=1))
    assert absence.longest_s() < 2.0


def test_the_list_of_sleeps_is_bounded() -> None:
    absence = Absence(TwoClocks())
    for _ in range(SLEEPS_MAX + 5):
        absence.on_event(HostSlept(tick=1, host_s=0.0, slept_s=1.0))
    assert len(absence.slept_s) == SLEEPS_MAX
