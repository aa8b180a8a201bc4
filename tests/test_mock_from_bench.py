"""A bench file as a mock: board, plant and faults follow from it, and what cannot be made is refused at its line."""

from __future__ import annotations

import math

import pytest

from ramprig.bench import bench_of_text
from ramprig.errors import FileError
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import SERIAL, setup_of_bench
from sequence_rig import BENCH


def test_board_and_plant_are_those_of_the_bench() -> None:
    setup = setup_of_bench(bench_of_text(BENCH, "b.yaml"))
    assert (setup.board.axes, setup.board.servos) == (2, 2)
    assert (setup.board.board, setup.board.serial) == ("ramprig-mock", SERIAL)
    assert [axis.name for axis in setup.plant.axes] == ["vent", "fan"]
    assert setup.plant.axes[0].encoder.lines == 16
    assert setup.plant.axes[0].motor.gear_ratio == 90
    assert setup.plant.supply.can_sink
    assert [servo.us_per_deg for servo in setup.plant.servos] == [10.0, 10.0]


def test_faults_of_the_bench_are_those_of_the_mock() -> None:
    faults = "mock: {faults: [deaf, {fault: jammed_shaft, motor: fan}, {fault: encoder-dead, motor: vent, from: 2 s}]}"
    setup = setup_of_bench(bench_of_text(BENCH + faults, "b.yaml"), faults=("unplug",))
    assert setup.faults == ("deaf", "jammed_shaft:1", "unplug")
    assert [(fault.text, fault.from_s) for fault in setup.timed_faults] == [("encoder_dead:0", 2.0)]


def test_a_fault_of_the_bench_may_have_a_strength() -> None:
    wear = "{fault: friction_wear, motor: vent, strength: 2.5, from: 1 s}"
    faults = f"mock: {{faults: [{wear}, {{fault: weak_supply, strength: 3}}]}}"
    setup = setup_of_bench(bench_of_text(BENCH + faults, "b.yaml"))
    assert setup.faults == ("weak_supply=3",)
    assert [fault.text for fault in setup.timed_faults] == ["friction_wear:0=2.5"]
    with pytest.raises(FileError, match="fault jammed_shaft cannot be 2") as caught:
        setup_of_bench(bench_of_text(BENCH + "mock: {faults: [{fault: jammed_shaft, strength: 2}]}", "b.yaml"))
    assert caught.value.place is not None


def test_play_and_an_encoder_on_the_output_come_from_the_bench() -> None:
    text = BENCH.replace("on: motor shaft", "on: output shaft", 1)
    text = text.replace(
        "inertia: 60 g cm2\n", "inertia: 60 g cm2\n      play: 1.5 deg\n      output friction: 20 mN m\n", 1
    )
    vent, fan = setup_of_bench(bench_of_text(text, "b.yaml")).plant.axes
    assert vent.motor.play_rad == pytest.approx(math.radians(1.5))
    assert vent.motor.output_friction_nm == pytest.approx(0.02)
    assert (vent.encoder.on_output, fan.encoder.on_output) == (True, False)
    assert fan.motor.play_rad == 0.0


def test_an_encoder_that_counts_the_other_way_has_its_phases_swapped() -> None:
    bench = bench_of_text(BENCH.replace("direction: same", "direction: opposite"), "b.yaml")
    assert bench.motors[0].sense == -1
    setup = setup_of_bench(bench)
    assert setup.faults == ("phases_swapped:0", "phases_swapped:1")
    assert MockDevice(setup).faults.get("phases_swapped", axis=1)


@pytest.mark.parametrize(
    ("old", "new", "sentence"),
    [
        ("      inertia: 60 g cm2\n", "", "'inertia' is missing in 'model'"),
    ],
)
def test_what_a_mock_cannot_be_made_from_is_refused_with_its_place(old: str, new: str, sentence: str) -> None:
    with pytest.raises(FileError, match=sentence) as caught:
        setup_of_bench(bench_of_text(BENCH.replace(old, new), "b.yaml"))
    assert caught.value.place is not None


def test_a_motor_without_a_model_is_refused_and_nothing_is_invented() -> None:
    lines = BENCH.splitlines(keepends=True)
    first = next(i for i, line in enumerate(lines) if line.strip() == "model:")
    text = "".join(line for i, line in enumerate(lines) if not first <= i <= first + 7)
    bench = bench_of_text(text, "b.yaml")
    assert bench.motors[0].model is None
    with pytest.raises(FileError, match="'vent' has no 'model'; a mock of it needs resistance"):
        setup_of_bench(bench)


def test_a_fault_that_does_not_exist_is_refused_at_its_line() -> None:
    bench = bench_of_text(BENCH + "mock:\n  faults:\n    - jammed_shift", "b.yaml")
    with pytest.raises(FileError, match=r"there is no fault 'jammed_shift'; did you mean 'jammed_shaft'\?") as caught:
        setup_of_bench(bench)
    assert caught.value.place is not None
    assert caught.value.place.line == len(BENCH.splitlines()) + 3
