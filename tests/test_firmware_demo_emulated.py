"""The sequence of the examples passes on mock, posix core and emulated board through `ramprig run`, with one log."""

from __future__ import annotations

import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from avr_builds import WHY_NOT, emulator, program
from posix_board import PosixBoard
from ramprig.cli import main
from ramprig.cli.files import read_pair
from ramprig.mock.core.parameters import plant_text
from ramprig.mock.from_bench import setup_of_bench
from run_logs import Resolution, RunLog, differences, read_log

pytestmark = [pytest.mark.skipif(bool(WHY_NOT), reason=WHY_NOT), pytest.mark.process]

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
DEMO = SCRIPTS / "vent_endurance.yaml"
BENCH = SCRIPTS / "vent_bench.yaml"
EMULATED_NAME = "atmega328p"
SEED = 11
PATIENCE_S = 20.0

# firmware_ref/ports/atmega328p/board.h and WIRING.md
CONVERTER_STEPS = 1024
CURRENT_SPAN_A = 27.027
CURRENT_READINGS = 4
SUPPLY_SPAN_V = 21.5
BRIDGE_STEP_PCT = 100 / 255
NOISE_SIGMAS = 4
"""The noise of the bench's model ends before: its table has 4096 places."""


def run(port: str, runs: Path, *options: str) -> RunLog:
    """What `ramprig run` leaves of one pass of the demo, which passes."""
    assert main(["run", str(DEMO), "--set", "passes=1", "--runs", str(runs), "--port", port, "--yes", *options]) == 0
    (folder,) = runs.iterdir()
    return read_log(folder)


@contextmanager
def emulated(folder: Path) -> Iterator[tuple[str, Path]]:
    """The board with the demo's plant at its pins: the port's name, and a bench file that names the board."""
    plant, bench = folder / "plant", folder / "bench.yaml"
    plant.write_text(plant_text(setup_of_bench(read_pair(DEMO, bench=None, values={}).bench).plant), "utf-8")
    text = BENCH.read_text("utf-8")
    assert "name: ramprig-mock" in text
    bench.write_text(text.replace("name: ramprig-mock", f"name: {EMULATED_NAME}"), "utf-8")
    command = [str(emulator()), str(program()), "--lockstep-pty", "--plant", str(plant), "--seed", str(SEED)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as board:
        assert board.stdout is not None
        try:
            yield f"lockstep:{board.stdout.readline().strip()}", bench
        finally:
            board.terminate()
            board.wait(PATIENCE_S)


@pytest.fixture(scope="module")
def logs(tmp_path_factory: pytest.TempPathFactory) -> dict[str, RunLog]:
    """The demo's log by board."""
    found = {"mock": run(f"mock:?pace=virtual&seed={SEED}", tmp_path_factory.mktemp("mock"))}
    folder = tmp_path_factory.mktemp("plant")
    setup = setup_of_bench(read_pair(DEMO, bench=None, values={}).bench)
    (folder / "plant").write_text(plant_text(setup.plant), "utf-8")
    who = ("--board", setup.board.board, "--plant", str(folder / "plant"), "--seed", str(SEED))
    with PosixBoard("--lockstep", *who, board=setup.board) as posix:
        found["posix"] = run(f"lockstep:{posix.port}", tmp_path_factory.mktemp("posix"))
    with emulated(folder) as (port, bench):
        found["emulated"] = run(port, tmp_path_factory.mktemp("emulated"), "--bench", str(bench))
    return found


@pytest.fixture(scope="module")
def resolution() -> Resolution:
    """What the emulated board and the mock together can tell apart: by the bench, and the board's converter and PWM."""
    bench = read_pair(DEMO, bench=None, values={}).bench
    motor, servo = bench.motors[0], bench.servos[0]
    assert motor.model is not None
    assert motor.encoder is not None
    assert servo.model is not None
    assert bench.supply.model is not None
    per_turn = 4 * motor.encoder.lines * float(motor.gear_ratio)
    noise_a = NOISE_SIGMAS * motor.model.sensor_noise_ma * (1 + CURRENT_READINGS**-0.5) / 1000
    return Resolution(
        steps={
            "duty_pct": 0.01,  # as the log tells it; the bridge's own step moves the shaft, see `drawn_apart`
            "counts": 1.0,
            "position_rev": 1 / per_turn,
            "speed_rpm": 60 / per_turn / bench.log.period_s,  # a count within a row
            "current_a": CURRENT_SPAN_A / CONVERTER_STEPS + motor.model.sensor_step_ma / 1000 + noise_a,
            "pulse_us": 1.0,
            "angle_deg": 1.0 / abs(servo.us_per_deg),
            "supply_v": SUPPLY_SPAN_V / CONVERTER_STEPS + 0.001,
        },
        bridge_step_pct=BRIDGE_STEP_PCT,
        servo_moving_v=servo.model.moving_ma / 1000 * bench.supply.model.resistance_ohm,
    )


@pytest.mark.parametrize("name", ["mock", "posix", "emulated"])
def test_the_demo_passes_with_every_sample_accounted_for(name: str, logs: dict[str, RunLog]) -> None:
    log = logs[name]
    assert log.verdict == "passed"
    assert log.account["lost"] == 0
    assert log.account["expected"] == log.account["written"] == len(log.rows) - 1
    assert max(log.column("vent.duty_pct")) == 60.0
    assert min(log.column("vent.duty_pct")) == -60.0
    assert np.nanmax(log.column("latch.angle_deg")) > 25.0


@pytest.mark.parametrize("other", ["mock", "posix"])
def test_the_emulated_boards_log_is_the_others_within_the_sensors_resolution(
    other: str, logs: dict[str, RunLog], resolution: Resolution
) -> None:
    assert differences(logs["emulated"], logs[other], resolution) == []
    assert differences(logs[other], logs["emulated"], resolution) == []


def test_the_mean_current_of_the_driven_motor_is_the_same_to_a_step_of_the_converter(logs: dict[str, RunLog]) -> None:
    for sign in (1, -1):
        means = [
            np.mean(log.column("vent.current_a")[sign * log.column("vent.duty_pct") == 60.0]) for log in logs.values()
        ]
        assert max(means) - min(means) <= CURRENT_SPAN_A / CONVERTER_STEPS


def changed(log: RunLog, name: str, by: float, to: float = 0.0) -> RunLog:
    """The log with a column multiplied and shifted."""
    at = log.rows[0].index(name)
    rows = [log.rows[0]]
    rows += [[*row[:at], f"{float(row[at]) * by + to:g}" if row[at] else "", *row[at + 1 :]] for row in log.rows[1:]]
    return replace(log, rows=rows)


def test_a_log_that_is_otherwise_is_noticed(logs: dict[str, RunLog], resolution: Resolution) -> None:
    ours, mock = logs["emulated"], logs["mock"]
    faster = changed(changed(ours, "vent.counts", 1.005), "vent.position_rev", 1.005)
    late = replace(ours, pieces=[(kind, tick - 3) for kind, tick in ours.pieces])
    for wrong, column in (
        (faster, "vent.counts"),
        (late, "vent.duty_pct"),
        (changed(ours, "supply_v", 1.0, -0.1), "supply_v"),
        (changed(ours, "vent.current_a", 1.0, 0.15), "vent.current_a"),
        (changed(ours, "latch.pulse_us", 1.0, 4.0), "latch.pulse_us"),
    ):
        assert any(column in text for text in differences(wrong, mock, resolution)), column
