"""The ready sequences: each has a plan, fits the schema and passes its rehearsal; and one runs on a bad line."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from pathlib import Path

import jsonschema
import pytest
import yaml

from ramprig.bench import Bench, load_bench
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import plant_of_bench, setup_of_bench
from ramprig.mock.orders import OrderQueue
from ramprig.mock.plant import VENT_BENCH
from ramprig.mock.port import MockPort
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.outcome import Verdict
from ramprig.sequence.reading import Sequence, read_sequence
from ramprig.sequence.report import report_lines
from ramprig.sequence.running import RunResult, RunWish, run_sequence
from ramprig.sequence.schema import sequence_schema

SCRIPTS = Path(__file__).resolve().parent.parent / "scripts"
SEQUENCES = sorted(path for path in SCRIPTS.glob("*.yaml") if "\nsteps:" in path.read_text(encoding="utf-8"))
SETTINGS = {
    "overnight_sweep.yaml": {"night": "30 s"},
    "vent_night.yaml": {"cycles": "2"},
    "vent_week.yaml": {"length": "10 s"},
    "vent_wear.yaml": {"cycles": "4"},  # of its 100, most of which it is not to come to
}
"""What makes a long one short."""
ENDURANCE = SCRIPTS / "vent_endurance.yaml"
JAMMED = SCRIPTS / "jammed_vent.yaml"
PASS_S = 13.3


def loaded(path: Path, settings: Mapping[str, str] | None = None) -> tuple[Sequence, Bench]:
    """A sequence and the bench it names."""
    sequence = read_sequence(path, settings=settings)
    assert sequence.bench is not None
    return sequence, load_bench(sequence.bench)


def rehearsed(
    path: Path,
    runs: Path | None = None,
    *,
    faults: tuple[str, ...] = (),
    seed: int = 1,
    settings: Mapping[str, str] | None = None,
) -> RunResult:
    """The run of a ready sequence on the mock in virtual time."""
    sequence, bench = loaded(path, settings)
    port = MockPort(MockDevice(setup_of_bench(bench, faults=faults), seed=seed), pace="virtual", seed=seed)
    wish = RunWish(sequence=sequence, bench=bench, runs=runs, seed=seed, virtual=True, short_id="x")
    return run_sequence(wish, port)


def manifest_of(result: RunResult) -> dict[str, object]:
    """The run's `run.json`."""
    assert result.folder is not None
    contents = json.loads((result.folder / "run.json").read_text(encoding="utf-8"))
    assert isinstance(contents, dict)
    return contents


def test_there_are_ready_sequences() -> None:
    names = {path.name for path in SEQUENCES}
    assert {"vent_endurance.yaml", "latch_check.yaml", "jog_check.yaml", "overnight_sweep.yaml"} <= names
    assert {"encoder_log.yaml", "jammed_vent.yaml"} <= names


@pytest.mark.parametrize("path", SEQUENCES, ids=lambda path: str(path.name))
def test_a_ready_sequence_has_a_plan_without_remarks_and_fits_the_schema(path: Path) -> None:
    sequence, bench = loaded(path)
    plan = compile_plan(sequence, bench)
    assert all(line.isascii() for line in report_lines(plan, bench))
    assert path == JAMMED or not plan.remarks
    jsonschema.validate(yaml.safe_load(path.read_text(encoding="utf-8")), sequence_schema())


@pytest.mark.parametrize("path", [path for path in SEQUENCES if path != JAMMED], ids=lambda path: str(path.name))
def test_a_ready_sequence_passes_its_rehearsal(path: Path) -> None:
    outcome = rehearsed(path, settings=SETTINGS.get(path.name)).outcome
    assert outcome.verdict is Verdict.PASSED, outcome
    assert outcome.stop_confirmed
    assert outcome.overdue == 0


def test_the_schema_is_one_and_refuses_what_the_reader_refuses() -> None:
    schema = sequence_schema()
    jsonschema.Draft202012Validator.check_schema(schema)
    good = {"sequence": "x", "steps": [{"hold": "2 s"}, {"repeat": {"times": 3, "steps": [{"coast": "vent"}]}}]}
    jsonschema.validate(good, schema)
    for bad in (
        {"sequence": "x"},
        {"sequence": "x", "steps": [{"hold": 2}]},
        {"sequence": "x", "steps": [{"spin": 1}]},
    ):
        with pytest.raises(jsonschema.ValidationError):
            jsonschema.validate(bad, schema)


def test_the_endurance_run_takes_less_than_40_s_and_leaves_a_whole_folder(tmp_path: Path) -> None:
    result = rehearsed(ENDURANCE, tmp_path)
    assert result.outcome.verdict is Verdict.PASSED
    assert result.outcome.elapsed_s < 40
    assert result.folder is not None
    manifest = manifest_of(result)
    assert manifest["verdict"] == "passed"
    samples = manifest["samples"]
    assert isinstance(samples, dict)
    assert samples["complete"] is True
    assert samples["lost"] == 0
    rows = (result.folder / "samples.csv").read_bytes().count(b"\r\n") - 1
    assert rows == samples["expected"]
    names = {path.name for path in result.folder.iterdir()}
    assert {"vent_endurance.yaml", "latch_check.yaml", "vent_bench.yaml", "events.jsonl"} <= names
    kinds = [json.loads(line)["kind"] for line in (result.folder / "events.jsonl").read_text().splitlines()]
    assert kinds.count("judged") == result.outcome.held == 10
    assert kinds.count("pass_begun") == 2


def test_the_same_rehearsal_gives_the_same_bytes(tmp_path: Path) -> None:
    first, second = (rehearsed(SCRIPTS / "latch_check.yaml", tmp_path / name, seed=3) for name in ("a", "b"))
    assert first.folder is not None
    assert second.folder is not None
    assert (first.folder / "samples.csv").read_bytes() == (second.folder / "samples.csv").read_bytes()


def test_a_jammed_shaft_trips_on_overcurrent_and_leaves_its_trail(tmp_path: Path) -> None:
    result = rehearsed(JAMMED, tmp_path)
    assert result.outcome.verdict is Verdict.TRIPPED
    assert result.outcome.exit_code == 3
    assert result.outcome.sentence.startswith("overcurrent on vent: ")
    assert result.folder is not None
    assert manifest_of(result)["verdict"] == "tripped"
    trail = (result.folder / "trail.csv").read_text(encoding="ascii").splitlines()
    assert len(trail) > 100
    assert "vent.current_a" in trail[0]


def test_the_jammed_bench_is_the_vent_bench_but_for_its_fault() -> None:
    texts = [(SCRIPTS / name).read_text(encoding="utf-8") for name in ("vent_bench.yaml", "jammed_bench.yaml")]
    bodies = [text[text.index("\nbench:") : text.index("\nmock:")] for text in texts]
    assert bodies[0] == bodies[1]


def test_bench_file_and_plant_agree() -> None:
    plant = plant_of_bench(load_bench(SCRIPTS / "vent_bench.yaml"))
    assert plant.axes == VENT_BENCH.axes
    assert plant.supply == VENT_BENCH.supply


def on_a_bad_line(tmp_path: Path, passes: int, monkeypatch: pytest.MonkeyPatch) -> tuple[RunResult, list[object], int]:
    """The endurance run at 500 samples/s with one byte in 10,000 flipped and one lost; orders taken, orders planned."""
    folder = tmp_path / "in"
    folder.mkdir()
    for name in ("vent_bench.yaml", "latch_check.yaml"):
        (folder / name).write_bytes((SCRIPTS / name).read_bytes())
    path = folder / "noisy.yaml"
    text = ENDURANCE.read_text(encoding="utf-8").replace("\nsteps:", "\nlog: {period: 2 ms}\nsteps:", 1)
    path.write_text(text, encoding="utf-8")
    taken: list[object] = []
    plain: Callable[..., object] = OrderQueue.add

    def counted(queue: OrderQueue, *args: object, **kwargs: object) -> object:
        taken.append(args)
        return plain(queue, *args, **kwargs)

    monkeypatch.setattr(OrderQueue, "add", counted)
    faults = ("bit_errors=1e-4", "dropped_bytes=1e-4")
    result = rehearsed(path, tmp_path / "out", faults=faults, settings={"passes": str(passes)})
    sequence, bench = loaded(path, {"passes": str(passes)})
    return result, taken, compile_plan(sequence, bench).totals.orders


@pytest.mark.parametrize("passes", [4, pytest.param(46, marks=pytest.mark.soak)])
def test_a_bad_line_loses_no_sample_unseen_and_repeats_no_order(
    passes: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    result, taken, planned = on_a_bad_line(tmp_path, passes, monkeypatch)
    assert result.outcome.verdict is Verdict.PASSED, result.outcome
    assert result.outcome.elapsed_s > passes * PASS_S
    assert len(taken) == planned
    manifest = manifest_of(result)
    samples, link = manifest["samples"], manifest["link"]
    assert isinstance(samples, dict)
    assert isinstance(link, dict)
    assert samples["complete"] is True
    assert samples["written"] + samples["lost"] == samples["expected"]
    gaps = samples["gaps"]
    assert isinstance(gaps, list)
    assert sum(gap["count"] for gap in gaps) == samples["lost"]
    assert link["dropped_lines"] > 0
