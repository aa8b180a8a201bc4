"""What a YAML file says, as a tree of text with places: nothing in it was taken for a number, a date or a truth."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from ..errors import FileError
from .source import Mark


@dataclass(frozen=True, slots=True, eq=False)
class Scalar:
    """A single text; `plain` where it stands without quotes and is no block."""

    text: str
    plain: bool
    mark: Mark

    def error(self, found: str, wanted: str = "") -> FileError:
        """An error that points here."""
        return self.mark.error(found, wanted)


@dataclass(frozen=True, slots=True, eq=False)
class Listing:
    """The items of a list, in order."""

    items: tuple[Node, ...]
    mark: Mark

    def error(self, found: str, wanted: str = "") -> FileError:
        """An error that points here."""
        return self.mark.error(found, wanted)


@dataclass(frozen=True, slots=True, eq=False)
class Entry:
    """One `key: value` of a mapping."""

    key: Scalar
    value: Node


@dataclass(frozen=True, slots=True, eq=False)
class Mapping:
    """The entries of a mapping, in order; no key comes twice."""

    entries: tuple[Entry, ...]
    mark: Mark

    def error(self, found: str, wanted: str = "") -> FileError:
        """An error that points here."""
        return self.mark.error(found, wanted)

    def __iter__(self) -> Iterator[Entry]:
        return iter(self.entries)


Node = Scalar | Listing | Mapping
