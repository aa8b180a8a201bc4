"""The `measured:` part of a bench file: what `ramprig measure --save` found, when, on which board and in which run."""

from __future__ import annotations

import math
import re
from collections.abc import Mapping
from dataclasses import dataclass, field

from ..errors import FileError
from ..yamlfile import Built, Fields, Key, Mark, Record, TableShape, TextShape

LINK = "link"
"""What is measured of the link stands under this name, beside those of motors and servos."""

_PREFIXES = {"p": 1e-12, "n": 1e-9, "u": 1e-6, "m": 1e-3, "": 1.0, "k": 1e3, "M": 1e6}
_PREFIXED = "A|F|H|Hz|J|N|V|W|ohm|s|N\\*m"
_UNIT = re.compile(rf"(?P<prefix>[pnumkM]?)(?P<base>{_PREFIXED})")
_FORM = re.compile(
    r"(?P<value>-?[0-9.]+(?:e[+-]?[0-9]+)?)(?:\s(?P<unit>[^\s+]\S*))?\s\+-\s"
    r"(?P<half>[0-9.]+(?:e[+-]?[0-9]+)?)(?:\s\S+)?\s\(95 %(?:, dof (?P<dof>[0-9]+))?\)"
)


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasuredValue:
    """A value in `unit`, a unit without prefix; the truth lies within `expanded` of it with 95 % confidence.

    `dof` are the degrees of freedom behind that, infinite where they no longer matter. `text` is how the file has it.
    """

    value: float
    unit: str
    expanded: float
    dof: float
    text: str = field(compare=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasuredEntry:
    """What one procedure found on one subject: `date` as YYYY-MM-DD, the board and the run folder it comes from."""

    date: str
    board: str
    run: str
    values: Mapping[str, MeasuredValue]
    mark: Mark = field(compare=False, repr=False)


MeasuredPart = Mapping[str, Mapping[str, MeasuredEntry]]
"""By subject (a motor, a servo, or LINK) and by procedure."""


def read_measured_value(text: str, mark: Mark) -> MeasuredValue:
    """The value that a text such as `2.41 ohm +- 0.03 ohm (95 %, dof 42)` says. Raises `FileError`."""
    match = _FORM.fullmatch(text.strip())
    if match is None:
        raise mark.error(f"found '{text}'", "a measured value is written as in '2.41 ohm +- 0.03 ohm (95 %, dof 42)'")
    value, half = float(match["value"]), float(match["half"])
    unit = match["unit"] or ""
    scale = 1.0
    prefixed = _UNIT.fullmatch(unit)
    if prefixed is not None:
        scale, unit = _PREFIXES[prefixed["prefix"]], prefixed["base"]
    dof = math.inf if match["dof"] is None else float(match["dof"])
    return MeasuredValue(value=value * scale, unit=unit, expanded=half * scale, dof=dof, text=text.strip())


_DATE = Key("date", TextShape(r"[0-9]{4}-[0-9]{2}-[0-9]{2}", "a day such as 2026-03-01"), "the day", required=True)
_BOARD = Key("board", TextShape(), "name and serial number of the board", required=True)
_RUN = Key("run", TextShape(), "the run folder", required=True)
_VALUES = Key(
    "values",
    TableShape(Built(TextShape(), read_measured_value), what="measured value"),
    "the results, each with its expanded uncertainty",
)


def _entry(fields: Fields) -> MeasuredEntry:
    return MeasuredEntry(
        date=fields[_DATE],
        board=fields[_BOARD],
        run=fields[_RUN],
        values=fields.get(_VALUES) or {},
        mark=fields.mark,
    )


MEASURED = TableShape(
    TableShape(Record((_DATE, _BOARD, _RUN, _VALUES), _entry), what="procedure"), what="motor, servo or 'link'"
)


def unknown_subject(part: MeasuredPart, names: set[str]) -> FileError | None:
    """An error for results of a motor or servo that the bench does not have."""
    for subject, entries in part.items():
        if subject != LINK and subject not in names:
            mark = next(iter(entries.values())).mark
            return mark.error(f"'{subject}' was measured and is not on this bench", "rename it, or remove its results")
    return None
