"""Tells what the ATmega328P firmware's flash is made of: the bytes of each source file, of tables, and of the library.

    python scripts/dev/flash_parts.py [FLAG ...]

Builds the firmware with debug information (and the flags given), and asks for the source line of each of its words.
Code that was put into its caller is counted to the file it was written in. Ends with status 2 where the tools are
missing.
"""

from __future__ import annotations

import subprocess
import sys
import tempfile
from collections import Counter
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

import toolchain
from dev.build_firmware import build_program, sizes

DATA_SPACE = 0x800000  # where the linker has the addresses of data memory
TABLES = "tables in flash"
LIBRARY = "vectors, encoder.S, start and the compiler's library"


def printed(*command: str | Path, given: str = "") -> list[str]:
    """The lines that a command prints; raises CalledProcessError where it fails."""
    return subprocess.run(command, input=given, capture_output=True, text=True, check=True).stdout.splitlines()


def symbols(program: Path) -> list[tuple[str, range]]:
    """Kind and words of all that is in flash and has a size."""
    found = []
    for line in printed("avr-readelf", "-sW", program):
        fields = line.split()
        if len(fields) == 8 and fields[3] in ("OBJECT", "FUNC") and int(fields[1], 16) < DATA_SPACE:
            start = int(fields[1], 16)
            found.append((fields[3], range(start & ~1, start + int(fields[2]), 2)))
    return found


def parts(program: Path) -> Counter[str]:
    """Bytes by source file, tables and library; together all of the program's flash."""
    flash, _ = sizes(program)
    words = dict.fromkeys(range(0, flash, 2), LIBRARY)  # assembler code, which has no size or line
    for kind, covered in symbols(program):
        words.update(dict.fromkeys(covered, TABLES if kind == "OBJECT" else ""))
    lines = printed("avr-addr2line", "-e", program, given="\n".join(map(hex, words)))
    for word, line in zip(words, lines, strict=True):
        name = Path(line.split(":", maxsplit=1)[0]).name
        words[word] = words[word] or name
    return Counter({part: 2 * count for part, count in Counter(words.values()).items()})


def main(arguments: list[str]) -> int:
    """Build and print; the exit status."""
    if reason := toolchain.why_not(toolchain.BOARD):
        print(f"Not built: {reason}", file=sys.stderr)
        return 2
    with tempfile.TemporaryDirectory() as folder:
        found = parts(build_program(Path(folder), defines=("-g", *arguments)))
    for name, size in found.most_common():
        print(f"{size:6}  {name}")
    print(f"{found.total():6}  in all")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
