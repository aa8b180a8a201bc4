"""run --unattended, resume, note and read from the command line; kill -9 in earnest, against a board that lives on."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from pathlib import Path

import pytest

from cli_process import BENCH, PATIENCE_S, MockProcess, RunProcess, until
from ramprig.cli import main
from ramprig.endure.cycles import read_cycle_record
from ramprig.record.reading import audit, read_manifest

NIGHT = """sequence: night
bench: {bench}
on interruption: stop
steps:
  - cycle:
      name: open
      times: {times}
      rest: 200 ms
      steps:
        - ramp: {{motor: vent, to: 60 %, in: 700 ms}}
        - hold: 100 ms
        - confirm: {{position of: vent, is: at least 60 deg}}
        - coast: {{motor: vent, in: 700 ms}}
"""


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    filled_in = re.sub(r'"<(name|room).*>"', "filled in", BENCH.read_text("utf-8"))
    (tmp_path / "bench.yaml").write_text(filled_in, "utf-8")
    (tmp_path / "night.yaml").write_text(NIGHT.format(bench="bench.yaml", times=2), "utf-8")
    return tmp_path


def only_run() -> Path:
    (folder,) = Path("runs").iterdir()
    return folder


VIRTUAL = ["--port", "mock:?pace=virtual"]


def test_unattended_names_every_rule_that_does_not_hold(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = Path("bench.yaml").read_text("utf-8")
    text = re.sub(r"^safety:\n(  .*\n)+", "", text, flags=re.MULTILINE)
    Path("bench.yaml").write_text(re.sub(r"^      stall:.*$", "      stall: off", text, flags=re.MULTILINE), "utf-8")
    assert main(["run", "night.yaml", "--unattended", "--accept-sleep", *VIRTUAL]) == 2
    lines = capsys.readouterr().err.splitlines()
    assert lines[0] == "Not started unattended: 6 rules do not hold."
    assert lines[1].startswith("  bench.yaml: safety: contact: not said")
    assert lines[-1].startswith("  bench.yaml: motors: vent: limits: stall: not set")
    assert not Path("runs").exists()


def test_unattended_shows_the_sheet_and_keeps_it_with_the_run(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = ["run", "night.yaml", "--unattended", "--accept-sleep", "--at-most", "1 h", *VIRTUAL]
    assert main(words) == 0
    said = capsys.readouterr()
    assert "UNATTENDED TEST RUNNING - until " in said.err
    assert "against a closed lid" in said.err
    assert said.out.splitlines()[-1].endswith("cycles: 2 commanded, 2 confirmed, 0 failed")
    folder = only_run()
    assert (folder / "door-sheet.txt").read_text("utf-8") in said.err
    assert "<h1>UNATTENDED" in (folder / "door-sheet.html").read_text("utf-8")
    settings = read_manifest(folder)["settings"]
    assert settings["unattended"] is True
    assert "latest_end" in settings
    assert audit(folder).exact


@pytest.mark.parametrize("text", ["soon", "0 s", "-1 h"])
def test_at_most_takes_a_time(here: Path, capsys: pytest.CaptureFixture[str], text: str) -> None:
    assert main(["run", "night.yaml", f"--at-most={text}", *VIRTUAL]) == 2
    assert f"--at-most {text}: " in capsys.readouterr().err


def test_at_most_ends_a_run_in_order_and_it_can_be_gone_on_with(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["run", "night.yaml", "--at-most", "4 s", *VIRTUAL]) == 5
    assert "ended in order at its latest end" in capsys.readouterr().out
    folder = only_run()
    assert main(["resume", str(folder), "--at-most", "1 h"]) == 0
    said = capsys.readouterr()
    assert "broken    it was stopped" in said.err
    assert said.out.splitlines()[-1].startswith("passed: ")
    assert main(["read", str(folder)]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert any(line.startswith("broken   interruption 1: it was stopped after ") for line in lines)
    assert any(line.startswith("cycles   ") for line in lines)
    assert main(["resume", str(folder)]) == 2
    assert "came to its end (passed)" in capsys.readouterr().err


def test_what_was_begun_unattended_goes_on_unattended_unless_told_otherwise(
    here: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    Path("night.yaml").write_text(NIGHT.format(bench="bench.yaml", times=5), "utf-8")
    bound = ["--at-most", "5 s"]
    assert main(["run", "night.yaml", "--unattended", "--accept-sleep", *bound, *VIRTUAL]) == 5
    folder = only_run()
    assert main(["resume", str(folder), "--accept-sleep", *bound]) == 5
    assert "UNATTENDED TEST RUNNING" in capsys.readouterr().err
    assert (folder / "door-sheet-2.html").exists()
    text = re.sub("fuse:.*", "", Path("bench.yaml").read_text("utf-8"))
    kept = folder / "bench.yaml"
    assert kept.read_bytes() == Path("bench.yaml").read_bytes()
    Path("bench.yaml").write_text(text, "utf-8")  # the run is gone on with as it was begun: by the copy
    assert main(["resume", str(folder), "--attended", "--at-most", "1 h"]) == 0
    assert "UNATTENDED TEST RUNNING" not in capsys.readouterr().err
    assert not (folder / "door-sheet-3.html").exists()
    told = read_manifest(folder)["interruptions"]
    assert [(each["unattended"], each["kept_awake_by"]) for each in told] == [(True, None), (False, None)]
    assert told[0]["text"].endswith("by `ramprig resume`, unattended")


def test_a_latest_end_that_was_said_holds_for_what_goes_on_unattended(
    here: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["run", "night.yaml", "--unattended", "--accept-sleep", "--at-most", "4 s", *VIRTUAL]) == 5
    path = only_run() / "run.json"
    told = json.loads(path.read_text("utf-8"))
    assert told["settings"]["at_most"] == "4 s"
    told["settings"]["latest_end"] = "2026-01-01T05:00:00Z"
    path.write_text(json.dumps(told), "utf-8")
    capsys.readouterr()
    assert main(["resume", str(only_run()), "--accept-sleep"]) == 2
    assert "latest end, 2026-01-01T05:00:00Z, has gone by; say --at-most TIME anew" in capsys.readouterr().err


def test_a_note_is_kept_and_read_back(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["run", "night.yaml", *VIRTUAL]) == 0
    Path("brush.jpg").write_bytes(b"photo")
    folder = str(only_run())
    assert main(["note", folder, "brush length 4.2 mm", "--photo", "brush.jpg", "--by", "AN"]) == 0
    assert "note 1 kept at " in capsys.readouterr().out
    assert main(["read", folder]) == 0
    assert re.search(r"noted    \S+Z brush length 4.2 mm \(AN\) \[note-1-1.jpg\]", capsys.readouterr().out)
    assert main(["note", "bench.yaml", "x"]) == 2


@pytest.mark.process
@pytest.mark.skipif(sys.platform == "win32", reason="pseudo-terminals and kill -9 are POSIX only")
def test_after_kill_9_a_run_is_gone_on_with_on_a_port_of_another_name(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    """The board is reached by a link of another name, as an adapter that was plugged in again would be."""
    bench = tmp_path / "bench.yaml"
    patient = BENCH.read_text("utf-8").replace("lease: 500 ms", "lease: 2 s")  # for a machine with much else to do
    assert "lease: 2 s" in patient
    bench.write_text(patient, "utf-8")
    sequence = NIGHT.format(bench=bench, times=3)
    with MockProcess(tmp_path) as mock:
        with RunProcess(tmp_path, mock.port, sequence=sequence) as run:
            until(lambda: _done(run) >= 1, "a cycle to be done", run=run)
            ended_s = run.send("SIGKILL")
            assert run.code() == -9
            folder = run.folder
        until(lambda: mock.off_at(ended_s) is not None, "the bridge to be off")
        before = read_cycle_record(folder).counted
        assert main(["read", str(folder)]) == 2
        assert f"cycles   {before}" in capsys.readouterr().out
        other = tmp_path / "ttyOTHER"
        other.symlink_to(mock.port)
        command = [sys.executable, "-m", "ramprig", "resume", str(folder), "--port", str(other), "--yes"]
        done = subprocess.run(command, capture_output=True, text=True, timeout=PATIENCE_S, check=False)
    assert done.returncode == 0, done.stdout + done.stderr
    assert "the host program ended without a word" in done.stderr
    counted = read_cycle_record(folder).counted
    assert counted.confirmed == 3
    assert counted.commanded == 3 + counted.interrupted
    assert counted.confirmed >= before.confirmed
    found = audit(folder)
    assert found.exact, found.statements
    assert found.parts == 2
    manifest = read_manifest(folder)
    assert manifest["parts"][1]["port"] == str(other)
    assert manifest["settings"]["port"] == str(other)  # the next time it need not be said again
    assert manifest["interruptions"][0]["by"] == "command"
    assert f"cycles: {counted};" in manifest["stop_reason"]  # with the cycle that the kill broke off


def _done(run: RunProcess) -> int:
    """Cycles that the run has written down as done, so far."""
    if not run.runs.exists():
        return 0
    files = list(run.runs.glob("*/cycles.jsonl"))
    return files[0].read_text("utf-8").count('"cycle_done"') if files else 0
