"""Read and print the fields of a line in their one valid spelling (SPEC.md FIELD-1 to FIELD-5)."""

from __future__ import annotations

import re
from collections.abc import Sequence

from .faults import FieldError
from .words import TOKEN_MAX, Field, Kind, Worded

U32_MAX = 2**32 - 1
I32_MIN, I32_MAX = -(2**31), 2**31 - 1

Value = int | str

HEX2 = {f"{value:02x}": value for value in range(256)}  # the one spelling of a tag or running number

_UNSIGNED = re.compile("0|[1-9][0-9]{0,9}")
_SIGNED = re.compile("0|-?[1-9][0-9]{0,9}")
_HEX8 = re.compile("[0-9a-f]{8}")
_TOKEN = re.compile(f"[A-Za-z0-9._-]{{1,{TOKEN_MAX}}}")
_PAYLOAD = re.compile("[A-Za-z0-9+/]+")
_PRINTABLE = re.compile("[!-~]+")


def read_u32(text: str) -> int:
    """An unsigned 32-bit number; FieldError for anything else or any other spelling."""
    if _UNSIGNED.fullmatch(text) and (value := int(text)) <= U32_MAX:
        return value
    raise FieldError(text, wanted=f"a plain decimal number from 0 to {U32_MAX}")


def read_i32(text: str) -> int:
    """A signed 32-bit number; FieldError for anything else or any other spelling."""
    if _SIGNED.fullmatch(text) and I32_MIN <= (value := int(text)) <= I32_MAX:
        return value
    raise FieldError(text, wanted=f"a plain decimal number from {I32_MIN} to {I32_MAX}")


def read_field(field: Field, text: str) -> Value:
    """The value of one field: numbers and tags (HEX2) as int, all else as spelt.

    FieldError where it is not of its kind. Whether an axis exists, or a number lies in the word's range, is not judged.
    """
    match field.kind:
        case Kind.I32:
            return read_i32(text)
        case Kind.HEX2:
            if text in HEX2:
                return HEX2[text]
            raise FieldError(text, wanted="two lower-case hex digits")
        case Kind.HEX8:
            return _spelt(_HEX8, text, "eight lower-case hex digits")
        case Kind.WORD:
            if text in field.choices:
                return text
            raise FieldError(text, wanted="one of " + ", ".join(field.choices))
        case Kind.TOKEN:
            return _spelt(_TOKEN, text, f"1 to {TOKEN_MAX} letters, digits, dots, dashes or underscores")
        case Kind.PAYLOAD:
            return _spelt(_PAYLOAD, text, "base64 characters")
        case Kind.GROUP:
            raise FieldError(text, wanted="read here: a group is read by the number of axes and servos")
        case _:
            return read_u32(text)


def _spelt(pattern: re.Pattern[str], text: str, wanted: str) -> str:
    if pattern.fullmatch(text):
        return text
    raise FieldError(text, wanted=wanted)


def read_args(fields: Sequence[Field], texts: Sequence[str]) -> tuple[Value, ...]:
    """The values of a request's arguments; FieldError where their number or a spelling is wrong."""
    if not fields and not texts:
        return ()
    least = sum(not field.optional for field in fields)
    if not least <= len(texts) <= len(fields):
        names = " ".join(f"[{field.name}]" if field.optional else field.name for field in fields)
        raise FieldError(" ".join(texts), wanted=f"the arguments: {names}" if names else "empty as it must be")
    return tuple(read_field(field, text) for field, text in zip(fields, texts, strict=False))


def read_fields(fields: Sequence[Field], texts: Sequence[str]) -> tuple[Value, ...]:
    """The values of an answer's or notice's fields up to the first group, more fields at the end passed over (VER-2).

    FieldError where one is missing or wrongly spelt. A word this version does not know is given as spelt.
    """
    values: list[Value] = []
    for i, field in enumerate(fields):
        if field.kind is Kind.GROUP:
            break
        if i >= len(texts):
            raise FieldError(" ".join(texts), wanted=f"long enough: the field {field.name} is missing")
        values.append(texts[i] if field.kind is Kind.WORD else read_field(field, texts[i]))
    return tuple(values)


def print_field(value: object) -> str:
    """A field's one spelling: an int in decimal, an entry of a table as its word, a string as it is.

    FieldError for a string that is empty or has a space or a byte outside printable ASCII, and for any other type.
    """
    if isinstance(value, Worded):
        return value.word
    if isinstance(value, int) and not isinstance(value, bool):
        return f"{int(value)}"
    if isinstance(value, str) and _PRINTABLE.fullmatch(value):
        return str(value)
    raise FieldError(str(value), wanted="a number, a word or a token")
