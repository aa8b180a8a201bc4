"""A sequence file and what it includes, read into steps: nothing is known of the bench yet, and nothing is sent.

Every failure is a `FileError` that points into the file in which the mistake stands.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction
from pathlib import Path

from ramprig.errors import FileError, UsageError
from ramprig.record.keeping import Keeping
from ramprig.yamlfile import (
    Key,
    Mark,
    Names,
    Node,
    Reader,
    Record,
    Scalar,
    ScalarOr,
    Schema,
    Shape,
    Source,
    TableShape,
    TextShape,
    load,
    load_copy,
    load_text,
    shorten,
    suggestion,
)

from .cycle_shape import ON_INTERRUPTION
from .language import Language
from .log_shape import LOG, LogWish
from .steps import Include, Interruptions, Step

INCLUDES_DEEP = 8
"""Deepest chain of files that include one another."""
INCLUDES_MAX = 64
"""Most files read for one sequence, each inclusion counted."""

NAME = Key("sequence", TextShape(), "what this sequence is called", required=True)
ABOUT = Key("about", TextShape(), "what it does and for whom")
BENCH = Key("bench", TextShape(), "the bench file it is made for, relative to this file")
LOG_KEY = Key("log", LOG, "sampling, where it differs from the bench's, and how the log is kept")
VALUES: Key[dict[str, str]] = Key(
    "values", TableShape(TextShape(), "name of a value"), "named values, settable with --set"
)
INCLUDE_FILE = Key("file", TextShape(), "the file, relative to this one", required=True)


@dataclass(frozen=True, slots=True, kw_only=True)
class Sequence:
    """A sequence as its files say it.

    `bench` is the bench file it names, as a path from where the program runs, with the place that names it;
    `log_period_s` overrides the bench's, `keeping` says how the log is kept. `values` are those in force, `unused`
    those of the file's own that no step uses. `files` are all files read, the sequence's own first, each once.
    `interruptions` is what the run does when it is interrupted.
    """

    name: str
    about: str
    mark: Mark = field(repr=False, compare=False)
    bench: Path | None
    bench_mark: Mark | None = field(repr=False, compare=False)
    log_period_s: Fraction | None
    log_mark: Mark | None = field(repr=False, compare=False)
    values: Mapping[str, str]
    unused: tuple[str, ...]
    steps: tuple[Step, ...]
    files: tuple[Source, ...] = field(repr=False, compare=False)
    interruptions: Interruptions = field(default_factory=Interruptions)
    keeping: Keeping = field(default_factory=Keeping)


def read_sequence(
    path: str | Path, *, settings: Mapping[str, str] | None = None, copies: Mapping[str, Path] | None = None
) -> Sequence:
    """The sequence in the file at `path`, with named values replaced by `settings` (from `--set`).

    With `copies`, by the names of the files as they were read once, these are read in their place, and messages go on
    giving the names: no other file is read. Raises `FileError`, and `UsageError` for a setting of a name that the file
    does not have.
    """
    return _Files(path, settings or {}, copies).read_whole()


def sequence_of_text(text: str, file: str = "sequence.yaml") -> Sequence:
    """The sequence that a text says; `file` is the name that messages give, and what it includes is looked for there.

    Raises `FileError`.
    """
    return _Files(file, {}).whole(load_text(text, file))


class _UsedNames(Names):
    """Named values that remember which of them were asked for."""

    def __init__(self, values: Mapping[str, str]) -> None:
        super().__init__(values)
        self.used: set[str] = set()

    def lookup(self, name: str) -> str:
        text = super().lookup(name)
        self.used.add(name)
        return text


class _Files:
    """Reads one sequence with all that it includes; a thing of one use."""

    def __init__(self, path: str | Path, settings: Mapping[str, str], copies: Mapping[str, Path] | None = None) -> None:
        self.path = path
        self.copies = copies
        self.settings = settings
        self.sources: dict[Path, Source] = {}
        self.inclusions = 0

    def read_whole(self) -> Sequence:
        return self.whole(self._load(Path(self.path)))

    def _load(self, path: Path, *, named_at: Mark | None = None) -> Node:
        if self.copies is None:
            return load(path, named_at=named_at)
        resolved = path.resolve()
        same = (name for name in self.copies if Path(name).resolve() == resolved)
        name = str(path) if str(path) in self.copies else next(same, None)
        if name is None:
            found = f"there is no copy of '{shorten(str(path))}'"
            raise FileError(found) if named_at is None else named_at.error(found)
        return load_copy(self.copies[name], file=name)

    def whole(self, node: Node) -> Sequence:
        self.sources[Path(self.path).resolve()] = node.mark.source
        found = _keys(Reader(node))
        values = VALUES.shape.read(found["values"]) if "values" in found else {}
        for name in self.settings:
            if name not in values:
                raise UsageError(
                    f"--set {name}: no value has this name in {self.path}; {suggestion(name, values, 'named values')}"
                )
        values |= self.settings
        names = _UsedNames(values)
        steps = self._steps(found["steps"], names, (Path(self.path).resolve(),))
        interruptions = self._interruptions(found, names)
        bench = found.get("bench")
        log_reader = found.get("log")
        log = LogWish() if log_reader is None else LOG.read(Reader(log_reader.node, key=log_reader.key, names=names))
        return Sequence(
            name=NAME.shape.read(found["sequence"]),
            about=ABOUT.shape.read(found["about"]) if "about" in found else "",
            mark=node.mark,
            bench=None if bench is None else Path(self.path).parent / BENCH.shape.read(bench),
            bench_mark=None if bench is None else bench.mark,
            log_period_s=log.period_s,
            log_mark=None if log_reader is None else log_reader.mark,
            values=values,
            unused=tuple(name for name in values if name not in names.used),
            steps=steps,
            files=tuple(self.sources.values()),
            interruptions=interruptions,
            keeping=log.keeping,
        )

    def _interruptions(self, found: Mapping[str, Reader], names: Names) -> Interruptions:
        reader = found.get(ON_INTERRUPTION.name)
        if reader is None:
            return Interruptions()
        return ON_INTERRUPTION.shape.read(Reader(reader.node, key=reader.key, names=names))

    def _steps(self, reader: Reader, names: Names, chain: tuple[Path, ...]) -> tuple[Step, ...]:
        language = Language(_IncludeShape(self, names, chain))
        return language.steps.read(Reader(reader.node, key=reader.key, names=names))

    def include(self, file: Reader, values: Reader | None, names: Names, chain: tuple[Path, ...]) -> Include:
        """The steps of another file; its own values are overridden by `values`, which may name the includer's."""
        name = TextShape().read(file)
        path = Path(file.mark.source.file).parent / name
        resolved = path.resolve()
        if resolved in chain:
            circle = " -> ".join(part.name for part in (*chain[chain.index(resolved) :], resolved))
            raise file.fail(f"'{shorten(name)}' includes itself", f"break the circle {circle}")
        self.inclusions += 1
        if len(chain) > INCLUDES_DEEP or self.inclusions > INCLUDES_MAX:
            wanted = f"at most {INCLUDES_DEEP} deep and {INCLUDES_MAX} in all"
            raise file.fail("too many files include one another", wanted)
        node = self._load(path, named_at=file.mark)
        self.sources.setdefault(resolved, node.mark.source)
        found = _keys(Reader(node))
        own = VALUES.shape.read(found["values"]) if "values" in found else {}
        if values is not None:
            own |= _given(values, own, names)
        steps = self._steps(found["steps"], Names(own), (*chain, resolved))
        return Include(mark=file.mark, marks={}, file=name, steps=steps)


def _keys(reader: Reader) -> dict[str, Reader]:
    return reader.mapping(
        required=[key.name for key in FILE_KEYS if key.required],
        optional=[key.name for key in FILE_KEYS if not key.required],
    )


def _given(values: Reader, own: Mapping[str, str], names: Names) -> dict[str, str]:
    """The values that an include gives, each known to the included file; a name of the includer stands for its text."""
    given: dict[str, str] = {}
    for name, reader in values.table(what="name of a value").items():
        if name not in own:
            wanted = suggestion(name, own, "its named values")
            raise reader.fail(f"the included file has no value named '{shorten(name)}'", wanted)
        text = TextShape().read(reader)
        given[name] = names.lookup(text) if text in names.values else text
    return given


class _IncludeShape(Shape[Step]):
    """The name of a file, or a record with values for it. Without `files` it serves the schema alone."""

    def __init__(self, files: _Files | None, names: Names, chain: tuple[Path, ...]) -> None:
        self.files = files
        self.names = names
        self.chain = chain

    def read(self, reader: Reader) -> Step:
        assert self.files is not None  # only the schema is made without files
        if isinstance(reader.node, Scalar):
            return self.files.include(reader, None, self.names, self.chain)
        found = reader.mapping(required=("file",), optional=("values",))
        return self.files.include(found["file"], found.get("values"), self.names, self.chain)

    def schema(self, *, names: bool = False) -> Schema:
        keys: tuple[Key[object], ...] = (INCLUDE_FILE, VALUES)
        record: Record[object] = Record(keys, lambda fields: fields)
        return ScalarOr(TextShape(), record).schema(names=names)


SCHEMA_LANGUAGE = Language(_IncludeShape(None, Names({}), ()))
"""The language without files behind it."""
STEPS: Key[tuple[Step, ...]] = Key("steps", SCHEMA_LANGUAGE.steps, "what is done, in order", required=True)
FILE_KEYS: tuple[Key[object], ...] = (NAME, ABOUT, BENCH, LOG_KEY, VALUES, ON_INTERRUPTION, STEPS)
