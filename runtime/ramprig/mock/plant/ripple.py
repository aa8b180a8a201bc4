"""PWM current ripple, which the averaged bridge model leaves out.

Edge-aligned sign-magnitude (unipolar) drive at duty D, PWM frequency f, winding R and L, bus V. Source: the ripple of
a buck converter's inductor, Erickson and Maksimovic, Fundamentals of Power Electronics, ch. 2 (from memory).
"""

from __future__ import annotations

import math


def ripple_a(*, bus_v: float, duty: float, frequency_hz: float, inductance_h: float) -> float:
    """Return the current ripple, peak to peak, of a winding without resistance: V D (1 - D) / (f L)."""
    return bus_v * duty * (1.0 - duty) / (frequency_hz * inductance_h)


def largest_ripple_a(*, bus_v: float, frequency_hz: float, inductance_h: float) -> float:
    """Return the largest ripple over all duties, at one half: V / (4 f L)."""
    return bus_v / (4.0 * frequency_hz * inductance_h)


def exact_ripple_a(
    *, bus_v: float, duty: float, frequency_hz: float, inductance_h: float, resistance_ohm: float
) -> float:
    """Return the steady current ripple, peak to peak, with the winding's resistance.

    (V/R) (1 - e^(-DT/tau)) (1 - e^(-(1-D)T/tau)) / (1 - e^(-T/tau)) with T = 1/f and tau = L/R.
    """
    periods = resistance_ohm / (frequency_hz * inductance_h)
    rise = math.expm1(-duty * periods)
    fall = math.expm1(-(1.0 - duty) * periods)
    return -bus_v / resistance_ohm * rise * fall / math.expm1(-periods)


def triangle_rms_a(peak_to_peak_a: float) -> float:
    """Return the RMS value of a triangular ripple about its mean: peak to peak / (2 sqrt 3)."""
    return peak_to_peak_a / (2.0 * math.sqrt(3.0))
