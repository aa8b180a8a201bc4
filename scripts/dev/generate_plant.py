"""Make firmware_ref/plant/vent_bench.h from `ramprig.mock.plant.VENT_BENCH`, so that its figures stand in one place.

python scripts/dev/generate_plant.py            writes it where it differs and says so
python scripts/dev/generate_plant.py --check    writes nothing; exit status 1 where it differs
"""

from __future__ import annotations

import math
import sys
from pathlib import Path

from ramprig.mock.core.parameters import plant_values
from ramprig.mock.plant import VENT_BENCH

ROOT = Path(__file__).resolve().parents[2]
HEADER = ROOT / "firmware_ref" / "plant" / "vent_bench.h"

HEAD = """\
/* The vent drive's bench by name and value. Made by scripts/dev/generate_plant.py from VENT_BENCH in
 * ramprig.mock.plant.parameters; do not edit. Every figure is INVENTED. */
#ifndef RAMPRIG_PLANT_VENT_BENCH_H
#define RAMPRIG_PLANT_VENT_BENCH_H

"""


def header() -> str:
    """The header's whole text."""
    rows = ["#define PLANT_VENT_LIST(X)"]
    for name, value in plant_values(VENT_BENCH).items():
        rows.append(f'    X("{name}", {"(double)INFINITY" if math.isinf(value) else repr(value)})')
    return HEAD + " \\\n".join(rows) + "\n\n#endif\n"


def main(arguments: list[str]) -> int:
    """Write or, with `--check`, compare; return the exit status."""
    if arguments not in ([], ["--check"]):
        print(__doc__)
        return 2
    if HEADER.exists() and HEADER.read_text("utf-8") == header():
        return 0
    if arguments:
        print(f"{HEADER.relative_to(ROOT)} is not what VENT_BENCH gives; run scripts/dev/generate_plant.py")
        return 1
    HEADER.write_bytes(header().encode("utf-8"))
    print(f"wrote {HEADER.relative_to(ROOT)}")
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
