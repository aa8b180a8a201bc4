"""`ramprig accept`: what it asks, says, leaves and exits with."""

from __future__ import annotations

import argparse
import io
import json
from pathlib import Path

import pytest

from accept_boards import mock_port, no_axes
from ramprig.accept.examine import all_checks, open_board
from ramprig.accept.talk import Talk
from ramprig.accept.trial import Trial, Wish
from ramprig.cli import accept as command
from ramprig.cli.main import main
from ramprig.errors import UsageError

MOCK = "mock:?pace=virtual"


def report_in(runs: Path) -> Path:
    folders = list(runs.iterdir())
    assert len(folders) == 1
    return folders[0]


def test_without_power_it_exits_with_0_and_says_what_was_not_tested(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["accept", MOCK, "--energise", "no", "--runs", str(tmp_path)]) == 0
    out = capsys.readouterr().out
    assert "not tested S3" in out
    assert out.splitlines()[-1].startswith("ramprig-mock MOCK-0001 passed what needs no power")


def test_one_check_that_was_not_made_is_told_as_one(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["accept", MOCK, "--energise", "yes", "--only", "restart", "--runs", str(tmp_path)]) == 0
    assert "; 1 check was not made." in capsys.readouterr().out.splitlines()[-1]


def test_the_report_has_every_check_the_limits_and_the_lines(tmp_path: Path) -> None:
    assert main(["accept", MOCK, "--energise", "yes", "--restart", "--only", "st", "--runs", str(tmp_path)]) == 0
    folder = report_in(tmp_path)
    found = json.loads((folder / "accept.json").read_text("utf-8"))
    wanted = [check.name for check in all_checks() if "st" in check.name]
    assert [check["name"] for check in found["checks"]] == ["every-line", *wanted]
    assert {check["result"] for check in found["checks"]} == {"passed"}
    assert found["board"]["serial"] == "MOCK-0001"
    assert found["limits_not_put_back"] == []
    page = (folder / "accept.html").read_text("utf-8")
    assert "<h1>ramprig-mock MOCK-0001 passed the checks with &#x27;st&#x27; in their name." in page
    assert all(f"<td>{name}</td>" in page for name in wanted)
    lines = (folder / "lines.txt").read_text("ascii").splitlines()
    assert any(line.endswith(r"> stop\n") or r"\nstop\n" in line for line in lines)


def test_a_clause_that_fails_is_named_and_exits_with_1(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = ["accept", f"{MOCK}&fault=clock_drift=30000", "--energise", "no", "--only", "time", "--runs", str(tmp_path)]
    assert main(words) == 1
    out = capsys.readouterr().out
    assert "WHO-1      time: " in out
    assert out.splitlines()[-1] == "NOT ACCEPTED: ramprig-mock MOCK-0001: clauses WHO-1 failed."
    assert 'class="failed">WHO-1' in (report_in(tmp_path) / "accept.html").read_text("utf-8")


def test_what_moves_is_told_by_what_the_board_has(capsys: pytest.CaptureFixture[str]) -> None:
    trial = Trial(Talk(mock_port(no_axes())), Wish(energise=lambda trial: True))
    open_board(trial)
    words = argparse.Namespace(axis=0, servo=0, duty=30.0, energise="yes")
    assert command.may_energise(trial, words, [])
    said = "moves     servo 0 some degrees; the board has no axis: no check with a motor is made"
    assert capsys.readouterr().err.splitlines()[-1] == said
    with pytest.raises(UsageError, match="--axis 1: the board has 0 axes"):
        command.may_energise(trial, argparse.Namespace(**vars(words) | {"axis": 1}), [])


@pytest.mark.parametrize("option", ["--axis", "--servo"])
def test_axes_and_servos_are_counted_from_0(option: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["accept", MOCK, option, "-1", "--runs", str(tmp_path)]) == 2
    assert f"{option} -1: axes and servos are counted from 0" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("typed", "code", "said"), [("yes\n", 0, "All are needed"), ("no\n", 5, "not accepted"), ("", 5, "")]
)
def test_it_asks_before_anything_is_switched_on(
    typed: str,
    code: int,
    said: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setattr(command, "on_terminal", lambda: True)
    monkeypatch.setattr("sys.stdin", io.StringIO(typed))
    assert main(["accept", MOCK, "--only", "arming", "--runs", str(tmp_path)]) == code
    out, err = capsys.readouterr()
    assert "not an emergency stop" in err
    assert said in out


def test_where_nobody_can_be_asked_nothing_is_switched_on(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["accept", MOCK, "--only", "arming", "--runs", str(tmp_path)]) == 0
    out, err = capsys.readouterr()
    assert "Nobody is at the terminal" in err
    assert "not accepted for a motor" in out


def test_the_checks_are_listed_without_opening_anything(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["accept", "/dev/nothing-here", "--list"]) == 0
    out = capsys.readouterr().out
    assert all(check.name in out for check in all_checks())
    assert "not testable from outside" in out


@pytest.mark.parametrize("words", [["--duty", "0"], ["--duty", "101"], ["--axis", "7", "--energise", "yes"]])
def test_what_means_nothing_is_refused(words: list[str], tmp_path: Path) -> None:
    assert main(["accept", MOCK, "--only", "arming", "--runs", str(tmp_path), *words]) == 2
