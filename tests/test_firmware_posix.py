"""The posix port: a program on a terminal or a TCP port, paced or in lockstep, with its store in a file."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

from posix_board import PATIENCE_S, PosixBoard, program
from ramprig.errors import LinkLost
from ramprig.mock.board import Board
from ramprig.mock.core import why_not
from ramprig.mock.core.parameters import plant_text
from ramprig.mock.plant import VENT_BENCH
from ramprig.port.base import Port
from ramprig.port.open import open_port
from ramprig_link.check import seal

pytestmark = [
    pytest.mark.skipif(why_not() is not None, reason=why_not() or ""),
    pytest.mark.skipif(not hasattr(os, "openpty"), reason="this system has no pseudo-terminals"),
    pytest.mark.process,
]

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
SHORT = """
sequence: short
bench: {bench}
steps:
  - ramp: {{motor: vent, to: 40 %, in: 400 ms}}
  - hold: 300 ms
  - coast: {{motor: vent, in: 400 ms}}
"""


def line_with(port: Port, word: bytes) -> bytes:
    """The first whole line with this word in it; fails after PATIENCE_S of the port's time."""
    until_s = port.clock.now() + PATIENCE_S
    data = b""
    while port.clock.now() < until_s:
        data += port.read(0.1)
        for line in data.split(b"\n")[:-1]:
            if word in line:
                return line
    raise AssertionError(f"no {word!r} in {data!r}")


def talk(port: Port) -> None:
    """Ask for some seconds, until the link is lost."""
    for _ in range(50):
        port.write(b"who\n")
        port.read(0.1)


@pytest.mark.parametrize("options", [(), ("--tcp", "0")], ids=["terminal", "tcp"])
def test_a_paced_board_answers_who(options: tuple[str, ...]) -> None:
    with PosixBoard(*options) as board, open_port(board.port) as port:
        port.write(b"who\n")
        assert b"core-1 ramprig-core POSIX-0001" in line_with(port, b" who ")


def test_a_paced_boards_tick_follows_the_clock() -> None:
    with PosixBoard("--baud", "0") as board, open_port(board.port) as port:
        port.write(b"who\n")
        first = int(line_with(port, b" who ").split(b" ")[2])
        start_s = time.monotonic()
        assert port.read(0.3) == b""
        port.write(seal(b"01 beat"))
        passed_ms = int(line_with(port, b"01 ok").split(b" ")[2]) - first
        assert 290 <= passed_ms <= (time.monotonic() - start_s) * 1000 + 20


def test_ramprig_run_works_on_a_paced_board(tmp_path: Path) -> None:
    sequence = tmp_path / "short.yaml"
    sequence.write_text(SHORT.format(bench=SCRIPTS / "vent_bench.yaml"))
    with PosixBoard("--board", "ramprig-mock", "--link", str(tmp_path / "board")) as board:
        assert board.port == str(tmp_path / "board")
        command = [sys.executable, "-m", "ramprig", "run", str(sequence), "--port", board.port, "--yes"]
        command += ["--runs", str(tmp_path)]
        done = subprocess.run(command, capture_output=True, text=True, timeout=3 * PATIENCE_S, check=False)
        assert "passed: all steps carried out" in done.stdout, done.stdout + done.stderr
        assert done.returncode == 0
        assert board.end() == (0, "")
    assert not (tmp_path / "board").exists()


def test_limits_and_boot_number_are_in_the_file(tmp_path: Path) -> None:
    store = tmp_path / "store"
    for boot in (1, 2):
        with PosixBoard("--lockstep", "--store", str(store)) as board, open_port(f"lockstep:{board.port}") as port:
            assert line_with(port, b" boot ").split(b" ")[3] == str(boot).encode()
            port.write(seal(b"01 limit trip_ma 0" + (b" 1717" if boot == 1 else b"")))
            assert b" 1717 " in line_with(port, b"01 ok")
    store.write_bytes(b"x" * 99)
    done = subprocess.run([program(Board()), "--store", store], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert f"{store} has 99 bytes and is no store of this board" in done.stderr


def test_the_same_seed_gives_the_same_bytes_in_lockstep(tmp_path: Path) -> None:
    plant = tmp_path / "plant"
    plant.write_text(plant_text(VENT_BENCH))
    said = []
    for seed in ("5", "5", "6"):
        with (
            PosixBoard("--lockstep", "--seed", seed, "--plant", str(plant)) as board,
            open_port(f"lockstep:{board.port}") as port,
        ):
            port.write(seal(b"01 log 1 4 packed"))
            until_s = port.clock.now() + 2.0
            data = b""
            while port.clock.now() < until_s:
                data += port.read(until_s - port.clock.now())
            said.append(data)
    assert said[0] == said[1] != said[2]


def test_a_host_that_does_not_speak_in_frames_is_told_of() -> None:
    with PosixBoard("--lockstep") as board:
        with open_port(board.port) as port:
            port.write(b"who\n")
            assert port.read(0.2) == b""
        code, said = board.end()
    assert code == 0
    assert "does not speak in lockstep frames" in said


def test_a_second_host_is_turned_away_and_may_come_later() -> None:
    with PosixBoard("--tcp", "0") as board:
        with open_port(board.port) as first:
            first.write(b"who\n")
            line_with(first, b" who ")
            with open_port(board.port) as second, pytest.raises(LinkLost):
                talk(second)
        with open_port(board.port) as later:
            later.write(b"who\n")
            line_with(later, b" who ")


def test_a_fault_is_on_from_the_start() -> None:
    with (
        PosixBoard("--lockstep", "--fault", "current_offset:0=500") as board,
        open_port(f"lockstep:{board.port}") as port,
    ):
        port.read(0.1)
        port.write(seal(b"01 state"))
        assert abs(int(line_with(port, b"01 ok").split(b" ")[-3]) - 500) < 40


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        (["--speed", "3"], "'--speed' means nothing"),
        (["--seed"], "'--seed' means nothing"),
        (["--seed", "-1"], "'--seed' means nothing"),
        (["--baud", "x"], "'--baud' means nothing"),
        (["--fault", "jamed"], "'jamed' is no fault here"),
        (["--fault", "jammed_shaft:7"], "'jammed_shaft:7' is no fault here"),
        (["--fault", "jammed_shaft:x"], "'jammed_shaft:x' is no fault here"),
        (["--fault", "weak_supply=much"], "'weak_supply=much' is no fault here"),
        (["--fault", "weak_supply=nan"], "'weak_supply=nan' is no fault here"),
        (["--plant", "absent"], "absent: No such file or directory"),
        (["--board", "vent rig"], "'vent rig' is no name for a board"),
        (["--serial", "a" * 25], "is no name for a board: 1 to 24 of"),
        (["--tcp", "nowhere.invalid:x"], "is no address"),
        (["--tcp", "99999"], "99999 is no address"),
    ],
)
def test_what_means_nothing_is_refused(arguments: list[str], told: str) -> None:
    done = subprocess.run(
        [program(Board()), *arguments], capture_output=True, text=True, check=False, timeout=PATIENCE_S
    )
    assert done.returncode in (2, 3)
    assert told in done.stderr


def test_help_is_no_error() -> None:
    done = subprocess.run([program(Board()), "--help"], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stderr) == (0, "")
    assert "--lockstep" in done.stdout


def test_a_wrong_line_of_a_plant_is_named(tmp_path: Path) -> None:
    plant = tmp_path / "plant"
    plant.write_text("supply.volts 12\nsupply.volts -1\n")
    done = subprocess.run([program(Board()), "--plant", plant], capture_output=True, text=True, check=False)
    assert f"{plant}:2: " in done.stderr
    plant.write_text("axes 2\n")
    done = subprocess.run([program(Board()), "--plant", plant], capture_output=True, text=True, check=False)
    assert "other motors and servos" in done.stderr
