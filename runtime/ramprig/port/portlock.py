"""A lock file for each open port, which keeps two ramprigs apart and tells who holds the port.

pyserial's `exclusive` is an advisory lock that a program which does not ask never meets, and it cannot say
who holds it. Our file in the temporary folder names the process: its number, its start and what it runs.
The lock on the file is the system's own and dies with the process, so a file left behind by a crash never
keeps anybody out.
"""

from __future__ import annotations

import hashlib
import json
import os
import sys
import tempfile
from dataclasses import asdict, dataclass
from datetime import UTC, datetime
from pathlib import Path

HOLDER_MAX_BYTES = 1000
"""Most that is read of a lock file: anybody may have written it."""


@dataclass(frozen=True, slots=True)
class Holder:
    """The process that holds a port: `pid`, when it took the port (UTC, RFC 3339), its own start where
    known, program.

    `process_start` is the system's clock ticks since boot, or 0; with the pid it tells a process from a
    later one that was given the same number.
    """

    pid: int
    since: str
    process_start: int
    program: str

    def __str__(self) -> str:
        return f"process {self.pid} ({self.program}, since {self.since})"


def process_start(pid: int) -> int:
    """Start of process `pid` in clock ticks since boot (field 22 of Linux's /proc/PID/stat); 0 where
    unknown.
    """
    try:
        stat = Path(f"/proc/{pid}/stat").read_text("utf-8", "replace")
        return int(stat.rpartition(")")[2].split()[19])
    except (OSError, ValueError, IndexError):
        return 0


def is_alive(holder: Holder) -> bool:
    """Whether the very process that wrote the entry still runs."""
    if os.name != "posix" or holder.pid <= 0:
        return False
    try:
        os.kill(holder.pid, 0)
    except ProcessLookupError:
        return False
    except OSError:
        pass  # it runs under another user
    return holder.process_start in (0, process_start(holder.pid))


def lock_path(device: str, folder: str | None = None) -> Path:
    """The lock file of the device that the name `device` leads to, whatever link it was reached by."""
    real = os.path.realpath(device)
    digest = hashlib.sha256(real.encode("utf-8", "surrogateescape")).hexdigest()[:16]
    return Path(folder or tempfile.gettempdir()) / f"ramprig-port-{digest}.lock"


class PortHeld(Exception):
    """Another process holds the port; `holder` says which, or is None where its file does not tell."""

    def __init__(self, holder: Holder | None) -> None:
        self.holder = holder
        super().__init__(str(holder) if holder else "another program")


class PortLock:
    """Holds the lock of one device from its making until `release`; raises `PortHeld` where another has it.

    Where the system has no such locks (Windows, which opens serial ports exclusively anyway) or the folder
    cannot be written, it holds nothing and keeps nobody out.
    """

    def __init__(self, device: str, *, folder: str | None = None, now: datetime | None = None) -> None:
        self._descriptor: int | None = None
        path = lock_path(device, folder)
        try:
            import fcntl
        except ImportError:
            return
        descriptor, writable = _opened(path)
        if descriptor is None:
            return
        try:
            fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError as error:
            holder = read_holder(path)
            os.close(descriptor)
            raise PortHeld(holder if holder and is_alive(holder) else None) from error
        self._descriptor = descriptor
        self._writable = writable
        if writable:
            since = (now or datetime.now(UTC)).strftime("%Y-%m-%dT%H:%M:%SZ")
            program = " ".join([os.path.basename(sys.argv[0] or "python"), *sys.argv[1:2]])
            holder = Holder(os.getpid(), since, process_start(os.getpid()), program[:100])
            os.ftruncate(descriptor, 0)
            os.write(descriptor, json.dumps(asdict(holder)).encode("utf-8"))

    def release(self) -> None:
        """Give the lock back; the file stays, empty. May be called again."""
        descriptor, self._descriptor = self._descriptor, None
        if descriptor is None:
            return
        if self._writable:
            os.ftruncate(descriptor, 0)
        os.close(descriptor)


def _opened(path: Path) -> tuple[int | None, bool]:
    """The lock file's descriptor and whether it can be written: another user's file can be locked, not
    written.
    """
    no_links = getattr(os, "O_NOFOLLOW", 0)  # a link planted in the temporary folder must not lead anywhere
    for flags, writable in ((os.O_RDWR | os.O_CREAT, True), (os.O_RDONLY, False)):
        try:
            return os.open(path, flags | no_links, 0o644), writable
        except OSError:
            continue
    return None, False


def read_holder(path: Path) -> Holder | None:
    """Who the lock file says holds the port; None where it does not say, or not in our form."""
    try:
        with path.open("rb") as file:
            entry = json.loads(file.read(HOLDER_MAX_BYTES))
        return Holder(int(entry["pid"]), str(entry["since"]), int(entry["process_start"]), str(entry["program"]))
    except (OSError, ValueError, KeyError, TypeError):
        return None
