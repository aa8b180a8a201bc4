"""The demonstration itself, told inside the private environment: see `demo.py`, which makes that ready.

A mock board runs in another process. A whole endurance sequence passes on it over a serial port; then its shaft jams in
the middle of a second run, and the board trips on overcurrent. Both run folders stay for you to look at.
"""

from __future__ import annotations

import csv
import os
import shlex
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from ramprig.cautions import cautions_lines

SCRIPTS = Path(__file__).resolve().parent
BENCH = SCRIPTS / "vent_bench.yaml"
SEQUENCE = SCRIPTS / "vent_endurance.yaml"
WANTED_CODES = (0, 3)
"""Passed, tripped."""
PORT_WAIT_S = 30.0
RUN_WAIT_S = 300.0
JAM_WAIT_S = 60.0
JAM_ABOVE_PCT = 55.0
"""The shaft jams once the motor is driven by more than this: at rest the board would find a stall first."""
LOOK_EVERY_S = 0.1


def say(text: str = "") -> None:
    """A line, at once."""
    print(text, flush=True)


def ramprig(*words: object) -> list[str]:
    """The command `ramprig` with these words, run by this Python."""
    return [sys.executable, "-m", "ramprig", *map(str, words)]


def show(*words: object) -> None:
    """The command as the user would type it."""
    say("    $ ramprig " + shlex.join(map(str, words)))


class Mock:
    """A mock board in another process; `port` is what a host opens."""

    def __init__(self) -> None:
        words = ["mock", "--bench", BENCH]
        if os.name != "posix":
            words += ["--tcp", "127.0.0.1:0"]
        show(*words)
        self._process = subprocess.Popen(
            ramprig(*words), stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True, encoding="utf-8"
        )
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._control, self._said = self._process.stdin, self._process.stdout
        self.port = self._said.readline().strip()
        say(f"    {self.port}")

    def obey(self, line: str) -> None:
        """Have the mock carry out a line of control, and show both."""
        say(f"    > {line}")
        self._control.write(line + "\n")
        self._control.flush()
        say(f"    {self._said.readline().strip()}")

    def end(self) -> None:
        """End the process."""
        self._process.terminate()
        try:
            self._process.communicate(timeout=10)
        except subprocess.TimeoutExpired:
            self._process.kill()


def begin_run(port: str, runs: Path, title: str, passes: int) -> subprocess.Popen[bytes]:
    """Begin a run of the endurance sequence in another process; its words go straight to the user."""
    words = ["run", SEQUENCE, "--set", f"passes={passes}", "--port", port, "--runs", runs, "--title", title, "--yes"]
    show(*words)
    return subprocess.Popen(ramprig(*words))


def newest_duty_pct(runs: Path) -> float:
    """The vent's duty in the last whole row of the newest run under `runs`, 0 where there is none yet."""
    files = sorted(runs.glob("*/samples.csv"), key=lambda path: path.stat().st_mtime)
    if not files:
        return 0.0
    with open(files[-1], "rb") as file:
        names = file.readline().decode("ascii").strip().split(",")
        file.seek(max(file.tell(), os.fstat(file.fileno()).st_size - 4096))
        lines = file.read().decode("ascii").split("\r\n")
    rows = [row for row in csv.reader(lines[1:-1]) if len(row) == len(names)]
    return float(rows[-1][names.index("vent.duty_pct")]) if rows else 0.0


def jam_when_driven(mock: Mock, runs: Path) -> None:
    """Jam the shaft once the motor runs; after JAM_WAIT_S in any case."""
    bound_s = time.monotonic() + JAM_WAIT_S
    while newest_duty_pct(runs) < JAM_ABOVE_PCT and time.monotonic() < bound_s:
        time.sleep(LOOK_EVERY_S)
    mock.obey("fault jammed_shaft on")


def read_run(runs: Path) -> Path | None:
    """Show what `ramprig read` says of the run under `runs`; the folder."""
    folders = sorted(runs.iterdir()) if runs.exists() else []
    if not folders:
        say("    no run folder was made")
        return None
    show("read", folders[-1])
    done = subprocess.run(ramprig("read", folders[-1]), capture_output=True, text=True, encoding="utf-8", check=False)
    for line in (done.stdout + done.stderr).splitlines():
        say(f"    {line}")
    return folders[-1]


def tell(mock: Mock, root: Path, passes: int) -> int:
    """Both runs and what came of them; the exit status."""
    say()
    say("2. The endurance sequence runs over that port: the vent opens and closes, the latch works beside it.")
    say("   It takes about half a minute, in real time, and every expectation must hold.")
    passed = begin_run(mock.port, root / "passes", "demo", passes).wait(RUN_WAIT_S)
    say()
    say("3. The same sequence again, but this time the shaft jams while the motor is driven. The current rises within")
    say("   milliseconds, and the board itself trips and switches off: no order from this computer is needed for that.")
    second = begin_run(mock.port, root / "trips", "demo with a jam", passes)
    jam_when_driven(mock, root / "trips")
    tripped = second.wait(RUN_WAIT_S)
    say()
    say("4. What the two run folders say, each checked sample by sample against its own account:")
    folders = [read_run(root / "passes"), read_run(root / "trips")]
    say()
    say("The files are here. samples.csv opens in any spreadsheet, events.jsonl tells what happened when, and")
    say("trail.csv in the second folder is the board's own record of every millisecond around the trip:")
    for folder in folders:
        if folder is not None:
            say(f"    {folder}")
            for path in sorted(folder.iterdir()):
                say(f"        {path.name:<22}{path.stat().st_size:>9,} bytes")
    if (passed, tripped) == WANTED_CODES and None not in folders:
        say("The demonstration went as it should: the first run passed, the second one tripped on overcurrent.")
        return 0
    say(f"The demonstration did NOT go as it should: exit codes {passed} and {tripped}, wanted 0 and 3.")
    return 1


def story(*, passes: int = 2) -> int:
    """Tell the demonstration; returns the exit status, 0 where both runs ended as they should."""
    for line in cautions_lines():
        say(line)
    say("Nothing real moves in this demonstration. On a bench, read these again first.")
    say()
    say("1. A mock board with a motor and a servo starts in another process and says which port it is on:")
    mock = Mock()
    try:
        return tell(mock, Path(tempfile.mkdtemp(prefix="ramprig-demo-")), passes)
    finally:
        mock.end()
