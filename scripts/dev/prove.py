"""Prove the contracts of the firmware's core with Frama-C WP, run-time errors included.

    python scripts/dev/prove.py                      every part, with integers of 64-bit and of 16-bit machines
    python scripts/dev/prove.py --part chain         one part
    python scripts/dev/prove.py --bug SLEW_DOUBLED   with a seeded bug: its goals must fail

Prints goals proved and in all for each part, and names each goal that is not proved. Exit status 0 where all are
proved, 1 where one is not, 2 where the tools are missing or of another version than the contracts were proved with:
then nothing is counted as proved. Which functions are proved is the list `PARTS` here; firmware_ref/proofs/README.md
says what that means, and what is not proved.
"""

from __future__ import annotations

import argparse
import os
import re
import shutil
import subprocess
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from dev import proof_builds

# Debian 12's. Other versions have other options, models of memory and strength.
VERSIONS = {"frama-c": "25.0", "why3": "1.5.1", "cvc4": "1.8", "z3": "4.8.12"}
VERSION_OPTIONS = {"frama-c": "-version", "why3": "--version", "cvc4": "--version", "z3": "--version"}
PACKAGES = "frama-c-base why3 cvc4 z3"
GOAL_S = 30  # for one prover on one goal; the longest takes 3 s on a machine at rest
PART_S = 1800.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Part:
    """A file, and the functions of it that are proved (none named: all)."""

    name: str
    clauses: str
    file: Path
    functions: tuple[str, ...] = ()


PARTS = (
    Part(name="chain", clauses="S1, S2, S3", file=proof_builds.CORE / "chain.c"),
    Part(name="history", clauses="S1, S2, S3 over every history", file=proof_builds.PROOFS / "trace_chain.c"),
    Part(name="latch", clauses="S5", file=proof_builds.CORE / "latch.c"),
    Part(name="stops", clauses="S5 over every history", file=proof_builds.PROOFS / "trace_latch.c"),
    Part(name="servo", clauses="S7", file=proof_builds.CORE / "servo.c"),
    Part(
        name="orders",
        clauses="ORDER-3: the next order; ORDER-4: one step",
        file=proof_builds.CORE / "orders.c",
        functions=("rr_orders_take_due", "rr_glide_step", "rr_glide_end"),
    ),
    Part(name="guard", clauses="TRIP-1, TRIP-3, TRIP-5 to TRIP-8, CLEAR-1", file=proof_builds.CORE / "guard.c"),
    Part(name="heat", clauses="TRIP-8: no run-time error, and the whole root", file=proof_builds.CORE / "heat.c"),
)

# The AVR has integers of 16 bits: what is promoted to int there may overflow where a 64-bit machine has room.
MACHINES = ("x86_64", "x86_16")


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """What a part came to on one machine's integers."""

    part: str
    machine: str
    proved: int
    goals: int
    unproved: tuple[str, ...]
    trouble: str  # what kept the goals from being made at all; empty: nothing


def missing_tools() -> list[str]:
    """What is missing or of another version, in words; empty where all is right."""
    wrong = []
    for tool, version in VERSIONS.items():
        path = shutil.which(tool)
        if path is None:
            wrong.append(f"{tool} is not installed")
            continue
        done = subprocess.run([path, VERSION_OPTIONS[tool]], capture_output=True, text=True, check=False)
        found = re.search(r"\d+\.\d+(?:\.\d+)?", done.stdout)
        if found is None or found[0] != version:
            wrong.append(f"{tool} is version {found[0] if found else 'unknown'}, these proofs were made with {version}")
    return wrong


def prepared(folder: Path) -> dict[str, str]:
    """The environment for Frama-C, with a configuration of Why3 of its own in the folder."""
    config = folder / "why3.conf"
    subprocess.run(["why3", "-C", config, "config", "detect"], capture_output=True, check=True)
    return dict(os.environ, WHY3CONFIG=str(config))


def prove(part: Part, machine: str, environment: dict[str, str], *, bug: int = 0, goal_s: int = GOAL_S) -> Verdict:
    """Run WP on a part."""
    options = ["-c11", "-machdep", machine, f"-cpp-extra-args=-DRR_SEEDED_BUG={bug}"]
    options += ["-wp", "-wp-rte", "-wp-prover", "cvc4,z3", "-wp-timeout", str(goal_s)]
    options += ["-wp-cache", "none", "-wp-par", "2"]
    if part.functions:
        options += ["-wp-fct", ",".join(part.functions)]
    done = subprocess.run(
        ["frama-c", *options, part.file],
        env=environment,
        capture_output=True,
        text=True,
        check=False,
        timeout=PART_S,
    )
    return read_report(part.name, machine, done.stdout + done.stderr)


def read_report(part: str, machine: str, report: str) -> Verdict:
    """The verdict by what Frama-C printed. Only goals that WP counts as proved are counted."""
    total = re.search(r"Proved goals: +(\d+) / (\d+)", report)
    goals = re.findall(r"\[wp\] \[[^\]]*\] Goal (\w+)(?: : (?!Valid)|$)", report, re.MULTILINE)
    unproved = tuple(goal.removeprefix("typed_") for goal in goals)
    trouble = ""
    if total is None or int(total[2]) == 0:
        trouble = "\n".join(report.splitlines()[-8:]) or "Frama-C said nothing"
    return Verdict(
        part=part,
        machine=machine,
        proved=int(total[1]) if total else 0,
        goals=int(total[2]) if total else 0,
        unproved=unproved,
        trouble=trouble,
    )


def told(part: Part, verdict: Verdict) -> str:
    """A line for a verdict, and one for each goal that is not proved."""
    lines = [f"{part.name} ({part.clauses}), {verdict.machine}: {verdict.proved} of {verdict.goals} goals proved"]
    lines += [f"    not proved: {goal}" for goal in verdict.unproved]
    lines += [f"    {line}" for line in verdict.trouble.splitlines()]
    return "\n".join(lines)


def main(arguments: list[str]) -> int:
    """Run from the command line; returns the exit status."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--part", choices=[part.name for part in PARTS], action="append")
    parser.add_argument("--machine", choices=MACHINES, action="append")
    parser.add_argument("--bug", default="", help="a seeded bug by its name in core/seeded.h")
    given = parser.parse_args(arguments)
    try:
        bug = proof_builds.bug_named(given.bug)
    except ValueError as error:
        parser.error(str(error))
    wrong = missing_tools()
    if wrong:
        print(f"Nothing is proved here: {'; '.join(wrong)}.\nOn Debian 12: apt-get install {PACKAGES}", file=sys.stderr)
        return 2
    verdicts = []
    with tempfile.TemporaryDirectory(prefix="ramprig-prove-") as folder:
        environment = prepared(Path(folder))
        for part in PARTS:
            if given.part and part.name not in given.part:
                continue
            for machine in given.machine or MACHINES:
                verdicts.append(prove(part, machine, environment, bug=bug))
                print(told(part, verdicts[-1]), flush=True)
    proved = sum(verdict.proved for verdict in verdicts)
    goals = sum(verdict.goals for verdict in verdicts)
    whole = proved == goals and not any(verdict.trouble for verdict in verdicts)
    print(f"{proved} of {goals} goals proved" + ("" if whole else ": NOT all"))
    return 0 if whole else 1


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
