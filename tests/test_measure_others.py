"""Coast-down, backlash, servo and link: known answers of the mock within the stated intervals, and refusals."""

from __future__ import annotations

import dataclasses
import math
import random
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from measure_rig import drawn_bench, measured
from ramprig.bench import Bench, bench_of_text, load_bench
from ramprig.measure.numbers import coastdown as closed
from ramprig.measure.procedures.backlash import Backlash
from ramprig.measure.procedures.coastdown import CoastDown, fit_angle
from ramprig.measure.procedures.linkcheck import LinkCheck, Spoilt
from ramprig.measure.procedures.servo import ServoCheck
from ramprig.measure.refusal import NotMeasurable
from ramprig.mock.controller import Controller
from ramprig.mock.device import MockDevice
from ramprig.mock.setup import MockSetup
from sequence_rig import BENCH

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"

# ---- coast-down ------------------------------------------------------------------------------------------------------


def test_the_fit_of_a_run_down_against_the_closed_form() -> None:
    # J=1.03e-6, b=2e-7, Tc=2e-4, w0=500: stops after 2.0881453068 s and 486.854693 rad (`solve_ivp` agrees)
    figures = {"inertia_kgm2": 1.03e-6, "viscous_nms": 2e-7, "coulomb_nm": 2e-4}
    assert closed.stop_time_s(**figures, speed_rad_s=500.0) == pytest.approx(2.0881453068, abs=1e-9)
    time_s = np.arange(0.0, 2.0, 0.002)
    speed = np.array([closed.speed_rad_s(float(t), **figures, speed_rad_s=500.0) for t in time_s])
    angle = np.concatenate([[0.0], np.cumsum((speed[1:] + speed[:-1]) / 2) * 0.002])
    fit = fit_angle(time_s, np.floor(angle * 1000.0))
    assert fit.values[1] == pytest.approx(500.0e3, rel=1e-4)
    assert fit.values[2] == pytest.approx(2e-4 / 1.03e-6 * 1e3, rel=1e-3)
    assert fit.values[3] == pytest.approx(2e-7 / 1.03e-6, rel=1e-2)


def held(seeds: range) -> dict[str, list[bool]]:
    """Whether the stated intervals of the run-downs hold the truth."""
    found: dict[str, list[bool]] = {"coulomb": [], "viscous": []}
    for seed in seeds:
        drawn = drawn_bench(seed)
        values = measured(CoastDown(motor="vent"), drawn.bench, seed=seed).findings.values
        truth = {
            "coulomb": drawn.running_nm / drawn.inertia_kgm2,
            "viscous": drawn.viscous_nms / drawn.inertia_kgm2,
        }
        for name, value in truth.items():
            low, high = values[f"{name}_forward"].interval()
            found[name].append(low <= value <= high)
    return found


def test_friction_over_inertia_lies_in_its_interval() -> None:
    found = held(range(4))
    assert sum(found["coulomb"]) >= 3
    assert sum(found["viscous"]) >= 3


@pytest.mark.soak
def test_friction_over_inertia_lies_in_its_interval_on_100_benches() -> None:
    found = held(range(100))
    assert {name: float(np.mean(held)) >= 0.90 for name, held in found.items()} == {"coulomb": True, "viscous": True}


def test_a_run_down_without_motion_is_refused() -> None:
    with pytest.raises(NotMeasurable):
        measured(CoastDown(motor="vent"), drawn_bench(2).bench, faults=("jammed_shaft",))
    with pytest.raises(NotMeasurable, match="no encoder"):
        CoastDown(motor="vent").bench(drawn_bench(2, encoder=False).bench)


def test_the_fall_limit_is_put_back_after_the_run_downs() -> None:
    bench = load_bench(VENT)
    done = measured(CoastDown(motor="vent", repeats=2), bench)
    assert done.device.controller is not None
    assert done.device.controller.limits["slew_down_duty", 0] == bench.limits()["slew_down_duty", 0] == 10
    assert done.device.plant.supply.bus_v < 12.5


# ---- backlash --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("play_deg", [0.4, 1.5])
def test_a_clamped_output_shows_the_play(play_deg: float) -> None:
    def clamp(device: MockDevice) -> None:
        device.plant.axes[0].stops_rad = (-0.3, math.radians(play_deg) * 90.0 - 0.3)

    done = measured(Backlash(motor="vent", clamped=True), load_bench(VENT), prepare=clamp)
    low, high = done.findings.values["lost_motion"].interval()
    assert low <= play_deg <= high
    assert high - low < 0.11  # a count is 0.0625 deg
    assert done.most_a < 0.9


def test_the_play_of_the_mocks_gear_is_measured_with_its_output_clamped() -> None:
    faults = ("gear_play=1.2", "output_clamped")
    done = measured(Backlash(motor="vent", clamped=True), load_bench(VENT), faults=faults)
    low, high = done.findings.values["lost_motion"].interval()
    assert low <= 1.2 <= high


def followed(play_deg: float) -> Callable[[MockDevice], None]:
    """Has the encoder of the second motor sit on the first one's output, behind this play."""

    def prepare(device: MockDevice) -> None:
        motor, output = device.plant.axes[0], device.plant.axes[1]
        play = math.radians(play_deg)

        def watch(tick: int, controller: Controller | None) -> None:
            del tick, controller
            before = motor.angle_rad / 90.0
            output.angle_rad = 90.0 * min(max(output.angle_rad / 90.0, before - play), before)

        device.trace = watch

    return prepare


def test_a_second_encoder_shows_the_play() -> None:
    bench = bench_of_text(BENCH)
    done = measured(Backlash(motor="vent", second="fan"), bench, prepare=followed(2.0))
    low, high = done.findings.values["lost_motion"].interval()
    assert low <= 2.0 <= high
    assert high - low < 0.3


@pytest.mark.parametrize(
    ("procedure", "words"),
    [
        (Backlash(motor="vent"), "--clamped"),
        (Backlash(motor="vent", clamped=True, repeats=1), "at least 2"),
        (Backlash(motor="vent", second="vent"), "its own second encoder"),
    ],
)
def test_what_cannot_see_lost_motion_is_refused_with_the_reason(procedure: Backlash, words: str) -> None:
    with pytest.raises(NotMeasurable, match=words):
        procedure.bench(load_bench(VENT))


def test_an_output_that_is_not_clamped_and_an_encoder_that_does_not_follow_are_refused() -> None:
    with pytest.raises(NotMeasurable, match="clamp the output shaft"):
        measured(Backlash(motor="vent", clamped=True), load_bench(VENT))
    with pytest.raises(NotMeasurable, match="must sit on the output shaft"):
        measured(Backlash(motor="vent", second="fan"), bench_of_text(BENCH))


# ---- servo -----------------------------------------------------------------------------------------------------------


def horn(second: int, *, play_deg: float, noise_deg: float, seed: int = 1) -> Callable[[MockDevice], None]:
    """Has the encoder of a motor sit on the servo's horn, behind a play and with scatter."""

    def prepare(device: MockDevice) -> None:
        servo, axis, chance = device.plant.servos[0], device.plant.axes[second], random.Random(seed)
        state = {"at": servo.angle_deg, "goal": servo.angle_deg, "off": 0.0}

        def watch(tick: int, controller: Controller | None) -> None:
            del tick, controller
            if abs(servo.angle_deg - state["goal"]) > 1.0:
                state["goal"], state["off"] = servo.angle_deg, chance.gauss(0.0, noise_deg)
            low, high = servo.angle_deg - play_deg / 2, servo.angle_deg + play_deg / 2
            state["at"] = min(max(state["at"], low), high)
            # Counts of a motor entry are those of its output shaft; its gear of 90 turns them back.
            axis.angle_rad = math.radians(state["at"] + state["off"]) * 90.0

        device.trace = watch

    return prepare


def test_without_a_second_encoder_angles_are_called_commanded() -> None:
    findings = measured(ServoCheck(servo="latch"), load_bench(VENT)).findings
    assert findings.facts["angles"] == "commanded"
    text = "\n".join(findings.text())
    assert "commanded" in text
    assert "accuracy" not in findings.sentence
    low, high = findings.values["pulse_late"].interval()
    assert low <= 0.0 <= high


def test_a_second_encoder_on_the_horn_gives_the_figures_of_the_standard() -> None:
    def without_dead_band(setup: MockSetup) -> MockSetup:
        servo = dataclasses.replace(setup.plant.servos[0], dead_band_us=0.0)
        return dataclasses.replace(
            setup, plant=dataclasses.replace(setup.plant, servos=(servo, *setup.plant.servos[1:]))
        )

    prepare = horn(1, play_deg=0.8, noise_deg=0.05)
    done = measured(
        ServoCheck(servo="latch", second="fan"), bench_of_text(BENCH), prepare=prepare, change=without_dead_band
    )
    assert done.findings.facts["angles"] == "measured"
    figures = done.findings.facts["positioning"]
    assert figures.mean_reversal == pytest.approx(-0.8, abs=0.15)  # type: ignore[attr-defined]  # an object for JSON
    assert figures.repeatability > figures.reversal  # type: ignore[attr-defined]  # as above
    low, high = done.findings.values["mean_reversal"].interval()
    assert low <= -0.8 <= high
    assert "as ISO 230-2 asks" in "\n".join(done.findings.lines)


def test_an_encoder_that_is_not_on_the_horn_is_refused() -> None:
    with pytest.raises(NotMeasurable, match="must sit on the horn"):
        measured(ServoCheck(servo="latch", second="fan"), bench_of_text(BENCH))


def with_stops(low: float, high: float) -> Bench:
    text = VENT.read_text("utf-8").replace("end stops: -55 deg to 55 deg", f"end stops: {low} deg to {high} deg")
    return bench_of_text(text)


def test_the_creep_finds_an_end_stop_within_the_limits_by_the_supply() -> None:
    done = measured(ServoCheck(servo="latch", creep=True), with_stops(-55, 29.3))
    assert not done.findings.good
    assert list(done.findings.values) == ["stop_high"]
    low, high = done.findings.values["stop_high"].interval()
    assert low - 0.5 <= 29.3 <= high + 0.5
    assert "-40 deg to 25" in done.findings.lines[0]


def test_the_creep_finds_no_stop_where_none_is_within_the_limits() -> None:
    done = measured(ServoCheck(servo="latch", creep=True), load_bench(VENT))
    assert done.findings.good
    assert not done.findings.values
    assert "no stop up to the limit" in done.findings.sentence


# ---- link ------------------------------------------------------------------------------------------------------------


def test_a_sound_link_is_said_to_be_sound() -> None:
    findings = measured(LinkCheck(motor="vent"), load_bench(VENT)).findings
    assert findings.good
    assert findings.values["round_trip"].value < 0.01
    assert findings.values["errors_motor_on"].value == 0.0


@pytest.mark.parametrize(("lines", "most"), [(0, 3.689), (1, 5.572), (10, 18.390), (100, 121.63)])
def test_the_rate_of_spoilt_bytes_reaches_up_to_the_exact_bound_of_the_count(lines: int, most: float) -> None:
    # Garwood 1936, upper 97.5 % limits of a Poisson mean (tables; from memory): 3.689, 5.572, 18.390, 121.63.
    rate = Spoilt(lines=lines, bytes=40_000).rate
    assert rate.value == lines / 40_000
    assert rate.interval()[1] == pytest.approx(most / 40_000, rel=1e-4)


def test_a_delivery_grid_is_named() -> None:
    findings = measured(LinkCheck(), load_bench(VENT), faults=("delivery_grid",)).findings
    assert not findings.good
    assert "latency timer" in "\n".join(findings.lines)
    assert 0.014 <= findings.values["round_trip"].value <= 0.018


@pytest.mark.parametrize("ppm", [-180.0, 60.0, 400.0])
def test_the_drift_lies_in_its_interval(ppm: float) -> None:
    findings = measured(LinkCheck(), load_bench(VENT), faults=(f"clock_drift={ppm}",)).findings
    low, high = findings.values["clock_drift"].interval()
    assert low <= ppm <= high
    assert high - low < 80.0


@pytest.mark.parametrize("fault", ["bit_errors", "dropped_bytes"])
def test_spoilt_bytes_are_counted(fault: str) -> None:
    findings = measured(LinkCheck(), load_bench(VENT), faults=(f"{fault}=3e-4",), seed=3).findings
    low, high = findings.values["errors_motor_off"].interval()
    assert low <= 3e-4 <= high
    assert "spoilt or lost" in findings.sentence


def test_a_motor_that_spoils_bytes_is_blamed_only_when_it_runs() -> None:
    def prepare(device: MockDevice) -> None:
        def watch(tick: int, controller: Controller | None) -> None:
            del tick
            driven = controller is not None and controller.drives[0].duty != 0
            if driven != bool(device.faults.get("bit_errors")):
                device.faults.set("bit_errors", 1e-3 if driven else 0.0)

        device.trace = watch

    findings = measured(LinkCheck(motor="vent"), load_bench(VENT), prepare=prepare).findings
    assert findings.sentence == "link: the motor spoils bytes when it runs."
    assert findings.values["errors_motor_off"].value == 0.0
    assert dataclasses.is_dataclass(findings.facts["on"])
