"""Motor constants from recordings: one joint least-squares fit over pulses, steady points, run-ups and coast-downs.

R, Ke = Kt, Coulomb and viscous friction, J and, where the sampling allows it, L, all from the same fit with its
covariance. Current noise and the encoder's steps weigh the readings (their sizes are found in the residuals), the
current's offset is a parameter, and so is the winding's warming during the test, unless its temperature was measured.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .numbers import copper, joint
from .numbers.joint import OFFSET, RISE, TC, B, J, K, L, Noise, R, Solution
from .numbers.motor import Motion
from .numbers.startvalues import start_values
from .numbers.uncertainty import Measured, correlations, propagate
from .numbers.windows import Recording, Window, cut, noise_a
from .refusal import NotMeasurable

Array = NDArray[np.float64]

CORE = (R, K, B, J, TC)
UNITS = ("ohm", "V*s", "N*m*s", "kg*m2", "H", "N*m")
KEYS = ("resistance_20", "constant", "viscous", "inertia", "inductance", "coulomb")
"""The results' names, in the order of `joint.NAMES`."""

FIRST_WINDOWS = 80
"""So many windows, the lively ones first, find the constants before all are used: the same end, sooner."""
L_KNOWN_TO = 0.25
"""An inductance with a larger relative standard uncertainty is called not found; a choice of ours."""
PUSH_SHARE = 0.8
"""A driven shaft counts as still only while the motor's torque stays below this share of the Coulomb friction."""
ELECTRICAL_PERIODS = (0.1, 0.3, 0.6, 1.0, 1.7, 3.0, 10.0, 50.0, 300.0)
"""Electrical time constants tried at first, in sample periods."""
GOOD_FIT = 2.0
"""Mean square of the residuals, over the noise first assumed, below which no other way is tried."""
ROUNDS = 3
"""So often windows that do not fit the rest are left out of the first search."""
MISFIT = 25.0
"""A window whose mean square residual exceeds so many times the median's is left out and named; a choice of ours."""
LEAST_NOISE_A, LEAST_NOISE_RAD = 1e-7, 1e-8
"""Readings are never taken to be better than this, so that data without any noise can be fitted, too."""
FULL_RANGE = 0.995
"""From this share of its range on a current sensor counts as saturated."""
MOST_LEFT_OUT = 0.25
"""With more than this share of the windows left out there is no result."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Instruments:
    """What is known of the bench beside the recording; uncertainties are standard ones.

    `bridge_ohm` is what the bridge and leads add to the winding. `current_gain_u` and `supply_gain_u` are relative
    (type B) uncertainties of the two scales, common to all readings. `start_c` is the winding's temperature at the
    beginning, `thermal_time_s` its time constant, needed only roughly. Temperatures in degC. `range_a` is the end of
    the current sensor's range, None where it is not known.
    """

    start_c: float = 20.0
    start_u_k: float = 1.0
    bridge_ohm: float = 0.0
    bridge_u_ohm: float = 0.0
    current_gain_u: float = 0.0
    supply_gain_u: float = 0.0
    thermal_time_s: float = 60.0
    range_a: float | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Leftover:
    """Measured - fitted of one window: current in A and, where the shaft turned, angle in rad."""

    window: Window
    current_a: Array
    angle_rad: Array | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Identification:
    """Constants with their uncertainty; the covariance and correlations are in the order of `keys`.

    `inductance` is None where the sampling did not allow it. `noise` are the standard deviations found in the
    residuals; `warnings` are sentences for the user. `used_s` is the time that the fitted windows cover, `warmest_k`
    the winding's warming as fitted. `fitted` are the parameters as `joint.NAMES` orders them.
    """

    resistance_20: Measured
    constant: Measured
    coulomb: Measured
    viscous: Measured
    inertia: Measured
    inductance: Measured | None
    electrical_time: Measured | None
    mechanical_time: Measured
    current_offset: Measured
    warmest_k: float
    keys: tuple[str, ...]
    covariance: Array
    correlations: Array
    noise: Noise
    warnings: tuple[str, ...]
    windows: tuple[Window, ...]
    used_s: float
    fitted: Array
    bridge_ohm: float

    def residuals(self) -> list[Leftover]:
        """What the fit leaves of each window, for plots."""
        found = joint.linearised(self.fitted, self.windows, bridge_ohm=self.bridge_ohm, noise=self.noise)
        return [
            Leftover(
                part.window,
                part.left[0] * self.noise.current_a,
                part.left[1] * self.noise.angle_rad if len(part.left) > 1 else None,
            )
            for part in found
        ]

    def to_json(self) -> dict[str, object]:
        """For programs: each constant as `Measured.to_json`, correlations, warnings."""
        names = (*KEYS, "electrical_time", "mechanical_time", "current_offset")
        told: dict[str, object] = {}
        for name in names:
            value = getattr(self, name)
            told[name] = None if value is None else value.to_json()
        told["correlations"] = {"order": list(self.keys), "matrix": self.correlations.tolist()}
        told["warnings"] = list(self.warnings)
        return told


def identify(recordings: Sequence[Recording], instruments: Instruments | None = None) -> Identification:
    """Find the constants of one motor from all recordings together.

    They must share the encoder; the winding's temperature is either measured in all or in none. Raises `NotMeasurable`
    when the shaft never turned for long enough, when the readings do not fit one motor, or when the search does not
    settle.
    """
    known = instruments or Instruments()
    _check_range(recordings, known)
    windows = [window for recording in recordings for window in cut(recording, thermal_time_s=known.thermal_time_s)]
    turning = [window for window in windows if window.motion is Motion.TURNING]
    if not turning:
        raise NotMeasurable(
            "the shaft did not turn long enough while driven",
            wanted="check drive and encoder with the wiring check, or drive further or longer",
        )
    if not any(np.abs(window.current_a).max() > 0.0 for window in turning):
        raise NotMeasurable("no current was measured", wanted="these constants need a current sensor")
    _check_signs(turning)
    warnings: list[str] = []
    solution, windows, noise = _fitted(windows, known, warnings)
    if not _inductance_known(solution, windows):
        warnings.append(
            "the inductance cannot be found at this sample period: log faster, or give pulses at a held shaft"
        )
        free = tuple(index for index in solution.free if index != L)
        solution = joint.solve(windows, solution.values, free=free, bridge_ohm=known.bridge_ohm, noise=noise)
    if not solution.settled:
        raise NotMeasurable("the fit does not settle", wanted="look at the recording: does it show one motor's motion?")
    return _result(solution, windows, noise, known, warnings)


def _check_range(recordings: Sequence[Recording], known: Instruments) -> None:
    if known.range_a is None:
        return
    largest = max(float(np.abs(recording.current_a).max(initial=0.0)) for recording in recordings)
    if largest >= FULL_RANGE * known.range_a:
        raise NotMeasurable(
            f"the current sensor was at the end of its range ({largest:.3g} of {known.range_a:.3g} A)",
            wanted="ramp more gently or lower the duty, so that all of the current is seen",
        )


def _check_signs(turning: Sequence[Window]) -> None:
    """Refuse a motor that turns against its voltage: an encoder or motor wired the wrong way round."""
    pulls = [float(np.sign(window.volts[:-1].mean())) * window.direction * len(window) for window in turning]
    if sum(pulls) < 0.0:
        raise NotMeasurable(
            "the counts run against the duty", wanted="swap the encoder's phases or the motor's leads (wiring check)"
        )


def _inductance_known(solution: Solution, windows: Sequence[Window]) -> bool:
    """Whether the samples determine it: it is not at the least that they can tell, and its uncertainty is small."""
    covariance, _ = _statistical(solution, windows)
    least = joint.LEAST_PERIODS * min(window.period_s for window in windows) * solution.values[R]
    found = float(solution.values[L])
    return found > 1.5 * least and math.sqrt(covariance[L, L]) <= L_KNOWN_TO * found


def _fitted(windows: list[Window], known: Instruments, warnings: list[str]) -> tuple[Solution, list[Window], Noise]:
    """First few windows without driven stills, then all, with the noise as found and stills that certainly are."""
    idle = [window.current_a for window in windows if window.motion is Motion.IDLE]
    offset = float(np.mean(np.concatenate(idle))) if idle else 0.0
    moving = [w for w in windows if w.motion is not Motion.STILL or w.held]
    start = start_values(windows, bridge_ohm=known.bridge_ohm, offset_a=offset)
    quiet = float(np.median([noise_a(window.current_a) for window in windows]))
    noise = Noise(max(quiet, 5e-4), _step_rad(windows) / math.sqrt(12.0))
    measured = all(window.winding_c is not None for window in windows)
    free = [*CORE, L, OFFSET] + ([] if measured else [RISE])

    few = _liveliest(moving)
    for _ in range(ROUNDS):
        solution = _from_start(few, start, free, known, noise)
        kept, _ = _sorted_out(few, solution.sums)
        if len(kept) == len(few):
            break
        few = kept
    noise = _noise_found(solution.sums, len(solution.free), noise)
    windows = _trusted(windows, solution.values)
    before = joint.sums(solution.values, windows, bridge_ohm=known.bridge_ohm, noise=noise)
    kept, out = _sorted_out(windows, before)
    if len(out) > MOST_LEFT_OUT * len(windows):
        raise NotMeasurable(
            f"{len(out)} of {len(windows)} stretches do not fit one motor with constant friction",
            wanted="look at the residuals: a slipping coupling, a load that varies or lost counts do this",
        )
    warnings.extend(
        f"left out {window.motion} from {window.begin_s:.3f} s for {len(window) * window.period_s:.3f} s: "
        "it does not fit the rest"
        for window in out
    )
    solution = joint.solve(kept, solution.values, free=free, bridge_ohm=known.bridge_ohm, noise=noise)
    return solution, kept, _noise_found(solution.sums, len(solution.free), noise)


def _from_start(
    windows: Sequence[Window], start: Array, free: Sequence[int], known: Instruments, noise: Noise
) -> Solution:
    """The first search: the inductance after the others, or with them, until one way leads to a good fit.

    How good is judged by the middle window, so that a few that do not belong do not count. A fast winding (L/R of some
    periods) is found by the first way, a slow one by the others.
    """
    found: list[Solution] = []
    for with_others, guessed in ((False, True), (False, False), (True, True)):
        values = start.copy()
        if guessed:
            values[L] = _best_inductance(windows, values, known, noise)
        early = [index for index in free if index != RISE and (with_others or index != L)]
        values = joint.solve(windows, values, free=early, bridge_ohm=known.bridge_ohm, noise=noise).values
        if guessed and not with_others:
            values = values.copy()
            values[L] = _best_inductance(windows, values, known, noise)
        found.append(joint.solve(windows, values, free=free, bridge_ohm=known.bridge_ohm, noise=noise))
        if found[-1].settled and float(np.median(found[-1].sums.by_window)) < GOOD_FIT:
            break
    return min(found, key=lambda solution: float(np.median(solution.sums.by_window)))


def _best_inductance(windows: Sequence[Window], values: Array, known: Instruments, noise: Noise) -> float:
    """The inductance, of a row of them, that fits best as things stand: the fit has no slope to follow when far off."""
    best = (math.inf, float(values[L]))
    for periods in ELECTRICAL_PERIODS:
        trial = values.copy()
        trial[L] = periods * windows[0].period_s * (values[R] + known.bridge_ohm)
        square = joint.sums(trial, windows, bridge_ohm=known.bridge_ohm, noise=noise).square
        best = min(best, (square, float(trial[L])))
    return best[1]


def _step_rad(windows: Sequence[Window]) -> float:
    """The encoder's step."""
    moves = [float(d[d > 0].min()) for w in windows if (d := np.abs(np.diff(w.angle_rad))).max(initial=0.0) > 0.0]
    return min(moves)


def _liveliest(windows: Sequence[Window]) -> list[Window]:
    """At most `FIRST_WINDOWS` windows, those with something happening first, spread over the whole time."""
    lively = [window for window in windows if window.lively]
    dull = [window for window in windows if not window.lively]
    chosen: list[Window] = []
    for group, share in ((lively, 3 * FIRST_WINDOWS // 4), (dull, FIRST_WINDOWS)):
        most = min(share, FIRST_WINDOWS - len(chosen), len(group))
        chosen += [group[place * len(group) // most] for place in range(most)] if most else []
    return chosen


def _trusted(windows: Sequence[Window], values: Array) -> list[Window]:
    """Without those still windows in which the motor pushed so hard that the shaft may have crept unseen."""
    most_a = PUSH_SHARE * values[TC] / values[K]
    return [
        w
        for w in windows
        if w.motion is not Motion.STILL or w.held or np.abs(w.current_a - values[OFFSET]).max() < most_a
    ]


def _sorted_out(windows: Sequence[Window], found: joint.Sums) -> tuple[list[Window], list[Window]]:
    """The windows that fit the rest, and those that do not."""
    fits = found.by_window <= MISFIT * np.median(found.by_window)
    kept = [window for window, good in zip(windows, fits, strict=True) if good]
    return kept, [window for window, good in zip(windows, fits, strict=True) if not good]


def _noise_found(found: joint.Sums, free: int, noise: Noise) -> Noise:
    """The readings' standard deviations as the residuals show them."""
    left = 1.0 - (found.states + free) / found.readings
    current = math.sqrt(found.square_current / (found.count_current * left))
    angle = math.sqrt(found.square_angle / (found.count_angle * left))
    return Noise(max(noise.current_a * current, LEAST_NOISE_A), max(noise.angle_rad * angle, LEAST_NOISE_RAD))


def _result(
    solution: Solution, windows: list[Window], noise: Noise, known: Instruments, warnings: list[str]
) -> Identification:
    values = solution.values.copy()
    statistical, dof = _statistical(solution, windows)
    covariance = statistical + _common(values, known)
    if any(window.winding_c is None for window in windows):
        factor = copper.factor(known.start_c)
        values[R] /= factor
        statistical[R, R] /= factor**2
        covariance[R, :] /= factor
        covariance[:, R] /= factor
        covariance[R, R] += (values[R] * copper.ALPHA_20_PER_K / factor * known.start_u_k) ** 2
    # Welch-Satterthwaite with one finite contribution: the others, from outside, count as known.
    own, whole = np.diag(statistical), np.diag(covariance)
    dofs = np.where(own > 0.0, dof * (whole / np.where(own > 0.0, own, 1.0)) ** 2, math.inf)
    warnings.extend(f"{' and '.join(names)} cannot be told apart by what was recorded" for names in solution.weak)

    def one(index: int, unit: str) -> Measured:
        return Measured(float(values[index]), unit, math.sqrt(covariance[index, index]), float(dofs[index]))

    found = {key: one(index, unit) for index, (key, unit) in enumerate(zip(KEYS, UNITS, strict=True))}
    for key, value in found.items():
        if key != "inductance" and value.relative > 0.5:
            warnings.append(f"{key} is not determined by what was recorded: {value}")
    has_inductance = L in solution.free
    order = [index for index in range(len(KEYS)) if index != L or has_inductance]
    part = covariance[np.ix_(order, order)]
    electrical = _derived(lambda v: v[L] / v[R], values, covariance, float(dofs.min())) if has_inductance else None
    warmest = max((window.heat_a2s for window in windows), default=0.0) * values[RISE] / copper.ALPHA_20_PER_K
    return Identification(
        resistance_20=found["resistance_20"],
        constant=found["constant"],
        coulomb=found["coulomb"],
        viscous=found["viscous"],
        inertia=found["inertia"],
        inductance=found["inductance"] if has_inductance else None,
        electrical_time=electrical,
        mechanical_time=_derived(
            lambda v: v[J] * v[R] / (v[K] ** 2 + v[B] * v[R]), values, covariance, float(dofs.min())
        ),
        current_offset=one(OFFSET, "A"),
        warmest_k=float(warmest),
        keys=tuple(KEYS[index] for index in order),
        covariance=part,
        correlations=correlations(part),
        noise=noise,
        warnings=tuple(warnings),
        windows=tuple(windows),
        used_s=sum(len(window) * window.period_s for window in windows),
        fitted=solution.values,
        bridge_ohm=known.bridge_ohm,
    )


def _statistical(solution: Solution, windows: Sequence[Window]) -> tuple[Array, Array]:
    """Covariance and degrees of freedom by parameter, from the readings alone.

    Where the scatter from window to window is larger than the noise of the readings explains, it counts.
    """
    total = solution.sums
    many = total.readings - total.states - len(solution.free)
    covariance = solution.covariance * (total.square / many)
    size = np.sqrt(np.maximum(np.diag(covariance), 1e-300))
    widen = np.maximum(1.0, joint.scatter(solution.sums, solution.free) / size)
    moving = sum(window.motion is not Motion.IDLE for window in windows)
    dof = np.where(widen > 1.0, max(1, moving - len(solution.free)), many).astype(float)
    return covariance * np.outer(widen, widen), dof


_BY_CURRENT_GAIN = np.array([-1.0, 0.0, 1.0, 1.0, -1.0, 1.0, 0.0, 0.0])
_BY_SUPPLY_GAIN = np.array([1.0, 1.0, 1.0, 1.0, 1.0, 1.0, 0.0, 0.0])
"""How the constants, in `joint.NAMES`' order, follow a common error of scale: V = R i + K w, J dw/dt = K i - ..."""


def _common(values: Array, known: Instruments) -> Array:
    """Covariance from what all readings have in common: the scales of current and supply, the bridge's resistance."""
    current = values * _BY_CURRENT_GAIN * known.current_gain_u
    supply = values * _BY_SUPPLY_GAIN * known.supply_gain_u
    bridge = np.zeros(len(values))
    bridge[R] = known.bridge_u_ohm
    return np.outer(current, current) + np.outer(supply, supply) + np.outer(bridge, bridge)


def _derived(function: Callable[[Array], float], values: Array, covariance: Array, dof: float) -> Measured:
    """A time formed from the constants, its uncertainty with their correlations."""
    found, spread = propagate(lambda at: np.array([function(at)]), values, covariance)
    return Measured(float(found[0]), "s", math.sqrt(spread[0, 0]), dof)
