"""Fuzz the line parser and the whole device, guided by coverage, with sanitizers and the witness of SPEC section 12.

    python scripts/dev/fuzz.py --minutes 10                    each target for so long: line, device, spread
    python scripts/dev/fuzz.py --minutes 1 --target line
    python scripts/dev/fuzz.py --minutes 1 --bug LINE_ONE_TOO_LONG      with a seeded bug: it should be found

Needs clang with its libFuzzer (Debian: clang, libclang-rt-dev). It begins with the lines of `protocol/vectors`. Exit
status 0 with no finding, 1 with one (what replays it is printed), 2 where the tools are missing.
"""

from __future__ import annotations

import argparse
import json
import re
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from dev import proof_builds

from ramprig_link.check import seal

VECTORS = Path(__file__).resolve().parents[2] / "protocol" / "vectors" / "exchanges.json"
LONGEST_INPUT = 600
MINUTE_S = 60.0
GRACE_S = 120.0  # the fuzzer stops by itself; this is for a hang of it
STEP_SEALED, STEP_TICKS, STEP_RAW = 2, 0, 1  # enum step of fuzz_device.c


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """What one target's run came to."""

    target: str
    runs: int
    coverage: int
    finding: str  # empty: none


def seeds(target: str) -> Iterator[bytes]:
    """Inputs to begin with: the vectors' lines, for `line` as they are, else as scripts of fuzz_device.c."""
    for vector in json.loads(VECTORS.read_text("utf-8"))["vectors"]:
        whole = b"\0"
        for step in vector["steps"]:
            if "send" in step:
                body = step["send"].encode("latin-1")
                whole += seal(body) if target == "line" else bytes([STEP_SEALED, len(body) % 100]) + body[:99]
            if "raw" in step:
                raw = step["raw"].encode("latin-1")
                whole += raw if target == "line" else bytes([STEP_RAW, min(len(raw), 99)]) + raw[:99]
            if target != "line":
                whole += bytes([STEP_TICKS, 3])
        yield whole[1:] if target == "line" else whole


def reported(target: str, output: str, *, failed: bool) -> Outcome:
    """The outcome by what libFuzzer printed."""
    runs = re.search(r"stat::number_of_executed_units: (\d+)", output)
    covered = re.findall(r"cov: (\d+)", output)
    finding = ""
    if failed:
        wanted = r"^(?:broken: .*|.*runtime error: .*|==\d+==ERROR.*|SUMMARY: .*|Base64: .*)$"
        finding = "\n".join(re.findall(wanted, output, re.MULTILINE)) or output[-2000:]
    return Outcome(
        target=target,
        runs=int(runs[1]) if runs else 0,
        coverage=int(covered[-1]) if covered else 0,
        finding=finding,
    )


def fuzz(
    target: str,
    *,
    bug: int = 0,
    time_s: float | None = None,
    runs: int | None = None,
    seed: int = 0,
    optimise: bool = True,
) -> Outcome:
    """Build a target and run it for a time or a number of runs. `seed` 0: another each time."""
    with tempfile.TemporaryDirectory(prefix="ramprig-fuzz-") as folder:
        program = Path(folder) / "fuzz"
        proof_builds.build_fuzzer(program, target=target, bug=bug, optimise=optimise)
        corpus = Path(folder) / "corpus"
        corpus.mkdir()
        for number, data in enumerate(seeds(target)):
            (corpus / f"{number:04d}").write_bytes(data[:LONGEST_INPUT])
        options = [f"-max_len={LONGEST_INPUT}", f"-seed={seed}", "-print_final_stats=1", f"-artifact_prefix={folder}/"]
        if time_s is not None:
            options.append(f"-max_total_time={int(time_s)}")
        if runs is not None:
            options.append(f"-runs={runs}")
        done = subprocess.run(
            [program, *options, corpus],
            capture_output=True,
            check=False,
            timeout=None if time_s is None else time_s + GRACE_S,
        )
        output = done.stderr.decode("utf-8", "replace")
        return reported(target, output, failed=done.returncode != 0)


def main(arguments: list[str]) -> int:
    """Run from the command line; returns the exit status."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--minutes", type=float, default=1.0, help="for each target")
    parser.add_argument("--target", choices=proof_builds.TARGETS, action="append")
    parser.add_argument("--bug", default="", help="a seeded bug by its name in core/seeded.h")
    given = parser.parse_args(arguments)
    if proof_builds.CLANG is None:
        print("Not fuzzed: no clang here. On Debian: apt-get install clang libclang-rt-dev", file=sys.stderr)
        return 2
    try:
        bug = proof_builds.bug_named(given.bug)
    except ValueError as error:
        parser.error(str(error))
    found = False
    for target in given.target or proof_builds.TARGETS:
        outcome = fuzz(target, bug=bug, time_s=given.minutes * MINUTE_S)
        found = found or outcome.finding != ""
        print(f"{target}: {outcome.runs} runs, {outcome.coverage} places covered, ", end="")
        print(f"FOUND\n{outcome.finding}" if outcome.finding else "nothing found", flush=True)
    return 1 if found else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
