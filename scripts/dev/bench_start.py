"""Measures how long `ramprig --help` takes, and `ramprig shell` to its prompt on a terminal.

The bare interpreter's own start is measured beside them, since that part is nobody's to mend.

    python scripts/dev/bench_start.py
"""

from __future__ import annotations

import os
import select
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

HELP_AIM_S = 0.15
PROMPT = b"off>"
PROMPT_BOUND_S = 60.0
BENCH = Path(__file__).resolve().parent.parent / "vent_bench.yaml"


def fastest_s(work: Callable[[], float], repeats: int) -> float:
    """The shortest of so many, in s."""
    return min(work() for _ in range(repeats))


def command_s(*words: str) -> float:
    """From the start of this Python with these words to its end, in s."""
    began_s = time.perf_counter()
    subprocess.run([sys.executable, *words], stdout=subprocess.DEVNULL, check=True)
    return time.perf_counter() - began_s


def help_s(*, repeats: int = 7) -> float:
    """`ramprig --help` from start to end, in s."""
    return fastest_s(lambda: command_s("-m", "ramprig", "--help"), repeats)


def python_s(*, repeats: int = 7) -> float:
    """The interpreter that does nothing, in s."""
    return fastest_s(lambda: command_s("-c", "pass"), repeats)


def prompt_s(*, repeats: int = 3) -> float:
    """`ramprig shell` on a pseudo-terminal, on the mock, from its start to the prompt, in s. POSIX only."""
    return fastest_s(_to_prompt, repeats)


def _to_prompt() -> float:
    import pty

    with tempfile.TemporaryDirectory() as folder:
        master, slave = pty.openpty()
        command = [sys.executable, "-m", "ramprig", "shell", "--bench", str(BENCH), "--port", "mock:"]
        environment = {**os.environ, "TERM": "xterm", "HOME": folder, "XDG_STATE_HOME": folder}
        began_s = time.perf_counter()
        shell = subprocess.Popen(
            command, stdin=slave, stdout=slave, stderr=slave, cwd=folder, env=environment, start_new_session=True
        )
        os.close(slave)
        try:
            _wait_for(master, PROMPT)
            return time.perf_counter() - began_s
        finally:
            shell.terminate()
            _drain(master)
            os.close(master)
            shell.wait(PROMPT_BOUND_S)


def _wait_for(master: int, wanted: bytes) -> None:
    said = b""
    bound_s = time.perf_counter() + PROMPT_BOUND_S
    while wanted not in said:
        if not select.select([master], [], [], max(0.0, bound_s - time.perf_counter()))[0]:
            raise SystemExit(f"the shell gave no prompt; it said {said!r}")
        said += os.read(master, 65536)


def _drain(master: int) -> None:
    """Take what the shell says at its end, so that it never waits for somebody to read it."""
    try:
        while os.read(master, 65536):
            pass
    except OSError:
        return


def lines() -> list[str]:
    """The figures as sentences."""
    found = [
        f"start of --help:     {help_s():.3f} s (aim {HELP_AIM_S} or less); the bare interpreter {python_s():.3f} s",
    ]
    if os.name == "posix":
        found.append(f"start of the shell:  {prompt_s():.2f} s to its prompt, the mock opened and checked")
    return found


def main() -> None:
    """Print the figures."""
    print("\n".join(lines()))


if __name__ == "__main__":
    main()
