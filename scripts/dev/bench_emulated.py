"""Measures the emulated ATmega328P board: how much faster than a real one it runs, and whether it loses samples.

    python scripts/dev/bench_emulated.py

The board alone is driven in its own time as the demo drives it: armed, 60 % duty both ways, the latch swinging, all
channels logged every 10 ms. The demo is `ramprig run`'s own runner on the lockstep port, the host's work included.
Sustained logging is 500 samples/s of all channels at 115200 baud from a shaft that turns.
"""

from __future__ import annotations

import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import toolchain
from dev.build_firmware import ROOT, build_emulator, build_program
from dev.emulated_board import EmulatedBoard

from ramprig.cli.files import read_pair
from ramprig.mock.core.parameters import plant_text
from ramprig.mock.from_bench import setup_of_bench
from ramprig.port.open import open_port
from ramprig.sequence.running import RunWish, run_sequence
from ramprig_link.samples import decode_data

FACTOR_AIM = 5.0
DEMO = ROOT / "scripts" / "vent_endurance.yaml"
CHANNELS = 0x53007
"""Duty, counts and current of the axis, both servos, supply and state."""
MOVED_S = 10
LOGGED_S = 20
SWING_US = 200_000
LOG_PERIOD_TICKS = 2


@dataclass(frozen=True, slots=True)
class Factor:
    """Emulated seconds for each second of the wall's clock, and of the emulator's own processor time."""

    wall: float
    processor: float


@dataclass(frozen=True, slots=True)
class Sustained:
    """Samples asked for, arrived whole and in their place, and dropped by the board; lines with a wrong check."""

    due: int
    arrived: int
    dropped: int
    garbled: int


def _processor_s() -> float:
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def _order(board: EmulatedBoard, body: str) -> None:
    answer = board.ask(body)
    if answer[0] != "ok":
        raise RuntimeError(f"the board refuses '{body}': {answer}")


def drive(board: EmulatedBoard) -> None:
    """The demo's motion: opened for one half of the time, closed for the other, the latch moving to and fro."""
    board.run_us(150_000)
    for name, value in (("ceiling_duty", 8000), ("slew_up_duty", 10), ("slew_down_duty", 10)):
        board.set_limit(name, value)
    board.arm()
    _order(board, f"log 10 {CHANNELS} packed")
    end_us = board.now_us + MOVED_S * 1_000_000
    start = board.tick() + 60
    _order(board, f"ramp 0 6000 800 {start}")
    _order(board, f"ramp 0 -6000 1600 {start + MOVED_S * 500}")
    pulse = 1700
    while board.now_us < end_us:
        _order(board, f"swing 0 {pulse} 150 {board.tick() + 20}")
        pulse = 3000 - pulse
        board.run_us(SWING_US)
    if board.probe()["duty"] >= 0:
        raise RuntimeError(f"the board does not drive its motor: {board.lines[-4:]}")


def factor_with_motion(emulator: Path, program: Path) -> Factor:
    """The board alone."""
    before_s, start_s = _processor_s(), time.perf_counter()
    with EmulatedBoard(emulator, program) as board:
        drive(board)
        emulated_s = board.now_us / 1e6
    return Factor(emulated_s / (time.perf_counter() - start_s), emulated_s / (_processor_s() - before_s))


@contextmanager
def _demo_board(emulator: Path, program: Path, plant: Path) -> Iterator[str]:
    command = [str(emulator), str(program), "--lockstep-pty", "--plant", str(plant)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        try:
            yield f"lockstep:{process.stdout.readline().strip()}"
        finally:
            process.terminate()


def factor_of_demo(emulator: Path, program: Path, folder: Path) -> Factor:
    """The whole demo, host and all."""
    pair = read_pair(DEMO, bench=None, values={})
    plant = folder / "plant"
    plant.write_text(plant_text(setup_of_bench(pair.bench).plant), "utf-8")
    before_s = _processor_s()
    with _demo_board(emulator, program, plant) as url:
        port = open_port(url)
        start_s, start = time.perf_counter(), port.clock.now()
        wish = RunWish(sequence=pair.sequence, bench=pair.bench, runs=folder / "runs", virtual=True)
        result = run_sequence(wish, port)
        wall_s, emulated_s = time.perf_counter() - start_s, port.clock.now() - start
    if result.outcome.exit_code != 0:
        raise RuntimeError(f"the demo did not pass on the emulated board: {result.outcome}")
    return Factor(emulated_s / wall_s, emulated_s / (_processor_s() - before_s))


def sustained(emulator: Path, program: Path) -> Sustained:
    """A log every 2 ms, all channels."""
    with EmulatedBoard(emulator, program) as board:
        board.command("script 8000 400 12000")
        board.run_us(150_000)
        first = int(board.ask(f"log {LOG_PERIOD_TICKS} {CHANNELS} packed")[2])
        board.run_us(LOGGED_S * 1_000_000)
        due = int(board.ask("log 0 0 packed")[3])
        board.run_us(100_000)
        dropped = int(board.ask("counters")[-2])
        blocks = [decode_data(line[4:]) for line in board.lines if line.startswith("D")]
        ticks = {block.first_tick + LOG_PERIOD_TICKS * row for block in blocks for row in range(block.rows)}
        wanted = set(range(first, first + LOG_PERIOD_TICKS * due, LOG_PERIOD_TICKS))
        return Sustained(due, len(ticks & wanted), dropped, board.garbled)


def lines() -> list[str]:
    """What `bench.py` prints."""
    if reason := toolchain.why_not(toolchain.BOARD, toolchain.EMULATOR):
        return [f"emulated board:      not measured: {reason}"]
    with tempfile.TemporaryDirectory(prefix="ramprig-bench-") as name:
        folder = Path(name)
        emulator = build_emulator(folder)
        program = build_program(folder / "alone", serial="BENCH-1")
        alone = factor_with_motion(emulator, program)
        as_mock = build_program(folder / "demo", serial="BENCH-2", defines=("'-DBOARD_NAME=\"ramprig-mock\"'",))
        demo = factor_of_demo(emulator, as_mock, folder)
        log = sustained(emulator, program)
    return [
        f"emulated board:      {alone.wall:.1f} times real time with the demo's motion (aim {FACTOR_AIM:g} or more); "
        f"{alone.processor:.1f} times its own processor time",
        f"                     {demo.wall:.1f} times for the whole demo on the lockstep port, the host's work included",
        f"emulated logging:    {log.arrived} of {log.due} samples at 500/s and 115200 baud (aim all); "
        f"{log.dropped} dropped, {log.garbled} lines garbled",
    ]


if __name__ == "__main__":
    print("\n".join(lines()))
