"""PWM current ripple formulas against worked figures and a switched simulation."""

from __future__ import annotations

import math

import numpy as np
import pytest

from ramprig.mock.plant.flow import transitions
from ramprig.mock.plant.ripple import exact_ripple_a, largest_ripple_a, ripple_a, triangle_rms_a


@pytest.mark.parametrize(("duty", "milliamps"), [(0.1, 54.0), (0.25, 112.5), (0.5, 150.0), (0.75, 112.5)])
def test_ripple_of_a_pure_inductance(duty: float, milliamps: float) -> None:
    # 12 V, 20 kHz, 1 mH: V D (1 - D) / (f L), Erickson and Maksimovic ch. 2 (from memory).
    found = ripple_a(bus_v=12.0, duty=duty, frequency_hz=20e3, inductance_h=1e-3)
    assert found * 1000.0 == pytest.approx(milliamps, rel=1e-12)


def test_ripple_is_largest_at_half_duty() -> None:
    largest = largest_ripple_a(bus_v=12.0, frequency_hz=20e3, inductance_h=1e-3)
    assert largest == pytest.approx(0.150)
    every = [ripple_a(bus_v=12.0, duty=d / 100, frequency_hz=20e3, inductance_h=1e-3) for d in range(101)]
    assert max(every) == every[50] == pytest.approx(largest)


@pytest.mark.parametrize(("duty", "milliamps"), [(0.25, 112.48243), (0.5, 149.96876), (0.75, 112.48243)])
def test_ripple_with_resistance(duty: float, milliamps: float) -> None:
    found = exact_ripple_a(bus_v=12.0, duty=duty, frequency_hz=20e3, inductance_h=1e-3, resistance_ohm=2.0)
    assert found * 1000.0 == pytest.approx(milliamps, abs=1e-5)


def test_exact_ripple_tends_to_the_simple_one_and_to_the_full_swing() -> None:
    common = {"bus_v": 12.0, "duty": 0.3, "frequency_hz": 20e3, "inductance_h": 1e-3}
    assert exact_ripple_a(**common, resistance_ohm=1e-6) == pytest.approx(ripple_a(**common), rel=1e-9)
    assert exact_ripple_a(**common, resistance_ohm=1e5) == pytest.approx(12.0 / 1e5, rel=1e-9)


@pytest.mark.parametrize("duty", [0.25, 0.5, 0.75])
def test_exact_ripple_is_what_a_switched_winding_shows(duty: float) -> None:
    # The plant's own exact step, used here to switch a stalled winding on and off; mean current D V / R.
    period_s, steps = 1.0 / 20e3, 100
    rows = transitions((-2.0 / 1e-3, 0.0, 0.0, 0.0), 1.0 / 1e-3, 0.0, period_s / steps)[0]
    current = duty * 12.0 / 2.0
    seen = []
    for step in range(400 * steps):
        current = rows[0] * current + rows[2] * (12.0 if step % steps < duty * steps else 0.0)
        seen.append(current)
    last = np.array(seen[-steps:])
    expected = exact_ripple_a(bus_v=12.0, duty=duty, frequency_hz=20e3, inductance_h=1e-3, resistance_ohm=2.0)
    assert np.ptp(last) == pytest.approx(expected, rel=1e-6)
    assert last.mean() == pytest.approx(duty * 6.0, rel=1e-3)


def test_triangle_rms() -> None:
    ramp = np.linspace(-0.5, 0.5, 200_001)  # a triangle's distribution is uniform
    assert triangle_rms_a(1.0) == pytest.approx(math.sqrt(float(np.mean(ramp**2))), rel=1e-4)
