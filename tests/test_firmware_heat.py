"""The core's thermal model in 32 bits against SPEC TRIP-8 as it stands: whole numbers without a bound."""

from __future__ import annotations

import ctypes
from math import isqrt

import pytest
from hypothesis import given
from hypothesis import strategies as st

from agreement import BOARDS
from core_device import COMPILER, defines, library
from ramprig_link.words import THERMAL_TICKS

pytestmark = pytest.mark.skipif(COMPILER is None, reason="no C compiler: install gcc (Debian: apt-get install gcc)")

ONE = 1 << 24


class Heat(ctypes.Structure):
    """`struct rr_heat` of heat.h."""

    _fields_ = (
        ("level", ctypes.c_uint32),
        ("part", ctypes.c_uint32),
        ("sum_low", ctypes.c_uint32),
        ("sum_high", ctypes.c_uint8),
    )


@pytest.fixture(scope="module")
def core() -> ctypes.CDLL:
    made = library(defines(BOARDS["double"]))
    made.rr_heat_root.restype = ctypes.c_uint16
    made.rr_heat_root.argtypes = [ctypes.c_uint32]
    made.rr_heat_take.argtypes = [ctypes.c_void_p, ctypes.c_uint32]
    made.rr_heat_step.argtypes = [ctypes.c_void_p, ctypes.c_uint32]
    return made


CURRENTS = st.one_of(st.integers(0, 70_000), st.sampled_from((0, 1, 65_534, 65_535, 65_536, 2**31)))


@given(gain=st.integers(0, ONE - 1), steps=st.lists(st.tuples(CURRENTS, st.integers(0, THERMAL_TICKS)), max_size=12))
def test_the_heat_is_the_specs_to_the_last_bit(core: ctypes.CDLL, gain: int, steps: list[tuple[int, int]]) -> None:
    heat = Heat()
    wanted = 0
    for current_ma, ticks in steps:
        total = 0
        for tick in range(THERMAL_TICKS):
            size = current_ma if tick < ticks else 7
            core.rr_heat_take(ctypes.byref(heat), size)
            total += min(size, 65_535) ** 2
        core.rr_heat_step(ctypes.byref(heat), gain)
        wanted += (total // THERMAL_TICKS - wanted // ONE) * gain
        assert (heat.level, heat.part) == (wanted // ONE, wanted % ONE << 8)


@given(
    square=st.one_of(
        st.integers(0, 2**32 - 1), st.integers(1, 65_535).flatmap(lambda n: st.sampled_from((n * n - 1, n * n)))
    )
)
def test_the_root_is_whole(core: ctypes.CDLL, square: int) -> None:
    assert core.rr_heat_root(square) == isqrt(square)
