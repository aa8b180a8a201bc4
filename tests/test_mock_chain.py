"""The chain of one axis, plain and fast: SPEC CHAIN-1, CHAIN-2, CHAIN-3 and CHAIN-4."""

from __future__ import annotations

from hypothesis import given
from hypothesis import strategies as st

from ramprig.mock.board import Board
from ramprig.mock.chain import ChainLimits, ChainState, chain_step
from ramprig.mock.drive import AT_CEILING, AT_SLEW, DWELL_LOCK, Drive
from ramprig.mock.limits import LimitStore

DUTY = st.integers(-10000, 10000)
LIMITS: st.SearchStrategy[dict[str, int]] = st.builds(
    dict,
    ceiling_duty=st.integers(0, 10000),
    slew_up_duty=st.integers(1, 3000),
    slew_down_duty=st.integers(1, 3000),
    dwell_ticks=st.integers(1, 6),
)
TICK = st.tuples(DUTY | st.sampled_from((0, 1, -1, 500, -500)), st.booleans(), st.none() | LIMITS)


def limits_of(values: dict[str, int]) -> ChainLimits:
    return ChainLimits(**values)


@given(first=LIMITS, ticks=st.lists(TICK, min_size=1, max_size=60))
def test_the_fast_chain_and_the_plain_one_agree(
    first: dict[str, int], ticks: list[tuple[int, bool, dict[str, int] | None]]
) -> None:
    store = LimitStore(Board())
    told: list[tuple[object, ...]] = []
    for name, value in first.items():
        store.set(name, 0, value)
    drive = Drive(0, store, age=0, tell=lambda *notice: told.append(notice))
    state, limits = ChainState(), limits_of(first)
    for age, (demand, still, changed) in enumerate(ticks):
        if changed:
            for name, value in changed.items():
                store.set(name, 0, value)
            drive.refresh(store)
            limits = limits_of(changed)
        drive.demand.set(demand)
        drive.steady = False
        told.clear()
        bits = drive.step(age, still)
        step = chain_step(state, limits, demand=demand, still=still)
        state = step.state
        assert drive.duty == state.duty
        assert bits == DWELL_LOCK * step.dwell_lock + AT_CEILING * step.at_ceiling + AT_SLEW * step.at_slew
        assert told == ([("dwell", 0, step.let_go_ticks)] if step.let_go_ticks else [])
        if drive.steady:
            again = chain_step(state, limits, demand=demand, still=False)
            assert again.state.duty == demand
            assert (again.at_slew, again.at_ceiling, again.dwell_lock) == (False, False, False)


QUICK = ChainLimits(ceiling_duty=1000, slew_up_duty=100, slew_down_duty=300, dwell_ticks=3)


def run(state: ChainState, demands: list[int], *, limits: ChainLimits = QUICK, still: bool = True) -> list[int]:
    duties = []
    for demand in demands:
        state = chain_step(state, limits, demand=demand, still=still).state
        duties.append(state.duty)
    return duties


def test_the_duty_rises_by_the_slew_to_the_ceiling() -> None:
    moving = ChainState(duty=700, last_sign=1)
    assert run(moving, [1200] * 5) == [800, 900, 1000, 1000, 1000]


def test_the_duty_falls_faster_than_it_rises_and_stops_at_zero_before_the_other_sign() -> None:
    moving = ChainState(duty=500, last_sign=1)
    assert run(moving, [-200] * 7) == [200, 0, 0, 0, -100, -200, -200]


def test_the_first_duty_waits_for_the_dwell_and_for_standstill() -> None:
    assert run(ChainState(), [50] * 5) == [0, 0, 0, 50, 50]
    assert run(ChainState(), [50] * 5, still=False) == [0] * 5


def test_the_last_sign_may_come_back_at_once() -> None:
    assert run(ChainState(duty=0, last_sign=-1, zero_ticks=1), [-50], still=False) == [-50]


def test_a_tightened_ceiling_cuts_at_once() -> None:
    tight = ChainLimits(ceiling_duty=200, slew_up_duty=100, slew_down_duty=10, dwell_ticks=3)
    step = chain_step(ChainState(duty=-900, last_sign=-1), tight, demand=-900, still=True)
    assert (step.state.duty, step.at_ceiling) == (-200, True)


def test_a_lock_that_lets_go_tells_how_long_it_held() -> None:
    state = ChainState(duty=0, last_sign=1, zero_ticks=1)
    told = []
    for _ in range(4):
        step = chain_step(state, QUICK, demand=-10, still=True)
        told.append((step.dwell_lock, step.let_go_ticks))
        state = step.state
    assert told == [(True, 0), (True, 0), (False, 2), (False, 0)]
