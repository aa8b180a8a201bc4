"""The sequence that a run was made from, read back from the copies in its folder.

All copies lie side by side in the folder, wherever the files were; `run.json` says which copy stands for which.
"""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

from ramprig.errors import RecordError

from .reading import Sequence, read_sequence

Document = Mapping[str, Any]  # JSON as it comes, of a checked format


def kept_sequence(folder: Path, manifest: Document) -> Sequence:
    """The sequence with the values that it ran with; places in it name the files as they were called then.

    Raises RecordError where the folder has no copy of it, FileError where a copy cannot be read.
    """
    inputs = list(manifest.get("inputs") or [])
    first = next((entry for entry in inputs if entry.get("role") == "sequence"), None)
    if first is None:
        raise RecordError(f"{folder} has no copy of its sequence")
    copies = {str(entry["name"]): folder / str(entry["file"]) for entry in inputs if entry.get("role") != "bench"}
    return read_sequence(str(first["name"]), settings=kept_values(manifest), copies=copies)


def kept_values(manifest: Document) -> dict[str, str]:
    """The named values that the run was made with."""
    values = (manifest.get("settings") or {}).get("values") or {}
    return {str(name): str(value) for name, value in values.items()}
