"""Proves the properties of the FPGA blocks by induction, shows each of their covers by a trace, and tells their sizes.

    .env/bin/python scripts/dev/prove_gates.py [MODULE ...]     all of them take some minutes

Prints a line a module: properties proved, covers reached, cells on an iCE40 (4-input tables and flip-flops, before
place and route). Ends with status 1 where a property is not proved or a cover is not reached, 2 where the tools are
missing. A property is a labelled `assert` or `cover` under FORMAL in firmware_ref/fpga; one without a label is refused,
since nothing could tell whether it was looked at.
"""

from __future__ import annotations

import argparse
import re
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import toolchain

FPGA = Path(__file__).resolve().parent.parent.parent / "firmware_ref" / "fpga"
COVER_MAP = "cover_as_assert.v"

PROPERTY = re.compile(r"(?:(\w+): )?\b(assert|cover) \(")
PROVED = "Induction step proven: SUCCESS!"
REACHED = re.compile(r"model found(?: for base case)?: FAIL!")


@dataclass(frozen=True, slots=True)
class Block:
    """A module to prove: the modules it is made of, and smaller parameters under which its covers are soon reached.

    A trace to a cover has at most `cover_clocks`. It is looked for clock by clock; with `at_once` in all of them
    together, which is quicker for long traces: the search by clocks asks that no state comes twice, pair by pair.
    """

    name: str
    parts: tuple[str, ...] = ()
    small: tuple[tuple[str, int], ...] = ()
    cover_clocks: int = 20
    at_once: bool = False

    @property
    def sources(self) -> str:
        """The file names, this module's first."""
        return " ".join(f"{name}.v" for name in (self.name, *self.parts))


BLOCKS = (
    Block("rr_chain"),
    Block("rr_standstill"),
    Block("rr_quadrature", small=(("FILTER", 2),), cover_clocks=30),
    Block("rr_bridge", small=(("STEP", 2500), ("DEAD", 2))),
    Block("rr_servo"),
    Block("rr_servo_pulse", small=(("FRAME_NS", 200),), cover_clocks=30),
    Block("rr_lease"),
    Block("rr_overcurrent"),
    Block("rr_crc16"),
    Block("rr_line", ("rr_crc16",)),
    Block("rr_uart_rx", small=(("BIT_CLOCKS", 4),), cover_clocks=50, at_once=True),
    Block("rr_uart_tx", small=(("BIT_CLOCKS", 2),), cover_clocks=30, at_once=True),
    Block("rr_interlock", ("rr_chain", "rr_bridge", "rr_lease", "rr_overcurrent", "rr_standstill")),
)
INDUCTION_STEPS = 8


@dataclass(frozen=True, slots=True)
class Found:
    """What came of one block: names of properties proved or not, of covers reached or not."""

    block: Block
    proved: tuple[str, ...]
    unproved: tuple[str, ...]
    reached: tuple[str, ...]
    unreached: tuple[str, ...]

    @property
    def holds(self) -> bool:
        """Whether nothing is missing."""
        return not self.unproved and not self.unreached

    @property
    def line(self) -> str:
        """The result in a line."""
        said = f"{self.block.name:<16} {len(self.proved):3} proved  {len(self.reached):2} covered"
        if self.unproved:
            said += f"  NOT PROVED among {', '.join(self.unproved)}"
        if self.unreached:
            said += f"  NOT REACHED: {', '.join(self.unreached)}"
        return said


def properties(name: str) -> dict[str, tuple[str, ...]]:
    """The labels of a module's asserts and covers; raises ValueError for one without a label or with another's."""
    found: dict[str, list[str]] = {"assert": [], "cover": []}
    for number, line in enumerate((FPGA / f"{name}.v").read_text("utf-8").splitlines(), start=1):
        for match in PROPERTY.finditer(line.split("//")[0]):
            if match[1] is None:
                raise ValueError(f"{name}.v:{number}: {match[2]} without a label; write 'name: {match[2]} (...)'")
            if match[1] in found["assert"] + found["cover"]:
                raise ValueError(f"{name}.v:{number}: the label '{match[1]}' is used twice")
            found[match[2]].append(match[1])
    return {kind: tuple(names) for kind, names in found.items()}


def yosys(commands: str) -> str:
    """What Yosys prints; raises RuntimeError with its last lines where it fails."""
    done = subprocess.run(["yosys", "-Q", "-T", "-p", commands], cwd=FPGA, capture_output=True, text=True, check=False)
    if done.returncode != 0:
        raise RuntimeError("yosys: " + "\n".join((done.stdout + done.stderr).splitlines()[-5:]))
    return done.stdout


def prepared(block: Block, *, small: bool) -> str:
    """The commands that read a block with its properties, at its small or full parameters, and flatten it."""
    setting = "".join(f"chparam -set {key} {value} {block.name}; " for key, value in block.small if small)
    return f"read_verilog -formal {block.sources}; {setting}prep -top {block.name} -flatten; async2sync; dffunmap; "


def prove(block: Block) -> bool:
    """Whether all asserts of a block hold, from reset on and step by step, at its full parameters."""
    commands = prepared(block, small=False) + "chformal -cover -remove; opt -full; "
    search = f"sat -tempinduct -prove-asserts -set-assumes -seq 1 -maxsteps {INDUCTION_STEPS}"
    return PROVED in yosys(commands + search)


def reach(block: Block, cover: str) -> bool:
    """Whether a trace shows one cover of a block, at its smaller parameters."""
    commands = prepared(block, small=True)
    commands += f"chformal -assert -remove; techmap -map {COVER_MAP}; select -assert-count 1 t:$assert c:{cover} %i; "
    commands += f"delete t:$assert c:{cover} %d; opt -full; "
    how = "-seq" if block.at_once else "-tempinduct -tempinduct-baseonly -maxsteps"
    return REACHED.search(yosys(commands + f"sat -prove-asserts -set-assumes {how} {block.cover_clocks}")) is not None


def size(block: Block) -> tuple[int, int]:
    """Four-input tables and flip-flops of a block on an iCE40, at its full parameters."""
    printed = yosys(f"read_verilog {block.sources}; synth_ice40 -top {block.name} -flatten; stat")
    last = printed[printed.rindex("Number of cells") :]
    cells = {name: int(number) for name, number in re.findall(r"(SB_\w+) +(\d+)", last)}
    return cells.get("SB_LUT4", 0), sum(number for name, number in cells.items() if name.startswith("SB_DFF"))


def examine(block: Block) -> Found:
    """Prove and cover one block."""
    named = properties(block.name)
    proved = prove(block)
    reached = tuple(cover for cover in named["cover"] if reach(block, cover))
    return Found(
        block,
        proved=named["assert"] if proved else (),
        unproved=() if proved else named["assert"],
        reached=reached,
        unreached=tuple(cover for cover in named["cover"] if cover not in reached),
    )


def main(arguments: list[str]) -> int:
    """Examine the blocks named, or all; return the exit status."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("modules", nargs="*", metavar="MODULE")
    wanted = parser.parse_args(arguments).modules
    blocks = [block for block in BLOCKS if not wanted or block.name in wanted]
    if unknown := set(wanted) - {block.name for block in BLOCKS}:
        parser.error(f"no block is named {', '.join(sorted(unknown))}; there are {', '.join(b.name for b in BLOCKS)}")
    if missing := toolchain.why_not(toolchain.GATES):
        print(f"nothing is proved: {missing}")
        return 2
    results = []
    for block in blocks:
        results.append(examine(block))
        tables, flip_flops = size(block)
        print(f"{results[-1].line}  {tables:5} tables  {flip_flops:4} flip-flops", flush=True)
    failed = [found for found in results if not found.holds]
    print(
        f"{sum(len(found.proved) for found in results)} properties proved, {len(failed)} blocks with something missing"
    )
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
