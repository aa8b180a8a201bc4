"""The mock's controller and the firmware core, two readings of SPEC.md, agree in every tick of random sessions."""

from __future__ import annotations

import random
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from agreement import Session, Step, check, cut_down, first_difference, make_session
from core_device import COMPILER, FIRMWARE, CoreDevice
from ramprig_link.check import seal
from ramprig_link.words import LIMITS

pytestmark = pytest.mark.skipif(COMPILER is None, reason="no C compiler: install gcc (Debian: apt-get install gcc)")

CLANG = shutil.which("clang")
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
        build_options = (f"-DRR_SEEDED_BUG={number}", "-O0")  # built quickly rather than well

    sessions = (make_session(random.Random(seed)) for seed in range(400))
    different = next(session for session in sessions if first_difference(session, Bugged) is not None)
    with pytest.raises(AssertionError, match="the mock says"):
        check(different, Bugged)


def test_a_session_is_cut_down_to_what_its_difference_needs() -> None:
    class Bugged(CoreDevice):
        build_options = ("-DRR_SEEDED_BUG=12", "-O0")

    idle = [Step(3, line="02 beat"), Step(1, raw=b"x\n"), Step(2, inputs={"supply_mv": 11_000})]
    steps = (*idle, Step(1, line="03 arm 300 00000000"), *idle)
    short = cut_down(Session(board="plain", limits={}, steps=steps), Bugged)
    assert [step.line for step in short.steps] == ["03 arm 300 00000000"]
    assert first_difference(short, CoreDevice) is None


@pytest.mark.skipif(CLANG is None, reason="no clang: another compiler does not watch where pointers lead")
@pytest.mark.parametrize(("axes", "servos"), [(1, 2), (4, 4)])
def test_no_limit_of_any_board_is_looked_for_beyond_its_table(axes: int, servos: int, tmp_path: Path) -> None:
    built = tmp_path / "core.so"
    sources = [*sorted((FIRMWARE / "core").glob("*.c")), FIRMWARE / "ports" / "scripted" / "scripted.c"]
    watched = ["-fsanitize=bounds,pointer-overflow,shift,signed-integer-overflow", "-fsanitize-trap=all"]
    sizes = [f"-DRR_AXES={axes}", f"-DRR_SERVOS={servos}"]
    subprocess.run([str(CLANG), "-std=c11", "-shared", "-fPIC", *watched, *sizes, "-o", built, *sources], check=True)
    lines = [f"limit {item} {index}" for item in LIMITS for index in range(max(axes, servos) + 1)]
    sealed = b"".join(seal(f"{i % 200:02x} {line}".encode()) for i, line in enumerate(lines))
    program = (
        "import ctypes, sys; core = ctypes.CDLL(sys.argv[1]); core.scripted_new.restype = ctypes.c_void_p\n"
        "board = ctypes.c_void_p(core.scripted_new(b'f', b'b', b's')); core.scripted_start(board, 0, 0)\n"
        "lines = sys.stdin.buffer.read(); core.scripted_feed(board, lines, len(lines)); core.scripted_tick(board)\n"
        "length = ctypes.c_uint32(); core.scripted_take.restype = ctypes.c_void_p\n"
        "said = core.scripted_take(board, ctypes.byref(length))\n"
        "sys.stdout.buffer.write(ctypes.string_at(said, length.value))\n"
    )
    done = subprocess.run([sys.executable, "-c", program, built], input=sealed, capture_output=True, check=False)
    assert done.returncode == 0, f"a trap of the compiler's watch ended the program: {done.returncode}"
    assert done.stdout.count(b" ok ") == 5 + 17 * axes + 4 * servos
