"""Prints the plant of a bench file as `ramprig-core --plant` takes it: `python -m ramprig.mock.core BENCH.yaml`."""

from __future__ import annotations

import sys
from collections.abc import Sequence
from pathlib import Path

from ramprig.bench import load_bench
from ramprig.errors import RamprigError
from ramprig.mock.from_bench import plant_of_bench

from .parameters import plant_text


def main(arguments: Sequence[str]) -> int:
    """The exit code; the text goes to standard output."""
    if len(arguments) != 1:
        print(__doc__, file=sys.stderr)
        return 2
    try:
        print(plant_text(plant_of_bench(load_bench(Path(arguments[0])))), end="")
    except RamprigError as error:
        print(f"ramprig.mock.core: {error}", file=sys.stderr)
        return error.exit_code
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
