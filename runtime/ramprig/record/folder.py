"""The folder of one run: its name, its files, the copies of what it was made from, and `run.json`.

    runs/20260301T083000Z-vent-endurance-3fa9c2/
        run.json        what, when, with what, verdict and account; replaced in one step at the start and at the end
        samples.csv     every sample, up to a million; then samples.0002.csv and so on (see `volumes.py`)
        events.jsonl    everything that happened
        trail.csv       the fast record around a trip, where there was one
        cycles.jsonl    the count of cycles, where the sequence has cycles
        cycle-ranges.csv      least, mean and greatest of each column over each cycle
        interval-ranges.csv   the same over each interval of a thinned log
        held-1.csv, held-2.csv   while it runs: the last rows of a thinned log, not decided yet
        samples-2.csv   the samples after the first interruption, where the run was gone on with
        notes.jsonl     what people noted by hand, with copies of their photos
        bench.yaml ...  copies of the files the run was made from

A folder is never used twice: where the name exists already, it gets a number.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import platform
import re
import secrets
import unicodedata
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path

import numpy as np

from .. import __version__
from ..errors import RecordError
from .appendfile import AppendFile, Reserve, replace_file, sync_folder, write_new
from .events import Json, from_rfc3339, jsonable
from .held import absorb_held
from .parts import Document, Earlier, earlier_of, parts_of
from .volumes import OWN_NAME

FORMAT = "ramprig run 1"
RUN_FILE = "run.json"
SAMPLES_FILE = "samples.csv"
EVENTS_FILE = "events.jsonl"
TRAIL_FILE = "trail.csv"
CYCLES_FILE = "cycles.jsonl"
CYCLE_RANGES_FILE = "cycle-ranges.csv"
INTERVAL_RANGES_FILE = "interval-ranges.csv"
RANGES_FILES = (CYCLE_RANGES_FILE, INTERVAL_RANGES_FILE)
NOTES_FILE = "notes.jsonl"
RESERVE_FILE = "reserve.bin"
OWN_FILES = (
    *(RUN_FILE, SAMPLES_FILE, EVENTS_FILE, TRAIL_FILE, CYCLES_FILE),
    *RANGES_FILES,
    *(NOTES_FILE, RESERVE_FILE),
)
GOING_ON = (EVENTS_FILE, CYCLES_FILE, *RANGES_FILES)
"""Files that a later part of a run adds to."""

SLUG_MAX = 40  # characters of the name that go into the folder's
SAME_NAME_MAX = 999  # folders of one name before we say that something is wrong
COPY_MAX_BYTES = 16 * 1024 * 1024  # a bench or sequence file larger than this is no such file


@dataclass(frozen=True, slots=True)
class InputFile:
    """A file the run was made from: what it was (`bench`, `sequence`, `include`), its name, and its whole contents.

    The contents are those that were read to make the plan, so that the copy is what ran even where the file has
    changed since.
    """

    role: str
    name: str
    content: bytes

    @classmethod
    def read(cls, role: str, path: Path) -> InputFile:
        """The file as it is now; raises RecordError where it cannot be read or is too large."""
        try:
            with open(path, "rb") as file:
                content = file.read(COPY_MAX_BYTES + 1)
        except OSError as error:
            raise RecordError(f"{path} cannot be copied into the run folder: {error.strerror}") from error
        if len(content) > COPY_MAX_BYTES:
            raise RecordError(f"{path} cannot be copied into the run folder: larger than {COPY_MAX_BYTES} bytes")
        return cls(role, str(path), content)


@dataclass(frozen=True, slots=True, kw_only=True)
class RunDescription:
    """What is known of a run before it begins.

    `name` is the user's, such as that of the sequence. `identity` is the device's answer to `who`, `settings`
    whatever the caller wants to have on record (port, seed, values given on the command line, what the user entered
    on the motor).
    """

    name: str
    port: str = ""
    identity: Mapping[str, object] = field(default_factory=dict)
    settings: Mapping[str, object] = field(default_factory=dict)
    inputs: Sequence[InputFile] = ()


def slug_of(name: str) -> str:
    """The name as part of a folder's name: small ASCII letters, digits and single hyphens; `run` where nothing is
    left."""
    plain = unicodedata.normalize("NFKD", name).encode("ascii", "ignore").decode("ascii").lower()
    return re.sub(r"[^a-z0-9]+", "-", plain).strip("-")[:SLUG_MAX].rstrip("-") or "run"


def software() -> dict[str, Json]:
    """What the run was made with."""
    return {
        "ramprig": __version__,
        "python": platform.python_version(),
        "numpy": np.__version__,
        "os": platform.platform(),
        "machine": platform.machine(),
    }


class RunFolder:
    """The folder of one run while it is being written. Make it with `create`, or `reopen` it for another part.

    `earlier` is what the earlier parts left, None for the first; `torn_bytes` were cut off from their last lines.
    """

    def __init__(self, path: Path, description: RunDescription, *, started_unix_s: float) -> None:
        self.path = path
        self.description = description
        self.started_unix_s = started_unix_s
        self.reserve = Reserve(path / RESERVE_FILE)
        self.earlier: Earlier | None = None
        self.torn_bytes = 0
        self._reopened: dict[str, AppendFile] = {}
        self._files: list[AppendFile | dict[str, Json]] = []
        self._inputs: list[Json] = []

    @classmethod
    def create(
        cls, root: Path, description: RunDescription, *, started_unix_s: float, short_id: str | None = None
    ) -> RunFolder:
        """Make `root/<UTC start>-<name>-<id>`, copy the inputs into it and take the reserve.

        `short_id` is random where none is given; give one where the same run must have the same name. Raises
        RecordError where that cannot be done; nothing that was there is ever touched.
        """
        start = (datetime(1970, 1, 1, tzinfo=UTC) + timedelta(seconds=int(started_unix_s))).strftime("%Y%m%dT%H%M%SZ")
        stem = f"{start}-{slug_of(description.name)}-{slug_of(short_id or secrets.token_hex(3))}"
        try:
            root.mkdir(parents=True, exist_ok=True)
            folder = cls(_new_folder(root, stem), description, started_unix_s=started_unix_s)
            folder._copy_inputs()
            folder.reserve.take()
            sync_folder(folder.path)
            sync_folder(root)
        except OSError as error:
            raise RecordError(f"the run folder cannot be made in {root}: {error.strerror or error}") from error
        return folder

    @classmethod
    def reopen(
        cls,
        path: Path,
        manifest: Document,
        interruption: Mapping[str, Json],
        *,
        port: str,
        identity: Mapping[str, Json],
    ) -> RunFolder:
        """The folder of a run that was interrupted, for its next part. Raises RecordError, also where it is under way.

        `manifest` is its `run.json`, `interruption` what is to be told of the break; `port` and `identity` are those of
        the part to come.
        """
        description = RunDescription(name=str(manifest.get("name")), port=port, identity=identity)
        folder = cls(path, description, started_unix_s=from_rfc3339(manifest["started"]).timestamp())
        try:
            for name in GOING_ON:
                if (path / name).exists():
                    folder._reopened[name], torn_bytes = AppendFile.reopen(path / name)
                    folder.torn_bytes += torn_bytes
            absorb_held(path, parts_of(manifest)[-1])
            folder.earlier = earlier_of(manifest, path, interruption, GOING_ON)
            (path / RESERVE_FILE).unlink(missing_ok=True)
            folder.reserve.take()
            sync_folder(path)
        except OSError as error:
            folder.abandon()
            raise RecordError(f"the run folder {path} cannot be gone on with: {error.strerror or error}") from error
        except BaseException:
            folder.abandon()
            raise
        return folder

    def _copy_inputs(self) -> None:
        used = {name.lower() for name in OWN_FILES}
        for given in self.description.inputs:
            name = Path(given.name).name or given.role
            name = _free_name(f"{given.role}-{name}" if OWN_NAME.fullmatch(name) else name, used)
            used.add(name.lower())
            write_new(self.path / name, given.content)
            self._inputs.append(
                {
                    "role": given.role,
                    "name": given.name,
                    "file": name,
                    "bytes": len(given.content),
                    "sha256": hashlib.sha256(given.content).hexdigest(),
                }
            )

    def new_file(self, name: str) -> AppendFile:
        """A new file of lines in the folder, which `run.json` will list; where the name is taken it gets a number."""
        file = AppendFile(self.path / self.free_name(name))
        self._files.append(file)
        return file

    def seal(self, file: AppendFile) -> None:
        """Close a file that takes no more, and keep what `run.json` says of it."""
        self._files[self._files.index(file)] = _entry_of(file)
        file.close()

    def drop(self, file: AppendFile) -> None:
        """Close a file that could not be begun; `run.json` will not list it."""
        self._files.remove(file)
        file.close()

    def free_name(self, name: str) -> str:
        """The name that `new_file` would take: one that no file has, nor any part of the run has claimed for its
        samples, though it broke off before it began the file."""
        there = {path.name.lower() for path in self.path.iterdir()}
        return _free_name(name, there if self.earlier is None else there | self.earlier.claimed)

    def go_on(self, name: str) -> AppendFile | None:
        """The file of this name that earlier parts wrote, for more; None where there is none."""
        file = self._reopened.pop(name, None)
        if file is not None:
            self._files.append(file)
        return file

    def close(self) -> None:
        """Close the files that were reopened and not taken by `go_on`."""
        for file in self._reopened.values():
            file.close()
        self._reopened.clear()

    def abandon(self) -> None:
        """Let go of every file and of the reserve, so that a later try finds nothing held; never raises."""
        self.close()
        for file in self._files:
            if isinstance(file, AppendFile):
                with contextlib.suppress(OSError):
                    file.close()
        self.reserve.free()

    def head(self) -> dict[str, Json]:
        """What `run.json` says at the start and at the end alike."""
        if self.earlier is not None:
            return dict(self.earlier.head)
        about = self.description
        return {
            "format": FORMAT,
            "run": self.path.name,
            "name": about.name,
            "software": software(),
            "port": about.port,
            "device": jsonable(about.identity),
            "settings": jsonable(about.settings),
            "inputs": self._inputs,
        }

    def files(self) -> list[Json]:
        """The files written so far, each with its size and hash."""
        return self._earlier_files() + [
            _entry_of(file) if isinstance(file, AppendFile) else file for file in self._files
        ]

    def closed_files(self) -> list[Json]:
        """Those among them that will not change any more."""
        return [*self._earlier_files(), *(file for file in self._files if not isinstance(file, AppendFile))]

    def _earlier_files(self) -> list[Json]:
        return [] if self.earlier is None else list(self.earlier.files)

    def write_manifest(self, contents: Mapping[str, Json]) -> None:
        """Replace `run.json` in one step; raises OSError, and then the old one stands."""
        text = json.dumps(contents, ensure_ascii=False, allow_nan=False, indent=2) + "\n"
        replace_file(self.path / RUN_FILE, text.encode("utf-8", errors="backslashreplace"))


def _entry_of(file: AppendFile) -> dict[str, Json]:
    return {"file": file.path.name, "bytes": file.size_bytes, "lines": file.lines, "sha256": file.sha256}


def _new_folder(root: Path, stem: str) -> Path:
    for number in range(1, SAME_NAME_MAX + 1):
        path = root / (stem if number == 1 else f"{stem}-{number}")
        try:
            path.mkdir()
        except FileExistsError:
            continue
        return path
    raise RecordError(f"{root} has {SAME_NAME_MAX} run folders named {stem}; move some away")


def _free_name(name: str, used: set[str]) -> str:
    """`name`, or with a number before its suffix where that is taken, letter case aside."""
    stem, dot, suffix = name.rpartition(".")
    if not stem:
        stem, dot, suffix = name, "", ""
    number = 1
    while name.lower() in used:
        number += 1
        name = f"{stem}-{number}{dot}{suffix}"
    return name
