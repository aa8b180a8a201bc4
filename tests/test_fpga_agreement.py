"""The FPGA blocks give what the core in C gives, tick for tick, and what an encoder's edges mean.

The gates are run by Icarus Verilog; the core's step functions are compiled from the same sources as the firmware.
"""

from __future__ import annotations

import random
import subprocess
from pathlib import Path

import pytest
import toolchain

ROOT = Path(__file__).resolve().parent.parent
FPGA = ROOT / "firmware_ref" / "fpga"

pytestmark = pytest.mark.skipif(
    bool(toolchain.why_not(toolchain.GATES, toolchain.CORE)), reason=toolchain.why_not(toolchain.GATES, toolchain.CORE)
)

TICKS = 6000
SPANS = ((1, 40), (60, 900), (2000, 10000))
"""Slews from a creep to a jump, so that a history has ramps, corners and steps."""


def compiled(top: str, bench: str, folder: Path) -> Path:
    """A test bench and the blocks, for vvp; warnings are failures."""
    program = folder / f"{top}.vvp"
    sources = [str(path) for path in sorted(FPGA.glob("rr_*.v"))]
    command = ["iverilog", "-g2005", "-Wall", "-Wno-timescale", "-I", str(FPGA), "-s", top, "-o", str(program)]
    done = subprocess.run([*command, str(FPGA / "sim" / bench), *sources], capture_output=True, text=True, check=True)
    assert done.stderr == ""
    return program


def simulated(program: Path, text: str, folder: Path) -> list[str]:
    """What a bench prints for its inputs."""
    (folder / "in.txt").write_text(text, "ascii")
    command = ["vvp", "-n", str(program), f"+in={folder / 'in.txt'}"]
    return subprocess.run(command, capture_output=True, text=True, check=True).stdout.splitlines()


def history(chance: random.Random) -> list[tuple[int, ...]]:
    """Inputs of TICKS ticks: stretches of steady limits with demands, currents and shafts that change within them."""
    rows: list[tuple[int, ...]] = []
    counts = 0
    while len(rows) < TICKS:
        low, high = chance.choice(SPANS)
        limits = (
            chance.choice((0, chance.randrange(10001), 10000)),
            chance.randint(low, high),
            chance.randint(low, high),
            chance.choice((0, 1, 5, 40)),
            chance.choice((-1, 0, 1)),
            chance.choice((0, 2, 9)),
            chance.choice((0, 1, 7)),
            chance.choice((200, 2500, 130000)),
            chance.choice((1, 2, 5)),
        )
        ends = sorted(chance.randrange(500_000, 2_500_001) for _ in range(2))
        servo = (*ends, chance.randrange(500_000, 2_600_001), chance.choice((1, 900, 40_000, 2_000_000)))
        on = chance.random() < 0.9
        speed = chance.choice((0, 0, 1, 3, -2, 50))
        demand, goal = chance.randint(-10000, 10000), chance.choice((0, chance.randrange(400_000, 2_600_001)))
        for _ in range(chance.randrange(1, 120)):
            if chance.random() < 0.05:
                demand = chance.choice((0, -demand, chance.randint(-10000, 10000)))
            counts = (counts + speed + 2**31) % 2**32 - 2**31
            current = chance.choice((0, chance.randint(-3000, 3000), chance.randint(-131072, 131071)))
            rows.append((int(on), demand, counts, current, goal, *limits, *servo))
    return rows[:TICKS]


@pytest.fixture(scope="module")
def core_steps(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The core's steps as a program."""
    program = tmp_path_factory.mktemp("core") / "steps"
    core = [str(ROOT / "firmware_ref" / "core" / name) for name in ("chain.c", "guard.c", "heat.c", "servo.c")]
    flags = ["-std=c11", "-O1", "-Wall", "-Wextra", "-Werror"]
    subprocess.run(["cc", *flags, "-o", str(program), str(FPGA / "sim" / "steps.c"), *core], check=True)
    return program


@pytest.mark.parametrize("seed", range(3))
def test_chain_standstill_overcurrent_and_servo_step_as_the_core_does(
    seed: int, core_steps: Path, tmp_path: Path
) -> None:
    rows = history(random.Random(seed))
    text = "".join(" ".join(map(str, row)) + "\n" for row in rows)
    told = subprocess.run([str(core_steps)], input=text, capture_output=True, text=True, check=True).stdout.splitlines()
    gates = simulated(compiled("steps", "steps.v", tmp_path), text, tmp_path)
    assert len(gates) == len(told) == TICKS
    for tick, (by_gates, by_core) in enumerate(zip(gates, told, strict=True)):
        assert by_gates == by_core, f"seed {seed}, tick {tick}, inputs {rows[tick]}"
    signs = {(int(line.split()[0]) > 0) - (int(line.split()[0]) < 0) for line in told}
    locks = sum(line.split()[3] == "1" for line in told)
    let_go = sum(line.split()[4] != "0" for line in told)
    assert signs == {-1, 0, 1}, "a history without reversals shows nothing"
    assert locks > 50
    assert let_go > 3


def test_a_shaft_with_bouncing_edges_is_counted_edge_by_edge(tmp_path: Path) -> None:
    chance = random.Random(7)
    cycle = ((0, 0), (1, 0), (1, 1), (0, 1))
    place, counts, rows, expected = 0, 0, [], []
    for _ in range(3000):
        before = cycle[place % 4]
        place += chance.choice((1, 1, 1, -1))
        after = cycle[place % 4]
        for _ in range(chance.randrange(3)):  # a contact that bounces, each time shorter than the filter
            rows += [(chance.randint(1, 3), *after), (chance.randint(1, 3), *before)]
            expected += [counts, counts]
        counts = place
        rows.append((chance.randint(12, 30), *after))
        expected.append(counts)
    text = "".join(f"{clocks} {a} {b}\n" for clocks, a, b in rows)
    shown = simulated(compiled("shaft", "shaft.v", tmp_path), text, tmp_path)
    assert len(shown) == len(rows)
    settled = [(line, want) for line, want, row in zip(shown, expected, rows, strict=True) if row[0] >= 12]
    for index, (line, want) in enumerate(settled):
        assert line == f"{want} 0", f"seed 7, step {index}"


def test_a_step_of_both_tracks_at_once_is_illegal_and_not_counted(tmp_path: Path) -> None:
    shown = simulated(compiled("shaft", "shaft.v", tmp_path), "20 1 0\n20 0 1\n20 0 0\n20 1 1\n", tmp_path)
    assert shown == ["1 0", "1 1", "2 1", "2 2"]
