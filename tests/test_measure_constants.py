"""The motor's constants: on the mock the truth lies in the stated intervals; bad data give a refusal and no numbers."""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path

import numpy as np
import pytest

from measure_rig import Drawn, drawn_bench, measured
from ramprig.bench import Bench, load_bench
from ramprig.cli.main import main
from ramprig.measure.findings import Findings
from ramprig.measure.procedures.constants import Constants
from ramprig.measure.refusal import NotMeasurable

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"
NAMES = ("resistance_20", "constant", "coulomb", "viscous", "inertia", "inductance")


def truth_of(bench: Bench) -> dict[str, float]:
    """What the mock's motor is made of."""
    model = bench.motors[0].model
    assert model is not None
    figures = (
        *(model.resistance_ohm, model.constant_vs, model.running_nm),
        *(model.viscous_nms, model.inertia_kgm2, model.inductance_h),
    )
    return dict(zip(NAMES, figures, strict=True))


def holds(findings: Findings, truth: dict[str, float]) -> dict[str, bool]:
    """Whether each stated interval holds the truth."""
    held = {}
    for name, true in truth.items():
        if name in findings.values:
            low, high = findings.values[name].interval()
            held[name] = low <= true <= high
    return held


def of_benches(seeds: range) -> tuple[dict[str, list[bool]], dict[str, list[float]], list[str]]:
    """By constant: what holds, and the relative errors; and the refusals."""
    refused: list[str] = []
    held: dict[str, list[bool]] = {name: [] for name in NAMES}
    errors: dict[str, list[float]] = {name: [] for name in NAMES}
    for seed in seeds:
        drawn: Drawn = drawn_bench(seed)
        try:
            findings = measured(Constants(motor="vent"), drawn.bench, seed=seed).findings
        except NotMeasurable as refusal:
            refused.append(f"{seed}: {refusal}")
            continue
        truth = truth_of(drawn.bench)
        for name, holding in holds(findings, truth).items():
            held[name].append(holding)
            if truth[name]:
                errors[name].append(abs(findings.values[name].value / truth[name] - 1.0))
    return held, errors, refused


def test_the_vents_constants_lie_in_their_intervals() -> None:
    bench = load_bench(VENT)
    findings = measured(Constants(motor="vent"), bench, seed=3).findings
    held = holds(findings, truth_of(bench))
    assert sum(held.values()) >= len(held) - 1
    assert set(NAMES) - {"inductance"} <= held.keys()
    values = findings.values
    assert values["constant"].value == pytest.approx(0.0195, rel=0.02)
    assert values["resistance_20"].value == pytest.approx(2.4, rel=0.02)
    assert values["inertia"].value == pytest.approx(60e-7, rel=0.05)
    assert "vent" in findings.sentence
    assert any("20 degC" in line for line in findings.lines)


def test_constants_of_random_benches_lie_in_their_intervals() -> None:
    held, errors, refused = of_benches(range(2))
    assert not refused
    flat = [one for found in held.values() for one in found]
    assert np.mean(flat) >= 0.8
    for name in ("resistance_20", "constant"):
        assert np.median(errors[name]) < 0.02
    for name in ("coulomb", "inertia"):
        assert np.median(errors[name]) < 0.05


@pytest.mark.soak
def test_constants_of_100_random_benches_lie_in_their_intervals() -> None:
    """Run by `python -m pytest -m soak tests/test_measure_constants.py -s`; prints the fractions."""
    held, errors, refused = of_benches(range(100))
    print(refused)
    flat = [one for found in held.values() for one in found]
    print({name: (len(found), float(np.mean(found))) for name, found in held.items()})
    print({name: float(np.median(found)) for name, found in errors.items()})
    assert len(refused) <= 2
    assert 0.90 <= np.mean(flat) <= 0.99


def test_the_scales_widen_what_they_touch() -> None:
    bench = drawn_bench(1).bench
    exact = measured(Constants(motor="vent"), bench).findings
    wide = measured(Constants(motor="vent", scale_u=0.02), bench).findings
    for name in ("resistance_20", "constant", "coulomb", "inertia"):
        assert wide.values[name].relative > max(0.015, exact.values[name].relative)
        assert wide.values[name].value == pytest.approx(exact.values[name].value, rel=1e-6)


def test_a_run_folder_has_result_and_residuals(tmp_path: Path) -> None:
    done = measured(Constants(motor="vent"), load_bench(VENT), runs=tmp_path, pictures=True)
    assert done.folder is not None
    names = {path.name for path in done.folder.iterdir()}
    assert {"result.json", "residuals.png", "correlations.png"} <= names
    result = json.loads((done.folder / "result.json").read_text("utf-8"))
    assert result["values"]["constant"]["unit"] == "V*s"
    assert result["facts"]["identified"]["correlations"]["order"][0] == "resistance_20"


@pytest.mark.parametrize("fault", ["jammed_shaft", "encoder_dead", "leads_swapped"])
def test_bad_data_end_in_a_refusal(fault: str) -> None:
    with pytest.raises(NotMeasurable):
        measured(Constants(motor="vent"), drawn_bench(2).bench, faults=(fault,))


def test_a_saturated_sensor_is_refused() -> None:
    bench = drawn_bench(1).bench
    motor = bench.motors[0]
    assert motor.model is not None
    small = dataclasses.replace(motor.model, sensor_range_ma=150)
    changed = dataclasses.replace(bench, motors=(dataclasses.replace(motor, model=small),))
    with pytest.raises(NotMeasurable, match="sensor"):
        measured(Constants(motor="vent"), changed)


def test_what_cannot_be_measured_is_refused_before_anything_moves() -> None:
    with pytest.raises(NotMeasurable, match="no encoder"):
        Constants(motor="vent").bench(drawn_bench(2, encoder=False).bench)
    with pytest.raises(NotMeasurable, match="scale error"):
        Constants(motor="vent", scale_u=0.7).bench(drawn_bench(2).bench)


def test_save_writes_what_the_bench_file_reads_back(tmp_path: Path) -> None:
    path = tmp_path / "bench.yaml"
    path.write_bytes(VENT.read_bytes())
    code = main(
        ["measure", "constants", "--bench", str(path), "--rehearse", "--runs", str(tmp_path / "runs"), "--save"]
    )
    assert code == 0
    entry = load_bench(path).measured["vent"]["constants"]
    assert entry.board.endswith("rehearsed")
    assert entry.values["constant"].value == pytest.approx(0.0195, rel=0.01)
    assert entry.values["coulomb"].unit == "N*m"
