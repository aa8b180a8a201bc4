"""Tells which features of the cycles a run does not have, and what each would have asked for."""

from __future__ import annotations

from collections.abc import Sequence

from ramprig.endure.features import absent
from ramprig.endure.recorded import TurnFeatures, names_of

from . import page


def untold_table(features: Sequence[TurnFeatures], *, motors: Sequence[str], servos: Sequence[str]) -> str:
    """A table of what neither a cycle nor a check shows, with a heading; empty where nothing is missing."""
    missing = absent(names_of(features), motors=motors, servos=servos)
    if not missing:
        return ""
    said = "Nothing is put in the place of what was not measured. By the cycles and their checks this run cannot tell:"
    rows = [[page.text(name), page.text(why)] for name, why in missing.items()]
    return "<h3>Not measured</h3>" + page.paragraph(said, kind="note") + page.table(["feature", "asks for"], rows)
