"""Reads a run folder back, whole or as a crash left it, and checks the account of samples against the rows that are
there.

A run that was killed has a `run.json` that says `running`, perhaps a torn last row and a torn last event: all that is
accepted, and said. A run that was gone on with after an interruption has several parts, each with a samples file.
"""

from __future__ import annotations

import csv
import hashlib
import io
import json
import math
import sys
from collections.abc import Collection, Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from ..errors import RecordError
from .appendfile import whole_lines
from .events import from_rfc3339
from .expected import KeptTicks, Told, compare
from .folder import CYCLES_FILE, EVENTS_FILE, FORMAT, NOTES_FILE, RANGES_FILES, RUN_FILE
from .parts import parts_of, whole_account
from .unaccounted import without_account
from .volumes import Stream, volume_files

CHUNK_BYTES = 1024 * 1024
Document = dict[str, Any]  # JSON as it comes: what is in it is checked where it is used


@dataclass(frozen=True, slots=True)
class Samples:
    """The rows of a samples file, in the order of the file.

    `ticks` is (n,) int64; `numbers` has (n,) float64 for each column asked for that holds numbers, NaN where a field is
    empty; `words` the texts of the others. `torn_bytes` is the length of an unfinished last row, which is left out.
    """

    names: tuple[str, ...]
    ticks: NDArray[np.int64]
    numbers: dict[str, NDArray[np.float64]]
    words: dict[str, list[str]]
    torn_bytes: int

    def __len__(self) -> int:
        return len(self.ticks)


def read_samples(path: Path, columns: Collection[str] | None = None) -> Samples:
    """The samples file `path`; only these columns besides the ticks, or all. Raises RecordError where it is none."""
    table = _Table(path, columns)
    torn_bytes = 0
    try:
        for data, torn_bytes in whole_lines(path):  # noqa: B007  (the last one is what is wanted)
            table.take(list(csv.reader(io.StringIO(data.decode("utf-8"), newline=""), strict=True)))
    except (OSError, ValueError, csv.Error) as error:
        raise RecordError(f"{path} cannot be read as a samples file: {error}") from error
    return Samples(
        tuple(table.names),
        np.concatenate([np.empty(0, np.int64), *table.ticks]),
        {name: np.concatenate([np.empty(0), *parts]) for name, parts in table.numbers.items()},
        table.words,
        torn_bytes,
    )


class _Table:
    """Gathers rows of text into columns, a piece of the file at a time, so that the texts need not all be kept."""

    def __init__(self, path: Path, wanted: Collection[str] | None) -> None:
        self._path = path
        self._wanted = wanted
        self.names: list[str] = []
        self.ticks: list[NDArray[np.int64]] = []
        self.numbers: dict[str, list[NDArray[np.float64]]] = {}
        self.words: dict[str, list[str]] = {}

    def take(self, rows: list[list[str]]) -> None:
        if not self.names and rows:
            self._header(rows.pop(0))
        if not rows:
            return
        if any(len(row) != len(self.names) for row in rows):
            raise RecordError(f"{self._path} is no samples file: a row has not as many fields as the header")
        fields = dict(zip(self.names, zip(*rows, strict=True), strict=True))
        self.ticks.append(np.array(fields["tick"], dtype=np.int64))
        for name in list(self.numbers):
            try:
                self.numbers[name].append(np.array([float(text) if text else math.nan for text in fields[name]]))
            except ValueError:
                self._becomes_words(name)
        for name, words in self.words.items():
            words += map(sys.intern, fields[name])

    def _header(self, names: list[str]) -> None:
        if names[:1] != ["tick"]:
            raise RecordError(f"{self._path} is no samples file: its first column is not tick")
        self.names = names
        self.numbers = {name: [] for name in names[1:] if self._wanted is None or name in self._wanted}

    def _becomes_words(self, name: str) -> None:
        """A column that does not hold numbers, found when its first word comes; only empty fields may have come
        before."""
        parts = self.numbers.pop(name)
        if not all(np.isnan(part).all() for part in parts):
            raise RecordError(f"{self._path} is no samples file: column {name} holds numbers and words")
        self.words[name] = [""] * sum(map(len, parts))


class EventLines:
    """Iterates over the events of a file, one after another, in the memory of one. Raises RecordError.

    `torn_bytes`, once all were read, is the length of an unfinished last line, which is left out.
    """

    def __init__(self, path: Path) -> None:
        self._path = path
        self.torn_bytes = 0

    def __iter__(self) -> Iterator[Document]:
        try:
            for data, torn_bytes in whole_lines(self._path):
                self.torn_bytes = torn_bytes
                yield from map(json.loads, data.splitlines())
        except (OSError, ValueError) as error:
            raise RecordError(f"{self._path} cannot be read as an event log: {error}") from error


def read_events(path: Path) -> tuple[list[Document], int]:
    """All events of a run in order, and the length in bytes of an unfinished last line, which is left out."""
    lines = EventLines(path)
    return list(lines), lines.torn_bytes


def read_manifest(folder: Path) -> Document:
    """The contents of `run.json`; raises RecordError where there is none of our format."""
    path = folder / RUN_FILE
    try:
        manifest = json.loads(path.read_text("utf-8"))
    except (OSError, ValueError) as error:
        raise RecordError(f"{folder} is no run folder: {RUN_FILE} cannot be read ({error})") from error
    if not isinstance(manifest, dict) or manifest.get("format") != FORMAT:
        raise RecordError(f"{folder}: {RUN_FILE} is not of the format '{FORMAT}'")
    return manifest


def sample_files(folder: Path) -> list[Path]:
    """The samples files of all parts of the run, in order; a part that broke off before its first row may lack its own.

    Ticks of different parts have nothing to do with each other where the board restarted between them; `time_s` goes
    on over all of them. Raises RecordError.
    """
    return [path for paths in files_by_part(read_manifest(folder), folder).values() for path in paths]


def files_by_part(manifest: Document, folder: Path) -> dict[int, list[Path]]:
    """The samples files of each part by its number, both in order; only files that were begun."""
    return {int(part["part"]): volume_files(folder, part) for part in parts_of(manifest)}


def read_cycles(folder: Path) -> tuple[list[Document], int]:
    """The count of cycles line by line, and the length in bytes of a torn last line; empty where there is none."""
    path = folder / CYCLES_FILE
    return read_events(path) if path.exists() else ([], 0)


def read_notes(folder: Path) -> list[Document]:
    """What people noted by hand, in the form of events; empty where there is nothing."""
    path = folder / NOTES_FILE
    return read_events(path)[0] if path.exists() else []


def run_events(folder: Path) -> list[Document]:
    """Everything that happened, with what people noted in its place by time of day. Raises RecordError."""
    events, _ = read_events(folder / EVENTS_FILE)
    notes = read_notes(folder)
    return sorted([*events, *notes], key=lambda event: from_rfc3339(event["utc"])) if notes else events


@dataclass(frozen=True, slots=True)
class Audit:
    """What a run folder holds against what it says.

    `missing` counts samples that should be in the file and are not, `unexpected` rows whose tick no logging made, and
    `known_lost` those that are told as lost. `statements` says everything that is not as it should be, for the user;
    `exact` is true where there is nothing to say. `interruptions` tells of each break that the run went on after: not
    a fault of the folder, and yet to be known.
    """

    finished: bool
    rows: int
    known_lost: int
    missing: int
    unexpected: int
    statements: tuple[str, ...]
    parts: int = 1
    interruptions: tuple[str, ...] = ()

    @property
    def exact(self) -> bool:
        """Whether the run ended in order, and every sample is in the file or told as lost."""
        return not self.statements


def audit(folder: Path) -> Audit:
    """Check the run folder; raises RecordError only where it cannot be read as one at all."""
    manifest = read_manifest(folder)
    finished = manifest.get("status") == "finished"
    begun = finished or (folder / EVENTS_FILE).exists()
    entries = parts_of(manifest)
    events = EventLines(folder / EVENTS_FILE)
    by_part = _events_by_part(events if begun else (), len(entries))
    parts = [
        _audit_part(folder, entry, told, last=entry is entries[-1], several=len(entries) > 1)
        for entry, told in zip(entries, by_part, strict=True)
    ]
    statements = [text for part in parts for text in part.statements]
    if events.torn_bytes:
        statements.append(f"the last event is torn ({events.torn_bytes} bytes) and was left out")
    if _is_torn(folder / CYCLES_FILE):
        statements.append("the last line of the count of cycles is torn and was left out")
    statements += _torn_ranges(folder)
    statements += _changed_files(folder, manifest)  # of a run that is not over it lists only what changes no more
    if finished and len(entries) > 1 and manifest.get("samples") != whole_account(entries):
        statements.append("the account of the whole run is not the sum of its parts")
    statements += _changed_photos(folder)
    return Audit(
        finished,
        sum(part.rows for part in parts),
        sum(part.known_lost for part in parts),
        sum(part.missing for part in parts),
        sum(part.unexpected for part in parts),
        tuple(statements),
        len(entries),
        tuple(str(each.get("text")) for each in manifest.get("interruptions", [])),
    )


def _events_by_part(events: Iterable[Document], parts: int) -> list[Told]:
    """What the events of each part tell, divided where a run was gone on with."""
    divided = [Told() for _ in range(parts)]
    part = 1
    for event in events:
        if event["kind"] == "run_resumed":
            part = int(event["part"])
        if part <= parts:
            divided[part - 1].take(event)
    return divided


def _is_torn(path: Path) -> bool:
    """Whether the last line of a file of events is unfinished; False where there is none. Raises RecordError."""
    if not path.exists():
        return False
    lines = EventLines(path)
    for _ in lines:  # each must be an object
        pass
    return lines.torn_bytes > 0


def _torn_ranges(folder: Path) -> list[str]:
    """Ranges files whose end was torn off, or that a loss of power left empty from somewhere on. Raises OSError."""
    statements = []
    for name in RANGES_FILES:
        path = folder / name
        torn_bytes = [torn for _, torn in whole_lines(path)][-1] if path.exists() else 0
        if torn_bytes:
            statements.append(f"the end of {name} is torn ({torn_bytes} bytes) and was left out")
    return statements


def _audit_part(folder: Path, entry: Document, told: Told, *, last: bool, several: bool) -> Audit:
    """One part of a run: its rows against its account, or against its events where it has none."""
    where = f"part {entry['part']}: " if several else ""
    finished = entry.get("status") == "finished"
    stream = Stream(volume_files(folder, entry), columns=())
    kept = KeptTicks.of(entry, told)
    account = entry.get("samples")
    if account:
        rows, known_lost, missing, unexpected, found = _against_account(account, kept, stream)
        if missing < account["unwritten"]:  # of a thinned log it is not known which of them were to be kept
            found = [*found, f"{account['unwritten']} samples that were received could not be written"]
        ending: list[str] = []
    else:
        inferred = without_account((piece.ticks for piece in stream), told, kept)
        rows, found = inferred.rows, inferred.statements
        known_lost, missing, unexpected = int(told.gaps[:, 1].sum()), 0, 0
        ending = [] if finished or not last else [_how_it_broke_off(inferred.last_tick, told.last)]
    statements = list(ending)
    if stream.torn_bytes and (last or finished):  # an earlier part that broke off is told of as an interruption
        statements.append(f"the last row is torn ({stream.torn_bytes} bytes) and was left out")
    troubles = entry.get("disk_troubles") or []
    statements += [f"trouble with the disk: {trouble['text']}" for trouble in troubles]
    if entry.get("events_unwritten"):
        what = "events, lines of cycles or trails could not be written, or not be synced"
        statements.append(f"{entry['events_unwritten']} {what}")
    texts = tuple(where + text for text in statements + found)
    return Audit(finished, rows, known_lost, missing, unexpected, texts)


def _against_account(account: Document, kept: KeptTicks | None, stream: Stream) -> tuple[int, int, int, int, list[str]]:
    """Rows, those told as lost, missing and unexpected ones, and what is to be said."""
    if account["loggings"]:
        found = compare(account, kept, (piece.ticks for piece in stream))
        statements = found.statements()
        if statements and account["gaps_unlisted"]:
            statements = []
            if found.rows != account["written"]:
                statements = ["the rows differ from the account, and not all of its gaps are listed"]
            return found.rows, account["lost"], 0, 0, statements
        return found.rows, account["lost"], found.missing, found.unexpected, statements
    rows = sum(len(piece) for piece in stream)
    statements = [] if rows == account["written"] else [f"{rows} rows are there, {account['written']} were written"]
    return rows, account["lost"], 0, 0, statements


def _how_it_broke_off(last_tick: int | None, last: Mapping[str, Any] | None) -> str:
    last_row = "there is no row" if last_tick is None else f"the last row is of tick {last_tick}"
    last_event = "there is no event" if last is None else f"the last event is '{last['kind']}' at {last['utc']}"
    return f"the run did not end in order ({RUN_FILE} says it is still running): {last_row}, {last_event}"


def _changed_files(folder: Path, manifest: Document) -> list[str]:
    """Files that are gone or no longer as they were written."""
    statements = []
    for entry in [*manifest.get("files", []), *manifest.get("inputs", [])]:
        path = folder / entry["file"]
        try:
            found, more_bytes = _digest(path, entry["bytes"])
        except OSError:
            statements.append(f"{entry['file']} is missing")
            continue
        if found != entry["sha256"]:
            statements.append(f"{entry['file']} was changed after the run")
        elif more_bytes:
            statements.append(f"{entry['file']} has {more_bytes} bytes more than the run knows of")
    return statements


def _digest(path: Path, size_bytes: int) -> tuple[str, int]:
    """The SHA-256 of the first bytes of a file, and how many more it has. Raises OSError."""
    digest = hashlib.sha256()
    with open(path, "rb") as file:
        while chunk := file.read(min(CHUNK_BYTES, size_bytes - file.tell())):
            digest.update(chunk)
        return digest.hexdigest(), file.seek(0, io.SEEK_END) - min(size_bytes, file.tell())


def _changed_photos(folder: Path) -> list[str]:
    """Photos of notes that are gone or no longer as they were copied."""
    entries = [photo for note in read_notes(folder) for photo in note.get("photos", [])]
    return _changed_files(folder, {"files": entries})
