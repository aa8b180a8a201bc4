"""Running down without drive: closed forms for Coulomb and viscous friction, and the retardation test.

J dw/dt = -(b w + Tc) from w0 > 0. Everything is in SI units; `b` may be 0, where the formulas go over into their
limits without loss of digits.
"""

from __future__ import annotations

import math


def _log_ratio(x: float) -> float:
    """ln(1 + x) / x, 1 at 0."""
    return math.log1p(x) / x if x else 1.0


def _log_rest(x: float) -> float:
    """(x - ln(1 + x)) / x^2, 1/2 at 0; a series where the difference would lose digits."""
    if abs(x) > 1e-2:
        return (x - math.log1p(x)) / (x * x)
    return sum((-1.0) ** n * x**n / (n + 2) for n in range(10))


def stop_time_s(*, inertia_kgm2: float, viscous_nms: float, coulomb_nm: float, speed_rad_s: float) -> float:
    """Time to standstill from `speed_rad_s`: J/b ln(1 + b w0/Tc), J w0/Tc without viscous friction."""
    return inertia_kgm2 * speed_rad_s / coulomb_nm * _log_ratio(viscous_nms * speed_rad_s / coulomb_nm)


def stop_angle_rad(*, inertia_kgm2: float, viscous_nms: float, coulomb_nm: float, speed_rad_s: float) -> float:
    """Angle to standstill: J w0/b - J Tc/b^2 ln(1 + b w0/Tc), J w0^2/(2 Tc) without viscous friction."""
    scale = inertia_kgm2 * speed_rad_s**2 / coulomb_nm
    return scale * _log_rest(viscous_nms * speed_rad_s / coulomb_nm)


def speed_rad_s(
    time_s: float, *, inertia_kgm2: float, viscous_nms: float, coulomb_nm: float, speed_rad_s: float
) -> float:
    """Speed `time_s` after the drive went away; 0 from standstill on."""
    decays = viscous_nms / inertia_kgm2 * time_s
    lost = coulomb_nm / inertia_kgm2 * time_s * (-math.expm1(-decays) / decays if decays else 1.0)
    return max(0.0, speed_rad_s * math.exp(-decays) - lost)


def retardation_inertia_kgm2(*, power_w: float, high_rpm: float, low_rpm: float, time_s: float) -> float:
    """Inertia from the time a machine that loses `power_w` takes between two speeds near each other.

    W = (2 pi/60)^2 J N dN/dt with N the mean speed (Theraja, Electrical Technology vol. II, ch. 31, from memory).
    """
    mean_rpm = (high_rpm + low_rpm) / 2.0
    return power_w * time_s / ((math.tau / 60.0) ** 2 * mean_rpm * (high_rpm - low_rpm))


def retardation_losses_w(*, added_w: float, alone_s: float, loaded_s: float) -> float:
    """Losses from the times of running down alone and with `added_w` more taken out: W = W' t2 / (t1 - t2)."""
    return added_w * loaded_s / (alone_s - loaded_s)
