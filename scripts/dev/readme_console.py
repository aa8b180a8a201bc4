"""Runs the `console` blocks of README.md and of the guides, and compares, or renews, the output printed there.

In a block each line that begins with `$ ` is a command, given to bash; what follows it is its standard output. All
blocks of the file run in order in one empty folder that has a copy of `scripts/`. What differs from run to run (run
folders' names, times of day) is compared by its form only.

    python scripts/dev/readme_console.py            compare; prints each difference, exit 1 where there is one
    python scripts/dev/readme_console.py --renew    write the output as it is now into the files
"""

from __future__ import annotations

import argparse
import os
import re
import shutil
import subprocess
import sys
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent.parent
README = ROOT / "README.md"
GUIDES = (README, ROOT / "scripts" / "night_run.md")
"""The files whose blocks are run, each in a folder of its own."""
COMMAND_S = 120.0
"""A command that takes longer is broken."""
FENCE = re.compile(r"^```console\n(.*?)^```$", re.MULTILINE | re.DOTALL)
VARYING = (
    (re.compile(r"\b\d{8}T\d{6}Z-([a-z0-9-]+)-[0-9a-f]{6}\b"), r"RUN-\1"),
    (re.compile(r"\b\d{8}T\d{6}Z\b"), "START"),
    (re.compile(r"\b\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d+)?Z"), "TIME"),
    (re.compile(r"\b\d{4}-\d\d-\d\d \d\d:\d\d\b"), "TIME"),
    (re.compile(r"\b[A-Z][a-z]{2} \d\d [A-Z][a-z]{2} \d{4} \d\d:\d\d \(UTC[+-]\d{4}\)"), "TIME"),
    (re.compile(r"\b(core|mock):\?"), "SIMULATED:?"),
    (re.compile(r"the firmware core and plant in C|the mock in Python"), "SIMULATED"),
    (re.compile(r"  (-?\d+ mA|0 A)  "), "  NOISE  "),  # of a current at rest
    (re.compile(r"^link [\d.]+ ms", re.MULTILINE), "link TIME"),
    (re.compile(r"outputs off after \d+ ms"), "outputs off after TIME"),
)
"""What differs from run to run, and what stands for it when outputs are compared."""


@dataclass(frozen=True, slots=True)
class Command:
    """One command of a block and the output printed below it, whole lines."""

    text: str
    output: str


def commands_of(block: str) -> list[Command]:
    """The commands of a block; lines before the first `$ ` are refused."""
    parts = re.split(r"^\$ ", block, flags=re.MULTILINE)
    if parts[0]:
        raise ValueError(f"a console block begins with a command, not with {parts[0].splitlines()[0]!r}")
    found = []
    for part in parts[1:]:
        text, _, output = part.partition("\n")
        found.append(Command(text, output))
    return found


def settled(output: str) -> str:
    """The output with all that varies replaced by what stands for it."""
    for pattern, by in VARYING:
        output = pattern.sub(by, output)
    return output


def carried_out(text: str, folder: Path) -> str:
    """The command's standard output, run in the folder by bash with this Python's programs first on the path.

    Raises RuntimeError where it fails; one that is meant to fail ends with `; echo "exit code $?"`.
    """
    path = f"{Path(sys.executable).parent}{os.pathsep}{os.environ.get('PATH', '')}"
    done = subprocess.run(
        ["bash", "-c", text], cwd=folder, env=os.environ | {"PATH": path, "COLUMNS": "100"}, stdin=subprocess.DEVNULL,
        capture_output=True, timeout=COMMAND_S, check=False,
    )  # fmt: skip
    if done.returncode:
        raise RuntimeError(f"`{text}` ended with {done.returncode}: {done.stderr.decode('utf-8', 'replace')}")
    return "".join(line.rstrip() + "\n" for line in done.stdout.decode("utf-8").splitlines())


def all_run(text: str, folder: Path) -> Iterator[tuple[Command, str]]:
    """Each command of the text with the output it has now, in order."""
    shutil.copytree(ROOT / "scripts", folder / "scripts", ignore=shutil.ignore_patterns("dev", "__pycache__"))
    for block in FENCE.findall(text):
        for command in commands_of(block):
            yield command, carried_out(command.text, folder)


def differences(text: str) -> list[str]:
    """What the text says otherwise than the commands do."""
    with tempfile.TemporaryDirectory() as folder:
        return [
            f"$ {command.text}\n--- the text says\n{command.output}--- it prints\n{now}"
            for command, now in all_run(text, Path(folder))
            if settled(command.output) != settled(now)
        ]


def renewed(text: str) -> str:
    """The text with every output as it is now."""
    with tempfile.TemporaryDirectory() as folder:
        outputs = iter([(command.text, now) for command, now in all_run(text, Path(folder))])

        def block_now(match: re.Match[str]) -> str:
            lines = [f"$ {command}\n{now}" for command, now in (next(outputs) for _ in commands_of(match[1]))]
            return "```console\n" + "".join(lines) + "```"

        return FENCE.sub(block_now, text)


def main() -> int:
    """Compare or renew."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0] if __doc__ else None)
    parser.add_argument("--renew", action="store_true", help="write the output as it is now into the files")
    if parser.parse_args().renew:
        for guide in GUIDES:
            guide.write_text(renewed(guide.read_text("utf-8")), "utf-8")
        return 0
    found = [difference for guide in GUIDES for difference in differences(guide.read_text("utf-8"))]
    print("\n".join(found) or "the output in the texts is what the commands print")
    return 1 if found else 0


if __name__ == "__main__":
    sys.exit(main())
