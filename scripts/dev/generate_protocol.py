"""Make words.py, words.h, words.vh and the tables of SPEC.md from protocol/protocol.toml.

    python scripts/dev/generate_protocol.py            writes what differs and names it
    python scripts/dev/generate_protocol.py --check    writes nothing; exit status 1 where something differs

The form of each output is in a file of its own beside this one: `protocol_python.py`, `protocol_header.py`,
`protocol_verilog.py`, `protocol_tables.py`.
"""

from __future__ import annotations

import sys
import tomllib
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))
from dev import protocol_header, protocol_python, protocol_tables, protocol_verilog

ROOT = Path(__file__).resolve().parents[2]
SOURCE = ROOT / "protocol" / "protocol.toml"
PYTHON = ROOT / "protocol" / "ramprig_link" / "words.py"
HEADER = ROOT / "firmware_ref" / "core" / "words.h"
VERILOG = ROOT / "firmware_ref" / "fpga" / "words.vh"
SPEC = ROOT / "protocol" / "SPEC.md"


def outputs() -> dict[Path, str]:
    """Every generated file with the text it must have."""
    protocol = tomllib.loads(SOURCE.read_text("utf-8"))
    return {
        PYTHON: protocol_python.module(protocol),
        HEADER: protocol_header.header(protocol),
        VERILOG: protocol_verilog.header(protocol),
        SPEC: protocol_tables.with_tables(SPEC.read_text("utf-8"), protocol),
    }


def stale() -> dict[Path, str]:
    """The outputs that differ from what is on the disk."""
    return {
        path: text for path, text in outputs().items() if not path.exists() or path.read_bytes() != text.encode("utf-8")
    }


def main(arguments: list[str]) -> int:
    """Write or, with `--check`, compare; return the exit status."""
    if arguments not in ([], ["--check"]):
        print(__doc__)
        return 2
    differing = stale()
    for path, text in differing.items():
        name = path.relative_to(ROOT)
        if arguments:
            print(f"{name} is not what protocol.toml gives; run scripts/dev/generate_protocol.py")
        else:
            path.write_bytes(text.encode("utf-8"))
            print(f"wrote {name}")
    return 1 if arguments and differing else 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
