"""However the host process ends, the board's bridge is off in time, and the log reads to the last second.

kill -9, SIGSTOP, SIGTERM, SIGHUP and a pulled cable at moments drawn at random, against a mock in another process.
"""

from __future__ import annotations

import json
import random
import shutil
import sys
import time
from pathlib import Path

import pytest

from cli_process import BENCH, MockProcess, RunOnTerminal, RunProcess, until
from ramprig.bench import load_bench
from ramprig.record.reading import audit, read_manifest, read_samples

pytestmark = [
    pytest.mark.process,
    pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals and these signals are POSIX only"),
]

LIMITS = load_bench(BENCH).limits()
LEASE_S = LIMITS["lease_ms", 0] / 1000
STOP_S = LIMITS["stop_ticks", 0] / 1000
MARGIN_S = 1.5
"""For a machine with much else to do: the mock runs in a process of its own, paced by the clock."""
LAST_SECOND_S = 1.0 + MARGIN_S
MOMENTS_S = 1.9
"""One pass of the endless sequence and some: the moments fall into every part of it."""

SIGNALS = {"SIGTERM": 5, "SIGHUP": 5, "SIGKILL": -9, "SIGSTOP": 3}
"""Each with the exit code that it ends in; after SIGSTOP the process is let go on, and finds that the board tripped."""
ENDINGS = [*SIGNALS, "unplug"]


def once(folder: Path, ending: str, number: int) -> None:
    """One host process that is ended at a random moment; every claim is checked."""
    seed = f"{ending} {number}"
    delay_s = random.Random(seed).uniform(0.0, MOMENTS_S)
    folder.mkdir()
    with MockProcess(folder) as mock, RunProcess(folder, mock.port) as run:
        until(lambda: mock.driven_since(0.0), "motion", run=run)
        bound_s = time.monotonic() + delay_s
        until(lambda: time.monotonic() >= bound_s, "the moment")
        ended_s = _end(run, mock, ending)
        until(lambda: mock.off_at(ended_s) is not None, f"the bridge to be off ({seed})")
        off_s = mock.off_at(ended_s)
        assert off_s is not None
        late_s = off_s - ended_s - LEASE_S - STOP_S
        assert late_s <= MARGIN_S, f"{seed}: off {off_s - ended_s:.3f} s after, delay {delay_s:.3f} s"
        if ending == "SIGSTOP":
            run.send("SIGCONT")
        assert run.code() == (4 if ending == "unplug" else SIGNALS[ending]), f"{seed}\n{run.said()}"
        check_log(run, ended_s, ending, seed)
    shutil.rmtree(folder)


def _end(run: RunProcess, mock: MockProcess, ending: str) -> float:
    if ending != "unplug":
        return run.send(ending)
    now_s = time.monotonic()
    assert mock.obey("fault unplug on") == "ok fault unplug on"
    return now_s


def check_log(run: RunProcess, ended_s: float, ending: str, seed: str) -> None:
    """The run folder reads to the last second before the end, and says how it ended where somebody was left."""
    manifest = read_manifest(run.folder)
    found = audit(run.folder)
    ticks = read_samples(run.folder / "samples.csv", columns=()).ticks
    start = manifest["clocks"]["start"]
    last_s = start["host_s"] + (int(ticks[-1]) - start["tick"]) * manifest["clocks"]["tick_us"] / 1e6
    assert ended_s - last_s <= LAST_SECOND_S, f"{seed}: the last row is {ended_s - last_s:.3f} s older than the end"
    assert found.missing == 0, f"{seed}: {found.statements}"
    assert found.unexpected == 0, f"{seed}: {found.statements}"
    if ending == "SIGKILL":
        assert manifest["status"] == "running"
        return
    assert found.exact, f"{seed}: {found.statements}"
    wanted = {"SIGTERM": "stopped", "SIGHUP": "stopped", "SIGSTOP": "tripped", "unplug": "link lost"}[ending]
    assert manifest["verdict"] == wanted, f"{seed}: {manifest['stop_reason']}"
    if ending == "SIGSTOP":
        assert "link lost" in manifest["stop_reason"]
    kinds = [json.loads(line)["kind"] for line in (run.folder / "events.jsonl").read_text("utf-8").splitlines()]
    assert kinds[-1] == "run_finished"


@pytest.mark.parametrize(("ending", "number"), [*((ending, 0) for ending in ENDINGS), ("SIGKILL", 1), ("unplug", 1)])
def test_the_bridge_is_off_in_time_and_the_log_is_whole(tmp_path: Path, ending: str, number: int) -> None:
    once(tmp_path / "one", ending, number)


@pytest.mark.soak
@pytest.mark.parametrize("ending", ENDINGS)
def test_the_same_at_fifty_moments(tmp_path: Path, ending: str) -> None:
    for number in range(50):
        once(tmp_path / f"{number}", ending, 1000 + number)


def test_a_second_run_finds_the_board_tripped_and_says_so(tmp_path: Path) -> None:
    """After kill -9 the board stays latched: nothing moves again by itself."""
    first, second = tmp_path / "first", tmp_path / "second"
    first.mkdir()
    second.mkdir()
    with MockProcess(tmp_path) as mock:
        with RunProcess(first, mock.port) as run:
            until(lambda: mock.driven_since(0.0), "motion", run=run)
            ended_s = run.send("SIGKILL")
            until(lambda: mock.off_at(ended_s) is not None, "the bridge to be off")
        again_s = time.monotonic()
        with RunProcess(second, mock.port) as run:
            assert run.code() == 3
            assert "still tripped from before (link lost" in run.said()
        assert not mock.driven_since(again_s)


def test_a_terminal_that_is_closed_stops_the_run_in_order(tmp_path: Path) -> None:
    with MockProcess(tmp_path) as mock, RunOnTerminal(tmp_path, mock.port) as run:
        until(lambda: mock.driven_since(0.0), "motion", run=run)
        ended_s = run.hang_up()
        assert run.code() == 5
        off_s = mock.off_at(ended_s)
        assert off_s is not None
        assert off_s - ended_s <= LEASE_S + STOP_S + MARGIN_S
        check_log(run, ended_s, "SIGHUP", "closed terminal")
        assert "(SIGHUP)" in read_manifest(run.folder)["stop_reason"]


def test_the_quit_key_stops_the_run_in_order(tmp_path: Path) -> None:
    r"""Ctrl-\ would end any other program without a word."""
    with MockProcess(tmp_path) as mock, RunOnTerminal(tmp_path, mock.port) as run:
        until(lambda: mock.driven_since(0.0), "motion", run=run)
        ended_s = run.type(b"\x1c")
        assert run.code() == 5
        check_log(run, ended_s, "SIGTERM", "quit key")
        assert "(SIGQUIT)" in read_manifest(run.folder)["stop_reason"]


def test_the_question_before_an_acceptance_can_be_ended_by_the_interrupt_key(tmp_path: Path) -> None:
    with MockProcess(tmp_path) as mock:
        words = ("accept", mock.port, "--only", "arming", "--runs", str(tmp_path / "runs"))
        with RunOnTerminal(tmp_path, mock.port, words=words) as run:
            until(lambda: "Type yes and ENTER" in run.shown(), "the question", run=run)
            run.type(b"\x03")
            assert run.code() == 5
            assert (run.folder / "accept.json").exists()
