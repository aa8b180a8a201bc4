"""What people note of a run by hand (a brush's length, a noise, a photo), kept with the run and with the time.

Notes have a file of their own, in the form of events, so that they can be added while the run is on and after it, and
no file that the recorder writes is ever touched by another program.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from ramprig.errors import RecordError, UsageError
from ramprig.record.appendfile import AppendFile, sync_folder, write_new
from ramprig.record.events import Json, encode_line, from_rfc3339, rfc3339
from ramprig.record.folder import NOTES_FILE
from ramprig.record.reading import read_manifest

KIND = "operator_note"
TEXT_MAX = 4000
PHOTOS_MAX = 50
PHOTO_MAX_BYTES = 100 * 1024 * 1024
NOTES_MAX = 99_999


@dataclass(frozen=True, slots=True, kw_only=True)
class Note:
    """A note as it was kept: its number in the run, when, and the names of its photos in the run folder."""

    number: int
    utc: str
    photos: tuple[str, ...]


def add_note(folder: Path, text: str, *, unix_s: float, by: str = "", photos: Sequence[Path] = ()) -> Note:
    """Keep a note with the run in `folder`; its photos are copied and hashed. The disk holds it when this returns.

    Raises UsageError for an empty or too long text or a photo that cannot be read, RecordError where the folder is no
    run's or cannot be written.
    """
    text = text.strip()
    if not 0 < len(text) <= TEXT_MAX:
        raise UsageError(f"a note has 1 to {TEXT_MAX} characters; this one has {len(text)}")
    if len(photos) > PHOTOS_MAX:
        raise UsageError(f"a note has at most {PHOTOS_MAX} photos; this one has {len(photos)}")
    manifest = read_manifest(folder)
    contents = [(path, _read(path)) for path in photos]
    try:
        return _keep(folder, manifest["started"], text, unix_s, by, contents)
    except OSError as error:
        raise RecordError(f"the note cannot be kept in {folder}: {error.strerror or error}") from error


def _read(path: Path) -> bytes:
    try:
        with open(path, "rb") as file:
            data = file.read(PHOTO_MAX_BYTES + 1)
    except OSError as error:
        raise UsageError(f"{path} cannot be read: {error.strerror}") from error
    if len(data) > PHOTO_MAX_BYTES:
        raise UsageError(f"{path} is larger than {PHOTO_MAX_BYTES} bytes")
    return data


def _keep(
    folder: Path, started: str, text: str, unix_s: float, by: str, contents: Sequence[tuple[Path, bytes]]
) -> Note:
    path = folder / NOTES_FILE
    file = AppendFile.reopen(path)[0] if path.exists() else AppendFile(path)
    try:
        number = file.lines + 1
        if number > NOTES_MAX:
            raise UsageError(f"a run has at most {NOTES_MAX} notes")
        entries: list[Json] = []
        names = []
        for place, (photo, data) in enumerate(contents, start=1):
            name = _free_name(folder, f"note-{number}-{place}", photo.suffix.lower()[:8])
            write_new(folder / name, data)
            names.append(name)
            digest = hashlib.sha256(data).hexdigest()
            entries.append({"file": name, "name": str(photo), "bytes": len(data), "sha256": digest})
        utc = rfc3339(unix_s)
        line: dict[str, Json] = {
            "tick": None,
            "time_s": round(unix_s - from_rfc3339(started).timestamp(), 3),
            "utc": utc,
            "kind": KIND,
            "number": number,
            "text": text,
            "by": by,
            "photos": entries,
        }
        file.append(encode_line(line))
        file.sync()
        sync_folder(folder)
    finally:
        file.close()
    return Note(number=number, utc=utc, photos=tuple(names))


def _free_name(folder: Path, stem: str, suffix: str) -> str:
    """A name that no file has: a copy whose note a crash has lost may be there already."""
    name, again = stem + suffix, 1
    while (folder / name).exists():
        again += 1
        name = f"{stem}-{again}{suffix}"
    return name
