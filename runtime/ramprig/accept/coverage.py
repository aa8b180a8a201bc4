"""Which clauses no check can cover, and why: what a host says to a working board does not show them."""

from __future__ import annotations

from collections.abc import Sequence

from ramprig.accept.trial import Check

UNTESTABLE = {
    "LINE-1": "the rate is whatever both sides talk at; that they understand each other is all that can be seen",
    "KIND-5": "it binds the host",
    "TAG-1": "it binds the host",
    "TAG-6": "it binds the host",
    "VER-2": "it binds the host, and later versions",
    "BAD-6": "no host can make a board's receiver lose bytes at will; `overrun` is only told in the report",
    "WHO-3": "that no other board has these names cannot be seen; the boot number is checked with --restart",
    "CLEAR-2": "a board under test has no demand in state tripped, by ORDER-8",
    "TRIP-2": "two trips at one time need two causes at one time, which a healthy bench does not have",
    "RUN-1": "outputs off before all else takes an oscilloscope; the notices of a start are checked with --restart",
}
"""By clause. WHO-3, BAD-6 and RUN-1 are covered in part; the text says what is left."""


def covered(checks: Sequence[Check], every_line: Sequence[str]) -> dict[str, list[str]]:
    """By clause, the names of the checks that cover it; `every line` for what is judged in each."""
    found: dict[str, list[str]] = {}
    for clause in every_line:
        found.setdefault(clause, []).append("every line")
    for check in checks:
        for clause in check.clauses:
            found.setdefault(clause, []).append(check.name)
    return found
