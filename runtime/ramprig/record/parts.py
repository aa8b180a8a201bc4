"""The parts of a run that was interrupted and gone on with: each has its own samples files, clocks and account.

A part never touches the rows of an earlier one: ticks begin anew when a board restarts, an account is exact only for
what one recorder saw, and a file that only one recorder wrote can be checked. Events and cycles go on in one file.
"""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from .events import Json
from .volumes import SAMPLES_FIRST, Stream, volume_files, volume_names

SUMS = ("expected", "received", "lost", "written", "unwritten", "gaps_unlisted")
MORE_SUMS = ("asked_again", "recovered", "duplicates", "strange_lines")
HEAD_KEYS = ("format", "run", "name", "software", "port", "device", "settings", "inputs", "started")
PART_KEYS = (
    *("clocks", "verdict", "stop_reason", "samples", "link", "results", "limits_digest", "disk_troubles"),
    *("keeping", "events_unwritten"),
)
CHUNK_BYTES = 1024 * 1024
Document = dict[str, Any]  # JSON as it comes: what is in it is checked where it is used


@dataclass(frozen=True, slots=True, kw_only=True)
class Earlier:
    """What `run.json` says of the earlier parts of a run, for the one that is to follow.

    `parts` has an entry for each, `files` every file of theirs that is closed for good, `head` what stays the same.
    `last_time_s` is that of their last row: times go on from there though the wall clock was set back meanwhile.
    """

    head: Mapping[str, Json]
    parts: Sequence[Json]
    interruptions: Sequence[Json]
    files: Sequence[Json] = field(default_factory=list)
    last_time_s: float = 0.0

    @property
    def number(self) -> int:
        """The number of the part to follow."""
        return len(self.parts) + 1

    @property
    def claimed(self) -> frozenset[str]:
        """The names of samples files, in small letters, that belong to earlier parts, whether they are there or not."""
        parts = [entry for entry in self.parts if isinstance(entry, dict)]
        names = [name for entry in parts for name in (entry.get("samples_file"), *_listed(entry.get("samples_files")))]
        return frozenset(str(name).lower() for name in names if name)


def _listed(found: Json) -> list[Json]:
    return found if isinstance(found, list) else []


def parts_of(manifest: Document) -> list[Document]:
    """An entry for each part of the run, in order; a run that was never interrupted has one."""
    if "parts" in manifest:
        return list(manifest["parts"])
    entry: Document = {
        "part": 1,
        "samples_file": SAMPLES_FIRST,
        "samples_files": manifest.get("samples_files"),
        "status": manifest.get("status"),
        "started": manifest.get("started"),
        "ended": manifest.get("ended"),
        "port": manifest.get("port"),
        "device": manifest.get("device"),
        "software": manifest.get("software"),
    }
    return [entry | {key: manifest.get(key) for key in PART_KEYS}]


def earlier_of(manifest: Document, folder: Path, interruption: Mapping[str, Json], going_on: Sequence[str]) -> Earlier:
    """What a part to follow needs; `going_on` are the files that it will add to. Raises OSError.

    The last part so far is closed: where its recorder was killed, its status is `broken off`, and its files are hashed
    as they were found.
    """
    parts = parts_of(manifest)
    if parts[-1].get("status") != "finished":
        parts[-1] |= {"status": "broken off"}
    parts[-1] |= {"samples_files": volume_names(folder, parts[-1])}
    known = {entry["file"]: entry for entry in manifest.get("files", [])}
    files: list[Json] = []
    volumes = [folder / name for part in parts for name in volume_names(folder, part)]
    for path in [*volumes, *sorted(folder.glob("trail*.csv"))]:
        if path.name not in going_on and (path.name in known or path.exists()):
            entry = known.get(path.name)
            files.append(entry if entry is not None else file_entry(path))
    return Earlier(
        head={key: manifest[key] for key in HEAD_KEYS if key in manifest},
        parts=parts,
        interruptions=[*manifest.get("interruptions", []), dict(interruption)],
        files=files,
        last_time_s=max([_last_time_s(volume_files(folder, part)) for part in parts], default=0.0),
    )


def _last_time_s(volumes: Sequence[Path]) -> float:
    """The time of the last row of a part; 0 where there is none. Raises RecordError."""
    if not volumes:
        return 0.0
    times = Stream(volumes, columns=("time_s",)).tail().numbers["time_s"]
    return float(times[-1]) if len(times) else 0.0


def file_entry(path: Path) -> dict[str, Json]:
    """A file as it is now, for the list of files. Raises OSError."""
    digest, size, lines = hashlib.sha256(), 0, 0
    with open(path, "rb") as file:
        while chunk := file.read(CHUNK_BYTES):
            digest.update(chunk)
            size += len(chunk)
            lines += chunk.count(b"\n")
    return {"file": path.name, "bytes": size, "lines": lines, "sha256": digest.hexdigest()}


def whole_account(parts: Sequence[Document]) -> dict[str, Json]:
    """The account over all parts: sums of those that have one, and which have none because they were broken off.

    Its gaps and loggings tell their part, since ticks of different parts have nothing to do with each other.
    """
    known = [(entry["part"], entry["samples"]) for entry in parts if entry.get("samples")]
    without = [entry["part"] for entry in parts if not entry.get("samples")]
    whole: dict[str, Json] = {key: sum(account[key] for _, account in known) for key in SUMS + MORE_SUMS}
    if any("thinned" in account for _, account in known):
        whole["thinned"] = sum(account.get("thinned", 0) for _, account in known)
    whole["complete"] = not without and all(account["complete"] for _, account in known)
    for key in ("gaps", "loggings"):
        whole[key] = [{"part": part} | dict(found) for part, account in known for found in account[key]]
    whole["parts_without_account"] = without
    return whole
