"""Builds the ATmega328P firmware and the emulated board, and holds the firmware to its budgets.

    python scripts/dev/build_firmware.py [--out FOLDER] [--serial TOKEN] [--baud RATE]

Prints flash, static memory, stack and the worst tick beside their budgets, and ends with status 1 where one is passed,
2 where the tools are missing. Flash and static memory are the program's; stack and tick are measured on the emulated
board, through a run with one motor, two servos, 1 kHz logging and 40,000 counts/s in which every request is made.
"""

from __future__ import annotations

import argparse
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import toolchain
from dev.emulated_board import EmulatedBoard

ROOT = Path(__file__).resolve().parent.parent.parent
FIRMWARE = ROOT / "firmware_ref"
PORT = FIRMWARE / "ports" / "atmega328p"
OUT = ROOT / "build" / "firmware"
EMULATOR_FLAGS = ("-std=c11", "-O2", "-ffp-contract=off", "-Wall", "-Wextra", "-Wconversion", "-Wshadow", "-Werror")

FLASH_BYTES = 16 * 1024
STATIC_BYTES = int(1.3 * 1024)
STACK_BYTES = 256
TICK_US = 400

RATED_BAUD_ERROR_PERMILLE = 15
"""The data sheet's recommended greatest error at double speed (DS40002061A, table 20-3)."""


@dataclass(frozen=True, slots=True)
class Measured:
    """One figure beside its budget."""

    name: str
    value: int
    budget: int
    unit: str

    @property
    def fits(self) -> bool:
        """Whether the budget is kept."""
        return self.value <= self.budget


def run(command: list[str | Path], cwd: Path | None = None) -> str:
    """What a command prints; raises RuntimeError with its complaints where it fails."""
    done = subprocess.run(command, cwd=cwd, capture_output=True, text=True, check=False)
    if done.returncode != 0:
        raise RuntimeError(f"{' '.join(map(str, command))}\n{done.stdout}{done.stderr}")
    return done.stdout


def scripted_sources() -> list[Path]:
    """The firmware's sources with its sensors replaced: a test writes what they measure."""
    replaced = {"analog.c", "encoder.c", "encoder.S"}
    own = [path for path in sorted(PORT.glob("*.[cS]")) if path.name not in replaced]
    return [*sorted((FIRMWARE / "core").glob("*.c")), *own, FIRMWARE / "emu" / "scripted" / "inputs.c"]


def build_program(
    out: Path, *, serial: str = "unset", baud: int = 115200, defines: tuple[str, ...] = (), scripted: bool = False
) -> Path:
    """The firmware as an ELF file, made anew in `out`; `scripted` with what its sensors measure written by a test."""
    command: list[str | Path] = ["make", "-s", "-B", f"BUILD={out}", f"SERIAL={serial}", f"BAUD={baud}"]
    command.append(f"EXTRA={' '.join(defines)}")
    if scripted:
        command.append(f"SOURCES={' '.join(map(str, scripted_sources()))}")
    run(command, PORT)
    return out / "ramprig.elf"


def build_emulator(out: Path) -> Path:
    """The emulated board as a program."""
    out.mkdir(parents=True, exist_ok=True)
    program = out / "ramprig-emu"
    plant = [path for path in sorted((FIRMWARE / "plant").glob("*.c")) if path.name != "probe.c"]
    sources = [*sorted((FIRMWARE / "emu").glob("*.c")), *plant]
    libraries = ["-lsimavr", "-lelf", "-lm"]
    run(["cc", *EMULATOR_FLAGS, "-isystem", "/usr/include/simavr", "-o", program, *sources, *libraries])
    return program


def sizes(program: Path) -> tuple[int, int]:
    """Bytes of flash and of static memory."""
    text, data, bss = map(int, run(["avr-size", program]).splitlines()[1].split()[:3])
    return text + data, data + bss


def _prepare(board: EmulatedBoard) -> None:
    board.run_us(150_000)
    board.command("script 40000 300 12000")
    for name, value in (("lease_ms", 5000), ("sense", 0), ("stall_duty", 0), ("trip_ma", 9000), ("rated_ma", 0)):
        board.set_limit(name, value)


def _move(board: EmulatedBoard) -> None:
    board.ask("log 1 7 packed")
    board.arm(5000)
    start = board.tick() + 60
    for order in ("ramp 0 3000 400", "swing 0 1600 300", "swing 1 1400 200"):
        board.ask(f"{order} {start}")
    board.run_us(600_000)
    for body in ("who", "state", "why", "counters", "limit dwell_ticks 0", "limit dwell_ticks 0 300", "again 0"):
        board.ask(body)
    start = board.tick() + 200
    for _ in range(8):
        board.ask(f"rest 0 brake {start}")
    board.run_us(300_000)


def exercise(board: EmulatedBoard) -> tuple[int, int]:
    """Take a board through all it can be asked; the stack's depth in bytes and the worst tick in us."""
    _prepare(board)
    board.probe()
    _move(board)
    board.command("script 40000 9500 12000")  # overcurrent
    board.run_us(100_000)
    board.ask("trail 0 0")
    board.command("script 40000 0 12000")
    board.run_us(100_000)
    board.ask("clear")
    found = board.probe()
    return found["stack"], found["worst_us"]


def measure(program: Path, emulator: Path) -> list[Measured]:
    """All figures that have a budget."""
    flash, static = sizes(program)
    with EmulatedBoard(emulator, program) as board:
        stack, worst_us = exercise(board)
    return [
        Measured("flash", flash, FLASH_BYTES, "bytes"),
        Measured("static memory", static, STATIC_BYTES, "bytes"),
        Measured("stack", stack, STACK_BYTES, "bytes"),
        Measured("worst tick", worst_us, TICK_US, "us"),
    ]


def baud_error_permille(baud: int, f_cpu: int = 16_000_000) -> int:
    """How far the nearest rate of the UART is off, as `baud.h` chooses it."""
    best = 1000
    for clocks in (16, 8):
        divider = max(0, (f_cpu + clocks // 2 * baud) // (clocks * baud) - 1)
        best = min(best, abs(round(1000 * f_cpu / (clocks * (divider + 1)) / baud) - 1000))
    return best


def main(arguments: list[str]) -> int:
    """Build, measure, and print; the exit status."""
    parser = argparse.ArgumentParser(description="Build the ATmega328P firmware and hold it to its budgets.")
    parser.add_argument("--out", type=Path, default=OUT)
    parser.add_argument("--serial", default="unset", help="the board's own serial, a token")
    parser.add_argument("--baud", type=int, default=115200)
    options = parser.parse_args(arguments)
    if reason := toolchain.why_not(toolchain.BOARD, toolchain.EMULATOR):
        print(f"Not built: {reason}", file=sys.stderr)
        return 2
    out = options.out.resolve()
    program = build_program(out, serial=options.serial, baud=options.baud)
    figures = measure(program, build_emulator(out))
    for figure in figures:
        verdict = "" if figure.fits else "   OVER THE BUDGET"
        print(f"{figure.name:14} {figure.value:6} of {figure.budget:6} {figure.unit}{verdict}")
    off = baud_error_permille(options.baud)
    if off > RATED_BAUD_ERROR_PERMILLE:
        print(f"note: {options.baud} baud is {off / 10} % off at 16 MHz; the data sheet recommends 1.5 % at most.")
    print(f"program: {program.with_suffix('.hex')}")
    return 0 if all(figure.fits for figure in figures) else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
