"""Build the programs of firmware_ref/proofs: explorer and fuzz targets, each with one of the seeded bugs if asked.

The core's own sources are compiled in, with sizes that keep the models small. For `fuzz.py` and the tests.
"""

from __future__ import annotations

import re
import shutil
import subprocess
from dataclasses import dataclass
from pathlib import Path

FIRMWARE = Path(__file__).resolve().parents[2] / "firmware_ref"
PROOFS = FIRMWARE / "proofs"
CORE = FIRMWARE / "core"
WARNINGS = ("-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Werror")
SANITIZERS = ("-fsanitize=fuzzer,address,undefined", "-fno-sanitize-recover=all", "-fno-omit-frame-pointer", "-g")
SMALL = ("-DRR_TRAIL=32", "-DRR_QUEUE=8")

COMPILER = shutil.which("cc") or shutil.which("gcc") or shutil.which("clang")
CLANG = shutil.which("clang")


@dataclass(frozen=True, slots=True, kw_only=True)
class SeededBug:
    """A row of core/seeded.h."""

    number: int
    name: str
    clause: str
    text: str


def seeded_bugs() -> list[SeededBug]:
    """The seeded bugs in order of their numbers."""
    rows = re.findall(r'X\((\d+), +(\w+), +"([^"]+)", +"([^"]+)"\)', (CORE / "seeded.h").read_text("utf-8"))
    return [SeededBug(number=int(row[0]), name=row[1], clause=row[2], text=row[3]) for row in rows]


def bug_named(name: str) -> int:
    """The number of a seeded bug; 0 for the empty name. Raises `ValueError` where there is no such bug."""
    numbers = {bug.name: bug.number for bug in seeded_bugs()} | {"": 0}
    if name not in numbers:
        raise ValueError(f"no seeded bug is called {name!r}; there are {', '.join(filter(None, numbers))}")
    return numbers[name]


def core_sources() -> list[Path]:
    """The C files of the core."""
    return sorted(CORE.glob("*.c"))


def build_explorer(out: Path, *, bug: int = 0, spread: bool = False, optimise: bool = True) -> None:
    """Compile proofs/explore.c to `out`. `spread`: the core's work done between the ticks, as on a small controller."""
    assert COMPILER is not None
    sources = [PROOFS / "explore.c", PROOFS / "witness.c", PROOFS / "rig.c", *core_sources()]
    sizes = ["-DRR_KEEP=0", "-DRR_TICK_US=12500", f"-DRR_SEEDED_BUG={bug}", f"-DRR_SPREAD={int(spread)}"]
    level = "-O2" if optimise else "-O0"
    subprocess.run([COMPILER, "-std=c11", level, *WARNINGS, *SMALL, *sizes, "-o", out, *sources], check=True)


TARGETS = ("line", "device", "spread")


def build_fuzzer(out: Path, *, target: str, bug: int = 0, optimise: bool = True) -> None:
    """Compile a fuzz target with libFuzzer and sanitizers: `line`, `device`, or `spread` (device with RR_SPREAD=1).

    Without `optimise` it is built in half the time and runs at a third of the speed.
    """
    assert CLANG is not None
    name = "line" if target == "line" else "device"
    sources = [PROOFS / f"fuzz_{name}.c", PROOFS / "witness.c", *core_sources()]
    if name == "device":
        sources.append(PROOFS / "rig.c")
    sizes = ["-DRR_KEEP=2", f"-DRR_SEEDED_BUG={bug}", f"-DRR_SPREAD={int(target == 'spread')}"]
    level = "-O1" if optimise else "-O0"
    subprocess.run([CLANG, "-std=c11", level, *WARNINGS, *SANITIZERS, *SMALL, *sizes, "-o", out, *sources], check=True)
