"""Copper, coast-down, retardation and positioning figures against published or hand-made numbers."""

from __future__ import annotations

import numpy as np
import pytest

from ramprig.errors import UsageError
from ramprig.measure.numbers import coastdown, copper, iso230


def test_alpha_of_the_nbs_table() -> None:
    # NBS Circular 31 / Handbook 100 (printed values from memory).
    for celsius, alpha in ((0, 0.00427), (15, 0.00401), (20, 0.00393), (25, 0.00385), (30, 0.00378)):
        assert copper.alpha_per_k(celsius) == pytest.approx(alpha, abs=6e-6)


def test_resistance_ratios_to_25_degc() -> None:
    # A maker's multiplier table, R(t)/R(25 degC).
    table = {40: 1.058, 50: 1.096, 55: 1.116, 75: 1.193, 100: 1.289, 125: 1.385, 150: 1.482, 200: 1.674}
    for celsius, ratio in table.items():
        assert copper.resistance_at(1.0, measured_c=25.0, wanted_c=celsius) == pytest.approx(ratio, abs=6e-4)


def test_rise_by_resistance_of_iec_60034_1() -> None:
    # Made-up number: 10 ohm at 20 degC, 13 ohm hot, coolant 25 degC: 96.5 degC, 71.5 K.
    assert copper.rise_k(cold_ohm=10.0, hot_ohm=13.0, cold_c=20.0, coolant_c=25.0) == pytest.approx(71.5)


SMALL = {"inertia_kgm2": 1.03e-6, "viscous_nms": 2e-7, "coulomb_nm": 2e-4, "speed_rad_s": 500.0}


def test_coast_down_in_closed_form() -> None:
    # Values of scipy.integrate.solve_ivp with an event, agreeing to 1e-8.
    assert coastdown.stop_time_s(**SMALL) == pytest.approx(2.0881453068, rel=1e-9)
    assert coastdown.stop_angle_rad(**SMALL) == pytest.approx(486.854693, rel=1e-8)
    assert coastdown.speed_rad_s(2.0881453068, **SMALL) == pytest.approx(0.0, abs=1e-6)
    assert coastdown.speed_rad_s(0.0, **SMALL) == 500.0


def test_coast_down_without_viscous_friction_is_its_limit() -> None:
    dry = SMALL | {"viscous_nms": 0.0}
    nearly = SMALL | {"viscous_nms": 1e-15}
    assert coastdown.stop_time_s(**dry) == pytest.approx(1.03e-6 * 500.0 / 2e-4)
    assert coastdown.stop_angle_rad(**dry) == pytest.approx(1.03e-6 * 500.0**2 / 4e-4)
    assert coastdown.stop_angle_rad(**nearly) == pytest.approx(coastdown.stop_angle_rad(**dry), rel=1e-8)
    assert coastdown.speed_rad_s(1.0, **dry) == pytest.approx(500.0 - 2e-4 / 1.03e-6)


def test_the_two_forms_of_the_angle_meet() -> None:
    angles = [coastdown.stop_angle_rad(**(SMALL | {"viscous_nms": 4e-9 * s})) for s in (0.9999999, 1.0000001)]
    assert angles[0] == pytest.approx(angles[1], rel=1e-7)


def test_retardation_examples() -> None:
    # Theraja, Electrical Technology vol. II, ch. 31 (from memory): W = 4000 W and J = 121.6 kg m2; W = 4100 W.
    losses = coastdown.retardation_losses_w(added_w=1000.0, alone_s=25.0, loaded_s=20.0)
    assert losses == pytest.approx(4000.0)
    inertia = coastdown.retardation_inertia_kgm2(power_w=losses, high_rpm=1525.0, low_rpm=1475.0, time_s=25.0)
    assert inertia == pytest.approx(121.6, abs=0.05)
    mean_v = (220.0 + 190.0) / 2.0
    assert coastdown.retardation_losses_w(added_w=mean_v * 10.0, alone_s=30.0, loaded_s=20.0) == pytest.approx(4100.0)


UP = np.array([[0.0, 0.1, -0.1], [0.2, 0.3, 0.1], [0.1, 0.2, 0.0]])
DOWN = np.array([[0.3, 0.4, 0.2], [0.5, 0.6, 0.4], [0.6, 0.7, 0.5]])


def test_positioning_by_hand() -> None:
    # Definitions of ISO 230-2:2014 (from memory); the numbers are our own, worked by hand.
    found = iso230.positioning(UP, DOWN)
    assert found.mean_up == pytest.approx([0.0, 0.2, 0.1])
    assert found.mean_down == pytest.approx([0.3, 0.5, 0.6])
    assert found.sd_up == pytest.approx([0.1] * 3)
    assert found.reversal_at == pytest.approx([-0.3, -0.3, -0.5])
    assert (found.reversal, found.mean_reversal) == pytest.approx((0.5, -1.1 / 3.0))
    assert (found.repeatability_up, found.repeatability_down) == pytest.approx((0.4, 0.4))
    assert found.repeatability_at == pytest.approx([0.7, 0.7, 0.9])
    assert found.repeatability == pytest.approx(0.9)
    assert found.mean_deviation_range == pytest.approx(0.2)
    assert (found.systematic_up, found.systematic_down, found.systematic) == pytest.approx((0.2, 0.3, 0.6))
    assert (found.accuracy_up, found.accuracy_down, found.accuracy) == pytest.approx((0.6, 0.7, 1.0))


def test_three_approaches_do_not_conform_and_five_do() -> None:
    assert not iso230.conforms(iso230.positioning(UP, DOWN), travel_deg=90.0)
    five = np.tile(UP, (1, 2))[:, :5]
    assert iso230.conforms(iso230.positioning(five, five + 0.1), travel_deg=90.0)
    assert not iso230.conforms(iso230.positioning(five, five + 0.1), travel_deg=120.0)


def test_deviations_that_do_not_match_are_refused() -> None:
    with pytest.raises(UsageError, match="the same shape"):
        iso230.positioning(UP, DOWN[:2])
