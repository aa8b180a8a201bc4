"""The brushed permanent-magnet motor: closed forms, and its exact motion over sample periods of constant drive.

Equations, SI units, `w` the motor shaft's speed, with Ke = Kt = K:

    L di/dt = V - R i - K w          J dw/dt = K i - b w - T          T = Tc sign(w)

An open bridge carries no current, a shaft at rest does not turn; both leave one of the two equations. The relations
between data-sheet figures are those of the maxon "Key information" pages (from memory) and hold for any maker's motor.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from ramprig.extras import need

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorConstants:
    """Everything referred to the motor shaft; the resistance is the winding's as it is now, leads and bridge included.

    `constant_vs` is both Ke in V*s/rad and Kt in N*m/A.
    """

    resistance_ohm: float
    inductance_h: float
    constant_vs: float
    inertia_kgm2: float
    coulomb_nm: float = 0.0
    viscous_nms: float = 0.0

    @property
    def electrical_time_s(self) -> float:
        """L / R."""
        return self.inductance_h / self.resistance_ohm

    @property
    def mechanical_time_s(self) -> float:
        """J R / (K^2 + b R), the run-up's time constant where the winding is much faster."""
        return self.inertia_kgm2 * self.resistance_ohm / (self.constant_vs**2 + self.viscous_nms * self.resistance_ohm)

    def poles_per_s(self) -> tuple[complex, complex]:
        """The two poles from voltage to speed, the slower (or that above the real axis) first."""
        a = self.resistance_ohm / self.inductance_h
        d = self.viscous_nms / self.inertia_kgm2
        product = a * d + self.constant_vs**2 / (self.inductance_h * self.inertia_kgm2)
        root = complex((a + d) ** 2 / 4.0 - product) ** 0.5
        fast = -(a + d) / 2.0 - root
        slow = product / fast if not root.imag else -(a + d) / 2.0 + root
        return complex(slow), complex(fast)

    def steady(self, volts: float, load_nm: float = 0.0) -> tuple[float, float]:
        """Speed in rad/s and current in A at a constant voltage above 0; (0, V/R) where it does not turn."""
        torque = self.coulomb_nm + load_nm
        k, r, b = self.constant_vs, self.resistance_ohm, self.viscous_nms
        speed = (k * volts - r * torque) / (k * k + b * r)
        if speed <= 0.0:
            return 0.0, volts / r
        return speed, (torque + b * speed) / k

    def pulse_current_a(self, volts: float, time_s: Array) -> Array:
        """Current after a step of voltage at a shaft at rest: V/R (1 - e^(-R t/L))."""
        rise: Array = -volts / self.resistance_ohm * np.expm1(-np.asarray(time_s) / self.electrical_time_s)
        return rise


@dataclass(frozen=True, slots=True, kw_only=True)
class DataSheet:
    """What a data sheet derives from R, K, J, the rated voltage and the no-load current; speeds in rad/s."""

    stall_current_a: float
    stall_torque_nm: float
    no_load_rad_s: float
    gradient_rad_s_per_nm: float
    mechanical_time_s: float
    highest_efficiency: float


def data_sheet(
    *, volts: float, no_load_a: float, resistance_ohm: float, constant_vs: float, inertia_kgm2: float
) -> DataSheet:
    """I_A = V/R, M_H = K I_A, n0 = (V - I0 R)/K, dn/dM = R/K^2, tau = J R/K^2, eta = (1 - sqrt(I0/I_A))^2."""
    stall_a = volts / resistance_ohm
    return DataSheet(
        stall_current_a=stall_a,
        stall_torque_nm=constant_vs * stall_a,
        no_load_rad_s=(volts - no_load_a * resistance_ohm) / constant_vs,
        gradient_rad_s_per_nm=resistance_ohm / constant_vs**2,
        mechanical_time_s=inertia_kgm2 * resistance_ohm / constant_vs**2,
        highest_efficiency=(1.0 - math.sqrt(no_load_a / stall_a)) ** 2,
    )


class Motion(StrEnum):
    """Which equations hold: `turning` both, `coasting` no current, `still` no speed, `idle` neither."""

    TURNING = "turning"
    COASTING = "coasting"
    STILL = "still"
    IDLE = "idle"


R, K, B, J, L = range(5)
"""Places of the dynamic parameters in `transitions`' input and in the last axis of its derivatives."""

_STEP = 1e-30


def transitions(dynamic: Array, motion: Motion, period_s: float) -> tuple[Array, Array, Array, Array]:
    """The exact step over one sample period of constant voltage and torque, and its derivatives.

    `dynamic` is `(sets, 5)`: R, K, b, J, L. With the state x = (current, speed, angle) and the input u = (voltage,
    opposing torque), x' = F x + G u: returns F `(sets, 3, 3)`, G `(sets, 3, 2)`, and the derivatives by parameter,
    `(sets, 5, 3, 3)` and `(sets, 5, 3, 2)`. Matrix exponential of the augmented system (Van Loan 1978), derivatives
    by complex step (Al-Mohy and Higham, Numer. Algorithms 53 (2010)).
    """
    sets = len(dynamic)
    probes = np.repeat(dynamic[:, None, :], 5, axis=1).astype(np.complex128)
    steps = _STEP * np.maximum(np.abs(dynamic), 1e-12)
    for index in range(5):
        probes[:, index, index] += 1j * steps[:, index]
    r, k, b, j, el = np.moveaxis(probes, -1, 0)
    # Torque is carried in units of K, so that no entry is much larger than the system's own rates.
    unit = np.abs(dynamic[:, None, K])
    system = np.zeros((sets, 5, 5, 5), np.complex128)
    if motion is not Motion.COASTING:
        system[..., 0, 0] = -r / el
        system[..., 0, 3] = 1.0 / el
        if motion is Motion.TURNING:
            system[..., 0, 1] = -k / el
            system[..., 1, 0] = k / j
    if motion is not Motion.STILL:
        system[..., 1, 1] = -b / j
        system[..., 1, 4] = -unit / j
        system[..., 2, 1] = 1.0
    found = _exponential(system * period_s)
    found[..., 4] /= unit[..., None]
    slopes = np.imag(found) / steps[:, :, None, None]
    step = np.real(found[:, 0])
    if motion is Motion.COASTING:
        step[:, 0, 0] = 0.0
    return step[:, :3, :3], step[:, :3, 3:], slopes[:, :, :3, :3], slopes[:, :, :3, 3:]


_TERMS = 14


def _exponential(matrices: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """e^M of many small matrices: Taylor series of e^M - 1 for a 2^n-th of M, doubled n times by F <- 2 F + F F.

    Keeping e^M - 1 loses no digits of a slow mode beside a fast one (scaling and squaring, Moler and van Loan, SIAM
    Review 45 (2003)). For matrices this small it also is far quicker than `scipy.linalg.expm`.
    """
    size = float(np.abs(matrices).sum(axis=-1).max())
    doublings = max(0, math.frexp(size)[1] + 2)
    part = matrices * 2.0**-doublings
    one = np.eye(matrices.shape[-1])
    series = one + part / _TERMS
    for term in range(_TERMS - 1, 1, -1):
        series = one + part @ series / term
    found = part @ series
    for _ in range(doublings):
        found = 2.0 * found + found @ found
    result: NDArray[np.complex128] = one + found
    return result


def respond(step: Array, forcing: Array) -> Array:
    """States of z[k] = F z[k-1] + forcing[k], z[-1] = 0, for many forcings at once.

    `step` is F `(2, 2)`, `forcing` `(..., 2, n)`; the result has forcing's shape. Each component is a second-order
    recursion with the same denominator, so one filter call does them all.
    """
    signal = need("scipy.signal", purpose="the motion of a motor")
    (a, b), (c, d) = step
    inputs = forcing.copy()
    inputs[..., 0, 1:] += b * forcing[..., 1, :-1] - d * forcing[..., 0, :-1]
    inputs[..., 1, 1:] += c * forcing[..., 0, :-1] - a * forcing[..., 1, :-1]
    states: Array = signal.lfilter([1.0], [1.0, -(a + d), a * d - b * c], inputs, axis=-1)
    return states


def simulate(
    constants: MotorConstants,
    volts: Array,
    *,
    period_s: float,
    current_a: float = 0.0,
    speed_rad_s: float = 0.0,
    direction: int = 1,
    motion: Motion = Motion.TURNING,
) -> Array:
    """Current, speed and angle `(3, n + 1)` at the ends of `n` periods, starting from the state given.

    `volts` holds the motor's voltage over each period. The friction opposes `direction` throughout: the shaft is
    taken to turn that way all the time, from rest too.
    """
    volts = np.asarray(volts, float)
    dynamic = np.array(
        [
            constants.resistance_ohm,
            constants.constant_vs,
            constants.viscous_nms,
            constants.inertia_kgm2,
            constants.inductance_h,
        ]
    )
    step, drive, _, _ = (found[0] for found in transitions(dynamic[None, :], motion, period_s))
    inputs = np.stack([volts, np.full(len(volts), direction * constants.coulomb_nm)])
    forced = drive @ inputs
    forcing = np.concatenate([np.array([[current_a], [speed_rad_s]]), forced[:2]], axis=1)
    states = respond(step[:2, :2], forcing)
    turned = step[2, :2] @ states[:, :-1] + forced[2]
    return np.vstack([states, np.concatenate([[0.0], np.cumsum(turned)])])
