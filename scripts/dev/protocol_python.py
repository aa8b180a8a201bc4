"""Write the Python form of protocol.toml: `ramprig_link/words.py`."""

from __future__ import annotations

from typing import Any

Protocol = dict[str, Any]  # what tomllib gives; its shape is plain in protocol.toml
Row = dict[str, Any]

TOP = '''\
"""The words, numbers, units, reasons, channels and trips of the line protocol, as constants and tables.

Made from protocol/protocol.toml by scripts/dev/generate_protocol.py; do not edit. SPEC.md says what they mean.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from enum import Enum, IntEnum, IntFlag, StrEnum
from types import MappingProxyType
from typing import Final, Self


class Worded(IntEnum):
    """A table whose entries travel as words in lines and as numbers in samples; `text` tells what an entry means."""

    text: str

    def __new__(cls, number: int, text: str = "") -> Self:
        entry = int.__new__(cls, number)
        entry._value_ = number
        entry.text = text
        return entry

    @property
    def word(self) -> str:
        """The entry as it stands in a line."""
        return self.name.lower()

    @classmethod
    def named(cls, word: str) -> Self | None:
        """The entry that the line's `word` names; None where this version knows none of that name."""
        entry = cls.__members__.get(word.upper())
        return entry if entry is not None and entry.word == word else None

    @classmethod
    def all_words(cls) -> tuple[str, ...]:
        """The words of the table, in order."""
        return tuple(entry.word for entry in cls)


class Kind(Enum):
    """How a field is spelt; see SPEC.md, section 4."""

    U32 = "u32"
    I32 = "i32"
    HEX2 = "hex2"
    HEX8 = "hex8"
    AXIS = "axis"
    SERVO = "servo"
    TICK = "tick"
    TICKS = "ticks"
    WORD = "word"
    TOKEN = "token"
    PAYLOAD = "payload"
    GROUP = "group"


class Per(Enum):
    """What a limit or channel there is one of."""

    DEVICE = "device"
    AXIS = "axis"
    SERVO = "servo"


class Tighter(Enum):
    """The way in which a limit may be moved while armed."""

    LOWER = "lower"
    HIGHER = "higher"
    NONE = "none"


@dataclass(frozen=True, slots=True)
class Field:
    """One field: `choices` are the words allowed where `kind` is WORD, `group` the parts repeated where it is GROUP."""

    name: str
    kind: Kind
    choices: tuple[str, ...] = ()
    group: tuple[str, ...] = ()
    optional: bool = False


@dataclass(frozen=True, slots=True)
class Word:
    """One request: its arguments, the fields of its `ok`, and the states that allow it."""

    name: str
    args: tuple[Field, ...]
    fields: tuple[Field, ...]
    states: frozenset[State]
    text: str


@dataclass(frozen=True, slots=True)
class NoticeWord:
    """One notice and its fields."""

    name: str
    fields: tuple[Field, ...]
    text: str


@dataclass(frozen=True, slots=True)
class TripRow:
    """The stop category of a trip and what its value and bound are."""

    category: int
    value: str
    bound: str


@dataclass(frozen=True, slots=True)
class Channel:
    """One kind of sample channel: axis, servo or device number i has bit `first_bit + i * step` of the mask."""

    name: str
    per: Per
    first_bit: int
    step: int
    bits: int
    order: int
    unit: str
    text: str


@dataclass(frozen=True, slots=True)
class StateBits:
    """One part of the `state` channel: `width` bits from bit `low` on."""

    name: str
    low: int
    width: int
    text: str

    def of(self, bits: int) -> int:
        """This part's value in the channel value `bits`."""
        return bits >> self.low & (1 << self.width) - 1


@dataclass(frozen=True, slots=True)
class Limit:
    """One limit: a number from `lowest` to `highest` by which the device judges."""

    name: str
    number: int
    per: Per
    lowest: int
    highest: int
    default: int
    unit: str
    tighter: Tighter
    text: str
'''

ENUMS = {
    "states": ("State", "What the device is in."),
    "trips": ("Trip", "Why the device stopped itself; the number is also the rank, the lowest first."),
    "sources": ("Source", "Who asked for a stop."),
    "causes": ("Cause", "Why the device started."),
    "rests": ("Rest", "What the bridge does at zero duty."),
    "forms": ("Form", "How samples are sent."),
}


def quoted(text: str) -> str:
    """`text` as a Python string in double quotes."""
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def arguments(*values: object) -> str:
    """The values as they stand in a call, strings in quotes."""
    return ", ".join(quoted(value) if isinstance(value, str) else str(value) for value in values)


def tupled(parts: list[str]) -> str:
    """Expressions as a tuple's source."""
    return "(" + ", ".join(parts) + ("," if len(parts) == 1 else "") + ")"


def field(text: str) -> str:
    """One entry of `args` or `fields`, such as `state:word:states`, as a call of Field."""
    name, kind, *rest = text.removesuffix("?").split(":")
    parts = [quoted(name), f"Kind.{kind.upper()}"]
    if kind == "word":
        table = rest[0]
        parts.append("tuple(LIMITS)" if table == "limits" else f"{ENUMS[table][0]}.all_words()")
    if kind == "group":
        parts.append("group=" + tupled([quoted(part) for part in rest[0].split(",")]))
    if text.endswith("?"):
        parts.append("optional=True")
    return f"Field({', '.join(parts)})"


def spread(name: str, entries: list[str]) -> str:
    """`name=(...)` on one line, or one entry a line where that is too long."""
    whole = f"{name}={tupled(entries)}"
    if len(whole) < 100:
        return f"        {whole},"
    inner = "\n".join(f"            {entry}," for entry in entries)
    return f"        {name}=(\n{inner}\n        ),"


def number_lines(rows: list[Row]) -> list[str]:
    """One constant a row, with its meaning and unit behind it."""
    lines = []
    for row in rows:
        value = f"{row['value']:_}" if row["value"] > 99999 else str(row["value"])
        lines.append(f"{row['name']}: Final = {value}  # {row['unit']}: {row['text']}")
    return lines


def enum_lines(table: str, rows: list[Row]) -> list[str]:
    """One Worded table."""
    name, sentence = ENUMS[table]
    members = [f"    {row['name'].upper()} = {row['number']}, {quoted(row['text'])}" for row in rows]
    return ["", "", f"class {name}(Worded):", f'    """{sentence}"""', "", *members]


def table_lines(name: str, kind: str, entries: list[str]) -> list[str]:
    """A read-only mapping from names to rows."""
    return ["", f"{name}: Final[Mapping[{kind}]] = MappingProxyType({{", *entries, "})"]


def word_entries(rows: list[Row]) -> list[str]:
    """The requests."""
    entries = []
    for row in rows:
        states = ", ".join(f"State.{state.upper()}" for state in row["states"])
        entries += [
            f"    {quoted(row['name'])}: Word(",
            f"        name={quoted(row['name'])},",
            spread("args", [field(text) for text in row["args"]]),
            spread("fields", [field(text) for text in row["fields"]]),
            f"        states=frozenset({{{states}}}),",
            f"        text={quoted(row['text'])},",
            "    ),",
        ]
    return entries


def notice_entries(rows: list[Row]) -> list[str]:
    """The notices."""
    entries = []
    for row in rows:
        entries += [
            f"    {quoted(row['name'])}: NoticeWord(",
            f"        name={quoted(row['name'])},",
            spread("fields", [field(text) for text in row["fields"]]),
            f"        text={quoted(row['text'])},",
            "    ),",
        ]
    return entries


def limit_entries(rows: list[Row]) -> list[str]:
    """The limits in order of their numbers, which is the order of the digest."""
    entries = []
    for row in sorted(rows, key=lambda row: int(row["number"])):
        head = f"{quoted(row['name'])}, {row['number']}, Per.{row['per'].upper()}"
        values = arguments(row["min"], row["max"], row["default"], row["unit"])
        tail = f"Tighter.{row['tighter'].upper()},\n        {quoted(row['text'])}"
        entries.append(f"    {quoted(row['name'])}: Limit(\n        {head}, {values}, {tail},\n    ),")
    return entries


def channel_entries(rows: list[Row]) -> list[str]:
    """The kinds of channel in bit order."""
    entries = []
    for row in rows:
        numbers = arguments(*(row[key] for key in ("first_bit", "step", "bits", "order", "unit", "text")))
        call = f"Channel({quoted(row['name'])}, Per.{row['per'].upper()}, {numbers})"
        entries.append(f"    {quoted(row['name'])}: {call},")
    return entries


def module(protocol: Protocol) -> str:
    """The whole text of words.py."""
    lines = [TOP, "", f"VERSION: Final = {protocol['version']}", *number_lines(protocol["numbers"])]
    for table in ENUMS:
        lines += enum_lines(table, protocol[table])
    lines += ["", "", "class Reason(StrEnum):", '    """Why a request was refused."""', ""]
    lines += [f"    {row['name'].upper()} = {quoted(row['name'])}  # {row['text']}" for row in protocol["reasons"]]
    lines += ["", "", "class Cap(IntFlag):", '    """What a board can do."""', ""]
    lines += [f"    {row['name'].upper()} = 1 << {row['bit']}  # {row['text']}" for row in protocol["caps"]]
    lines += ["", ""]
    reasons = [f"    Reason.{row['name'].upper()}: {quoted(row['text'])}," for row in protocol["reasons"]]
    trips = [
        f"    Trip.{row['name'].upper()}: TripRow({arguments(row['category'], row['value'], row['bound'])}),"
        for row in protocol["trips"]
    ]
    bits = [
        f"    {quoted(row['name'])}: StateBits({arguments(row['name'], row['low'], row['width'], row['text'])}),"
        for row in protocol["state_bits"]
    ]
    lines += table_lines("REASONS", "Reason, str", reasons)[1:]
    lines += table_lines("TRIPS", "Trip, TripRow", trips)
    lines += table_lines("LIMITS", "str, Limit", limit_entries(protocol["limits"]))
    lines += table_lines("CHANNELS", "str, Channel", channel_entries(protocol["channels"]))
    lines += table_lines("STATE_BITS", "str, StateBits", bits)
    lines += table_lines("WORDS", "str, Word", word_entries(protocol["words"]))
    lines += table_lines("NOTICES", "str, NoticeWord", notice_entries(protocol["notices"]))
    return "\n".join(lines) + "\n"
