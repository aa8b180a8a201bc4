"""`ramprig measure`: rehearsals from the command line, JSON, saving, and what is refused before anything is opened."""

from __future__ import annotations

import io
import json
from contextlib import AbstractContextManager, nullcontext
from pathlib import Path

import pytest

from ramprig.bench import load_bench
from ramprig.cli.main import main
from ramprig.errors import StoppedByUser
from ramprig.measure.procedures.curve import Curve
from ramprig.measure.running import MeasureWish, measure
from ramprig.mock.core import why_not
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.session import Session

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


def test_a_stop_is_told_as_one_and_the_limits_are_put_back(tmp_path: Path) -> None:
    """It comes between two stages, where nothing but the procedure is there to take it up."""
    bench = load_bench(VENT)
    device = MockDevice(setup_of_bench(bench), seed=1)
    sessions: list[Session] = []

    def guard(session: Session) -> AbstractContextManager[object]:
        sessions.append(session)
        return nullcontext()

    def stop_there(text: str) -> None:
        if text.startswith("search backward") and len(stopped) < 2:
            stopped.append(sessions[0].panic(1))

    stopped: list[bool] = []
    wish = MeasureWish(runs=tmp_path, virtual=True, seed=1)
    with pytest.raises(StoppedByUser):
        measure(Curve(motor="vent"), bench, MockPort(device, pace="virtual"), wish, progress=stop_there, guard=guard)
    manifest = json.loads(next(tmp_path.iterdir()).joinpath("run.json").read_text("utf-8"))
    assert (manifest["verdict"], manifest["status"]) == ("stopped", "finished")
    assert "StoppedByUser" not in manifest["stop_reason"]
    assert device.controller is not None
    own = bench.limits(tick_us=1000)
    assert {key: device.controller.limits[key] for key in own} == own


@pytest.mark.parametrize(
    ("what", "options", "words"),
    [
        ("wiring", ["--motor", "fan"], "the bench has vent"),
        ("servo", ["--servo", "flap"], "the bench has latch"),
        ("wiring", ["--fault", "one_channel"], "belong to --rehearse"),
        ("curve", ["--repeats", "0"], "--repeats 0: 1 to 200"),
        ("curve", ["--repeats", "1000000000"], "--repeats 1000000000: 1 to 200"),
        ("wiring", ["--save", "--no-record"], "needs the run folder"),
        (
            "wiring",
            ["--rehearse", "--port", "socket://127.0.0.1:9"],
            "--rehearse moves nothing real, and --port socket",
        ),
    ],
)
def test_a_command_line_that_cannot_be_is_refused_with_2(
    bench: Path, capsys: pytest.CaptureFixture[str], what: str, options: list[str], words: str
) -> None:
    assert run(bench, what, *options) == 2
    assert words in capsys.readouterr().err


@pytest.mark.parametrize("scheme", ["mock:", "core:"])
def test_a_simulated_board_is_measured_unasked_by_the_bench_file(
    bench: Path, capsys: pytest.CaptureFixture[str], scheme: str
) -> None:
    if scheme == "core:" and why_not() is not None:
        pytest.skip(why_not() or "")
    assert run(bench, "servo", "--servo", "latch", "--port", f"{scheme}?pace=virtual") in (0, 1)
    assert "Type yes" not in capsys.readouterr().err


@pytest.mark.parametrize(("is_there", "typed"), [(False, "yes\n"), (True, "no\n"), (True, "yes\n")])
def test_nothing_real_moves_unasked(
    bench: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, is_there: bool, typed: str
) -> None:
    monkeypatch.setattr("ramprig.cli.asking.on_terminal", lambda: is_there)
    monkeypatch.setattr("sys.stdin", io.StringIO(typed))
    code = run(bench, "coastdown", "--port", "/dev/ttyNONE9")
    said = capsys.readouterr().err
    assert ("say --yes where somebody watches over it" in said) == (not is_there)
    assert ("Nothing has moved" in said) == (is_there and typed == "no\n")
    assert ("there is no port /dev/ttyNONE9" in said) == (is_there and typed == "yes\n")
    assert code == (5 if is_there and typed == "no\n" else 2)
    assert run(bench, "coastdown", "--port", "/dev/ttyNONE9", "--yes") == 2
    assert "there is no port /dev/ttyNONE9" in capsys.readouterr().err


def test_the_same_seed_gives_the_same_result(bench: Path, capsys: pytest.CaptureFixture[str]) -> None:
    outs = []
    for _ in range(2):
        run(bench, "wiring", "--rehearse", "--seed", "9", "--json", "--no-record")
        outs.append(capsys.readouterr().out)
    assert outs[0] == outs[1]
