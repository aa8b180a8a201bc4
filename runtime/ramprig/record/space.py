"""Watches the free space of the disk while a run is on: warns in time, and asks for a stop in order before there is
none."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from ..errors import RecordError
from ..quantity import format_bytes
from .writer import Trouble, TroubleKind

MB = 1_000_000


def disk_free(path: Path) -> int:
    """Bytes that this user may still write on the disk of `path`; raises OSError."""
    return shutil.disk_usage(path).free


@dataclass(frozen=True, slots=True)
class SpacePolicy:
    """Below `warn_bytes` free a warning, below `stop_bytes` a stop in order, while the log can still be written."""

    warn_bytes: int = 256 * MB
    stop_bytes: int = 32 * MB

    @classmethod
    def for_run(cls, predicted_bytes: int, *, stop_bytes: int = 32 * MB) -> SpacePolicy:
        """Warns at twice what the run is predicted to need, above what is kept for the stop."""
        return cls(warn_bytes=2 * predicted_bytes + stop_bytes, stop_bytes=stop_bytes)


def standing(path: Path) -> Path:
    """The folder, or the nearest above it that is there already: it has the disk on which it will be made.

    Where there is none (a drive that is not there), the topmost.
    """
    path = path.absolute()
    while not path.exists() and path != path.parent:
        path = path.parent
    return path


def check_space(path: Path, *, free: Callable[[Path], int] = disk_free) -> None:
    """Raise RecordError where a run in `path` would have to be stopped at once for lack of space."""
    kept_bytes = SpacePolicy().stop_bytes
    try:
        found = free(standing(path))
    except OSError:
        return  # whoever writes there finds out, and says so
    if found < kept_bytes:
        raise RecordError(
            f"{path}: {format_bytes(found)} are free, and {format_bytes(kept_bytes)} are kept back: make room, or "
            "record elsewhere with --runs"
        )


class SpaceWatch:
    """Looks when it is told to, and passes on what it finds."""

    def __init__(
        self,
        folder: Path,
        policy: SpacePolicy,
        *,
        tell: Callable[[Trouble], None],
        free: Callable[[Path], int] = disk_free,
    ) -> None:
        self._folder = folder
        self._policy = policy
        self._tell = tell
        self._free = free

    def look(self) -> None:
        """Tell of too little space. A folder whose disk cannot be asked (gone, say) is a disk error."""
        try:
            free = self._free(self._folder)
        except OSError as error:
            self._tell(Trouble(TroubleKind.DISK_ERROR, f"the run folder cannot be reached: {error.strerror or error}"))
            return
        if free < self._policy.stop_bytes:
            kept = format_bytes(self._policy.stop_bytes)
            text = f"the disk is nearly full: {format_bytes(free)} free, {kept} are kept back"
            self._tell(Trouble(TroubleKind.SPACE_LOW, text))
        elif free < self._policy.warn_bytes:
            wanted = format_bytes(self._policy.warn_bytes)
            text = f"the disk is filling up: {format_bytes(free)} free, {wanted} are wanted"
            self._tell(Trouble(TroubleKind.SPACE_WARNING, text))
