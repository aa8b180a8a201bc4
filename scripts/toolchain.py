"""The programs outside Python that parts of the project need, and the Debian packages they come from: the one place.

`scripts/test.py` calls `provide`: as root on Debian it installs what is missing, elsewhere it names it. A part whose
tools are missing is skipped by its tests with `why_not`'s message, never passed.

Standard library only.
"""

import glob
import os
import re
import shutil
import subprocess
from collections.abc import Callable, Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Part:
    """A part of the project and what it needs: programs on the path, files (as patterns), and their packages."""

    title: str
    programs: tuple[str, ...]
    files: tuple[str, ...]
    packages: tuple[str, ...]


CORE = Part("the firmware's core as a program", ("cc",), (), ("gcc", "libc6-dev"))
BOARD = Part(
    "the ATmega328P firmware",
    ("avr-gcc", "avr-size", "avr-nm", "make"),
    ("/usr/lib/avr/include/avr/io.h",),
    ("gcc-avr", "avr-libc", "binutils-avr", "make"),
)
EMULATOR = Part(
    "the emulated board",
    ("cc",),
    ("/usr/include/simavr/sim_avr.h", "/usr/include/libelf.h", "/usr/lib/*/libsimavr.so"),
    ("gcc", "libc6-dev", "libsimavr-dev", "libelf-dev"),
)
PROOFS = Part(
    "the proofs of the firmware",
    ("frama-c", "why3", "cvc4", "z3"),
    (),
    ("frama-c-base", "why3", "cvc4", "z3"),
)
FUZZING = Part(
    "fuzzing of the firmware",
    ("clang",),
    ("/usr/lib/llvm-*/lib/clang/*/lib/linux/libclang_rt.fuzzer*",),
    ("clang", "libclang-rt-dev"),
)
GATES = Part("the FPGA blocks", ("iverilog", "vvp", "yosys"), (), ("iverilog", "yosys"))
PARTS = (CORE, BOARD, EMULATOR, PROOFS, FUZZING, GATES)
LISTS = "/var/lib/apt/lists/*Packages*"
"""Where apt keeps what the release has; nothing there on a system whose lists were never fetched, or thrown away."""
CANDIDATE = re.compile(r"^(\S+):\n(?:  Installed: .*\n)?  Candidate: (.+)$", re.MULTILINE)


def is_there(part: Part) -> bool:
    """Whether all a part needs is installed."""
    return all(shutil.which(name) for name in part.programs) and all(glob.glob(pattern) for pattern in part.files)


def why_not(*parts: Part) -> str:
    """Why one of the parts cannot be built or run here, naming the packages; "" where all can."""
    lacking = [part for part in parts if not is_there(part)]
    if not lacking:
        return ""
    return f"tools missing for {' and '.join(part.title for part in lacking)}: install {' '.join(packages_of(lacking))}"


def packages_of(parts: "Iterable[Part]") -> "list[str]":
    """The Debian packages of some parts, each once."""
    return list(dict.fromkeys(package for part in parts for package in part.packages))


def may_install() -> bool:
    """Whether this is a Debian machine and we are root."""
    debian = os.path.exists("/etc/debian_version") and shutil.which("apt-get") is not None
    return debian and hasattr(os, "geteuid") and os.geteuid() == 0


def known_packages(packages: "Iterable[str]") -> "set[str]":
    """Those of the packages that apt can install from the lists it has, or has installed."""
    plain = dict(os.environ, LC_ALL="C")
    done = subprocess.run(["apt-cache", "policy", *packages], env=plain, capture_output=True, text=True, check=False)
    return {name for name, candidate in CANDIDATE.findall(done.stdout) if candidate != "(none)"}


def install(parts: "list[Part]") -> None:
    """Install what some parts need; where that fails, fetch newer lists and try part by part, so that one may fail."""
    quiet = dict(os.environ, DEBIAN_FRONTEND="noninteractive")
    command = ["apt-get", "install", "-y", "-q", "--no-install-recommends"]
    if subprocess.run([*command, *packages_of(parts)], env=quiet, capture_output=True, check=False).returncode != 0:
        update_lists()
        for part in parts:
            subprocess.run([*command, *part.packages], env=quiet, capture_output=True, check=False)


def update_lists() -> None:
    """Fetch apt's lists of packages."""
    subprocess.run(["apt-get", "update", "-q"], capture_output=True, check=False)


def provide(say: "Callable[[str], None]") -> "list[Part]":
    """Install what is missing where we may, and say what was done or is missing; the parts that cannot be tested.

    A part with a package that this release does not have is not installed at all, and nothing is fetched for it: where
    it alone is missing, a start costs one look into apt's own lists.
    """
    lacking = [part for part in PARTS if not is_there(part)]
    unknown: dict[str, str] = {}
    if lacking and may_install():
        if not glob.glob(LISTS):
            update_lists()
        known = known_packages(packages_of(lacking))
        unknown = {part.title: " ".join(name for name in part.packages if name not in known) for part in lacking}
        possible = [part for part in lacking if not unknown[part.title]]
        if possible:
            say(f"Installing with apt-get: {' '.join(packages_of(possible))} ...")
            install(possible)
        lacking = [part for part in PARTS if not is_there(part)]
    for part in lacking:
        if names := unknown.get(part.title):
            say(f"SKIPPED, not passed: {part.title}; this release of the system has no package {names}")
        else:
            say(f"SKIPPED, not passed: {part.title}; it needs: apt-get install {' '.join(part.packages)}")
    return lacking
