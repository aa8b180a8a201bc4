"""Resistance and temperature of copper windings.

Sources: IEC 60028 (alpha at 20 degC, 0.00393 per K) and the rise by resistance of IEC 60034-1 (k = 235), both from
memory; the tables of NBS Handbook 100 agree.
"""

from __future__ import annotations

ALPHA_20_PER_K = 0.00393
"""Temperature coefficient of copper's resistance, referred to 20 degC (IEC 60028)."""

K_COPPER_C = 235.0
"""The constant of IEC 60034-1's rise by resistance for copper; 225 for aluminium."""


def alpha_per_k(celsius: float) -> float:
    """The coefficient referred to another temperature: 1 / (1/alpha20 + t - 20)."""
    return 1.0 / (1.0 / ALPHA_20_PER_K + celsius - 20.0)


def factor(celsius: float) -> float:
    """Resistance at `celsius` as a multiple of that at 20 degC, -50 to 200 degC; linear."""
    return 1.0 + ALPHA_20_PER_K * (celsius - 20.0)


def resistance_at(resistance_ohm: float, *, measured_c: float, wanted_c: float = 20.0) -> float:
    """A resistance measured at one temperature, referred to another."""
    return resistance_ohm * factor(wanted_c) / factor(measured_c)


def rise_k(
    *, cold_ohm: float, hot_ohm: float, cold_c: float, coolant_c: float, constant_c: float = K_COPPER_C
) -> float:
    """Temperature rise over the coolant by resistance, IEC 60034-1.

    (R2 - R1)/R1 * (k + t1) + t1 - ta, in K; `coolant_c` is the ambient at the end of the test.
    """
    return (hot_ohm - cold_ohm) / cold_ohm * (constant_c + cold_c) + cold_c - coolant_c
