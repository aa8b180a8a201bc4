"""The files of a command line: whether one is a bench or a sequence, and the two read together."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from ramprig.errors import UsageError

if TYPE_CHECKING:
    from ramprig.bench import Bench
    from ramprig.sequence.reading import Sequence

SEQUENCE_KEYS = ("sequence", "steps")
BENCH_KEYS = ("port", "board", "motors")
"""Keys that no sequence has."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Pair:
    """A sequence and the bench that it is for."""

    sequence: Sequence
    bench: Bench
    bench_path: Path


def values_of(texts: Iterable[str]) -> dict[str, str]:
    """The named values of `--set NAME=VALUE` options; raises UsageError for anything else, or a name given twice."""
    values: dict[str, str] = {}
    for text in texts:
        name, equals, value = text.partition("=")
        if not (name.strip() and equals and value.strip()):
            raise UsageError(f"--set {text}: write NAME=VALUE, such as --set 'drive=40 %'")
        if name.strip() in values:
            raise UsageError(f"--set {text}: '{name.strip()}' is set twice")
        values[name.strip()] = value.strip()
    return values


def is_bench(path: Path) -> bool:
    """Whether the file is a bench file and no sequence. Raises FileError where it is no YAML of ours."""
    from ramprig.yamlfile import Mapping, load

    return isinstance(load(path), Mapping) and not _has_keys(path, SEQUENCE_KEYS)


def _has_keys(path: Path, keys: Iterable[str]) -> bool:
    """Whether the file has one of these keys at its top. Raises FileError where it is no YAML of ours."""
    from ramprig.yamlfile import Mapping, load

    root = load(path)
    return isinstance(root, Mapping) and any(entry.key.text in keys for entry in root.entries)


def read_pair(path: Path, *, bench: Path | None, values: dict[str, str]) -> Pair:
    """The sequence at `path` and its bench: the one given, else the one it names. Raises FileError, UsageError."""
    from ramprig.bench.bench import bench_of
    from ramprig.sequence.reading import read_sequence
    from ramprig.yamlfile import load

    if _has_keys(path, BENCH_KEYS) and is_bench(path):
        raise UsageError(f"{path} is a bench file; a sequence is wanted here, and '--bench {path}' beside it")
    sequence = read_sequence(path, settings=values)
    if bench is not None:
        if _has_keys(bench, SEQUENCE_KEYS):
            raise UsageError(
                f"--bench {bench}: this is a sequence; a bench file is wanted, with port, board and motors"
            )
        return Pair(sequence=sequence, bench=bench_of(load(bench)), bench_path=bench)
    if sequence.bench is None:
        raise UsageError(f"{path} names no bench: write 'bench: FILE' there, or give --bench FILE")
    tree = load(sequence.bench, named_at=sequence.bench_mark)
    return Pair(sequence=sequence, bench=bench_of(tree), bench_path=sequence.bench)
