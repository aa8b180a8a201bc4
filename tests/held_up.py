"""How long others kept this process from running: a bound on a latency is ours to keep, the load of the machine is not.

`held_up_s` reads it from Linux, which counts for each thread the time in which it could run and no core was free.
Elsewhere it is 0, and a bound holds for the machine too.
"""

from __future__ import annotations

from pathlib import Path

THREADS = Path("/proc/self/task")


def held_up_s() -> float:
    """Seconds that the threads of this process have waited for a core so far, all of them together."""
    waited_ns = 0
    for thread in THREADS.glob("*/schedstat"):
        try:
            waited_ns += int(thread.read_text("ascii").split()[1])
        except (OSError, IndexError):  # the thread has ended meanwhile
            continue
    return waited_ns / 1e9
