"""Files that only grow, in whole lines: one `write` call a batch, counted, hashed, and cut back to whole lines on
failure.

Nothing is buffered in the process, so a killed process loses nothing that was appended; `sync` guards against the
loss of power. Two more ways to the disk live here because they need the same care: a file replaced in one step, and
the reserve.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import os
import sys
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

RESERVE_BYTES = 256 * 1024
"""Kept back on the disk while a run is on, and given up when the disk is full, so that the reason can still be
written."""

CHUNK_BYTES = 1024 * 1024
READERS_HINDER = sys.platform == "win32"
"""Windows neither replaces nor removes a file that somebody has open, such as `run.json` while it is read."""
REPLACE_TRIES = 20
REPLACE_WAIT_S = 0.05
"""So long in all, a second, a reader may take."""

_APPEND = os.O_WRONLY | os.O_APPEND | getattr(os, "O_BINARY", 0) | getattr(os, "O_CLOEXEC", 0)


class AppendFile:
    """One file of lines, opened for appending only.

    `lines` and `size_bytes` count what was appended whole, `synced_lines` and `synced_bytes` what is known to be on the
    disk itself, and `sha256` is that of the contents. Not for use by two threads at once, but for `let_go`.
    """

    def __init__(self, path: Path, *, new: bool = True) -> None:
        """Creates the file and raises FileExistsError where there is one; with `new` false it must exist (a device,
        say)."""
        self.path = path
        self._handle = os.open(path, _APPEND | (os.O_CREAT | os.O_EXCL if new else 0), 0o666)
        self._hash = hashlib.sha256()
        self._open = self._takes_more = True
        self._torn = self._sync_failed = False
        self.size_bytes = self.synced_bytes = 0
        self.lines = self.synced_lines = 0

    @classmethod
    def reopen(cls, path: Path) -> tuple[AppendFile, int]:
        """The file that an earlier program wrote, to be gone on with, and how long a torn last line was cut off.

        Its counts and hash are those of all that is in it. Raises OSError, BlockingIOError where another program holds
        it; then nothing is changed.
        """
        found = cls(path, new=False)
        try:
            if not found.hold_alone():
                raise BlockingIOError(errno.EWOULDBLOCK, "another program is writing it", str(path))
            return found, found._take_over()
        except BaseException:
            found.close()
            raise

    def _take_over(self) -> int:
        """Count and hash what is in the file, and cut a torn last line off; its length."""
        torn_bytes = 0
        for data, torn_bytes in whole_lines(self.path):  # noqa: B007  (the last one is what is wanted)
            self._count(data)
        if torn_bytes:
            os.ftruncate(self._handle, self.size_bytes)
        os.fsync(self._handle)
        self.synced_bytes, self.synced_lines = self.size_bytes, self.lines
        return torn_bytes

    def hold_alone(self) -> bool:
        """Keep other programs from holding this file too, until it is closed; False where one does (POSIX only).

        Readers are not hindered. On a file system that knows no locks nobody is kept out.
        """
        if sys.platform == "win32":
            return True
        import fcntl

        try:
            fcntl.flock(self._handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            return error.errno not in (errno.EWOULDBLOCK, errno.EAGAIN, errno.EACCES)
        return True

    @property
    def dirty(self) -> bool:
        """Whether something was appended after the last `sync`."""
        return self.size_bytes != self.synced_bytes

    @property
    def sha256(self) -> str:
        """Of what was appended, in hexadecimal."""
        return self._hash.hexdigest()

    def append(self, data: bytes) -> None:
        """Write whole lines (`data` ends with LF) and leave them with the operating system.

        Raises OSError where not all of it could be written. The file then ends after the last whole line that could,
        and the counts say so; where the disk refuses to cut the rest off, a torn line stays behind, and nothing is
        appended until that has been cut off. A file that was closed takes nothing (EBADF).
        """
        self._cut()
        done = 0
        view = memoryview(data)
        try:
            while done < len(data):
                self._check_open()
                done += os.write(self._handle, view[done:])
        except OSError:
            whole = data.rfind(b"\n", 0, done) + 1
            self._count(data[:whole])
            self._torn = done > whole
            with contextlib.suppress(OSError):
                self._cut()
            raise
        self._count(data)

    def _cut(self) -> None:
        """Cut a torn line off, unless the file was let go: somebody else may go on with it. Raises OSError."""
        if self._torn and self._takes_more:
            os.ftruncate(self._handle, self.size_bytes)
            self._torn = False

    def _check_open(self) -> None:
        """A descriptor that was closed may be another file's by now. Raises OSError."""
        if not self._takes_more:
            raise OSError(errno.EBADF, "the file was closed", str(self.path))

    def _count(self, data: bytes) -> None:
        self._hash.update(data)
        self.size_bytes += len(data)
        self.lines += data.count(b"\n")

    def sync(self) -> None:
        """Have the disk itself hold what was appended; raises OSError where it cannot.

        After one failure it is still tried, and never believed again: a system may drop what it could not write and
        tell of it once (Rebello et al., Can Applications Recover from fsync Failures?, USENIX ATC 2020; from memory).
        """
        self._check_open()
        if not self.dirty:
            return
        try:
            os.fsync(self._handle)
        except OSError:
            self._sync_failed = True
            raise
        if self._sync_failed:
            raise OSError(errno.EIO, "an earlier sync of it failed, so what it holds is not certain", str(self.path))
        self.synced_bytes, self.synced_lines = self.size_bytes, self.lines

    def let_go(self) -> None:
        """Have it take no more, from any thread: one that hangs in a write finds that out after it. `close` follows."""
        self._takes_more = False

    def close(self) -> None:
        """Close the file without syncing; a second call does nothing."""
        if self._open:
            with contextlib.suppress(OSError):
                self._cut()
        self._takes_more = False
        if self._open:
            self._open = False
            os.close(self._handle)


def whole_length(data: bytes) -> int:
    """How many bytes of `data` are whole lines: up to its last LF, and none from the first NUL on.

    Our files have no NUL. A file system may leave them where it had made a file longer, and lost its power before the
    data came: what follows them was not synced either.
    """
    end = data.find(b"\0")
    return data.rfind(b"\n", 0, end if end >= 0 else len(data)) + 1


def whole_lines(path: Path) -> Iterator[tuple[bytes, int]]:
    """The file in pieces of whole lines, each with 0, and last an empty piece with the length of what follows them.

    Raises OSError.
    """
    rest = b""
    with open(path, "rb") as file:
        while chunk := file.read(CHUNK_BYTES):
            data = rest + chunk
            end = whole_length(data)
            rest = data[end:]
            if end:
                yield data[:end], 0
            if b"\0" in rest:
                yield b"", len(rest) - file.tell() + file.seek(0, os.SEEK_END)
                return
    yield b"", len(rest)


def sync_folder(folder: Path) -> None:
    """Have the disk hold the names in `folder`, where the system can (POSIX)."""
    if os.name != "posix":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def write_new(path: Path, data: bytes) -> None:
    """A new file of these contents, on the disk itself; raises OSError, FileExistsError where there is one."""
    with open(path, "xb") as file:
        file.write(data)
        file.flush()
        os.fsync(file.fileno())


def is_held(path: Path) -> bool | None:
    """Whether a program holds the file alone and so is still writing it; None where that cannot be told: on Windows,
    and where the file cannot be opened."""
    if sys.platform == "win32":
        return None
    import fcntl

    try:
        with open(path, "rb") as file:
            fcntl.flock(file, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        return True
    except OSError:
        return None
    return False


def replace_file(path: Path, data: bytes) -> None:
    """Give `path` the contents `data` in one step: a reader, or a crash, sees the old or the new, never a part.

    Raises OSError, and then the old contents stand, unless it was the folder alone that could not be synced.
    """
    part = path.with_name(path.name + ".part")
    try:
        with open(part, "wb") as file:
            file.write(data)
            file.flush()
            os.fsync(file.fileno())
        patiently(lambda: os.replace(part, path))
    except OSError:
        with contextlib.suppress(OSError):
            part.unlink()
        raise
    sync_folder(path.parent)


def patiently(work: Callable[[], None]) -> None:
    """Replace or remove a file; where a reader hinders that (Windows), try for a second. Raises OSError."""
    tries = REPLACE_TRIES if READERS_HINDER else 1
    while True:
        tries -= 1
        try:
            work()
        except PermissionError:
            if tries <= 0:
                raise
            time.sleep(REPLACE_WAIT_S)
        else:
            return


@dataclass(slots=True)
class Reserve:
    """Space taken on the disk beforehand, so that there is some when there is none left."""

    path: Path
    held: bool = False

    def take(self, size_bytes: int = RESERVE_BYTES) -> None:
        """Fill the reserve file; raises OSError where the disk has no room, FileExistsError where there is one."""
        try:
            with open(self.path, "xb") as file:
                file.write(os.urandom(size_bytes))  # a file system that compresses would keep zeros for nothing
                file.flush()
                os.fsync(file.fileno())
        except FileExistsError:
            raise
        except OSError:
            with contextlib.suppress(OSError):
                self.path.unlink()
            raise
        self.held = True

    def free(self) -> bool:
        """Give the space back; returns whether there was any. Never raises."""
        if not self.held:
            return False
        self.held = False
        with contextlib.suppress(OSError):
            self.path.unlink()
        return True
