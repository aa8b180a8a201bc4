"""Building the C parts with the machine's own compiler, once for each board and state of the sources.

What has been built is kept in the user's cache under a name made from everything that went into it, so that it is used
again by later runs and never where a source, an option or the compiler's name has changed.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import shutil
import subprocess
import sys
import tempfile
from functools import cache
from pathlib import Path

from ramprig.errors import UsageError

COMPILERS = ("cc", "gcc", "clang")
"""Looked for in this order; the environment's `CC` comes before them."""

FLAGS = ("-std=c11", "-O3", "-ffp-contract=off")
"""Without contraction the C plant rounds as the Python one does."""

WHOLE = ("-flto", "-fno-semantic-interposition")
"""Lets the compiler see all files at once, and trust that nobody puts other functions in the place of the library's:
15 % fewer instructions of a tick. For what runs in this process; left out where compiler and linker cannot do it."""

BUILD_TIMEOUT_S = 120.0

BUILDS_MAX = 64
"""Most files that are kept; beyond, the one used longest ago goes."""

HERE = Path(__file__).resolve()
INSTALLED = HERE.parents[2] / "_firmware"
"""Where a wheel has the C sources."""
CHECKOUT = HERE.parents[4] / "firmware_ref"
"""Where a checkout has them."""

NO_COMPILER = "there is no C compiler here (Debian: apt-get install gcc libc6-dev)"


def firmware() -> Path | None:
    """The folder of the C sources, None where they are not installed."""
    return next((path for path in (INSTALLED, CHECKOUT) if (path / "core" / "device.c").exists()), None)


def compiler() -> str | None:
    """The C compiler to use, None where there is none."""
    named = os.environ.get("CC", "")
    names = (named, *COMPILERS) if named else COMPILERS
    return next((found for name in names if (found := shutil.which(name))), None)


def why_not() -> str | None:
    """Why the C parts cannot be built here, None where they can."""
    if firmware() is None:
        return "the sources of the firmware core are not installed"
    return NO_COMPILER if compiler() is None else None


def simulated_sources(root: Path) -> list[Path]:
    """The core, the plant and what ties them together."""
    plant = [path for path in sorted((root / "plant").glob("*.c")) if path.name != "probe.c"]
    return [*sorted((root / "core").glob("*.c")), *plant, root / "ports" / "simulated" / "simulated.c"]


def cache_folder() -> Path:
    """The user's folder for what can be made again at any time."""
    if sys.platform == "win32":
        base = os.environ.get("LOCALAPPDATA") or str(Path.home() / "AppData" / "Local")
    elif sys.platform == "darwin":
        base = str(Path.home() / "Library" / "Caches")
    else:
        base = os.environ.get("XDG_CACHE_HOME") or str(Path.home() / ".cache")
    return Path(base) / "ramprig" / "core"


@cache
def _sources_digest(root: Path) -> bytes:
    """A digest of every C file and header; a program that runs does not follow changes of them."""
    digest = hashlib.sha256()
    for path in sorted([*root.rglob("*.c"), *root.rglob("*.h")]):
        digest.update(str(path.relative_to(root)).encode() + b"\0" + path.read_bytes() + b"\0")
    return digest.digest()


def build(name: str, sources: list[Path], options: tuple[str, ...], *, shared: bool) -> Path:
    """The program, or with `shared` the shared library, made of these sources; built now or earlier.

    Raises UsageError where there is no compiler or the compiler refuses.
    """
    reason = why_not()
    root, command = firmware(), compiler()
    if reason is not None or root is None or command is None:
        raise UsageError(f"the firmware core cannot be built: {reason}")
    flags = (*FLAGS, *((*WHOLE, "-shared", "-fPIC") if shared else ()), *options)
    key = hashlib.sha256(_sources_digest(root) + "\0".join((command, sys.platform, *flags)).encode()).hexdigest()
    suffix = (".dll" if sys.platform == "win32" else ".so") if shared else ""
    folder = _writable(cache_folder())
    out = folder / f"{name}-{key[:20]}{suffix}"
    if not out.exists():
        _compile(command, flags, sources, out)
        _prune(folder)
    with contextlib.suppress(OSError):
        os.utime(out)
    return out


def _prune(folder: Path) -> None:
    """Remove what was used longest ago; what cannot be removed, being in use, stays."""
    with contextlib.suppress(OSError):
        kept = sorted((path for path in folder.iterdir() if path.is_file()), key=lambda path: path.stat().st_mtime)
        for path in kept[:-BUILDS_MAX]:
            path.unlink()


def _writable(folder: Path) -> Path:
    """The folder, made where it is not there; a temporary one where nothing can be written there."""
    with contextlib.suppress(OSError):
        folder.mkdir(parents=True, exist_ok=True)
        if os.access(folder, os.W_OK):
            return folder
    return _temporary()


@cache
def _temporary() -> Path:
    return Path(tempfile.mkdtemp(prefix="ramprig-core-"))


def _compile(command: str, flags: tuple[str, ...], sources: list[Path], out: Path) -> None:
    """Build beside its place and rename, so that another process never sees half a library."""
    with tempfile.TemporaryDirectory(dir=out.parent, prefix="building-") as folder:
        fresh = Path(folder) / out.name
        line = [command, *flags, "-o", str(fresh), *map(str, sources), "-lm"]
        done = _run(line)
        if done.returncode != 0:
            done = _run([word for word in line if word not in WHOLE])
        if done.returncode != 0:
            raise UsageError(f"the firmware core cannot be built: {command} says\n{done.stderr.strip()[:2000]}")
        os.replace(fresh, out)


def _run(line: list[str]) -> subprocess.CompletedProcess[str]:
    """One call of the compiler, whatever it says; UsageError where it cannot be called, or takes too long."""
    try:
        return subprocess.run(line, capture_output=True, text=True, timeout=BUILD_TIMEOUT_S, check=False)
    except (OSError, subprocess.TimeoutExpired) as error:
        raise UsageError(f"the firmware core cannot be built: {line[0]}: {error}") from error
