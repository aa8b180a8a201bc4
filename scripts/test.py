"""Run every check of the project: lint, strict types, tests. Needs only a bare Python 3.11 or newer.

    python3 scripts/test.py                    everything but the tests marked `soak`
    python3 scripts/test.py --quick            the tests alone
    python3 scripts/test.py --soak             everything, the minutes-long tests included
    python3 scripts/test.py tests/test_x.py -k name     what is not an option of ours goes to pytest

The tests run on all cores, a file at a time, long ones first; with arguments for pytest they run one after the other,
to be looked at.
All checks run even where an earlier one fails; the exit status is 0 only if all passed. The compilers and libraries
that the firmware's tests need are installed where we may, and otherwise named: those tests are then skipped.
"""

import os
import subprocess
import sys

sys.path.insert(0, os.path.dirname(os.path.abspath(__file__)))
import environment
import toolchain

OPTIONS = ("--quick", "--soak")


def workers() -> int:
    """How many processes run tests: one more than there are cores, since some tests wait for the clock."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
    return cores + 1


def commands(python: str, arguments: "list[str]") -> "list[tuple[str, list[str]]]":
    """The checks to run, as (title, command) in order, for the script's `arguments`; pytest comes last."""
    passed_on = [argument for argument in arguments if argument not in OPTIONS]
    marks = ["-m", "soak or not soak"] if "--soak" in arguments else []
    spread = ["--numprocesses", str(workers()), "--dist", "loadfile", "--no-loadscope-reorder"]
    tests = ("pytest: the tests", [python, "-m", "pytest", *([] if passed_on else spread), *marks, *passed_on])
    if "--quick" in arguments:
        return [tests]
    return [
        ("ruff: lint", [python, "-m", "ruff", "check", "."]),
        ("mypy: strict types", [python, "-m", "mypy", "--strict"]),
        tests,
    ]


def main(arguments: "list[str]") -> int:
    """Run the checks and return the exit status."""
    if any(argument in ("-h", "--help") for argument in arguments):
        print(__doc__)
        return 0
    python = environment.ready_or_exit()
    lacking = toolchain.provide(environment.say)
    verdicts = []
    for title, command in commands(python, arguments):
        print(f"\n=== {title} ===", flush=True)
        done = subprocess.run(command, cwd=environment.ROOT, env=environment.clean_variables(), check=False)
        verdicts.append((title.split(":")[0], done.returncode == 0))
    summary = [f"{name} {'passed' if passed else 'FAILED'}" for name, passed in verdicts]
    summary += [f"{part.title} SKIPPED (tools missing)" for part in lacking]
    print(", ".join(summary), flush=True)
    return 0 if all(passed for _, passed in verdicts) else 1


if __name__ == "__main__":
    try:
        sys.exit(main(sys.argv[1:]))
    except KeyboardInterrupt:
        sys.exit(130)
