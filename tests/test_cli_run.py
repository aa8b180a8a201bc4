"""check, rehearse, run and shell from the command line: what they print, and the exit code of every kind of ending."""

from __future__ import annotations

import gc
import io
import json
import re
import shutil
import signal
import sys
from pathlib import Path

import pytest

from ramprig.cli import main, running
from ramprig.cli.main import EXIT_BUG
from ramprig.cli.running import how_far, mock_url
from ramprig.errors import LinkLost
from ramprig.mock.url import parse_mock
from ramprig.record.reading import audit, read_events, read_manifest
from ramprig.record.recorder import Recorder
from ramprig.sequence.executive import Progress
from ramprig.sequence.outcome import Outcome, Verdict

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
BENCH = SCRIPTS / "vent_bench.yaml"

SHORT = """sequence: short
bench: {bench}
values: {{drive: 40 %}}
steps:
  - ramp: {{motor: vent, to: drive, in: 500 ms}}
  - hold: 1 s
  - expect: {{speed of: vent, is: {wanted}, over: 300 ms}}
  - coast: {{motor: vent, in: 500 ms}}
"""
HOLDS = "at least 15 rpm"
DOES_NOT_HOLD = "at least 55 rpm"


@pytest.fixture
def here(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """A folder to work in, with the example bench beside the sequences."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "bench.yaml").write_text(BENCH.read_text("utf-8"), "utf-8")
    write("short.yaml")
    return tmp_path


def write(name: str, wanted: str = HOLDS) -> None:
    Path(name).write_text(SHORT.format(bench="bench.yaml", wanted=wanted), "utf-8")


def only_run(root: Path = Path("runs")) -> Path:
    (folder,) = root.iterdir()
    return folder


# ---- exit codes ----------------------------------------------------------------------------------------------------


def test_0_a_rehearsal_that_passes(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["rehearse", "short.yaml"]) == 0
    said = capsys.readouterr()
    folder = only_run()
    assert said.out == f"run folder: {folder}\npassed: all steps carried out, 1 expectation held\n"
    on, not_proved = said.err.splitlines()
    assert on.startswith("rehearsing on the ")
    assert not_proved == running.NOT_PROVED
    assert "short-rehearsal" in folder.name
    manifest = read_manifest(folder)
    assert (manifest["verdict"], manifest["settings"]["rehearsal"]) == ("passed", True)
    assert audit(folder).exact
    assert {entry["file"] for entry in manifest["inputs"]} == {"bench.yaml", "short.yaml"}


def test_1_an_expectation_that_fails(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    write("fails.yaml", DOES_NOT_HOLD)
    collect_after = gc.get_threshold()
    assert main(["rehearse", "fails.yaml", "--no-record"]) == 1
    assert gc.get_threshold() == collect_after
    first, last = capsys.readouterr().out.splitlines()
    claim = r"speed of vent is at least 55 rpm over 300 ms: found 2\d(\.\d+)? rpm"
    assert re.fullmatch(rf"not as expected: {claim} \[fails.yaml:7:13\]", first)
    assert re.fullmatch(rf"failed: {claim} \[fails.yaml:7:13\]", last)
    assert not Path("runs").exists()


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["rehearse", "absent.yaml"], "absent.yaml"),
        (["rehearse", "short.yaml", "--set", "speed=3"], "no value has this name"),
        (["rehearse", "short.yaml", "--set", "drive=95 %"], "short.yaml:5"),
        (["rehearse", "short.yaml", "--bench", "absent.yaml"], "absent.yaml"),
        (["rehearse", "short.yaml", "--fault", "jamed_shaft"], "did you mean 'jammed_shaft'?"),
        (["run", "short.yaml", "--port", "nothing:1", "--yes"], "no port is called 'nothing:'"),
        (["run", "short.yaml", "--port", "/dev/ttyNONE9", "--yes"], "no port /dev/ttyNONE9"),
        (["shell", "--bench", "absent.yaml"], "absent.yaml"),
    ],
)
def test_2_a_file_or_word_that_must_be_mended(
    here: Path, capsys: pytest.CaptureFixture[str], words: list[str], said: str
) -> None:
    assert main(words) == 2
    assert said in capsys.readouterr().err
    assert not Path("runs").exists()


def test_2_a_sequence_without_a_bench(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = Path("short.yaml").read_text("utf-8").replace("bench: bench.yaml\n", "")
    Path("alone.yaml").write_text(text, "utf-8")
    assert main(["check", "alone.yaml"]) == 2
    assert "alone.yaml names no bench" in capsys.readouterr().err
    assert main(["check", "alone.yaml", "--bench", "bench.yaml"]) == 0


def test_2_a_bench_that_is_named_and_not_there_is_told_where_it_is_named(
    here: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    Path("bench.yaml").unlink()
    assert main(["check", "short.yaml"]) == 2
    assert "short.yaml:2:8" in capsys.readouterr().err


def test_2_a_disk_that_makes_no_progress_stops_the_motor(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(Recorder, "liveness_s", lambda recorder: 10.0)
    assert main(["rehearse", "short.yaml"]) == 2
    assert "not recorded: " in capsys.readouterr().out
    manifest = read_manifest(only_run())
    assert (manifest["verdict"], manifest["results"]["stop_confirmed"]) == ("not recorded", True)
    assert "no progress for 3 s" in manifest["stop_reason"]
    assert manifest["disk_troubles"] == [{"kind": "disk_stalled", "text": "the disk has made no progress for 3 s"}]
    found = audit(only_run())
    assert "trouble with the disk: the disk has made no progress for 3 s" in found.statements
    events, _ = read_events(only_run() / "events.jsonl")
    assert [event["trouble"] for event in events if event["kind"] == "disk_trouble"] == ["disk_stalled"]


def test_a_host_that_was_held_up_itself_takes_that_for_no_stall_of_the_disk(
    here: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    looks: list[float] = []

    def liveness_s(recorder: Recorder) -> float:
        looks.append(10.0 if len(looks) % 10 == 5 else 0.0)  # now and then a job was at work when the host was stopped
        return looks[-1]

    monkeypatch.setattr(Recorder, "liveness_s", liveness_s)
    assert main(["rehearse", "short.yaml"]) == 0
    assert looks.count(10.0) > 1
    assert read_manifest(only_run())["disk_troubles"] == []


def test_5_an_end_that_cannot_be_written_hides_nothing_of_what_broke_the_run_off(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def silent(*_: object, **__: object) -> None:
        monkeypatch.setattr("ramprig.record.folder.replace_file", refuse)
        raise LinkLost("the board says nothing any more")

    def refuse(*_: object) -> None:
        raise OSError(5, "Input/output error")

    monkeypatch.setattr("ramprig.sequence.running.run_plan", silent)
    assert main(["rehearse", "short.yaml"]) == LinkLost.exit_code
    said = capsys.readouterr().err.splitlines()
    assert said[-2] == "the board says nothing any more"
    assert said[-1].startswith("run.json cannot be written in runs/")
    assert said[-1].endswith(": Input/output error")


def test_2_a_disk_that_is_full_from_the_start_is_told_before_anything_moves(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    usage = type(shutil.disk_usage(here))
    monkeypatch.setattr(shutil, "disk_usage", lambda path: usage(10**9, 10**9 - 10**6, 10**6))
    assert main(["rehearse", "short.yaml"]) == 2
    last = capsys.readouterr().err.splitlines()[-1]
    assert last.startswith("runs: 1 MB are free, and 32 MB are kept back: make room")
    assert not Path("runs").exists()


def test_3_a_trip(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["rehearse", "short.yaml", "--fault", "jammed_shaft"]) == 3
    last = capsys.readouterr().out.splitlines()[-1]
    assert last.startswith("tripped: stall on vent: ")
    assert last.endswith("[short.yaml:5:11]")
    assert (only_run() / "trail.csv").exists()


def test_4_a_link_that_is_lost(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["rehearse", "short.yaml", "--fault", "deaf"]) == 4
    assert "no device answers" in capsys.readouterr().err


def test_4_another_board(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    text = Path("bench.yaml").read_text("utf-8")
    Path("bench.yaml").write_text(text.replace("serial: any", "serial: BOARD-7"), "utf-8")
    assert main(["run", "short.yaml", "--port", f"mock:?pace=virtual&bench={BENCH}"]) == 4
    assert "serial 'MOCK-0001', wanted 'BOARD-7'" in capsys.readouterr().err


@pytest.mark.skipif(sys.platform == "win32", reason="a process cannot signal itself there")
@pytest.mark.parametrize("name", ["SIGTERM", "SIGHUP", "SIGINT"])
def test_5_a_signal_stops_in_order_and_is_named(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, name: str
) -> None:
    def once(far: object) -> str:
        monkeypatch.setattr(running, "how_far", lambda far: "")
        signal.raise_signal(getattr(signal, name))
        return ""

    monkeypatch.setattr(running, "how_far", once)
    monkeypatch.setattr("ramprig.cli.progress.LINE_EVERY_S", 0.0)
    assert main(["rehearse", "short.yaml"]) == 5
    assert f"stopped: stopped by the user ({name})" in capsys.readouterr().out
    manifest = read_manifest(only_run())
    assert (manifest["verdict"], manifest["results"]["stop_confirmed"]) == ("stopped", True)
    assert audit(only_run()).exact


def test_a_bug_in_a_run_stops_the_motors_first_and_says_so(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(far: object) -> str:
        raise ZeroDivisionError("a bug of the test")

    monkeypatch.setattr(running, "how_far", broken)
    monkeypatch.setattr("ramprig.cli.progress.LINE_EVERY_S", 0.0)
    assert main(["rehearse", "short.yaml"]) == EXIT_BUG
    _, stopped, bug, where = capsys.readouterr().err.splitlines()
    assert stopped == "The motors were stopped first: confirmed."
    assert bug == "This is a bug in ramprig: ZeroDivisionError: a bug of the test"
    path = Path(where.split()[4].rstrip(";"))
    assert "a bug of the test" in path.read_text("utf-8")
    path.unlink()
    assert read_manifest(only_run())["verdict"] == "broken off"


@pytest.mark.parametrize("confirmed", [True, False])
def test_outputs_that_are_not_confirmed_off_are_told_before_the_last_sentence(
    capsys: pytest.CaptureFixture[str], *, confirmed: bool
) -> None:
    outcome = Outcome(
        verdict=Verdict.LINK_LOST, sentence="the port is gone", place=None, held=0, failed=0, failures=(), passes=0,
        elapsed_s=1.0, stop_confirmed=confirmed, overdue=0,
    )  # fmt: skip
    running.tell_end(outcome, None, rehearsal=False)
    said = capsys.readouterr().out.splitlines()
    assert said == [*([] if confirmed else [running.NOT_OFF]), "link lost: the port is gone"]


# ---- asking before anything moves ----------------------------------------------------------------------------------


@pytest.mark.parametrize(("typed", "code"), [("no\n", 5), ("", 5), ("yes\n", 2), (" YES \n", 2)])
def test_run_shows_what_will_move_and_asks_on_a_terminal(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, typed: str, code: int
) -> None:
    """With `yes` it goes on to the port, which is not there; without it never gets so far."""
    monkeypatch.setattr("ramprig.cli.asking.on_terminal", lambda: True)
    monkeypatch.setattr(sys, "stdin", io.StringIO(typed))
    assert main(["run", "short.yaml", "--port", "/dev/ttyNONE9"]) == code
    said = capsys.readouterr().err
    assert "Keep a hard-wired power cut" in said
    assert "port      /dev/ttyNONE9, board ramprig-mock (any serial)" in said
    assert "latch     may move, -40 deg to 40 deg" in said
    assert "peak duty 40 %" in said
    assert ("Nothing has moved" in said) == (code == 5)


@pytest.mark.parametrize("words", [["--yes", "--port", "/dev/ttyNONE9"], ["--port", "mock:?pace=virtual"]])
def test_run_does_not_ask_where_told_or_where_nothing_real_moves(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, words: list[str]
) -> None:
    monkeypatch.setattr(sys, "stdin", None)
    assert main(["run", "short.yaml", *words]) == (2 if "--yes" in words else 0)
    assert "Type yes" not in capsys.readouterr().err


def test_nothing_real_moves_unasked_where_nobody_is_at_a_terminal(
    here: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["run", "short.yaml", "--port", "/dev/ttyNONE9"]) == 2
    said = capsys.readouterr().err
    assert "nobody is at a terminal to be asked, and a run moves what is connected: say --yes" in said
    assert "no port" not in said


# ---- what is printed -----------------------------------------------------------------------------------------------


def test_check_prints_the_plan(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["check", "short.yaml", "--set", "drive=50 %"]) == 0
    assert capsys.readouterr().out.splitlines() == [
        "short",
        "bench     greenhouse vent drive (bench.yaml)",
        "takes     2 s",
        "motor     vent: 1 start, peak duty 50 %; 2.4 A if the shaft is held (trips above 2.5 A)",
        "orders    2, expectations 1",
        "log       every 10 ms, about 201 rows, 14.6 kB",
        "",
        "          at         for    line  what",
        "    0.000 s       500 ms       5  vent to 50 % in 500 ms",
        "    0.500 s          1 s       6  hold 1 s",
        "    1.500 s                    7  expect speed of vent is at least 15 rpm over 300 ms",
        "    1.500 s       500 ms       8  vent to zero in 500 ms, then coast",
    ]


def test_the_same_seed_gives_the_same_samples(here: Path) -> None:
    for runs in ("one", "two"):
        assert main(["rehearse", "short.yaml", "--seed", "5", "--runs", runs]) == 0
    one, two = (only_run(Path(runs)) / "samples.csv" for runs in ("one", "two"))
    assert one.read_bytes() == two.read_bytes()


def test_a_title_names_the_run_whose_folder_is_told_first(here: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["run", "short.yaml", "--port", "mock:?pace=virtual", "--title", "Vent 7, worn"]) == 0
    assert capsys.readouterr().err.splitlines()[0] == f"recording to {only_run()}"
    assert "vent-7-worn" in only_run().name
    assert json.loads((only_run() / "run.json").read_text("utf-8"))["name"] == "Vent 7, worn"


WEARING = """sequence: wearing
bench: bench.yaml
steps:
  - cycle:
      name: open
      times: 9
      wear:
        run in: {cycles: 2, for: 0 s}
        limits: [{feature: peak current, of: vent, watch: at most 10 mA, fail: at most 20 mA, cycles: 2 of 2}]
      steps:
        - ramp: {motor: vent, to: 40 %, in: 500 ms}
        - coast: {motor: vent, in: 500 ms}
"""


def test_limits_to_wear_are_told_first_and_end_the_run_as_a_failed_one(
    here: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    Path("wearing.yaml").write_text(WEARING, "utf-8")
    assert main(["check", "wearing.yaml"]) == 0
    in_force = [line for line in capsys.readouterr().out.splitlines() if line.startswith("wear ")]
    assert "wear      vent: peak current: watch at most 10 mA, fail at most 20 mA, 2 of 2 cycles" in in_force
    assert main(["run", "wearing.yaml", "--port", "mock:?pace=virtual"]) == 1
    said = capsys.readouterr()
    shown = said.err.splitlines()
    assert shown[: len(in_force)] == in_force
    assert shown[len(in_force)] == f"recording to {only_run()}"
    found = [line.partition(" at cycle 4, ")[0] for line in shown if " at cycle " in line]
    assert found == ["vent: peak current: watch limit", "vent: peak current: fail limit"]
    *lines, end = said.out.splitlines()
    assert lines[0].startswith("likely   worn, or drifted, beyond a limit of the file: vent: peak current is ")
    assert end.startswith("failed: vent: peak current: fail limit at cycle 4, ")
    assert end.endswith("; cycles: 4 commanded, 0 confirmed, 0 failed, 4 not judged [wearing.yaml:9:18]")
    assert main(["resume", str(only_run())]) == 2


def test_limits_to_wear_are_told_once_where_the_user_is_asked(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    Path("wearing.yaml").write_text(WEARING, "utf-8")
    monkeypatch.setattr("ramprig.cli.asking.on_terminal", lambda: True)
    monkeypatch.setattr(sys, "stdin", io.StringIO("yes\n"))
    assert main(["run", "wearing.yaml", "--port", "/dev/ttyNONE9"]) == 2
    assert capsys.readouterr().err.count("peak current: watch at most 10 mA") == 1


@pytest.mark.parametrize(
    ("url", "bench"),
    [("mock:", "here/bench.yaml"), ("mock:?seed=3", "here/bench.yaml"), ("mock:?bench=other.yaml", "other.yaml")],
)
def test_a_mock_is_made_from_the_bench_file_unless_its_name_says_which(url: str, bench: str) -> None:
    wish = parse_mock(mock_url(url, Path("here/bench.yaml"), virtual=True, faults=["bit_errors=1e-3"]))
    assert (wish.bench, wish.pace, wish.faults) == (Path(bench), "virtual", ("bit_errors=1e-3",))


def test_the_shell_takes_lines_from_a_pipe(
    here: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "stdin", io.StringIO("state\nleave\n"))
    assert main(["shell", "--port", "mock:?pace=virtual"]) == 0
    assert "left: all outputs are off" in capsys.readouterr().out


@pytest.mark.parametrize(
    ("cycle", "done", "failed", "said"),
    [
        (0, 0, 0, " 25%  1 min 30 s left  hold 2 s"),
        (8, 6, 0, " 25%  1 min 30 s left  cycle 8  hold 2 s"),
        (0, 1, 0, " 25%  1 min 30 s left  1 cycle done  hold 2 s"),
        (0, 6, 2, " 25%  1 min 30 s left  6 cycles done  2 not as expected  hold 2 s"),
    ],
)
def test_progress_tells_the_cycle_under_way_from_those_that_are_done(
    cycle: int, done: int, failed: int, said: str
) -> None:
    far = Progress(
        elapsed_s=30.0,
        left_s=90.0,
        fraction=0.25,
        doing="hold 2 s",
        place=None,
        passes=0,
        held=0,
        failed=failed,
        cycle=cycle,
        cycles_done=done,
    )
    assert how_far(far) == said
