"""The one text of cautions: the README, the shell's first screen and a run without anyone beside it all show this."""

from __future__ import annotations

import textwrap

HEADING = "Before anything moves"

CAUTIONS = (
    "Guard moving parts: keep hands, hair and sleeves away from shaft, gear and linkage.",
    "Fuse the motor supply, and keep it separate from the supply of the board and the laptop.",
    "Keep a hard-wired power cut for the motor supply within reach, and try it before the first run.",
    "A stop from this program is a software stop. It is not an emergency stop and not a safety function: it can fail "
    "with the program, the cable or the board.",
    "The rules of your place and its qualified people come first.",
)
"""Each a sentence or two, in the order in which they are shown."""

REMINDER = "Guard on? Fuse in? Power cut within reach? A software stop is not an emergency stop."
"""One line for the moment of arming, after the cautions themselves were shown."""


def cautions_lines(width: int = 100) -> list[str]:
    """The heading and the cautions as lines of at most `width` characters (40 or more), each caution with a hyphen."""
    lines = [f"{HEADING}:"]
    for caution in CAUTIONS:
        lines += textwrap.wrap(caution, max(width, 40), initial_indent="  - ", subsequent_indent="    ")
    return lines
