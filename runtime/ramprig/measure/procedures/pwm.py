"""The PWM adviser: what each PWM frequency costs and gives on one motor, reckoned from R, L and the supply.

Formulas and where they come from:
- ripple, approximate and exact: `ramprig.mock.plant.ripple` (Erickson and Maksimovic, ch. 2, from memory). Locked
  antiphase (bipolar) drive doubles the voltage that swings; a timer that counts up and down halves the ripple of
  sign-magnitude drive only where both legs switch, which is not assumed here.
- resolution: log2 of the timer's steps in a period, clock/frequency, half of it for a timer that counts up and down
  (PIC16F887 and AVR data sheets).
- dead time: each half bridge that switches loses V t f of its mean voltage (from memory).
- least frequency for 40 % ripple of the rated current: f >= 0.6 V/(L I) (common practice: a bound at D = 1/2 would be
  0.625).
- audible: 20 Hz to 20 kHz (common practice).
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from ramprig.bench import Bench
from ramprig.errors import PackageMissing, RecordError
from ramprig.measure.findings import Findings, Picture
from ramprig.measure.known import figures_of
from ramprig.measure.numbers.uncertainty import Measured, propagate
from ramprig.measure.plots import png
from ramprig.measure.refusal import NotMeasurable
from ramprig.mock.plant.ripple import exact_ripple_a, ripple_a, triangle_rms_a
from ramprig.quantity import digits

if TYPE_CHECKING:
    from matplotlib.figure import Figure

AUDIBLE_HZ = (20.0, 20_000.0)
LADDER_HZ = (250.0, 500.0, 1_000.0, 2_000.0, 4_000.0, 8_000.0, 16_000.0, 20_000.0, 25_000.0, 32_000.0, 50_000.0)
RIPPLE_SHARE = 0.4
RULE = 0.6
BITS_LEAST = 8.0
"""With fewer bits a step of the duty is more than 0.4 %: too coarse for slow ramps (ours)."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PwmWish:
    """What is asked: the frequency the board has now (None: not said), its timer's clock, dead time and drive."""

    motor: str
    frequency_hz: float | None = None
    clock_hz: float = 16e6
    dead_time_s: float = 0.0
    centred: bool = False
    bipolar: bool = False


def resolution_bits(clock_hz: float, frequency_hz: float, *, centred: bool = False) -> float:
    """The timer's steps in a period, as bits: log2(clock/frequency), one bit less for a timer that counts both ways."""
    return math.log2(clock_hz / frequency_hz) - (1.0 if centred else 0.0)


def dead_time_error_v(*, bus_v: float, dead_time_s: float, frequency_hz: float, legs: int = 1) -> float:
    """The mean voltage lost by so many half bridges that switch: V t f each."""
    return legs * bus_v * dead_time_s * frequency_hz


def exact_a(
    *, bus_v: float, duty: float, frequency_hz: float, inductance_h: float, resistance_ohm: float, bipolar: bool
) -> float:
    """Peak-to-peak ripple with the winding's resistance. `duty` is that of the bridge, 0 to 1: for bipolar drive the
    share of the time at +V, so that its mean voltage is (2 duty - 1) V."""
    return (2.0 if bipolar else 1.0) * exact_ripple_a(
        bus_v=bus_v,
        duty=duty,
        frequency_hz=frequency_hz,
        inductance_h=inductance_h,
        resistance_ohm=resistance_ohm,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """What one frequency costs and gives; ripple peak to peak at duty 1/2."""

    frequency_hz: float
    exact_a: float
    approximate_a: float
    rms_a: float
    bits: float
    dead_time_v: float
    audible: bool


def advise(bench: Bench, wish: PwmWish) -> Findings:
    """The adviser's findings. Raises NotMeasurable where R or L is not known, or what is asked makes no sense."""
    _check(wish)
    motor = bench.motor(wish.motor)
    known = figures_of(bench, motor)
    figures = known.figures
    if "inductance" not in figures or "resistance_20" not in figures:
        raise NotMeasurable(
            f"nothing says the inductance of {motor.name}",
            wanted="a 'model' in the bench file, or `ramprig measure constants --save`",
        )
    henry, ohm = figures["inductance"], figures["resistance_20"]
    bridge = figures["bridge"].value
    volts = bench.supply.voltage_v
    drive = {"bus_v": volts, "inductance_h": henry.value}

    def row(frequency_hz: float) -> Row:
        exact = exact_a(
            duty=0.5, frequency_hz=frequency_hz, resistance_ohm=ohm.value + bridge, bipolar=wish.bipolar, **drive
        )
        return Row(
            frequency_hz=frequency_hz,
            exact_a=exact,
            approximate_a=(2.0 if wish.bipolar else 1.0) * ripple_a(duty=0.5, frequency_hz=frequency_hz, **drive),
            rms_a=triangle_rms_a(exact),
            bits=resolution_bits(wish.clock_hz, frequency_hz, centred=wish.centred),
            dead_time_v=dead_time_error_v(
                bus_v=volts, dead_time_s=wish.dead_time_s, frequency_hz=frequency_hz, legs=2 if wish.bipolar else 1
            ),
            audible=AUDIBLE_HZ[0] <= frequency_hz < AUDIBLE_HZ[1],
        )

    asked = [] if wish.frequency_hz is None else [wish.frequency_hz]
    rows = [row(frequency) for frequency in sorted({*LADDER_HZ, *asked}) if frequency <= wish.clock_hz / 4]
    rated_a = motor.rated_ma / 1000.0
    values = _values(wish, henry, ohm, bridge, volts, rated_a, asked)
    least_hz = values["least_frequency"].value
    lines = [
        f"from {known.source}: R {ohm}, L {henry}; supply {volts:g} V",
        *_table(rows, volts),
        "ripple: peak to peak at 50 % duty, exact and V D (1 - D)/(f L), doubled for locked antiphase",
        f"least frequency: 0.6 V/(L I) at the rated {1000 * rated_a:g} mA, about 40 % ripple (common practice)",
    ]
    return Findings(
        procedure="pwm",
        subject=motor.name,
        sentence=_sentence(motor.name, wish, rows, least_hz, rated_a),
        values=values,
        facts={"rows": rows, "source": known.source, "clock_hz": wish.clock_hz, "dead_time_s": wish.dead_time_s},
        lines=tuple(lines),
        pictures=(Picture(name="pwm", draw=lambda figure: _draw(figure, rows, rated_a, motor.name), height_in=7.0),),
    )


def _check(wish: PwmWish) -> None:
    asked = (wish.clock_hz, *([] if wish.frequency_hz is None else [wish.frequency_hz]))
    if any(not (math.isfinite(one) and one > 0.0) for one in asked):
        raise NotMeasurable("a frequency or clock that is not above 0 Hz", wanted="such as --frequency 20000")
    if wish.frequency_hz is not None and wish.frequency_hz > wish.clock_hz / 4:
        raise NotMeasurable(
            f"{wish.frequency_hz:g} Hz from a clock of {wish.clock_hz:g} Hz", wanted="four timer steps a period or more"
        )
    if not 0.0 <= wish.dead_time_s < 1e-3:
        raise NotMeasurable(f"a dead time of {1e9 * wish.dead_time_s:g} ns", wanted="0 to 1 ms")


def _values(
    wish: PwmWish, henry: Measured, ohm: Measured, bridge: float, volts: float, rated_a: float, asked: list[float]
) -> dict[str, Measured]:
    """What has an uncertainty, from those of R and L."""
    covariance = np.diag([henry.standard_uncertainty**2, ohm.standard_uncertainty**2])
    at = np.array([henry.value, ohm.value])

    def least(v: np.ndarray[tuple[int, ...], np.dtype[np.float64]]) -> float:
        return float(RULE * volts / (v[0] * rated_a))

    found = {"least_frequency": _propagated(least, at, covariance, "Hz", henry.dof)}
    for frequency in asked:

        def ripple(v: np.ndarray[tuple[int, ...], np.dtype[np.float64]], hz: float = frequency) -> float:
            return exact_a(
                bus_v=volts,
                duty=0.5,
                frequency_hz=hz,
                inductance_h=float(v[0]),
                resistance_ohm=float(v[1]) + bridge,
                bipolar=wish.bipolar,
            )

        found["ripple"] = _propagated(ripple, at, covariance, "A", henry.dof)
    return found


def _propagated(
    function: Callable[[np.ndarray[tuple[int, ...], np.dtype[np.float64]]], float],
    at: np.ndarray[tuple[int, ...], np.dtype[np.float64]],
    covariance: np.ndarray[tuple[int, ...], np.dtype[np.float64]],
    unit: str,
    dof: float,
) -> Measured:
    value, spread = propagate(lambda v: np.array([function(v)]), at, covariance)
    return Measured(float(value[0]), unit, math.sqrt(float(spread[0, 0])), dof)


def _table(rows: list[Row], volts: float) -> list[str]:
    lines = [f"{'Hz':>8} {'ripple':>10} {'approx.':>10} {'rms':>9} {'bits':>6} {'dead time':>16}  heard"]
    for one in rows:
        dead = f"{digits(1000 * one.dead_time_v, 3)} mV {digits(100 * one.dead_time_v / volts, 2)} %"
        lines.append(
            f"{one.frequency_hz:>8.0f} {1000 * one.exact_a:>7.1f} mA {1000 * one.approximate_a:>7.1f} mA "
            f"{1000 * one.rms_a:>6.1f} mA {one.bits:>6.2f} {dead:>16}  {'yes' if one.audible else 'no'}"
        )
    return lines


def _sentence(name: str, wish: PwmWish, rows: list[Row], least_hz: float, rated_a: float) -> str:
    good = [
        one
        for one in rows
        if one.bits >= BITS_LEAST and one.exact_a <= RIPPLE_SHARE * rated_a and one.frequency_hz >= least_hz
    ]
    silent = [one for one in good if not one.audible]
    chosen = silent[0] if silent else good[0] if good else None
    if chosen is None:
        advice = (
            f"no frequency gives both ripple below {100 * RIPPLE_SHARE:g} % of the rated current and "
            f"{BITS_LEAST:g} bits: a faster clock or more inductance is needed"
        )
    else:
        heard = "not heard" if not chosen.audible else "heard: none above 20 kHz has the bits"
        advice = (
            f"{digits(chosen.frequency_hz / 1000, 3)} kHz fits: {digits(1000 * chosen.exact_a, 3)} mA ripple, "
            f"{chosen.bits:.1f} bits, {heard}"
        )
    if wish.frequency_hz is None:
        return f"{name}: {advice}."
    now = next(one for one in rows if one.frequency_hz == wish.frequency_hz)
    ripple, share = digits(1000 * now.exact_a, 3), digits(100 * now.exact_a / rated_a, 2)
    return (
        f"{name}: at {digits(now.frequency_hz / 1000, 4)} kHz the ripple is {ripple} mA, {share} % of the rated "
        f"current, with {now.bits:.1f} bits, {'audible' if now.audible else 'not audible'}; {advice}."
    )


def _draw(figure: Figure, rows: list[Row], rated_a: float, title: str) -> None:
    ripple, bits = figure.subplots(2, 1, sharex=True)
    hz = [one.frequency_hz for one in rows]
    ripple.loglog(hz, [1000 * one.exact_a for one in rows], color="#1f5fa8", label="exact, with R")
    ripple.loglog(hz, [1000 * one.approximate_a for one in rows], "--", color="#b3541e", label="V/(4 f L)")
    ripple.axhline(1000 * RIPPLE_SHARE * rated_a, color="#2b2b2b", linewidth=0.9, label="40 % of the rated current")
    ripple.set_ylabel("ripple at 50 % duty, mA peak to peak")
    ripple.legend(fontsize=8, frameon=False)
    ripple.set_title(f"{title}: what the PWM frequency costs (grey: audible)")
    bits.semilogx(hz, [one.bits for one in rows], color="#1f5fa8")
    bits.set_ylabel("resolution, bits")
    bits.set_xlabel("PWM frequency, Hz")
    for axis in (ripple, bits):
        axis.grid(alpha=0.3, which="both")
        axis.axvspan(hz[0], min(hz[-1], AUDIBLE_HZ[1]), color="#8a8a8a", alpha=0.12, linewidth=0)


def write(findings: Findings, folder: Path, *, tell: Callable[[str], None]) -> list[Path]:
    """The result and its plot into the folder, replacing those of before. Raises RecordError where that cannot be."""
    stem = f"pwm-{findings.subject}"
    files = {f"{stem}.json": (json.dumps(findings.to_json(), allow_nan=False, indent=2) + "\n").encode()}
    try:
        files |= {f"{stem}.png": png(picture) for picture in findings.pictures}
    except PackageMissing as missing:
        tell(f"no plot: {missing}")
    written = []
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for name, data in files.items():
            (folder / name).write_bytes(data)
            written.append(folder / name)
    except OSError as error:
        raise RecordError(f"{folder} cannot be written: {error.strerror or error}") from error
    return written
