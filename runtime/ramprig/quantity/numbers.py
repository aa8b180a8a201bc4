"""Decimal numbers as people write them, read exactly, and what is wrong with those that are refused."""

from __future__ import annotations

import re
from fractions import Fraction

from ..errors import UsageError

DIGITS_MAX = 40
"""Longest number that is read, in characters."""
EXPONENT_MAX = 30
"""Largest power of ten that is read, either way: it bounds the size of the exact fraction."""

NUMBER_PATTERN = r"[-+]?(?:0|[1-9][0-9]*)(?:\.[0-9]+)?(?:[eE][-+]?[0-9]+)?"
"""The one way to write a number: decimal point, no leading zeros, no separators."""

_NUMBER = re.compile(NUMBER_PATTERN)
_COUNT = re.compile(r"-?(?:0|[1-9][0-9]*)")
_ASCII = str.maketrans(
    {"\u00b5": "u", "\u03bc": "u", "\u03a9": "ohm", "\u2126": "ohm", "\u00b1": "+-", "\u2212": "-", "\u00a0": " "}
    | {"\u202f": " ", "\u2009": " ", "\t": " "}
)


class QuantityError(UsageError):
    """A typed value cannot be taken: `found` says what stands there, `wanted` what would be right.

    Whoever read the value from a file turns it into a `FileError` with the place.
    """

    def __init__(self, found: str, *, wanted: str = "") -> None:
        self.found = found
        self.wanted = wanted
        super().__init__(f"{found}; {wanted}" if wanted else found)


def quoted(text: str) -> str:
    """`text` in quotes for a message, cut to 40 characters, what cannot be printed in ASCII escaped."""
    clipped = text if len(text) <= DIGITS_MAX else text[: DIGITS_MAX - 3] + "..."
    shown = (letter if " " <= letter <= "~" else letter.encode("unicode_escape").decode("ascii") for letter in clipped)
    return f"'{''.join(shown)}'"


def plain(text: str) -> str:
    """`text` with the signs a keyboard or data sheet may bring (micro, ohm, degree, minus) in our ASCII spelling."""
    ascii_text = text.translate(_ASCII).replace("\u00b0C", "degC").replace("\u00b0", "deg")
    return " ".join(ascii_text.split(" ")).strip() if "  " not in ascii_text else re.sub(" +", " ", ascii_text).strip()


def leading_number(text: str) -> tuple[Fraction, str] | None:
    """The number at the start of `text`, exact, and the rest of `text` without blanks before it; None if there is none.

    Raises `QuantityError` for a number beyond the bounds of this module.
    """
    match = _NUMBER.match(text)
    if match is None or re.match(r"[0-9.,_:]", text[match.end() :]):
        return None
    return _exact(match.group()), text[match.end() :].strip()


def _exact(digits: str) -> Fraction:
    exponent = re.search(r"[eE]([-+]?[0-9]+)$", digits)
    if len(digits) > DIGITS_MAX or (exponent and abs(int(exponent.group(1))) > EXPONENT_MAX):
        raise QuantityError(
            f"found {quoted(digits)}",
            wanted=f"a number has at most {DIGITS_MAX} characters and an exponent of at most {EXPONENT_MAX}",
        )
    return Fraction(digits)


def parse_count(text: str) -> int:
    """A whole number without a unit. Raises `QuantityError` with what would be right."""
    clean = plain(text)
    if _COUNT.fullmatch(clean) and clean != "-0":
        return int(_exact(clean))
    complaint = complain(clean)
    if complaint is not None:
        raise complaint
    found = leading_number(clean)
    if found is not None and not found[1]:
        wanted = f"write '{int(found[0])}'" if found[0].denominator == 1 else "it must be a whole number"
        raise QuantityError(f"found {quoted(text)}, which is not written as a whole number", wanted=wanted)
    if found is not None:
        raise QuantityError(f"found {quoted(text)}", wanted="a whole number without a unit is wanted here")
    raise QuantityError(f"found {quoted(text)}", wanted="a whole number is wanted, such as 3")


def parse_ratio(text: str) -> Fraction:
    """A positive number without a unit, decimal or a fraction of whole numbers (`3249/196`). Raises `QuantityError`."""
    clean = plain(text)
    colon = re.fullmatch(r"([0-9.]+) ?: ?([0-9.]+)", clean)
    if colon is not None:
        over = "" if colon[2] == "1" else f"/{colon[2]}"
        raise QuantityError(f"found {quoted(text)}, with a colon", wanted=f"write '{colon[1]}{over}'")
    head, slash, tail = (part.strip() for part in clean.partition("/"))
    try:
        if slash:
            value = Fraction(parse_count(head), parse_count(tail))
        else:
            found = leading_number(clean)
            if found is None or found[1]:
                complaint = complain(clean)
                if complaint is not None:
                    raise complaint
                raise QuantityError(f"found {quoted(text)}", wanted="a ratio is wanted, such as 90, 34.014 or 3249/196")
            value = found[0]
    except ZeroDivisionError as error:
        raise QuantityError(f"found {quoted(text)}", wanted="the lower number must not be 0") from error
    if value <= 0:
        raise QuantityError(f"found {quoted(text)}", wanted="a ratio must be greater than 0")
    return value


def _commas(text: str) -> str:
    if re.match(r"[-+]?[0-9]{1,3}(,[0-9]{3})+(?![0-9])", text):
        return f"write {quoted(text.replace(',', ''))} or {quoted(text.replace(',', '.', 1).replace(',', ''))}"
    return f"write {quoted(text.replace(',', '.', 1))}"


def _based(text: str) -> str:
    match = re.match(r"([-+]?)(0[xXbBoO][0-9a-fA-F_]+)(.*)", text)
    try:
        if match is not None and len(match.group(2)) <= DIGITS_MAX:
            return f"write {quoted(match.group(1) + str(int(match.group(2), 0)) + match.group(3))}"
    except ValueError:
        pass
    return "numbers are written in decimal"


def complain(text: str) -> QuantityError | None:
    """The error for a text that looks like a number in a way we do not take; None where it does not look like one."""
    found = f"found {quoted(text)}"
    sign = r"[-+]?"
    if re.match(sign + r"\.?(inf|nan)(inity)?(?![a-z])", text, re.IGNORECASE):
        return QuantityError(found, wanted="a number must be finite")
    if re.match(sign + r"0[xXbBoO][0-9a-fA-F]", text):
        return QuantityError(f"{found}, which is not decimal", wanted=_based(text))
    if re.match(sign + r"[0-9]+_[0-9_]*", text):
        return QuantityError(f"{found}, with an underscore", wanted=f"write {quoted(text.replace('_', ''))}")
    if re.match(sign + r"[0-9]+,[0-9]", text):
        return QuantityError(f"{found}, with a comma; the decimal sign is the point", wanted=_commas(text))
    if re.match(sign + r"[0-9]+'[0-9]", text) or re.match(sign + r"[0-9]{1,3}( [0-9]{3})+(?![0-9])", text):
        joined = re.sub(r"(?<=[0-9])[' ](?=[0-9])", "", text)
        return QuantityError(f"{found}, with a thousands separator", wanted=f"write {quoted(joined)}")
    if re.match(sign + r"[0-9]+(:[0-9]+)+", text):
        return QuantityError(
            f"{found}, where the colon can mean hours or minutes",
            wanted="write the units out, such as '1 h 30 min' or '90 s'",
        )
    if re.match(sign + r"0[0-9]+", text):
        mended = re.sub(r"^([-+]?)0+(?=[0-9])", r"\1", text)
        return QuantityError(f"{found}, with a leading zero", wanted=f"write {quoted(mended)}")
    if re.match(sign + r"\.[0-9]", text):
        return QuantityError(found, wanted=f"write {quoted(text.replace('.', '0.', 1))}")
    if re.match(sign + r"[0-9]+\.(?![0-9])", text):
        return QuantityError(found, wanted=f"write {quoted(text.replace('.', '', 1))}")
    return None
