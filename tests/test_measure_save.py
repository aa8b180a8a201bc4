"""Results go into the bench file's `measured:` part, and nothing else in the file changes by a byte."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from pathlib import Path

import jsonschema
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.bench import bench_of_text, bench_schema, load_bench
from ramprig.bench.measured import read_measured_value
from ramprig.cli.main import main
from ramprig.errors import FileError, UsageError
from ramprig.measure.bench_entry import save
from ramprig.measure.findings import Findings
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.running import Measurement
from ramprig.yamlfile import Listing, Node, load_text
from ramprig.yamlfile import Mapping as Tree

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"
MARK = load_text("a: b", "x.yaml").mark


def measurement(folder: Path, procedure: str = "curve", subject: str = "vent", **values: Measured) -> Measurement:
    findings = Findings(procedure=procedure, subject=subject, sentence="So it is.", values=values)
    return Measurement(findings=findings, board="ramprig-mock MOCK-0001", unix_s=1772353800.0, folder=folder)


def test_what_is_saved_is_read_back_and_the_rest_stays(tmp_path: Path) -> None:
    path = tmp_path / "bench.yaml"
    before = VENT.read_bytes()
    path.write_bytes(before)
    run = tmp_path / "20260301T083000Z-measure-curve-vent-abc123"
    save(path, measurement(run, breakaway_forward=Measured(2.26, "%", 0.05), no_load=Measured(0.0771, "A", 2e-4, 42.0)))
    assert path.read_bytes().startswith(before)
    entry = load_bench(path).measured["vent"]["curve"]
    assert (entry.date, entry.board, entry.run) == ("2026-03-01", "ramprig-mock MOCK-0001", run.name)
    no_load = entry.values["no_load"]
    assert no_load.value == pytest.approx(0.0771)
    assert no_load.unit == "A"
    assert no_load.expanded == pytest.approx(0.0004, abs=1e-5)
    assert no_load.dof == 42.0


def test_a_second_saving_replaces_its_own_results_and_keeps_the_others(tmp_path: Path) -> None:
    path = tmp_path / "bench.yaml"
    text = VENT.read_text("utf-8").replace(
        "safety:\n",
        "# what follows is the user's\nmeasured:  # old\n  vent:\n    # a comment inside is not kept\n    wiring:\n"
        '      date: "2025-01-02"\n      board: "b 1"\n      run: "r"\n\n# about safety\nsafety:\n',
    )
    path.write_text(text, encoding="utf-8")
    save(path, measurement(tmp_path / "r2", value=Measured(1.0, "V", 0.1)))
    save(path, measurement(tmp_path / "r3", value=Measured(2.0, "V", 0.1)))
    save(path, measurement(tmp_path / "r4", procedure="link", subject="link", round_trip=Measured(4e-3, "s", 1e-4)))
    after = path.read_text("utf-8")
    assert after.split("measured:")[0] == text.split("measured:")[0]
    assert after[after.index("\n# about safety") :] == text[text.index("\n# about safety") :]
    measured = load_bench(path).measured
    assert {subject: sorted(entries) for subject, entries in measured.items()} == {
        "vent": ["curve", "wiring"],
        "link": ["link"],
    }
    assert measured["vent"]["curve"].run == "r3"
    assert measured["vent"]["wiring"].date == "2025-01-02"


@pytest.mark.parametrize("end", [b"\r\n", b"\r"])
def test_line_ends_of_the_file_are_kept(tmp_path: Path, end: bytes) -> None:
    path = tmp_path / "bench.yaml"
    before = VENT.read_bytes().replace(b"\n", end).rstrip()
    path.write_bytes(before)
    save(path, measurement(tmp_path / "r", value=Measured(1.0, "V", 0.1)))
    after = path.read_bytes()
    assert after.startswith(before)
    assert b"\n" not in after.replace(end, b"")
    assert load_bench(path).measured


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda text: f"{text}...\n", "results cannot be written behind the file's end; remove the '...'"),
        (lambda text: json.dumps(plain(load_text(text, "f"))), "cannot be written into a bench in braces; write it as"),
    ],
)
def test_a_file_that_takes_no_more_lines_is_refused_before_anything_moves(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], change: Callable[[str], str], words: str
) -> None:
    path = tmp_path / "bench.yaml"
    path.write_text(change(VENT.read_text("utf-8")), encoding="utf-8")
    before = path.read_bytes()
    with pytest.raises(FileError, match=words):
        save(path, measurement(tmp_path / "run", value=Measured(1.0, "V", 0.1)))
    assert main(["measure", "wiring", "--bench", str(path), "--rehearse", "--save", "--runs", str(tmp_path / "r")]) == 2
    assert words in capsys.readouterr().err
    assert path.read_bytes() == before
    assert not (tmp_path / "r").exists()


def plain(node: Node) -> object:
    """A tree as lists, tables and texts."""
    if isinstance(node, Tree):
        return {entry.key.text: plain(entry.value) for entry in node}
    return [plain(item) for item in node.items] if isinstance(node, Listing) else node.text


def test_a_link_to_the_file_stays_a_link(tmp_path: Path) -> None:
    real, link = tmp_path / "real.yaml", tmp_path / "bench.yaml"
    real.write_bytes(VENT.read_bytes())
    link.symlink_to(real)
    save(link, measurement(tmp_path / "r", value=Measured(1.0, "V", 0.1)))
    assert link.is_symlink()
    assert "vent" in load_bench(real).measured


def test_results_without_a_run_folder_are_not_saved(tmp_path: Path) -> None:
    path = tmp_path / "bench.yaml"
    path.write_bytes(VENT.read_bytes())
    done = measurement(tmp_path)
    with pytest.raises(UsageError, match="run folder"):
        save(path, Measurement(findings=done.findings, board=done.board, unix_s=0.0, folder=None))
    assert path.read_bytes() == VENT.read_bytes()


@given(
    value=st.floats(-1e9, 1e9),
    share=st.floats(1e-6, 0.5),
    unit=st.sampled_from(["A", "ohm", "V", "s", "H", "kg*m2", "rpm/%", "%", "deg", "ppm", "", "rad/s2", "V*s/rad"]),
    dof=st.sampled_from([1.0, 4.0, 42.0, math.inf]),
)
@settings(max_examples=200, deadline=None)
def test_every_printed_value_is_read_back_within_what_is_printed(
    value: float, share: float, unit: str, dof: float
) -> None:
    measured = Measured(value, unit, max(abs(value), 1e-9) * share, dof)
    read = read_measured_value(str(measured), MARK)
    assert read.unit == unit
    assert read.value == pytest.approx(value, abs=measured.expanded())
    assert read.expanded == pytest.approx(measured.expanded(), rel=0.5)
    assert read.dof == (dof if dof < 200 else math.inf)


@pytest.mark.parametrize(
    ("part", "words"),
    [
        ("measured: {vent: {curve: {board: b, run: r}}}", "'date' is missing"),
        ("measured: {vent: {curve: {date: 1 March, board: b, run: r}}}", "a day such as"),
        ("measured: {gone: {curve: {date: 2026-03-01, board: b, run: r}}}", "not on this bench"),
        ('measured: {vent: {curve: {date: 2026-03-01, board: b, run: r, values: {x: "2 V"}}}}', "as in '2.41 ohm"),
    ],
)
def test_a_part_that_cannot_be_is_refused_at_its_place(part: str, words: str) -> None:
    with pytest.raises(FileError, match=words) as caught:
        bench_of_text(VENT.read_text("utf-8") + part + "\n")
    assert caught.value.place is not None


def test_the_schema_takes_what_is_written(tmp_path: Path) -> None:
    import yaml

    path = tmp_path / "bench.yaml"
    path.write_bytes(VENT.read_bytes())
    save(path, measurement(tmp_path / "r", value=Measured(1.0, "V", 0.1, 7.0)))
    document = yaml.safe_load(path.read_text("utf-8"))
    jsonschema.validate(document["measured"], json.loads(json.dumps(bench_schema()))["properties"]["measured"])
