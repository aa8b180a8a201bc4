"""Strict YAML: text stays text, every value has a place, and every failure is a `FileError` that points to it.

`load` gives the tree, `Reader` reads typed values from it, and the shapes declare a whole format, so that the same
declaration reads a file and gives its JSON Schema.
"""

from __future__ import annotations

from .compose import DEPTH_MAX, NODES_MAX, compose, load, load_copy, load_text, shorten
from .reader import Names, Reader, suggestion
from .shapes import (
    BandShape,
    Built,
    CountShape,
    Fields,
    FlagShape,
    Key,
    ListShape,
    OrWord,
    QuantityShape,
    RatioShape,
    Record,
    ScalarOr,
    Schema,
    Shape,
    TableShape,
    TextShape,
    WordShape,
)
from .source import FILE_MAX_BYTES, Mark, Source, read_source, source_of
from .tree import Entry, Listing, Mapping, Node, Scalar

__all__ = [
    "DEPTH_MAX",
    "FILE_MAX_BYTES",
    "NODES_MAX",
    "BandShape",
    "Built",
    "CountShape",
    "Entry",
    "Fields",
    "FlagShape",
    "Key",
    "ListShape",
    "Listing",
    "Mapping",
    "Mark",
    "Names",
    "Node",
    "OrWord",
    "QuantityShape",
    "RatioShape",
    "Reader",
    "Record",
    "Scalar",
    "ScalarOr",
    "Schema",
    "Shape",
    "Source",
    "TableShape",
    "TextShape",
    "WordShape",
    "compose",
    "load",
    "load_copy",
    "load_text",
    "read_source",
    "shorten",
    "source_of",
    "suggestion",
]
