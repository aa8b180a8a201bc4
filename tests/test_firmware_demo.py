"""The endurance run of the examples passes on the mock, the core in this process and the posix port, with one log."""

from __future__ import annotations

import csv
import math
from functools import cache
from pathlib import Path

import pytest

from posix_board import PosixBoard
from ramprig.cli.files import Pair, read_pair
from ramprig.mock.core import why_not
from ramprig.mock.core.parameters import plant_text
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.schemes import register
from ramprig.port.base import Port
from ramprig.port.open import open_port
from ramprig.sequence.running import RunWish, run_sequence

pytestmark = [
    pytest.mark.skipif(why_not() is not None, reason=why_not() or ""),
    pytest.mark.skipif(not hasattr(__import__("os"), "openpty"), reason="this system has no pseudo-terminals"),
]

DEMO = Path(__file__).resolve().parent.parent / "scripts" / "vent_endurance.yaml"
SEED = 11

register()


@cache
def pair() -> Pair:
    return read_pair(DEMO, bench=None, values={})


def log_of(port: Port, runs: Path) -> list[list[str]]:
    """The run's samples, a row each, the head first."""
    wish = RunWish(sequence=pair().sequence, bench=pair().bench, runs=runs, virtual=True, seed=SEED)
    result = run_sequence(wish, port)
    assert result.outcome.exit_code == 0, str(result.outcome)
    assert result.folder is not None
    with (result.folder / "samples.csv").open(newline="") as file:
        return list(csv.reader(file))


def simulated(scheme: str, runs: Path) -> list[list[str]]:
    return log_of(open_port(f"{scheme}:?pace=virtual&seed={SEED}&bench={pair().bench_path}"), runs)


def posix(runs: Path, *options: str) -> list[list[str]]:
    setup = setup_of_bench(pair().bench)
    plant = runs / "plant"
    plant.write_text(plant_text(setup.plant))
    who = ("--board", setup.board.board, "--serial", setup.board.serial, "--seed", str(SEED), "--plant", str(plant))
    with PosixBoard("--lockstep", *who, *options, board=setup.board) as it:
        return log_of(open_port(f"lockstep:{it.port}"), runs)


def resolution(column: str) -> float:
    """What the sensor behind a column can tell apart, in the column's unit."""
    bench = pair().bench
    motor = bench.motors[0]
    assert motor.model is not None
    assert motor.encoder is not None
    per_turn = 4 * motor.encoder.lines * float(motor.gear_ratio)
    return {
        "duty_pct": 0.01, "counts": 1.0, "position_rev": 1.0 / per_turn, "speed_rpm": 60.0 / per_turn / 0.001,
        "current_a": motor.model.sensor_step_ma / 1000.0, "pulse_us": 1.0, "angle_deg": 0.2, "supply_v": 0.001,
    }.get(column.rpartition(".")[2], 0.0)  # fmt: skip


def differences(a: list[list[str]], b: list[list[str]]) -> list[str]:
    """Where two logs differ by more than the sensors tell apart."""
    assert a[0] == b[0]
    found = [] if len(a) == len(b) else [f"{len(a)} rows and {len(b)}"]
    for ours, theirs in zip(a[1:], b[1:], strict=False):
        for column, x, y in zip(a[0], ours, theirs, strict=True):
            step = resolution(column)
            apart = x != y and not (step and math.isclose(float(x or "nan"), float(y or "nan"), abs_tol=step))
            if apart:
                found.append(f"tick {ours[0]}: {column} {x} and {y}")
    return found


@pytest.fixture(scope="module")
def mock_log(tmp_path_factory: pytest.TempPathFactory) -> list[list[str]]:
    return simulated("mock", tmp_path_factory.mktemp("mock"))


def test_the_log_shows_the_vent_and_the_latch_at_work(mock_log: list[list[str]]) -> None:
    columns = dict(zip(mock_log[0], zip(*mock_log[1:], strict=True), strict=True))
    assert max(map(float, columns["vent.duty_pct"])) == 60.0
    assert min(map(float, columns["vent.duty_pct"])) == -60.0
    assert max(map(float, columns["vent.current_a"])) > 0.2
    assert max(float(angle) for angle in columns["latch.angle_deg"] if angle) > 25.0


def test_the_core_in_this_process_gives_the_mocks_log(mock_log: list[list[str]], tmp_path: Path) -> None:
    assert differences(mock_log, simulated("core", tmp_path)) == []


@pytest.mark.parametrize("options", [(), ("--tcp", "0")], ids=["terminal", "tcp"])
def test_the_posix_port_gives_the_mocks_log(
    options: tuple[str, ...], mock_log: list[list[str]], tmp_path: Path
) -> None:
    assert differences(mock_log, posix(tmp_path, *options)) == []


def test_another_motor_is_noticed(mock_log: list[list[str]]) -> None:
    stiffer = [row.copy() for row in mock_log]
    at = mock_log[0].index("vent.counts")
    stiffer[900][at] = str(int(stiffer[900][at]) + 2)
    assert len(differences(mock_log, stiffer)) == 1
    assert differences(mock_log, mock_log[:-1]) == [f"{len(mock_log)} rows and {len(mock_log) - 1}"]
