"""Duty to speed: break-away and drop-out within their stated intervals, the line, and refusals without numbers."""

from __future__ import annotations

import random
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from measure_rig import Drawn, Measured, drawn_bench, measured
from ramprig.bench import load_bench
from ramprig.measure.procedures.curve import Curve
from ramprig.measure.refusal import NotMeasurable
from ramprig.mock.controller import Controller
from ramprig.mock.device import MockDevice

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"
COPPER_AT_22_C = 1.0 + 0.00393 * 2.0
TRUTH_DRAWS = 200_000


@dataclass
class Sticking:
    """Has the mock's shaft stick anew each time it stops: break-away torques scatter by `scatter`, never below running.

    Practice shows such scatter; that it is a clipped normal one is this test's assumption.
    """

    drawn: Drawn
    scatter: float
    seed: int

    def torque_nm(self, deviate: float) -> float:
        return max(self.drawn.running_nm, self.drawn.breakaway_nm * (1 + self.scatter * deviate))

    def mean_nm(self) -> float:
        deviates = np.random.default_rng(self.seed).normal(size=TRUTH_DRAWS)
        return float(np.maximum(self.drawn.running_nm, self.drawn.breakaway_nm * (1 + self.scatter * deviates)).mean())

    def __call__(self, device: MockDevice) -> None:
        axis, chance = device.plant.axes[0], random.Random(self.seed)
        rested = [True]

        def watch(tick: int, controller: Controller | None) -> None:
            del tick, controller
            at_rest = axis.speed_rad_s == 0.0
            if at_rest and not rested[0]:
                axis.static_nm = self.torque_nm(chance.gauss(0.0, 1.0))
            rested[0] = at_rest

        device.trace = watch


def curve_of(seed: int, *, scatter: float) -> tuple[Measured, dict[str, float]]:
    """The curve of a random bench, and the true duties in percent."""
    drawn = drawn_bench(seed)
    sticking = Sticking(drawn, scatter, seed)
    done = measured(Curve(motor="vent"), drawn.bench, seed=seed, prepare=sticking)
    percent_per_nm = 100.0 / drawn.constant_vs * drawn.ohm * COPPER_AT_22_C / 12.0
    return done, {"breakaway": sticking.mean_nm() * percent_per_nm, "dropout": drawn.running_nm * percent_per_nm}


def inside(seeds: range) -> dict[str, float]:
    """The share of seeds and directions whose stated interval holds the truth."""
    held: dict[str, list[bool]] = {"breakaway": [], "dropout": []}
    for seed in seeds:
        done, truth = curve_of(seed, scatter=random.Random(seed).uniform(0.02, 0.15))
        for what, value in truth.items():
            for way in ("forward", "backward"):
                low, high = done.findings.values[f"{what}_{way}"].interval()
                held[what].append(low <= value <= high)
    return {what: float(np.mean(found)) for what, found in held.items()}


def test_break_away_and_drop_out_lie_in_their_intervals() -> None:
    found = inside(range(2))
    assert found["breakaway"] >= 0.75
    assert found["dropout"] == 1.0


@pytest.mark.soak
def test_break_away_and_drop_out_lie_in_their_intervals_in_95_percent_of_100_benches() -> None:
    found = inside(range(100))
    assert 0.90 <= found["breakaway"] <= 1.0, found
    assert 0.95 <= found["dropout"] <= 1.0, found


def test_the_example_bench_in_numbers() -> None:
    done = measured(Curve(motor="vent"), load_bench(VENT)).findings
    # Invented bench: Ts R/(K V) and Tc R/(K V) with R = 2.4 ohm at 22 degC plus 0.1 ohm of the bridge, bus 11.995 V.
    ohm = 2.4 * COPPER_AT_22_C + 0.1
    for way in ("forward", "backward"):
        breakaway, dropout = done.values[f"breakaway_{way}"], done.values[f"dropout_{way}"]
        assert breakaway.interval()[0] <= 100 * 2.2e-3 / 0.0195 * ohm / 11.995 <= breakaway.interval()[1]
        assert dropout.interval()[0] <= 100 * 1.5e-3 / 0.0195 * ohm / 11.995 <= dropout.interval()[1]
        assert breakaway.expanded() < 0.2
        # K w = V d - R (Tc + b w)/K, the gear 90: the slope over the duty in percent.
        slope = 0.01 * 11.99 / (0.0195 + ohm * 8e-7 / 0.0195) * 30 / np.pi / 90
        assert done.values[f"slope_{way}"].value == pytest.approx(slope, rel=0.01)
    assert "forward it starts at" in done.sentence


@pytest.mark.parametrize(
    ("fault", "words"),
    [
        ("jammed_shaft", "stall|overcurrent|did not move"),
        ("encoder_dead", "stall|did not move"),
        ("phases_swapped", "wrong|against"),
        ("lead_open", "stall|did not move"),
    ],
)
def test_bad_data_end_in_a_refusal_and_no_numbers(fault: str, words: str) -> None:
    with pytest.raises(NotMeasurable, match=words):
        measured(Curve(motor="vent"), drawn_bench(3).bench, faults=(fault,))


def test_a_motor_without_an_encoder_is_refused_before_anything_is_opened() -> None:
    with pytest.raises(NotMeasurable, match="has no encoder"):
        Curve(motor="vent").bench(drawn_bench(3, encoder=False).bench)


def test_a_saturated_sensor_is_refused() -> None:
    def saturate(device: MockDevice) -> None:
        device.plant.sensors[0].range_ma = 60

    with pytest.raises(NotMeasurable, match="saturated"):
        measured(Curve(motor="vent"), load_bench(VENT), prepare=saturate)
