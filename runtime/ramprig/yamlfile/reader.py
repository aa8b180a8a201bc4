"""Typed reading of a tree: every wrong value becomes a `FileError` that points to it and says what would be right."""

from __future__ import annotations

import difflib
import re
from collections.abc import Callable, Iterable, Mapping
from fractions import Fraction
from typing import TypeVar

from ..errors import FileError
from ..quantity import (
    Band,
    Kind,
    Quantity,
    QuantityError,
    parse,
    parse_band,
    parse_count,
    parse_ratio,
)
from . import tree
from .compose import missing_blank, shorten
from .source import Mark

T = TypeVar("T")

TEXT_MAX = 400
"""Longest free text, in characters."""

WORDY_NAME = re.compile(r"[a-z][a-z0-9_]{0,23}")
"""A name that a user gives to a motor, a servo or a value: it becomes a column, a command word and a key."""


class Names:
    """Named values of a file: each name stands for the text of a value. Unknown names are refused with a suggestion."""

    def __init__(self, values: Mapping[str, str]) -> None:
        self.values = dict(values)

    def lookup(self, name: str) -> str:
        """The text that `name` stands for; raises `QuantityError` where there is none of that name."""
        if name in self.values:
            return self.values[name]
        raise QuantityError(
            f"no value is named '{shorten(name)}'", wanted=suggestion(name, self.values, "named values")
        )


def suggestion(word: str, known: Iterable[str], what: str) -> str:
    """What the user may have meant by `word`: the nearest of `known`, or all of them."""
    choices = [str(choice) for choice in known]
    close = difflib.get_close_matches(word[:40].lower(), choices, n=1, cutoff=0.6)
    if close:
        return f"did you mean '{close[0]}'?"
    if not choices:
        return f"there are no {what} here"
    return f"{what}: {', '.join(choices)}"


class Reader:
    """Reads one node. `key` is what it is called in messages; `names` are the named values that quantities may use."""

    def __init__(self, node: tree.Node, *, key: str = "", names: Names | None = None) -> None:
        self.node = node
        self.key = key
        self.names = names

    @property
    def mark(self) -> Mark:
        """Where the node begins."""
        return self.node.mark

    def fail(self, found: str, wanted: str = "") -> FileError:
        """An error, to be raised, that points to this node."""
        return self.node.error(found, wanted)

    def mapping(self, *, required: Iterable[str] = (), optional: Iterable[str] = ()) -> dict[str, Reader]:
        """The values by key, in the file's order; refuses unknown keys and missing ones."""
        must = tuple(required)
        known = (*must, *optional)
        found: dict[str, Reader] = {}
        for entry in self._entries(f"with {', '.join(known[:6])}"):
            if entry.key.text not in known:
                wanted = suggestion(entry.key.text, known, "known keys")
                if entry.key.text[:1].isdigit():  # as in {at most: 2,5 A}
                    wanted = "a comma begins a new key in braces; the decimal sign is the point, as in '2.5 A'"
                raise entry.key.error(f"unknown key '{shorten(entry.key.text)}'{self._inside()}", wanted)
            found[entry.key.text] = self._below(entry.value, entry.key.text)
        missing = [key for key in must if key not in found]
        if missing:
            raise self.fail(f"'{missing[0]}' is missing{self._inside()}", f"required: {', '.join(must)}")
        return found

    def table(self, *, what: str = "name") -> dict[str, Reader]:
        """The values by names that the user chose; refuses names that are not short lower-case words."""
        found: dict[str, Reader] = {}
        for entry in self._entries(f"of a {what} each"):
            if not WORDY_NAME.fullmatch(entry.key.text):
                wanted = "1 to 24 of a-z, 0-9 and _, the first a letter"
                raise entry.key.error(f"'{shorten(entry.key.text)}' cannot be a {what}", wanted)
            found[entry.key.text] = self._below(entry.value, entry.key.text)
        if not found:
            raise self.fail(f"no {what} here{self._inside()}", "remove the key or name one")
        return found

    def items(self, *, least: int = 0, most: int = 10_000) -> list[Reader]:
        """The items of a list, `least` to `most` of them."""
        if not isinstance(self.node, tree.Listing):
            raise self.fail(
                self._what_stands_here(), f"a list is wanted{self._for()}, as in [one, two] or lines of '- one'"
            )
        if not least <= len(self.node.items) <= most:
            raise self.fail(f"found {len(self.node.items)} items{self._inside()}", f"{least} to {most} are allowed")
        return [self._below(item, self.key) for item in self.node.items]

    def quantity(self, kind: Kind, *, least: str | None = None, most: str | None = None) -> Quantity:
        """A quantity of this kind between `least` and `most` (as text with unit, both included)."""
        text = self._scalar(f"{kind.name}, such as {kind.example},")
        value = self._taken(lambda: parse(text, kind, lookup=self._lookup))
        if (least is not None and value.value < parse(least, kind).value) or (
            most is not None and value.value > parse(most, kind).value
        ):
            raise self.fail(f"found '{value}'{self._for()}", _range_text(least, most))
        return value

    def band(self, kind: Kind) -> Band:
        """A value with its tolerance, a range, or one bound."""
        text = self._scalar(f"{kind.name} with its tolerance")
        return self._taken(lambda: parse_band(text, kind, lookup=self._lookup))

    def count(self, *, least: int = 0, most: int = 2**31 - 1) -> int:
        """A whole number without a unit, or the name of one."""
        text = self._scalar("a whole number")
        value = self._taken(lambda: parse_count(self._resolved(text)))
        if not least <= value <= most:
            raise self.fail(f"found {value}{self._for()}", _range_text(str(least), str(most)))
        return value

    def ratio(self) -> Fraction:
        """A positive number without a unit, exact: `90`, `34.014` or `3249/196`."""
        text = self._scalar("a ratio")
        return self._taken(lambda: parse_ratio(text))

    def word(self, choices: Iterable[str]) -> str:
        """One of these words; words of several parts have single blanks."""
        known = tuple(choices)
        text = " ".join(self._scalar(f"one of {', '.join(known)}").split())
        if text not in known:
            raise self.fail(f"found '{shorten(text)}'{self._for()}", suggestion(text, known, "one of"))
        return text

    def flag(self) -> bool:
        """`yes` or `no`."""
        return self.word(("yes", "no")) == "yes"

    def text(self, *, pattern: str | None = None, wanted: str = "") -> str:
        """A text of 1 to `TEXT_MAX` characters that matches `pattern` in full; `wanted` describes the pattern."""
        text = self._scalar("a text")
        if len(text) > TEXT_MAX:
            raise self.fail(f"found a text of {len(text)} characters{self._for()}", f"at most {TEXT_MAX} are allowed")
        if pattern is not None and not re.fullmatch(pattern, text):
            raise self.fail(f"found '{shorten(text)}'{self._for()}", wanted)
        return text

    @property
    def is_scalar(self) -> bool:
        """Whether the node is a single text."""
        return isinstance(self.node, tree.Scalar)

    def is_word(self, word: str) -> bool:
        """Whether the node is exactly this word, unquoted."""
        return isinstance(self.node, tree.Scalar) and self.node.plain and self.node.text == word

    def _below(self, node: tree.Node, key: str) -> Reader:
        return Reader(node, key=key, names=self.names)

    def _entries(self, of_what: str) -> tuple[tree.Entry, ...]:
        if not isinstance(self.node, tree.Mapping):
            raise self.fail(
                self._what_stands_here(), self._blank_hint() or f"a mapping is wanted{self._for()}, {of_what}"
            )
        return self.node.entries

    def _scalar(self, wanted: str) -> str:
        if not isinstance(self.node, tree.Scalar):
            raise self.fail(self._what_stands_here(), f"{wanted.rstrip(',')} is wanted{self._for()}")
        if not self.node.text.strip():
            after = f" after '{self.key}:'" if self.key and self.node.plain else ""
            raise self.fail(f"found nothing{after}", f"{wanted.rstrip(',')} is wanted")
        return self.node.text

    def _taken(self, read: Callable[[], T]) -> T:
        try:
            return read()
        except QuantityError as error:
            raise self.fail(error.found, error.wanted) from error

    def _lookup(self, name: str) -> str | None:
        return None if self.names is None else self.names.lookup(name)

    def _resolved(self, text: str) -> str:
        return self.names.lookup(text) if self.names is not None and WORDY_NAME.fullmatch(text) else text

    def _what_stands_here(self) -> str:
        if isinstance(self.node, tree.Mapping):
            return "found a mapping"
        if isinstance(self.node, tree.Listing):
            return "found a list"
        return f"found '{shorten(self.node.text)}'" if self.node.text else "found nothing"

    def _blank_hint(self) -> str | None:
        hint = missing_blank(self.node.text) if isinstance(self.node, tree.Scalar) and self.node.plain else None
        return hint[1] if hint else None

    def _inside(self) -> str:
        return f" in '{shorten(self.key)}'" if self.key else ""

    def _for(self) -> str:
        return f" for '{shorten(self.key)}'" if self.key else ""


def _range_text(least: str | None, most: str | None) -> str:
    if most is None:
        return f"it must be at least {least}"
    return f"it must be at most {most}" if least is None else f"it must lie in {least} to {most}"
