"""What a measured value must lie in: a value with a tolerance, a range, or one bound."""

from __future__ import annotations

import re
from dataclasses import dataclass, field
from fractions import Fraction

from .kinds import SHARE, TEMPERATURE, TEMPERATURE_STEP, Kind
from .numbers import NUMBER_PATTERN, QuantityError, plain, quoted
from .parse import Lookup, Quantity, parse


@dataclass(frozen=True, slots=True)
class Band:
    """All values from `low` to `high`, both included, in the base unit of `kind`; None leaves that side open.

    `nominal` is the value that a tolerance was given to. `text` is how it was written.
    """

    kind: Kind
    low: Fraction | None
    high: Fraction | None
    nominal: Fraction | None = None
    text: str = field(default="", compare=False)

    def holds(self, value: float | Fraction) -> bool:
        """Whether `value`, in the kind's base unit, lies inside; never for NaN."""
        return (self.low is None or value >= self.low) and (self.high is None or value <= self.high) and value == value

    def __str__(self) -> str:
        return self.text


def parse_band(text: str, kind: Kind, *, lookup: Lookup | None = None) -> Band:
    """The band that `text` says: `50 rpm +- 5 %`, `50 rpm +- 2 rpm`, `40 rpm to 60 rpm`, `at least 40 rpm`.

    `at most 2 A` is the other one-sided form. Raises `QuantityError`, and nothing else, for any other text.
    """
    clean = plain(text)
    one_side = re.fullmatch(r"at (least|most) (.+)", clean)
    if one_side is not None:
        bound = parse(one_side.group(2), kind, lookup=lookup).value
        return (
            Band(kind, bound, None, None, clean)
            if one_side.group(1) == "least"
            else Band(kind, None, bound, None, clean)
        )
    if "+-" in clean or "+/-" in clean:
        return _with_tolerance(clean.replace("+/-", "+-"), kind, lookup)
    low_text, to, high_text = clean.partition(" to ")
    if to:
        return _range(clean, low_text, high_text, kind, lookup)
    meant = _dashed(clean, kind)
    if meant is not None:
        raise QuantityError(f"found {quoted(clean)}", wanted=f"a range is written with 'to': '{meant}'")
    single = parse(clean, kind, lookup=lookup)
    raise QuantityError(
        f"found {quoted(clean)} without a tolerance",
        wanted=f"write '{single} +- {_example_tolerance(kind)}', 'at least {single}', 'at most {single}' "
        "or a range with 'to'",
    )


def _dashed(clean: str, kind: Kind) -> str | None:
    """The range that `9 V - 16 V` or `9-16 V` means, as we write it; None where it is no such thing."""
    parts = re.fullmatch(rf"({NUMBER_PATTERN})([^-.]*?) ?(?:-|\.\.\.?) ?({NUMBER_PATTERN}) ?([^-.0-9]+)", clean)
    if parts is None:
        return None
    low, low_unit, high, high_unit = (part.strip() for part in parts.groups())
    ends = f"{low} {low_unit or high_unit}", f"{high} {high_unit}"
    try:
        for end in ends:
            parse(end, kind)
    except QuantityError:
        return None
    return " to ".join(ends)


def _example_tolerance(kind: Kind) -> str:
    return "5 %" if kind.relative else f"1 {kind.example.split(' ', 1)[1]}"


def _range(clean: str, low_text: str, high_text: str, kind: Kind, lookup: Lookup | None) -> Band:
    high = parse(high_text, kind, lookup=lookup)
    try:
        low = parse(low_text, kind, lookup=lookup)
    except QuantityError as error:
        if re.fullmatch(r"[-+]?[0-9.]+", low_text.strip()):
            unit = high_text.strip().split(" ")[-1].lstrip("-+0123456789.")
            wanted = f"write both units: '{low_text} {unit} to {high_text}'"
            raise QuantityError(f"found {quoted(clean)}", wanted=wanted) from error
        raise
    if low.value > high.value:
        raise QuantityError(f"found {quoted(clean)}", wanted=f"the lower value comes first: '{high} to {low}'")
    return Band(kind, low.value, high.value, None, clean)


def _with_tolerance(clean: str, kind: Kind, lookup: Lookup | None) -> Band:
    nominal_text, _, tolerance_text = (part.strip() for part in clean.partition("+-"))
    nominal = parse(nominal_text, kind, lookup=lookup)
    half = abs(_tolerance(clean, nominal, tolerance_text, kind))
    return Band(kind, nominal.value - half, nominal.value + half, nominal.value, clean)


def _tolerance(clean: str, nominal: Quantity, text: str, kind: Kind) -> Fraction:
    """Half the width of the band, in the base unit."""
    if re.match(r"[-+]", text):
        raise QuantityError(f"found {quoted(clean)}", wanted="a tolerance has no sign of its own")
    if text.endswith("%"):
        share = parse(text, SHARE).value / 100
        if kind.relative and nominal.value != 0:
            return nominal.value * share
        if nominal.kind.base.symbol == "%":
            why = f"{text} of the value or of full scale? Write a range: '19 % to 21 %'"
        elif not kind.relative:
            why = f"{kind.name} has no percentage: write '+- {_example_tolerance(kind)}'"
        else:
            why = "a percentage of 0 is nothing: write the tolerance with a unit"
        raise QuantityError(f"found {quoted(clean)}", wanted=why)
    return parse(text, TEMPERATURE_STEP if kind is TEMPERATURE else kind).value
