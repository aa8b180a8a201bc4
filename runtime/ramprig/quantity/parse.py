"""Text to quantity: a number with its unit, exact, and for whatever is refused what would be right."""

from __future__ import annotations

import difflib
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from fractions import Fraction

from .kinds import ALL_KINDS, DURATION, DUTY, Kind, Unit
from .numbers import NUMBER_PATTERN, QuantityError, complain, leading_number, plain, quoted


@dataclass(frozen=True, slots=True)
class Quantity:
    """An exact value with its kind: `value` is in the kind's base unit. `text` is how it was written."""

    kind: Kind
    value: Fraction
    text: str = field(default="", compare=False)

    def exactly(self, symbol: str) -> Fraction:
        """The value in the unit `symbol`, exact (radians: to a double)."""
        unit = self.kind.unit(symbol)
        if unit is None:
            raise QuantityError(f"{self.kind.name} has no unit '{symbol}'", wanted=f"it has {_listed(self.kind)}")
        return unit.factor / self.value if unit.inverse else self.value / unit.factor

    def to(self, symbol: str) -> float:
        """The value in the unit `symbol`."""
        return float(self.exactly(symbol))

    def whole(self, symbol: str) -> int:
        """The value as a whole number of `symbol`; raises `QuantityError` where it is not one."""
        value = self.exactly(symbol)
        if value.denominator != 1:
            raise QuantityError(f"found {quoted(str(self))}", wanted=f"it must be a whole number of {symbol}")
        return int(value)

    def parts(self, step: Fraction, step_text: str) -> int:
        """How many `step` (in the base unit) make the value; raises `QuantityError` where it is no whole number."""
        count = self.value / step
        if count.denominator != 1:
            raise QuantityError(f"found {quoted(str(self))}", wanted=f"it must be a multiple of {step_text}")
        return int(count)

    def __neg__(self) -> Quantity:
        return Quantity(self.kind, -self.value)

    def __float__(self) -> float:
        return float(self.value)

    def __str__(self) -> str:
        if self.text:
            return self.text
        from .show import show  # `show` stands above this module

        return show(self.value, self.kind)


Lookup = Callable[[str], str | None]
"""Gives the text a name stands for, or None where it is no name (raises where it is an unknown one)."""


def parse(text: str, kind: Kind, *, lookup: Lookup | None = None) -> Quantity:
    """The quantity that `text` says, such as `1.25 A` or `1 h 30 min`.

    With `lookup`, `text` may be a name or `-name`. Raises `QuantityError` that says what was found and what would be
    right; no other exception, whatever the text.
    """
    if lookup is not None:
        named = _named(text, kind, lookup)
        if named is not None:
            return named
    clean = plain(text)
    complaint = complain(clean)
    if complaint is not None:
        raise complaint
    found = leading_number(clean)
    if found is None:
        raise QuantityError(f"found {quoted(text)}", wanted=f"{kind.name} is wanted, such as {kind.example}")
    number, symbol = found
    if kind is DURATION and re.search(r"[0-9]", symbol):
        value = _compound(clean, text)
    else:
        value = _in_base(number, _unit_of(symbol, kind, clean), text)
    if value < 0 and not kind.signed:
        raise QuantityError(f"found {quoted(text)}", wanted=f"{kind.name} cannot be negative")
    return Quantity(kind, value, clean)


NAME = re.compile(r"(-?)([a-z][a-z0-9_]*)")
"""A named value where a quantity may stand, with a minus sign or without."""


def _named(text: str, kind: Kind, lookup: Lookup) -> Quantity | None:
    match = NAME.fullmatch(text.strip())
    if match is None:
        return None
    meaning = lookup(match.group(2))
    if meaning is None:
        return None
    try:
        value = parse(meaning, kind)
    except QuantityError as error:
        raise QuantityError(
            f"'{match.group(2)}' is {quoted(meaning)}, which does not fit here", wanted=str(error)
        ) from error
    if not match.group(1):
        return value
    if not kind.signed:
        raise QuantityError(f"found {quoted(text)}", wanted=f"{kind.name} cannot be negative")
    return -value


def _in_base(number: Fraction, unit: Unit, text: str) -> Fraction:
    if not unit.inverse:
        return number * unit.factor
    if number == 0:
        raise QuantityError(f"found {quoted(text)}", wanted="it must not be 0")
    return unit.factor / number


_PART = re.compile(rf"({NUMBER_PATTERN}) ?([A-Za-z]+) ?")


def _compound(clean: str, text: str) -> Fraction:
    """Seconds of a duration of several parts, each unit smaller than the one before and less than one of it."""
    total, position, larger = Fraction(0), 0, None
    while position < len(clean):
        match = _PART.match(clean, position)
        if match is None or (position and match.group(1)[0] in "-+"):
            raise complain(clean[position:]) or QuantityError(
                f"found {quoted(text)}", wanted="write a duration of several parts as in '1 h 30 min'"
            )
        unit = _unit_of(match.group(2), DURATION, match.group().strip())
        number, _ = leading_number(match.group(1)) or (Fraction(0), "")
        if larger is not None and abs(number) * unit.factor >= larger.factor:
            raise QuantityError(
                f"found {quoted(text)}",
                wanted=f"after '{larger.symbol}' comes a part of less than 1 {larger.symbol}, as in '1 h 30 min'",
            )
        total += number * unit.factor
        larger, position = unit, match.end()
    return -total if clean.startswith("-") and total > 0 else total


def _listed(kind: Kind) -> str:
    *others, last = kind.symbols
    return f"{', '.join(others)} or {last}" if others else last


def _with_unit(number: str, kind: Kind) -> str:
    """How a number with the only unit of its kind is written. A duty below 1 is more likely a part of the whole, and
    one of more figures than a board takes is no help."""
    found = leading_number(number)
    if kind is not DUTY or found is None or found[1]:
        return f"write '{number} {kind.base.symbol}'"
    is_part = 0 < abs(found[0]) < 1
    duty = found[0] * 100 if is_part else found[0]
    text = f"{float(round(duty, 2)):.2f}".rstrip("0").rstrip(".")
    return f"write '{text} {kind.base.symbol}'" + (f" for {number} of full drive" if is_part else "")


def _unit_of(symbol: str, kind: Kind, clean: str) -> Unit:
    unit = kind.unit(symbol)
    if unit is not None:
        return unit
    number = clean.removesuffix(symbol).strip()
    if not symbol:
        only = _with_unit(number, kind) if len(kind.units) == 1 else f"as in '{kind.example}'"
        wanted = f"{kind.name} has its unit, {_listed(kind)}: {only}"
        raise QuantityError(f"found {quoted(clean)} without a unit", wanted=wanted)
    if "#" in symbol:
        raise QuantityError(f"found {quoted(clean)}", wanted="a comment needs a blank before the '#'")
    near = _nearest_unit(symbol, kind)
    if near is not None:
        raise QuantityError(f"found {quoted(clean)}, an unknown unit", wanted=f"write '{number} {near}'")
    other = next((other for other in ALL_KINDS if other.unit(symbol)), None)
    found = f"found {quoted(clean)}, which is {other.name}" if other else f"found {quoted(clean)}, an unknown unit"
    raise QuantityError(found, wanted=f"{kind.name} is wanted, in {_listed(kind)}, such as {kind.example}")


_OFTEN_WRITTEN = {
    spelling: symbol
    for symbol, spellings in {
        "min": ("m", "mins", "minute", "minutes"),
        "s": ("second", "seconds", "secs"),
        "h": ("hour", "hours", "hr"),
        "ms": ("msec",),
        "us": ("usec",),
        "%": ("percent", "pct"),
        "A": ("amp", "amps"),
        "V": ("volt", "volts"),
        "rpm": ("r/min", "1/min"),
        "rev/s": ("rps",),
        "deg": ("degree", "degrees"),
        "rev": ("revs",),
        "degC": ("c", "celsius"),
        "ohm": ("ohms",),
    }.items()
    for spelling in spellings
}
"""What people write for a unit, in lower case, and the unit meant where the kind has it."""


def _nearest_unit(symbol: str, kind: Kind) -> str | None:
    often = _OFTEN_WRITTEN.get(symbol.lower())
    if often is not None and kind.unit(often):
        return often
    for unit in kind.units:
        if symbol.lower() in (spelling.lower() for spelling in (unit.symbol, *unit.aliases)):
            return unit.symbol
    if any(other.unit(symbol) for other in ALL_KINDS):
        return None  # a unit of another kind is not a slip of the pen
    close = difflib.get_close_matches(symbol[:20], [s for s in kind.symbols if len(s) > 1], n=1, cutoff=0.6)
    return close[0] if close else None
