"""The bring-up check names each wiring mistake of the mock, blames no healthy bench, and keeps to its own limits."""

from __future__ import annotations

import dataclasses
import json
import math
import random
import re
from pathlib import Path

import pytest

from measure_rig import Measured, drawn_bench, measured, simulated
from ramprig.bench import load_bench
from ramprig.errors import LinkLost, WrongDevice
from ramprig.measure.diagnosis import Bring, Case, Push, Rest, Verdict, judge
from ramprig.measure.procedures.wiring import CEILING_DUTY, SPEED_SHARE, Wiring
from ramprig.measure.refusal import NotMeasurable
from ramprig.measure.running import MeasureWish, measure
from ramprig.mock.core import why_not
from ramprig.mock.core.device import SimulatedDevice
from ramprig.mock.core.url import CorePort
from ramprig.mock.device import MockDevice
from ramprig.mock.faults import FAULTS
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.setup import MockSetup
from ramprig_link.words import Cause
from sequence_rig import small_bench

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"

VERDICTS = {
    "": Case.GOOD,
    "phases_swapped": Case.REVERSED,
    "leads_swapped": Case.REVERSED,
    "encoder_dead": Case.ENCODER_DEAD,
    "one_channel": Case.ONE_CHANNEL,
    "lead_open": Case.OPEN,
    "encoders_exchanged": Case.EXCHANGED,
    "jammed_shaft": Case.STALLED,
    "current_offset": Case.OFFSET,
    "noisy_counts": Case.NOISY,
    "weak_supply": Case.WEAK_SUPPLY,
    "brownout_on_start": Case.BROWNOUT,
    "garbage_after_open": Case.GOOD,
    "reset_on_open": Case.GOOD,
    "delivery_grid": Case.GOOD,
    "clock_drift": Case.GOOD,
    "bit_errors": Case.GOOD,
    "dropped_bytes": Case.GOOD,
    "gear_play": Case.GOOD,
    "output_clamped": Case.STALLED,
    "friction_wear": Case.GOOD,
    "resistance_wear": Case.GOOD,
    "play_wear": Case.GOOD,
}
"""The verdict on each fault switch of the mock; those of the line, and a drive that wears, are none of its wiring."""
NOT_OPENED = {"unplug": LinkLost, "deaf": LinkLost, "second_board": WrongDevice}
"""Faults with which no device is opened, and what says so."""


def checked(fault: str, seed: int) -> Measured:
    drawn = drawn_bench(seed, motors=2 if fault == "encoders_exchanged" else 1)
    text = fault
    if fault == "weak_supply":  # so weak that the rated current pulls it down by 15 % to 40 %
        sag = random.Random(seed).uniform(0.15, 0.4)
        text = f"weak_supply={sag * 12.0 / drawn.rated_a / drawn.supply_ohm:.3g}"
    done = measured(Wiring(motor="vent"), drawn.bench, faults=(text,) if text else (), seed=seed)
    limit_rad_s = SPEED_SHARE * 12.0 / drawn.constant_vs
    assert done.fastest_rad_s <= limit_rad_s, (fault, seed)
    assert done.most_a <= drawn.rated_a + 0.03 * drawn.stall_a, (fault, seed)
    return done


@pytest.mark.parametrize("fault", VERDICTS, ids=lambda name: name or "healthy")
def test_each_fault_gets_its_own_verdict(fault: str) -> None:
    line = ("garbage_after_open", "reset_on_open", "delivery_grid", "clock_drift", "bit_errors", "dropped_bytes")
    for seed in range(1 if fault in line else 2):
        done = checked(fault, seed)
        assert done.findings.facts["case"] == VERDICTS[fault].name.lower(), (seed, done.findings)
        assert done.findings.good == (VERDICTS[fault] is Case.GOOD)


@pytest.mark.skipif(why_not() is not None, reason=why_not() or "")
@pytest.mark.parametrize("fault", ["", "leads_swapped", "encoder_dead", "one_channel", "lead_open", "jammed_shaft"])
def test_the_firmware_core_gets_the_same_verdicts(fault: str) -> None:
    bench = drawn_bench(11).bench
    device = SimulatedDevice(setup_of_bench(bench, faults=(fault,) if fault else ()), seed=11)
    port = CorePort(device, pace="virtual", seed=11)
    done = measure(Wiring(motor="vent"), bench, port, MeasureWish(seed=11, virtual=True))
    assert done.findings.facts["case"] == VERDICTS[fault].name.lower()


@pytest.mark.soak
@pytest.mark.parametrize("fault", VERDICTS, ids=lambda name: name or "healthy")
def test_each_fault_gets_its_own_verdict_on_200_random_benches(fault: str) -> None:
    wrong = {}
    for seed in range(1000, 1200):
        case = checked(fault, seed).findings.facts["case"]
        if case != VERDICTS[fault].name.lower():
            wrong[seed] = case
    assert wrong == {}


def test_every_fault_of_the_mock_has_a_verdict_or_an_error() -> None:
    assert set(VERDICTS) - {""} | set(NOT_OPENED) == set(FAULTS)


@pytest.mark.parametrize("fault", NOT_OPENED)
def test_a_device_that_is_not_there_is_no_wiring(fault: str) -> None:
    bench = drawn_bench(1).bench
    if fault == "second_board":
        bench = dataclasses.replace(bench, board=dataclasses.replace(bench.board, serial="MOCK-0001"))
    with pytest.raises(NOT_OPENED[fault]):
        measured(Wiring(motor="vent"), bench, faults=(fault,))


@pytest.mark.parametrize(("fault", "case"), [("phases_swapped", Case.PHASES), ("leads_swapped", Case.LEADS)])
@pytest.mark.parametrize("by_hand", [True, False])
def test_a_hand_or_an_eye_tells_leads_from_phases(fault: str, case: Case, by_hand: bool) -> None:
    done = measured(Wiring(motor="vent", by_hand=by_hand), drawn_bench(5).bench, faults=(fault,), bystander=simulated)
    assert done.findings.facts["case"] == case.name.lower()


@pytest.mark.parametrize(
    ("fault", "case"),
    [("", Case.GOOD), ("encoder_dead", Case.ENCODER_DEAD), ("one_channel", Case.ONE_CHANNEL)],
)
def test_turns_by_hand_agree_with_the_pulses(fault: str, case: Case) -> None:
    faults = (fault,) if fault else ()
    done = measured(Wiring(motor="vent", by_hand=True), drawn_bench(6).bench, faults=faults, bystander=simulated)
    assert done.findings.facts["case"] == case.name.lower()


@pytest.mark.parametrize(
    ("times", "words"), [(4, "a quarter of the lines"), (2, "half the lines"), (0.5, "twice the lines")]
)
def test_a_wrong_number_of_lines_is_found_by_hand_and_named(times: float, words: str) -> None:
    def change(setup: MockSetup) -> MockSetup:
        axis = setup.plant.axes[0]
        encoder = dataclasses.replace(axis.encoder, lines=round(axis.encoder.lines * times))
        plant = dataclasses.replace(setup.plant, axes=(dataclasses.replace(axis, encoder=encoder),))
        return dataclasses.replace(setup, plant=plant)

    done = measured(Wiring(motor="vent", by_hand=True), drawn_bench(7).bench, bystander=simulated, change=change)
    assert done.findings.facts["case"] == "ratio"
    assert words in str(done.findings.facts["because"])


def test_a_falling_encoder_that_the_bench_knows_of_is_healthy() -> None:
    done = measured(Wiring(motor="vent"), drawn_bench(8, direction="opposite").bench)
    assert done.findings.facts["case"] == "good"


@pytest.mark.parametrize(
    ("fault", "case"), [("", "good"), ("jammed_shaft", "stalled"), ("lead_open", "open"), ("leads_swapped", "good")]
)
def test_without_an_encoder_the_current_tells_what_it_can(fault: str, case: str) -> None:
    bench = drawn_bench(9, encoder=False).bench
    done = measured(Wiring(motor="vent"), bench, faults=(fault,) if fault else ())
    assert done.findings.facts["case"] == case


def test_the_limits_are_tighter_for_the_check_and_put_back_after_it() -> None:
    bench = load_bench(VENT)
    seen: list[int] = []
    tight = Wiring(motor="vent").bench(bench)
    limits = tight.limits()
    assert limits["ceiling_duty", 0] == CEILING_DUTY
    assert limits["trip_ma", 0] == 900
    assert 0 < limits["speed_counts", 0] < bench.limits()["speed_counts", 0]
    done = measured(Wiring(motor="vent"), bench)
    assert done.device.controller is not None
    own = bench.limits(axes=1, servos=1)
    seen = [done.device.controller.limits[key] for key in own]
    assert seen == list(own.values())


def test_a_bench_that_is_tighter_than_the_check_stays_so() -> None:
    text = (
        VENT.read_text("utf-8").replace("duty: 80 %", "duty: 12 %").replace("stall: {duty: 15 %", "stall: {duty: 12 %")
    )
    from ramprig.bench import bench_of_text

    assert Wiring(motor="vent").bench(bench_of_text(text)).limits()["ceiling_duty", 0] == 1200


def test_a_current_that_reads_beyond_the_trip_is_told_and_nothing_moves() -> None:
    done = measured(Wiring(motor="vent"), small_bench(), faults=("current_offset=2000",))
    assert done.findings.facts["case"] == "offset"
    assert re.search(r"write 'current zero: (1999|2000|2001) mA'", done.findings.lines[1])
    assert done.fastest_rad_s == 0.0
    assert done.most_a == 0.0


def test_a_trip_from_before_is_shown_and_not_cleared() -> None:
    def trip(device: MockDevice) -> None:
        device.restart(Cause.WATCHDOG)
        device.advance(5000)

    with pytest.raises(NotMeasurable, match=r"still tripped from before \(restarted\)"):
        measured(Wiring(motor="vent"), load_bench(VENT), prepare=trip)


def test_the_run_folder_holds_stages_samples_result_and_picture(tmp_path: Path) -> None:
    done = measured(Wiring(motor="vent"), load_bench(VENT), runs=tmp_path, pictures=True)
    assert done.folder is not None
    names = {path.name for path in done.folder.iterdir()}
    assert {"run.json", "samples.csv", "events.jsonl", "result.json", "pulses.png", "vent_bench.yaml"} <= names
    assert any(name.startswith("01-pulse") for name in names)
    manifest = json.loads((done.folder / "run.json").read_text("utf-8"))
    assert manifest["verdict"] == "passed"
    assert manifest["results"]["measured"]["facts"]["case"] == "good"
    assert manifest["samples"]["lost"] == 0
    assert manifest["samples"]["written"] == manifest["samples"]["received"] > 1000
    assert json.loads((done.folder / "result.json").read_text("utf-8"))["sentence"] == done.findings.sentence


# ---- the table itself ------------------------------------------------------------------------------------------------

REST = Rest(offset_a=0.0, noise_a=0.005, supply_v=12.0, count_span=0, count_changes=0)


def push(duty: float, **changes: object) -> Push:
    """A pulse of a motor that turns."""
    usual: dict[str, object] = {
        "moved": 40.0, "span": 40, "toggles": 40, "peak_a": 0.3, "holding_ap1": 1.5, "standing_ap1": 4.0,
        "least_a": -0.1,
    }  # fmt: skip
    return Push(duty=duty, **(usual | changes))  # type: ignore[arg-type]  # the tests name fields of their own


def bring(**changes: object) -> Bring:
    usual: dict[str, object] = {
        "rated_a": 0.9, "supply_nominal_v": 12.0, "gear": 90.0, "has_encoder": True, "zero_a": 0.0, "rest": REST,
        "forward": (push(0.05),), "backward": (push(-0.05),),
    }  # fmt: skip
    return Bring(**(usual | changes))  # type: ignore[arg-type]  # the tests name fields of their own


STILL = {"moved": 0.0, "span": 0, "toggles": 0}


@pytest.mark.parametrize(
    ("seen", "case"),
    [
        (bring(), Case.GOOD),
        (bring(backward=(push(-0.05, **STILL, least_a=0.0, holding_ap1=4.0),)), Case.ONE_WAY),
        (bring(backward=(push(-0.05, moved=-40.0),)), Case.NONE_OF_THESE),
        (bring(forward=(push(0.05, moved=7.0, span=9),), backward=(push(-0.05, **STILL),)), Case.NONE_OF_THESE),
        (bring(rest=dataclasses.replace(REST, supply_v=0.4)), Case.NO_SUPPLY),
        (bring(rest=dataclasses.replace(REST, supply_v=None)), Case.GOOD),
        (bring(rest=dataclasses.replace(REST, count_span=1, count_changes=3)), Case.GOOD),
        (bring(forward=(), backward=()), Case.NONE_OF_THESE),
        (bring(forward=(push(0.05, **STILL),), backward=(push(-0.05, **STILL),)), Case.ENCODER_DEAD),
        (
            bring(
                forward=(push(0.05, **STILL),),
                backward=(push(-0.05, **STILL),),
                hand_turns=2,
                hand_counts=5760.0,
                hand_span=5760,
                expected_counts=5760.0,
            ),
            Case.COUNTS_STOP,
        ),
        (bring(sag_low_v=0.5), Case.GOOD),
        (bring(sag_low_v=1.5), Case.WEAK_SUPPLY),
        (
            bring(hand_turns=2, hand_counts=60.0, hand_span=60, hand_elsewhere={"fan": 0}, expected_counts=5760.0),
            Case.RATIO,
        ),
        (bring(hand_turns=2, hand_counts=0.0, hand_elsewhere={"fan": 5760}, expected_counts=5760.0), Case.EXCHANGED),
    ],
)
def test_the_table(seen: Bring, case: Case) -> None:
    assert judge(seen).case is case


@pytest.mark.parametrize("case", Case)
def test_every_case_but_the_good_one_says_what_to_do_and_offers_none_of_these(case: Case) -> None:
    verdict = Verdict(case=case, because="it was so", remedy="mend it" if case is Case.OFFSET else "")
    lines = "\n".join(verdict.lines)
    assert ("do: " in lines) == (case is not Case.GOOD)
    assert ("none of these" in lines) == (case is not Case.GOOD)
    assert "are in the run folder" not in lines  # with --no-record there is none
    assert math.isfinite(len(case.heading))
