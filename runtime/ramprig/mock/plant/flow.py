"""Exact steps of a linear two-state system: over a tick, and over its halves, quarters and so on.

The system is dx/dt = A x + B u with x = (current, speed) and u = (voltage, opposing torque), u constant over a step.
A `Rows` tuple advances it by one step; `transitions` makes one for each of the steps tick, tick/2, ... tick/2^HALVINGS.

Method: Taylor series of e^(Ah) - 1 and its first two integrals for a step so short that the series converges at once,
then doubling: with F = e^(Ah) - 1, S = integral of e^(As) and W = integral of S,

    F(2h) = 2F + F F        S(2h) = 2S + F S        W(2h) = 2W + h S + F W

(the scaling and squaring of Moler and van Loan, SIAM Review 45 (2003), method 3, kept as F so that a slow mode beside
a stiff one loses no digits). Doubling passes through all the halves, so they cost nothing extra.
"""

from __future__ import annotations

import math

from ramprig.errors import FileError

HALVINGS = 12
"""How often a tick is halved to find an instant inside it: 4096 parts, a quarter of a microsecond in 1 ms."""

UNITS = 1 << HALVINGS
"""Smallest steps in a tick."""

Rows = tuple[float, ...]
"""Four rows of four factors, each for (current, speed, voltage, opposing torque) at the start of the step.

The rows give current in A, speed in rad/s, the current's mean over the step in A, and the angle turned in rad.
"""

_Matrix = tuple[float, float, float, float]

_TERMS = 16
_STIFFEST = 1e15


def _times(p: _Matrix, q: _Matrix) -> _Matrix:
    a, b, c, d = p
    e, f, g, h = q
    return (a * e + b * g, a * f + b * h, c * e + d * g, c * f + d * h)


def _sum(p: _Matrix, x: float, q: _Matrix, y: float) -> _Matrix:
    return (x * p[0] + y * q[0], x * p[1] + y * q[1], x * p[2] + y * q[2], x * p[3] + y * q[3])


def _series(system: _Matrix, step_s: float) -> tuple[_Matrix, _Matrix, _Matrix]:
    """Return F, S and W of a step in which the system hardly moves, by Horner's rule."""
    one: _Matrix = (1.0, 0.0, 0.0, 1.0)
    total = one
    for n in range(_TERMS, 2, -1):
        total = _sum(one, 1.0, _times(system, total), step_s / n)
    second = _sum(total, step_s * step_s / 2.0, total, 0.0)
    first = _sum(one, step_s, _times(system, second), 1.0)
    return _times(system, first), first, second


def _rows(f: _Matrix, s: _Matrix, w: _Matrix, step_s: float, per_volt: float, per_nm: float) -> Rows:
    return (
        1.0 + f[0], f[1], s[0] * per_volt, s[1] * per_nm,
        f[2], 1.0 + f[3], s[2] * per_volt, s[3] * per_nm,
        s[0] / step_s, s[1] / step_s, w[0] * per_volt / step_s, w[1] * per_nm / step_s,
        s[2], s[3], w[2] * per_volt, w[3] * per_nm,
    )  # fmt: skip


def transitions(system: _Matrix, per_volt: float, per_nm: float, tick_s: float) -> tuple[Rows, ...]:
    """Return the rows for a tick and its halvings, longest step first, HALVINGS + 1 of them.

    `system` is A by rows in 1/s, `per_volt` the current's slope per volt in A/(s*V), `per_nm` the speed's slope per
    opposing torque in rad/(s^2*N*m), so negative. A's eigenvalues must not grow (real parts at most 0). Raises
    `FileError` for a system so stiff that nothing meaningful is left of it in a tick.
    """
    a, b, c, d = system
    size = max(abs(a) + abs(b), abs(c) + abs(d)) * tick_s
    if not size < _STIFFEST:
        raise FileError(
            f"the motor changes {size:.3g} times over within a tick",
            wanted=f"resistance, inductance, constant, inertia and friction must keep this below {_STIFFEST:g}",
        )
    doublings = max(HALVINGS, 2 + math.frexp(size)[1])
    step_s = math.ldexp(tick_s, -doublings)
    f, s, w = _series(system, step_s)
    ladder: list[Rows] = []
    for left in range(doublings, -1, -1):
        if left <= HALVINGS:
            ladder.append(_rows(f, s, w, step_s, per_volt, per_nm))
        w = _sum(_sum(w, 2.0, s, step_s), 1.0, _times(f, w), 1.0)
        s = _sum(s, 2.0, _times(f, s), 1.0)
        f = _sum(f, 2.0, _times(f, f), 1.0)
        step_s *= 2.0
    return tuple(reversed(ladder))
