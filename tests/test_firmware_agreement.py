"""The mock's controller and the firmware core, two readings of SPEC.md, agree in every tick of random sessions."""

from __future__ import annotations

import random

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from agreement import Session, Step, check, cut_down, first_difference, make_session
from core_device import COMPILER, CoreDevice

pytestmark = pytest.mark.skipif(COMPILER is None, reason="no C compiler: install gcc (Debian: apt-get install gcc)")

SESSIONS = 2000
SOAK_SESSIONS = 200_000
BATCH = 100

SEEDED = {2: "the duty grows by twice the slew limit", 5: "the shaft may still turn", 9: "a trip's latch is gone"}
"""Some of the bugs of `firmware_ref/core/seeded.h`."""


@pytest.mark.parametrize("first", range(0, SESSIONS, BATCH))
def test_mock_and_core_agree_on_random_sessions(first: int) -> None:
    for seed in range(first, first + BATCH):
        check(make_session(random.Random(seed)), CoreDevice)


@settings(max_examples=200, deadline=None, suppress_health_check=list(HealthCheck))
@given(drawn=st.randoms(use_true_random=False))
def test_mock_and_core_agree_on_sessions_that_hypothesis_makes(drawn: random.Random) -> None:
    check(make_session(drawn, steps=15), CoreDevice)


@pytest.mark.soak
@pytest.mark.parametrize("first", range(1_000_000, 1_000_000 + SOAK_SESSIONS, 10 * BATCH))
def test_mock_and_core_agree_on_very_many_sessions(first: int) -> None:
    for seed in range(first, first + 10 * BATCH):
        check(make_session(random.Random(seed), steps=60), CoreDevice)


@pytest.mark.parametrize("number", SEEDED)
def test_a_bug_in_one_of_the_two_is_found(number: int) -> None:
    class Bugged(CoreDevice):
        build_options = (f"-DRR_SEEDED_BUG={number}",)

    sessions = (make_session(random.Random(seed)) for seed in range(400))
    different = next(session for session in sessions if first_difference(session, Bugged) is not None)
    with pytest.raises(AssertionError, match="the mock says"):
        check(different, Bugged)


def test_a_session_is_cut_down_to_what_its_difference_needs() -> None:
    class Bugged(CoreDevice):
        build_options = ("-DRR_SEEDED_BUG=12",)

    idle = [Step(3, line="02 beat"), Step(1, raw=b"x\n"), Step(2, inputs={"supply_mv": 11_000})]
    steps = (*idle, Step(1, line="03 arm 300 00000000"), *idle)
    short = cut_down(Session(board="plain", limits={}, steps=steps), Bugged)
    assert [step.line for step in short.steps] == ["03 arm 300 00000000"]
    assert first_difference(short, CoreDevice) is None
