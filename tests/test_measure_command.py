"""`ramprig measure`: rehearsals from the command line, JSON, saving, and what is refused before anything is opened."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from ramprig.bench import load_bench
from ramprig.cli.main import main

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"


@pytest.fixture
def bench(tmp_path: Path) -> Path:
    path = tmp_path / "bench.yaml"
    path.write_bytes(VENT.read_bytes())
    return path


def run(bench: Path, what: str, *options: str) -> int:
    return main(["measure", what, "--bench", str(bench), "--runs", str(bench.parent / "runs"), *options])


def test_a_healthy_bench_is_wired_well_and_can_be_saved(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(bench, "wiring", "--rehearse", "--save", "--by-hand") == 0
    out, err = capsys.readouterr()
    assert out.splitlines()[-1] == "vent: wired as the bench file says."
    assert "run folder: " in err
    entry = load_bench(bench).measured["vent"]["wiring"]
    assert entry.board == "ramprig-mock MOCK-0001, rehearsed"
    assert (bench.parent / "runs" / entry.run / "pulses.png").read_bytes().startswith(b"\x89PNG")


def test_a_fault_ends_with_1_in_json_and_nothing_is_saved(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    code = run(bench, "wiring", "--rehearse", "--fault", "one_channel", "--json", "--save")
    out, err = capsys.readouterr()
    assert code == 1
    assert json.loads(out)["facts"]["case"] == "one_channel"
    assert "nothing was written" in err
    assert not load_bench(bench).measured


def test_a_refusal_ends_with_1_and_its_reason(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run(bench, "backlash", "--rehearse") == 1
    assert "--clamped" in capsys.readouterr().err
    assert not (bench.parent / "runs").exists()


def test_a_refusal_on_the_way_leaves_a_run_folder_without_numbers(bench: Path) -> None:
    assert run(bench, "curve", "--rehearse", "--fault", "jammed_shaft") == 1
    folder = next((bench.parent / "runs").iterdir())
    manifest = json.loads((folder / "run.json").read_text("utf-8"))
    assert manifest["verdict"] == "not measured"
    assert not (folder / "result.json").exists()


@pytest.mark.parametrize(
    ("what", "options", "words"),
    [
        ("wiring", ["--motor", "fan"], "the bench has vent"),
        ("servo", ["--servo", "flap"], "the bench has latch"),
        ("wiring", ["--fault", "one_channel"], "belong to --rehearse"),
        ("curve", ["--repeats", "0"], "at least 1"),
        ("wiring", ["--save", "--no-record"], "needs the run folder"),
    ],
)
def test_a_command_line_that_cannot_be_is_refused_with_2(
    bench: Path, capsys: pytest.CaptureFixture[str], what: str, options: list[str], words: str
) -> None:
    assert run(bench, what, *options) == 2
    assert words in capsys.readouterr().err


def test_the_same_seed_gives_the_same_result(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    outs = []
    for _ in range(2):
        run(bench, "wiring", "--rehearse", "--seed", "9", "--json", "--no-record")
        outs.append(capsys.readouterr().out)
    assert outs[0] == outs[1]
