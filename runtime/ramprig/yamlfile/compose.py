"""Bytes of a YAML file to a tree of text, by PyYAML's event stream and none of its guesses about values.

The tree is built from parser events rather than from `yaml.compose`, so that no resolver runs, and so that the bounds
on nesting and size act before anything has recursed or grown.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from pathlib import Path
from typing import NamedTuple

import yaml

from ..errors import FileError
from .source import SEEN, Mark, Source, read_source, source_of
from .tree import Entry, Listing, Mapping, Node, Scalar

DEPTH_MAX = 32
"""Deepest nesting, aliases followed."""
NODES_MAX = 50_000
"""Most nodes of a tree, every alias counted as what it stands for."""


class _Built(NamedTuple):
    node: Node
    size: int
    height: int


def load(path: str | Path, *, named_at: Mark | None = None) -> Node:
    """The tree of the YAML file at `path`; `node.mark.source` has its bytes and their digest.

    Raises `FileError` and nothing else, whatever the bytes; `named_at` is where another file named this one.
    """
    return compose(read_source(path, named_at=named_at))


def load_copy(copy: str | Path, *, file: str) -> Node:
    """As `load`, from a copy of a file that messages go on calling `file`. Raises `FileError`."""
    return compose(source_of(read_source(copy).data, file))


def load_text(text: str, file: str) -> Node:
    """The tree of a text; `file` is the name that messages give."""
    return compose(source_of(text.encode("utf-8", "surrogatepass"), file))


def compose(source: Source) -> Node:
    """The tree of a source. Raises `FileError` and nothing else."""
    return _Composer(source).document()


class _Composer:
    """Builds one tree; a thing of one use."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self.mark = source.mark(1, 1)
        self.events: Iterator[yaml.Event] = iter(yaml.parse(source.text, Loader=yaml.SafeLoader))
        self.anchors: dict[str, _Built | None] = {}
        self.anchor_marks: dict[str, Mark] = {}

    def document(self) -> Node:
        self._next()  # the stream's start
        if isinstance(self._next(), yaml.StreamEndEvent):
            raise self.source.mark(1, 1).error("the file is empty", "it needs at least one 'key: value'")
        built = self._node(self._next(), depth=1)
        self._next()  # the document's end
        if not isinstance(self._next(), yaml.StreamEndEvent):
            raise self.mark.error("a second document begins here", "a file has one document: remove the '---'")
        return built.node

    def _next(self) -> yaml.Event:
        """The next event, with every exception of the library turned into ours."""
        try:
            event = next(self.events)
        except yaml.MarkedYAMLError as error:
            raise _explained(error, self.source, self.mark) from error
        except Exception as error:  # a damaged file also ends in ValueError and others inside the library
            raise self.mark.error(f"cannot be read as YAML from here on: {str(error)[:80]}") from error
        if event.start_mark is not None:
            self.mark = self.source.mark(event.start_mark.line + 1, event.start_mark.column + 1)
        return event

    def _node(self, event: yaml.Event, *, depth: int) -> _Built:
        mark = self.mark
        if depth > DEPTH_MAX:
            raise mark.error(f"nested more than {DEPTH_MAX} deep")
        if isinstance(event, yaml.AliasEvent):
            return self._alias(event.anchor or "", mark, depth)
        assert isinstance(event, yaml.NodeEvent)  # the parser's grammar gives nothing else here
        if getattr(event, "tag", None) is not None:
            tag = str(getattr(event, "tag", ""))[:40]
            raise mark.error(f"found the tag '{tag}'", "values have no tags here; put text in quotes where needed")
        anchor = event.anchor
        if anchor is not None:
            self._open_anchor(anchor, mark)
        if isinstance(event, yaml.ScalarEvent):
            built = _Built(self._scalar(event, mark), 1, 1)
        elif isinstance(event, yaml.SequenceStartEvent):
            built = self._listing(mark, depth)
        else:
            built = self._mapping(mark, depth)
        if anchor is not None:
            self.anchors[anchor] = built
        return built

    def _open_anchor(self, anchor: str, mark: Mark) -> None:
        if anchor in self.anchor_marks:
            first = self.anchor_marks[anchor]
            raise mark.error(f"the anchor '&{anchor}' is set twice", f"the first is in line {first.line}: rename one")
        self.anchors[anchor] = None
        self.anchor_marks[anchor] = mark

    def _alias(self, anchor: str, mark: Mark, depth: int) -> _Built:
        if anchor not in self.anchors:
            raise mark.error(f"'*{anchor}' stands for nothing", f"set '&{anchor}' before it is used")
        built = self.anchors[anchor]
        if built is None:
            raise mark.error(f"'*{anchor}' stands inside what it stands for", "a value cannot contain itself")
        if depth + built.height - 1 > DEPTH_MAX:
            raise mark.error(f"nested more than {DEPTH_MAX} deep")
        return built

    def _scalar(self, event: yaml.ScalarEvent, mark: Mark) -> Scalar:
        bad = re.search(f"[^\n\t\x20-\x7e{SEEN}\ue000-\U0010ffff]", event.value)
        if bad is not None:
            raise mark.error(f"this text contains the character U+{ord(bad.group()):04X}", "remove the escape")
        return Scalar(event.value, event.style is None, mark)

    def _listing(self, mark: Mark, depth: int) -> _Built:
        items: list[Node] = []
        size, height = 1, 0
        while not isinstance(event := self._next(), yaml.SequenceEndEvent):
            built = self._node(event, depth=depth + 1)
            items.append(built.node)
            size, height = self._grown(size + built.size), max(height, built.height)
        return _Built(Listing(tuple(items), mark), size, height + 1)

    def _mapping(self, mark: Mark, depth: int) -> _Built:
        entries: list[Entry] = []
        first_marks: dict[str, Mark] = {}
        size, height = 1, 0
        while not isinstance(event := self._next(), yaml.MappingEndEvent):
            key = self._key(event, first_marks, depth)
            built = self._node(self._next(), depth=depth + 1)
            entries.append(Entry(key, built.node))
            size, height = self._grown(size + built.size + 1), max(height, built.height)
        return _Built(Mapping(tuple(entries), mark), size, height + 1)

    def _grown(self, size: int) -> int:
        if size > NODES_MAX:
            raise self.mark.error(f"more than {NODES_MAX} values, counting what the aliases stand for")
        return size

    def _key(self, event: yaml.Event, first_marks: dict[str, Mark], depth: int) -> Scalar:
        mark = self.mark
        if isinstance(event, yaml.AliasEvent):
            raise mark.error("an alias cannot be a key", "write the key out")
        if not isinstance(event, yaml.ScalarEvent):
            raise mark.error("a list or mapping cannot be a key", "a key is a word, as in 'duty: 20 %'")
        key = self._node(event, depth=depth).node
        assert isinstance(key, Scalar)
        if key.text == "<<" and key.plain:
            raise mark.error("found the merge key '<<'", "write the keys out, or use '*name' for a whole value")
        if not key.text:
            raise mark.error("found an empty key", "a key is a word, as in 'duty: 20 %'")
        first = first_marks.setdefault(key.text, mark)
        if first is not mark:
            place = f"line {first.line}, column {first.column}"
            raise mark.error(f"the key '{shorten(key.text)}' stands twice in one mapping", f"the first is in {place}")
        return key


def shorten(text: str) -> str:
    """At most 40 characters of `text` on one line, for a message."""
    one_line = " ".join(text.split())
    return one_line if len(one_line) <= 40 else one_line[:37] + "..."


_NO_BLANK = re.compile(r"\s*(?:- +)*([A-Za-z_][\w ]*):([^\s/:][^#]*?)\s*(?:#.*)?$")


def missing_blank(line: str) -> tuple[int, str] | None:
    """Where a line such as `duty:20 %` lacks the blank after its colon: the key's column and a hint; else None."""
    match = _NO_BLANK.match(line)
    if match is None:
        return None
    return match.start(1) + 1, f"a blank belongs after the colon: '{match.group(1)}: {shorten(match.group(2))}'"


def _explained(error: yaml.MarkedYAMLError, source: Source, last: Mark) -> FileError:
    """The library's complaint as a place and a sentence that says what would be right."""
    problem, context = error.problem or "", error.context or ""
    at = _mark(error.problem_mark, source) or last
    begun = _mark(error.context_mark, source) or at
    for line in range(at.line, min(begun.line, at.line - 1) - 1, -1):
        hint = missing_blank(source.lines[line - 1]) if line >= 1 else None
        if hint is not None and ("mapping values" in problem or "expected ':'" in problem):
            return source.mark(line, hint[0]).error("this is not read as a key and its value", hint[1])
    if "mapping values" in problem and at.line > 1 and re.fullmatch(r" *[\w ]+", source.lines[at.line - 2]):
        above = source.mark(at.line - 1, len(source.lines[at.line - 2]) + 1)
        return above.error("this line has no ':' after its key", "write 'key: value'")
    if "end of stream" in problem and "quoted" in context:
        return begun.error("the quote that begins here is not closed", "end the text with the same quote")
    if "unknown escape" in problem or "escape sequence of" in problem:
        wanted = "use single quotes, as in 'C:\\folder'"
        return begun.error("in double quotes a backslash begins an escape", wanted)
    if "block end" in problem:
        return at.error("this line begins in another column than its neighbours", "keys of one mapping line up")
    if "expected ',' or" in problem:
        return begun.error("the bracket that opens here is not closed, or a comma is missing", "as in [1, 2] or {a: 1}")
    for part, found, wanted in _HINTS:
        if part in problem:
            return at.error(found, wanted)
    return at.error(f"cannot be read as YAML: {problem[:100]}", context[:100])


_HINTS = (
    ("'\\t' that cannot start", "found a tab where a value or a key begins", "use blanks, not tabs"),
    ("that cannot start any token", "a value cannot begin with this character", "put the text in quotes"),
    ("mapping values", "a second ':' in one value, or deeper indented than the line above", "as in 'key: value'"),
    ("expected ':'", "this line has no ':' after its key", "write 'key: value', or indent it as a part of the value"),
    ("sequence entries", "a list cannot begin in this line", "begin it in a line of its own: '- value'"),
    ("tag handle", "found a tag", "values have no tags here; put text in quotes where needed"),
)
"""A part of the library's words, what was found, what would be right; the first that matches is taken."""


def _mark(mark: yaml.Mark | None, source: Source) -> Mark | None:
    return None if mark is None else source.mark(mark.line + 1, mark.column + 1)
