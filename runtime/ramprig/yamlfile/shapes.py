"""What a file may say, declared once: a shape reads a node into a typed value and tells its own JSON Schema.

A record's keys are `Key` objects, so that `fields[SUPPLY]` has the type that the key's shape reads.
"""

from __future__ import annotations

import re
from abc import ABC, abstractmethod
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from fractions import Fraction
from typing import Generic, TypeVar, cast

from ..errors import FileError
from ..quantity import DURATION, NUMBER_PATTERN, Band, Kind, Quantity
from .reader import TEXT_MAX, WORDY_NAME, Reader
from .source import Mark

T = TypeVar("T")
U = TypeVar("U")
T_co = TypeVar("T_co", covariant=True)
Schema = dict[str, object]

NAME_PATTERN = "-?" + WORDY_NAME.pattern
"""A named value, as a schema may allow it wherever a quantity stands."""


class Shape(ABC, Generic[T_co]):
    """What may stand at a place in a file."""

    @abstractmethod
    def read(self, reader: Reader) -> T_co:
        """The value of the reader's node. Raises `FileError`."""

    @abstractmethod
    def schema(self, *, names: bool = False) -> Schema:
        """The JSON Schema (2020-12) of what is read; with `names`, named values may stand for quantities."""


def _escaped(symbol: str) -> str:
    return re.sub(r"([.*+^/])", r"\\\1", symbol)  # what ECMA 262 asks for, and no more: re.escape also escapes blanks


def _quantity_pattern(kind: Kind) -> str:
    symbols = [s for unit in kind.units for s in (unit.symbol, *unit.aliases)]
    units = "|".join(_escaped(symbol) for symbol in sorted(symbols, key=len, reverse=True))
    one = rf"(?:{NUMBER_PATTERN})\s*(?:{units})"
    return rf"{one}(?:\s*{one})*" if kind is DURATION else one


def _text_schema(patterns: list[str], names: bool, example: str) -> Schema:
    patterns = [*patterns, NAME_PATTERN] if names else patterns
    return {"type": "string", "pattern": rf"^\s*(?:{'|'.join(patterns)})\s*$", "examples": [example]}


@dataclass(frozen=True, slots=True)
class QuantityShape(Shape[Quantity]):
    """A quantity of a kind; the bounds are texts with a unit."""

    kind: Kind
    least: str | None = None
    most: str | None = None

    def read(self, reader: Reader) -> Quantity:  # noqa: D102  (the base class says it, here and below)
        return reader.quantity(self.kind, least=self.least, most=self.most)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return _text_schema([_quantity_pattern(self.kind)], names, self.kind.example)


@dataclass(frozen=True, slots=True)
class BandShape(Shape[Band]):
    """A band of a kind; `ranges_only` takes `A to B` alone."""

    kind: Kind
    ranges_only: bool = False

    def read(self, reader: Reader) -> Band:  # noqa: D102
        band = reader.band(self.kind)
        if self.ranges_only and (band.low is None or band.high is None or band.nominal is not None):
            raise reader.fail(f"found '{band}'", "a range is wanted here, with 'to'")
        return band

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        one = _quantity_pattern(self.kind)
        value = rf"(?:{one}|{NAME_PATTERN})" if names else rf"(?:{one})"
        forms = [rf"{value}\s+to\s+{value}"]
        if not self.ranges_only:
            forms += [rf"at\s+(?:least|most)\s+{value}", rf"{value}\s*\+\/?-\s*(?:[0-9].*)"]
        return _text_schema(forms, False, f"{self.kind.example} to {self.kind.example}")


@dataclass(frozen=True, slots=True)
class WordShape(Shape[str]):
    """One of some words."""

    choices: tuple[str, ...]

    def read(self, reader: Reader) -> str:  # noqa: D102
        return reader.word(self.choices)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return {"enum": [*self.choices, *_also_truths(self.choices)]}


@dataclass(frozen=True, slots=True)
class FlagShape(Shape[bool]):
    """`yes` or `no`."""

    def read(self, reader: Reader) -> bool:  # noqa: D102
        return reader.flag()

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return {"enum": ["yes", "no", True, False]}


def _also_truths(words: tuple[str, ...]) -> list[object]:
    """What an editor that reads YAML 1.1 takes these words for."""
    truths = {"on": True, "yes": True, "off": False, "no": False}
    return [truths[word] for word in words if word in truths]


@dataclass(frozen=True, slots=True)
class TextShape(Shape[str]):
    """A free text, or one that matches `pattern` in full; `wanted` says what the pattern asks for."""

    pattern: str | None = None
    wanted: str = ""

    def read(self, reader: Reader) -> str:  # noqa: D102
        return reader.text(pattern=self.pattern, wanted=self.wanted)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        schema: Schema = {"type": ["string", "number", "boolean"], "minLength": 1, "maxLength": TEXT_MAX}
        return schema | ({"pattern": f"^(?:{self.pattern})$"} if self.pattern is not None else {})


@dataclass(frozen=True, slots=True)
class CountShape(Shape[int]):
    """A whole number from `least` to `most`."""

    least: int = 0
    most: int = 2**31 - 1

    def read(self, reader: Reader) -> int:  # noqa: D102
        return reader.count(least=self.least, most=self.most)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        number: Schema = {"type": "integer", "minimum": self.least, "maximum": self.most}
        return {"anyOf": [number, {"type": "string", "pattern": f"^{WORDY_NAME.pattern}$"}]} if names else number


@dataclass(frozen=True, slots=True)
class RatioShape(Shape[Fraction]):
    """A positive number without a unit, or a fraction of two whole ones."""

    def read(self, reader: Reader) -> Fraction:  # noqa: D102
        return reader.ratio()

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        fraction = {"type": "string", "pattern": r"^[1-9][0-9]*\s*\/\s*[1-9][0-9]*$"}
        return {"anyOf": [{"type": "number", "exclusiveMinimum": 0}, fraction]}


@dataclass(frozen=True, slots=True)
class ListShape(Shape[tuple[T_co, ...]]):
    """A list of one shape."""

    item: Shape[T_co]
    least: int = 0
    most: int = 10_000

    def read(self, reader: Reader) -> tuple[T_co, ...]:  # noqa: D102
        return tuple(self.item.read(item) for item in reader.items(least=self.least, most=self.most))

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        items = self.item.schema(names=names)
        return {"type": "array", "items": items, "minItems": self.least, "maxItems": self.most}


@dataclass(frozen=True, slots=True)
class TableShape(Shape[dict[str, T]]):
    """A mapping from names of the user's choice to one shape; `what` is what is named."""

    item: Shape[T]
    what: str = "name"

    def read(self, reader: Reader) -> dict[str, T]:  # noqa: D102
        return {name: self.item.read(below) for name, below in reader.table(what=self.what).items()}

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        pattern = {"pattern": f"^{WORDY_NAME.pattern}$"}
        items = self.item.schema(names=names)
        return {"type": "object", "propertyNames": pattern, "additionalProperties": items, "minProperties": 1}


@dataclass(frozen=True, slots=True)
class OrWord(Shape[T_co | None]):
    """One word, which reads as None, or another shape."""

    word: str
    shape: Shape[T_co]

    def read(self, reader: Reader) -> T_co | None:  # noqa: D102
        return None if reader.is_word(self.word) else self.shape.read(reader)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return {"anyOf": [{"enum": [self.word, *_also_truths((self.word,))]}, self.shape.schema(names=names)]}


@dataclass(frozen=True, slots=True)
class ScalarOr(Shape[T_co]):
    """One shape for a single text, another for a list or mapping."""

    scalar: Shape[T_co]
    other: Shape[T_co]

    def read(self, reader: Reader) -> T_co:  # noqa: D102
        return (self.scalar if reader.is_scalar else self.other).read(reader)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return {"anyOf": [self.scalar.schema(names=names), self.other.schema(names=names)]}


@dataclass(frozen=True, slots=True)
class Built(Shape[T_co], Generic[U, T_co]):
    """A shape whose value is built further, with the mark at hand; `build` may raise `mark.error(...)`."""

    shape: Shape[U]
    build: Callable[[U, Mark], T_co]

    def read(self, reader: Reader) -> T_co:  # noqa: D102
        return self.build(self.shape.read(reader), reader.mark)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return self.shape.schema(names=names)


@dataclass(frozen=True, slots=True, eq=False)
class Key(Generic[T_co]):
    """A key of a record: its shape, what it means (for editors), and the default that makes it optional.

    A key that is neither required nor has a default may be left out: then `fields.get(key)` is None.
    """

    name: str
    shape: Shape[T_co]
    text: str
    required: bool = False
    default: T_co | None = None


class Fields:
    """The values that one record in a file gives, by `Key`, with their places."""

    def __init__(self, mark: Mark, values: Mapping[str, object], marks: Mapping[str, Mark]) -> None:
        self.mark = mark
        self._values = values
        self._marks = marks

    def __getitem__(self, key: Key[T]) -> T:
        value = self.get(key)
        if value is None:
            raise KeyError(key.name)
        return value

    def get(self, key: Key[T]) -> T | None:
        """The value said in the file, else the key's default."""
        return cast("T | None", self._values.get(key.name, key.default))

    def said(self, key: Key[T]) -> bool:
        """Whether the file says it."""
        return key.name in self._values

    def at(self, key: Key[T]) -> Mark:
        """Where the value stands; where the record begins if the file does not say it."""
        return self._marks.get(key.name, self.mark)

    def error(self, key: Key[T], found: str, wanted: str = "") -> FileError:
        """An error, to be raised, that points to the value of `key`."""
        return self.at(key).error(found, wanted)


@dataclass(frozen=True, slots=True)
class Record(Shape[T_co]):
    """A mapping with known keys, built into a value by `build`."""

    keys: tuple[Key[object], ...]
    build: Callable[[Fields], T_co]

    def read(self, reader: Reader) -> T_co:  # noqa: D102
        found = reader.mapping(
            required=[key.name for key in self.keys if key.required],
            optional=[key.name for key in self.keys if not key.required],
        )
        values = {key.name: key.shape.read(found[key.name]) for key in self.keys if key.name in found}
        return self.build(Fields(reader.mark, values, {name: below.mark for name, below in found.items()}))

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        properties = {key.name: {"description": key.text} | key.shape.schema(names=names) for key in self.keys}
        schema: Schema = {"type": "object", "properties": properties, "additionalProperties": False}
        required = [key.name for key in self.keys if key.required]
        return schema | ({"required": required} if required else {})
