"""The demonstration ends as it should, and what the bench script measures with can be run."""

from __future__ import annotations

import re
import shutil
import sys
from pathlib import Path

import demo_story
import pytest
from dev import bench_roundtrip, bench_start

from ramprig.record.reading import audit, read_manifest

pytestmark = pytest.mark.process
posix_only = pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals are POSIX only")


TRIES = 3
"""A program that a busy machine holds up for longer than the lease is stopped by the board: then once more."""


def told(capfd: pytest.CaptureFixture[str]) -> tuple[int, str, list[Path]]:
    """The demonstration's exit status, what it said, and the folders of its two runs."""
    for _ in range(TRIES):
        status = demo_story.story(passes=1)
        said = capfd.readouterr().out
        folders = [Path(found) for found in re.findall(r"^run folder: (.+)$", said, re.MULTILINE)]
        if not any(read_manifest(folder)["stop_reason"].startswith("link lost") for folder in folders):
            break
        shutil.rmtree(folders[0].parent.parent)
    return status, said, folders


def test_the_demonstration_shows_a_run_that_passes_and_one_that_trips(capfd: pytest.CaptureFixture[str]) -> None:
    status, said, folders = told(capfd)
    assert status == 0
    assert said.startswith("Before anything moves:")
    assert [read_manifest(folder)["verdict"] for folder in folders] == ["passed", "tripped"]
    assert "overcurrent on vent" in read_manifest(folders[1])["stop_reason"]
    assert (folders[1] / "trail.csv").exists()
    assert all(audit(folder).exact for folder in folders)
    shutil.rmtree(folders[0].parent.parent)


@posix_only
def test_round_trips_are_measured_with_as_many_bytes() -> None:
    found = bench_roundtrip.round_trips(requests=3, tick_digits=1)
    assert min(found.ours_s, found.mock_s, found.echo_s) > 0
    assert (found.request_bytes, found.answer_bytes >= len("00 ok 1 off cccc\n")) == (len("00 beat cccc\n"), True)


@posix_only
def test_the_start_is_measured_up_to_the_prompt() -> None:
    assert min(bench_start.python_s(repeats=1), bench_start.help_s(repeats=1), bench_start.prompt_s(repeats=1)) > 0
