"""Hold-to-run by keys that only repeat, and demands as they were ordered."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.shell.hold import FIRST_S, REPEAT_S, START_DUTY, STEP_DUTY, Hold
from ramprig.shell.slope import Slope


def test_a_tap_runs_for_the_usual_delay_before_a_keyboard_repeats() -> None:
    hold = Hold(ceiling_duty=8000)
    hold.press(1, 10.0)
    assert hold.wanted(10.0) == START_DUTY
    assert hold.wanted(10.0 + FIRST_S - 0.001) == START_DUTY
    assert hold.wanted(10.0 + FIRST_S) == 0


def test_once_a_key_repeats_letting_go_stops_soon() -> None:
    hold = Hold(ceiling_duty=8000)
    hold.press(-1, 0.0)
    for at_s in (0.5, 0.6, 0.7):
        hold.press(-1, at_s)
    assert hold.wanted(0.7 + REPEAT_S - 0.001) == -START_DUTY
    assert hold.wanted(0.7 + REPEAT_S) == 0


def test_the_other_arrow_stops_first() -> None:
    hold = Hold(ceiling_duty=8000)
    hold.press(1, 0.0)
    hold.press(-1, 0.1)
    assert hold.wanted(0.1) == 0
    hold.press(-1, 0.2)
    assert hold.wanted(0.2) == -START_DUTY


def test_any_other_key_stops_and_leaving_ends_it() -> None:
    hold = Hold(ceiling_duty=8000)
    hold.press(1, 0.0)
    hold.release()
    assert (hold.wanted(0.01), hold.left) == (0, False)
    hold.press(1, 0.1)
    hold.leave()
    assert (hold.wanted(0.11), hold.left) == (0, True)


@pytest.mark.parametrize("ceiling_duty", [0, 50, 8000])
def test_the_jog_duty_stays_between_one_step_and_the_ceiling(ceiling_duty: int) -> None:
    hold = Hold(ceiling_duty=ceiling_duty)
    hold.change(-1000)
    assert hold.duty == min(STEP_DUTY, ceiling_duty)
    hold.change(1000)
    assert hold.duty == ceiling_duty


@given(
    start=st.integers(-(10**6), 10**6),
    ticks=st.integers(0, 5000),
    begin=st.integers(-10_000, 10_000),
    end=st.integers(-10_000, 10_000),
    after=st.integers(-10, 6000),
)
def test_a_slope_is_the_specs_formula(start: int, ticks: int, begin: int, end: int, after: int) -> None:
    """SPEC.md ORDER-4: d + s floor(|D - d| k / n), and D at T for n = 0."""
    value = Slope(start, ticks, begin, end).at(start + after)
    if after >= ticks:
        assert value == end
    elif after < 0:
        assert value == begin
    else:
        sign = 1 if end > begin else -1
        assert value == begin + sign * (abs(end - begin) * after // ticks)
