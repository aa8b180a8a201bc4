"""Make the project's private Python environment ready, once, with nothing but a bare Python 3.11 or newer.

`scripts/test.py` and `scripts/demo.py` call `ready()`, which returns the environment's Python. The
environment is the folder `.env` at the top of the project: every package in it is pinned by hash in
`.requirements.lock`, and the project itself is installed editable. A stamp inside says what it was made
from, so that the second start is immediate; an environment made by another Python, moved to another place
or damaged is made again.

Standard library only. The syntax stays readable to Python 3.6 as far as the check below, so that an old
Python gets a sentence instead of a syntax error.
"""

import hashlib
import json
import os
import shutil
import subprocess
import sys
import tempfile
import time
from typing import IO

OLDEST = (3, 11)
if sys.version_info < OLDEST:
    sys.exit(
        "ramprig needs Python %d.%d or newer; this is Python %d.%d (%s). "  # noqa: UP031 - old Pythons read this
        "Install a newer one and start the script with it, for example: python3.11 scripts/test.py"
        % (OLDEST + sys.version_info[:2] + (sys.executable,))
    )

ROOT = os.path.dirname(os.path.dirname(os.path.abspath(__file__)))
ENV_DIR = os.path.join(ROOT, ".env")
LOCK_FILE = os.path.join(ROOT, ".requirements.lock")
PROJECT_FILE = os.path.join(ROOT, "pyproject.toml")
STAMP_NAME = "ramprig-stamp.json"
NEEDED_MODULES = (
    "numpy",
    "serial",
    "yaml",
    "prompt_toolkit",
    "pytest",
    "hypothesis",
    "mypy",
    "ruff",
    "ramprig",
)
OTHER_RUN_WAIT_S = 900.0
OUTPUT_TAIL_LINES = 30


class NotReady(Exception):
    """The environment could not be made; the message says why and what to do."""


def say(text: str) -> None:
    """Print one line at once, even into a pipe."""
    print(text, flush=True)


def base_python() -> str:
    """Path of the Python outside any virtual environment that the running one was started from."""
    return str(getattr(sys, "_base_executable", None) or sys.executable)


def env_python(env_dir: str = ENV_DIR) -> str:
    """Path of the Python inside the environment `env_dir`, whether or not it is there."""
    if os.name == "nt":
        return os.path.join(env_dir, "Scripts", "python.exe")
    return os.path.join(env_dir, "bin", "python")


def inside(env_dir: str = ENV_DIR) -> bool:
    """Whether the running Python is the environment's own."""
    return os.path.realpath(sys.prefix) == os.path.realpath(env_dir)


def interpreter_facts() -> "dict[str, str]":
    """What ties an environment to one interpreter: its kind, exact version and home."""
    return {
        "implementation": sys.implementation.name,
        "version": ".".join(str(part) for part in sys.version_info[:3]),
        "home": os.path.realpath(sys.base_prefix),
    }


def wanted_stamp(*, env_dir: str, project_file: str, lock_file: str) -> "dict[str, str]":
    """The stamp of an up-to-date environment: interpreter, place, and digests of the files it comes from."""
    stamp = interpreter_facts()
    stamp["place"] = os.path.realpath(env_dir)
    for name, path in (("project", project_file), ("lock", lock_file)):
        with open(path, "rb") as file:
            stamp[name] = hashlib.sha256(file.read()).hexdigest()
    return stamp


def read_stamp(env_dir: str) -> "dict[str, str]":
    """The stamp found in `env_dir`; empty where there is none or it cannot be read."""
    try:
        with open(os.path.join(env_dir, STAMP_NAME), encoding="utf-8") as file:
            found = json.load(file)
    except (OSError, ValueError):
        return {}
    return {str(key): str(value) for key, value in found.items()} if isinstance(found, dict) else {}


def write_stamp(env_dir: str, stamp: "dict[str, str]") -> None:
    """Write the stamp so that it is there whole or not at all."""
    path = os.path.join(env_dir, STAMP_NAME)
    with open(path + ".new", "w", encoding="utf-8") as file:
        json.dump(stamp, file, indent=1, sort_keys=True)
    os.replace(path + ".new", path)


def probe(env_dir: str) -> "dict[str, str]":
    """Ask the environment's Python what it is and which packages it lacks; empty where it does not run."""
    code = (
        "import sys, json, importlib.util as u\n"
        "missing = [m for m in sys.argv[1:] if u.find_spec(m) is None]\n"
        "print(json.dumps({'implementation': sys.implementation.name, 'home': sys.base_prefix,"
        " 'version': '.'.join(map(str, sys.version_info[:3])), 'missing': ' '.join(missing)}))\n"
    )
    try:
        done = subprocess.run(
            [env_python(env_dir), "-I", "-c", code, *NEEDED_MODULES],
            stdout=subprocess.PIPE,
            stderr=subprocess.DEVNULL,
            timeout=60,
            check=True,
        )
        facts = json.loads(done.stdout.decode("utf-8"))
    except (OSError, ValueError, subprocess.SubprocessError):
        return {}
    facts["home"] = os.path.realpath(facts["home"])
    return {str(key): str(value) for key, value in facts.items()}


def plan(*, wanted: "dict[str, str]", found: "dict[str, str]", probed: "dict[str, str]") -> str:
    """What must be done: `use` as it is, `update` the packages inside, or `rebuild` from nothing.

    `wanted` is the up-to-date stamp, `found` the one in the environment (empty: none), `probed` the answer
    of the environment's Python (empty: it does not run). An environment without a stamp that belongs to
    this interpreter is adopted by an update.
    """
    if not probed or any(probed.get(key) != wanted[key] for key in ("implementation", "version", "home")):
        return "rebuild"
    if found and found.get("place") != wanted["place"]:
        return "rebuild"
    if found == wanted and not probed.get("missing"):
        return "use"
    return "update"


def venv_package() -> str:
    """Name of the Debian package that gives this Python its `venv` and `ensurepip`."""
    return "python{}.{}-venv".format(*sys.version_info[:2])


def can_make_environments() -> bool:
    """Whether this Python can put pip into a new environment (Debian ships `ensurepip` apart)."""
    try:
        import ensurepip
    except ImportError:
        return False
    try:
        return bool(ensurepip.version())
    except Exception:  # Debian's stripped module fails in several ways; each means the same
        return False


def on_debian() -> bool:
    """Whether this machine installs packages with apt-get."""
    return os.path.exists("/etc/debian_version") and shutil.which("apt-get") is not None


def missing_venv_message(package: str, *, debian: bool) -> str:
    """What to tell a user whose Python cannot make environments."""
    problem = f"this Python ({sys.executable}) cannot make a private environment: it has no 'ensurepip' module. "
    if debian:
        return problem + f"Install it with: sudo apt-get install {package}   and start this script again."
    return problem + "Install your system's package for Python's venv module, or a Python from python.org."


def install_venv_package() -> None:
    """Give this Python its `ensurepip` by apt-get, as root on Debian; elsewhere tell the user what to do."""
    package = venv_package()
    debian = on_debian()
    if not debian or not hasattr(os, "geteuid") or os.geteuid() != 0:
        raise NotReady(missing_venv_message(package, debian=debian))
    say(f"This Python lacks 'ensurepip': installing the Debian package {package} with apt-get ...")
    quiet = dict(os.environ, DEBIAN_FRONTEND="noninteractive")
    install = ["apt-get", "install", "-y", "-q", "--no-install-recommends", package]
    if subprocess.run(install, env=quiet, capture_output=True, check=False).returncode != 0:
        run_or_explain(["apt-get", "update", "-q"], "apt-get update failed", environment=quiet)
        run_or_explain(install, f"apt-get could not install {package}", environment=quiet)
    done = subprocess.run([base_python(), "-I", "-c", "import ensurepip"], capture_output=True, check=False)
    if done.returncode != 0:
        raise NotReady(missing_venv_message(package, debian=True))


def run_or_explain(command: "list[str]", failure: str, *, environment: "dict[str, str] | None" = None) -> None:
    """Run `command` quietly; on failure raise `NotReady` with `failure` and the end of its output."""
    done = subprocess.run(
        command, env=environment, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, cwd=ROOT, check=False
    )
    if done.returncode != 0:
        lines = done.stdout.decode("utf-8", "replace").splitlines()[-OUTPUT_TAIL_LINES:]
        raise NotReady("\n".join([f"{failure}; it ran: {' '.join(command)}", *("    " + line for line in lines)]))


def make_environment(env_dir: str) -> None:
    """Make an empty environment with pip in it, in place of whatever is at `env_dir`."""
    if not can_make_environments():
        install_venv_package()
    if os.path.islink(env_dir) or os.path.isfile(env_dir):
        os.unlink(env_dir)
    run_or_explain([base_python(), "-I", "-m", "venv", "--clear", env_dir], "the environment could not be made")


def install(env_dir: str, *, lock_file: str) -> None:
    """Bring the packages in `env_dir` to what the lock file says, and the project itself as editable."""
    pip = [
        env_python(env_dir),
        "-I",
        "-m",
        "pip",
        "--disable-pip-version-check",
        "--no-input",
        "install",
        "--quiet",
    ]
    hint = "is there a network, and can pip reach its package index?"
    run_or_explain(
        [*pip, "--require-hashes", "--no-deps", "--requirement", lock_file],
        f"the packages were not installed ({hint})",
    )
    run_or_explain([*pip, "--no-deps", "--no-build-isolation", "--editable", ROOT], "the project was not installed")


def wait_for_turn(lock_path: str) -> "IO[str] | None":
    """Hold the lock file while the environment is made, so that two starts do not build over each other.

    Returns the open file, to be kept until done, or None where the system has no such lock. Waits at most
    `OTHER_RUN_WAIT_S`, then raises `NotReady`.
    """
    try:
        import fcntl
    except ImportError:
        return None
    file = open(lock_path, "w", encoding="utf-8")  # noqa: SIM115 - held open on purpose: closing gives the turn away
    deadline_s = time.monotonic() + OTHER_RUN_WAIT_S
    told = False
    while True:
        try:
            fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            if time.monotonic() > deadline_s:
                file.close()
                raise NotReady(f"another run has been preparing the environment for too long ({lock_path})") from None
            if not told:
                say("Waiting for another run that is preparing the environment ...")
                told = True
            time.sleep(0.2)
        else:
            return file


def turn_path(env_dir: str) -> str:
    """The lock file's path for `env_dir`, in the temporary folder: the project's own stays clean."""
    owner = str(os.getuid()) if hasattr(os, "getuid") else "user"
    digest = hashlib.sha256(os.path.realpath(env_dir).encode("utf-8")).hexdigest()[:16]
    return os.path.join(tempfile.gettempdir(), f"ramprig-env-{owner}-{digest}.lock")


def ready() -> str:
    """Return the environment's Python, made or brought up to date where needed; else raise `NotReady`."""
    wanted = wanted_stamp(env_dir=ENV_DIR, project_file=PROJECT_FILE, lock_file=LOCK_FILE)
    if plan(wanted=wanted, found=read_stamp(ENV_DIR), probed=probe(ENV_DIR)) == "use":
        return env_python()
    turn = wait_for_turn(turn_path(ENV_DIR))
    try:
        todo = plan(wanted=wanted, found=read_stamp(ENV_DIR), probed=probe(ENV_DIR))
        if todo == "rebuild":
            say("Making the private environment .env (downloads about 100 MB the first time, a minute or two) ...")
            make_environment(ENV_DIR)
        elif todo == "update":
            say("Bringing the private environment .env up to date with .requirements.lock ...")
        if todo != "use":
            install(ENV_DIR, lock_file=LOCK_FILE)
            write_stamp(ENV_DIR, wanted)
        return env_python()
    finally:
        if turn is not None:
            turn.close()


def clean_variables() -> "dict[str, str]":
    """The caller's environment variables, without those that bend Python's imports."""
    return {key: value for key, value in os.environ.items() if key not in ("PYTHONHOME", "PYTHONPATH")}


def ready_or_exit() -> str:
    """As `ready`, for a script's `main`: a failure is told in plain words and exits with status 2."""
    try:
        return ready()
    except NotReady as error:
        print(f"Not ready: {error}", file=sys.stderr)
        sys.exit(2)
    except KeyboardInterrupt:
        print("Interrupted; start again to go on.", file=sys.stderr)
        sys.exit(130)
