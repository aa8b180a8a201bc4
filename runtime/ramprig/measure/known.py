"""What is known of a motor before it runs: measured constants where the bench file has them, else its model's figures.

Each figure has a standard uncertainty: the measured ones their own, the others one that is assumed by what kind of
figure it is. The assumed ones are ours, and each result that rests on them says so.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from ramprig.bench import Bench, Motor
from ramprig.bench.measured import MeasuredEntry
from ramprig.mock.from_bench import SPARE

from .numbers.uncertainty import Measured, coverage_factor
from .refusal import NotMeasurable

CONSTANTS = ("resistance_20", "constant", "coulomb", "viscous", "inertia", "inductance")
"""What `ramprig measure constants` finds; the others come from the model or are usual."""

ASSUMED = {
    "resistance_20": 0.05,
    "constant": 0.05,
    "coulomb": 0.20,
    "viscous": 0.30,
    "inertia": 0.15,
    "inductance": 0.20,
    "stiction": 0.15,
    "bridge": 0.20,
    "thermal_resistance": 0.20,
    "thermal_time": 0.20,
    "supply_resistance": 0.20,
    "capacitance": 0.10,
    "volts": 0.005,
}
"""Relative standard uncertainty of a figure that was not measured: as data sheets and first guesses are; ours.
`stiction` is the break-away friction as a multiple of the running one, less 1."""
AMBIENT_U_K = 2.0

UNITS = {
    "resistance_20": "ohm",
    "constant": "V*s",
    "coulomb": "N*m",
    "viscous": "N*m*s",
    "inertia": "kg*m2",
    "inductance": "H",
    "stiction": "",
    "bridge": "ohm",
    "thermal_resistance": "K/W",
    "thermal_time": "s",
    "ambient": "degC",
}


@dataclass(frozen=True, slots=True, kw_only=True)
class Known:
    """The figures of one motor by name (`UNITS`), and where they come from, in words.

    `measured` are the names of those that were measured; `usual` those that nothing in the bench file says.
    """

    figures: Mapping[str, Measured]
    source: str
    measured: frozenset[str]
    usual: tuple[str, ...]


def figures_of(bench: Bench, motor: Motor) -> Known:
    """What is known of a motor. Raises NotMeasurable where it has neither a model nor measured constants."""
    entry = bench.measured.get(motor.name, {}).get("constants")
    if motor.model is None and entry is None:
        raise NotMeasurable(
            f"{motor.name} has neither a 'model' nor measured constants",
            wanted="`ramprig measure constants --save`, or the model's figures from the data sheet",
        )
    figures = _of_model(motor)
    measured = _of_entry(entry)
    if motor.model is None and (missing := [name for name in CONSTANTS[:5] if name not in measured]):
        raise NotMeasurable(f"the measured constants of {motor.name} lack {', '.join(missing)}", wanted="measure anew")
    figures |= measured
    usual = _usual(motor)
    for name in usual:
        value = {
            "thermal_resistance": SPARE.motor.thermal_resistance_k_w,
            "thermal_time": SPARE.motor.thermal_time_s,
            "ambient": SPARE.motor.ambient_c,
        }[name]
        figures[name] = _assumed(name, value, times=2.0)
    if "inductance" not in figures:
        # Only the current's first millisecond depends on it: a time constant of 0.5 ms stands for it.
        figures["inductance"] = _assumed("inductance", 0.5e-3 * figures["resistance_20"].value, times=2.0)
        usual = (*usual, "inductance")
    figures.setdefault("stiction", Measured(0.3, "", 0.15))
    figures.setdefault("bridge", Measured(0.0, "ohm", 0.0))
    return Known(figures=figures, source=_source(entry, measured), measured=frozenset(measured), usual=usual)


def _usual(motor: Motor) -> tuple[str, ...]:
    model = motor.model
    said = {
        "thermal_resistance": None if model is None else model.thermal_resistance_k_w,
        "thermal_time": None if model is None else model.thermal_s,
        "ambient": None if model is None else model.ambient_c,
    }
    return tuple(name for name, value in said.items() if value is None)


def _assumed(name: str, value: float, *, times: float = 1.0) -> Measured:
    u = AMBIENT_U_K if name == "ambient" else ASSUMED[name] * abs(value)
    return Measured(value, UNITS[name], times * u)


def _of_model(motor: Motor) -> dict[str, Measured]:
    model = motor.model
    if model is None:
        return {}
    told = {
        "resistance_20": model.resistance_ohm,
        "constant": model.constant_vs,
        "coulomb": model.running_nm,
        "viscous": model.viscous_nms,
        "inertia": model.inertia_kgm2,
        "inductance": model.inductance_h,
        "stiction": model.breakaway_nm / model.running_nm - 1.0 if model.running_nm else 0.0,
        "bridge": model.bridge_ohm,
        "thermal_resistance": model.thermal_resistance_k_w,
        "thermal_time": model.thermal_s,
        "ambient": model.ambient_c,
    }
    return {name: _assumed(name, value) for name, value in told.items() if value is not None}


def _of_entry(entry: MeasuredEntry | None) -> dict[str, Measured]:
    if entry is None:
        return {}
    found = {}
    for name in CONSTANTS:
        value = entry.values.get(name)
        if value is not None and value.value > 0.0:
            u = value.expanded / coverage_factor(value.dof)
            found[name] = Measured(value.value, UNITS[name], u, value.dof)
    return found


def _source(entry: MeasuredEntry | None, measured: Mapping[str, Measured]) -> str:
    if entry is None or not measured:
        return "the bench file's model, with assumed uncertainties (nothing of it was measured)"
    rest = [name.replace("_", " ") for name in CONSTANTS if name not in measured]
    besides = f"; {', '.join(rest)} and all else from the model, assumed" if rest else "; all else assumed"
    return f"the constants measured on {entry.date} ({entry.board}, {entry.run}){besides}"
