"""The report is one file that needs nothing else, says what the run folder says, and flags what cannot be compared."""

from __future__ import annotations

import json
import random
import re
import shutil
import sys
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path
from xml.etree import ElementTree

import pytest

from explain_cases import Case, case_of, run_case
from ramprig.cli.main import main
from ramprig.record.appendfile import AppendFile
from ramprig.report.compare import differing
from ramprig.report.explain import explain
from ramprig.report.facts import gather
from ramprig.report.html import Wish, report_id
from ramprig.report.making import Made, make_report, read_run
from ramprig.report.page import alike
from ramprig.report.protections import is_off
from ramprig.report.results import results
from ramprig.report.sections import method
from ramprig.report.svg import Chart, ticks

STEPS = """- repeat:
    times: 6
    steps:
      - sweep: {motor: vent, shape: steps, from: 30 %, to: 60 %, steps: 3, pause: 500 ms}
      - sweep: {motor: vent, shape: steps, from: 60 %, to: 30 %, steps: 3, pause: 500 ms}
      - expect: {speed of: vent, is: at least 5 rpm}
      - expect: {speed of: vent, is: at most 6 rpm}"""
VOID = {"meta", "br", "wbr"}


class Reader(HTMLParser):
    """Checks that elements nest, and gathers tags, attributes and text."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.tags: list[str] = []
        self.links: list[str] = []
        self.words: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.links += [value or "" for name, value in attrs if name in ("src", "href", "xlink:href")]
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.words.append(data)

    @property
    def text(self) -> str:
        return " ".join(" ".join(self.words).split())


def read_page(path: Path) -> Reader:
    reader = Reader()
    reader.feed(path.read_text("utf-8"))
    reader.close()
    assert reader.open == []
    return reader


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    result, _ = run_case(tmp_path_factory.mktemp("run"), Case("", steps=STEPS), seed=2)
    assert result.folder is not None
    return result.folder


@pytest.fixture(scope="module")
def jammed(tmp_path_factory: pytest.TempPathFactory) -> Path:
    result, _ = run_case(tmp_path_factory.mktemp("jam"), case_of("jam", random.Random(2)), seed=2)
    assert result.folder is not None
    return result.folder


def made(folder: Path, out: Path, **entries: str) -> Made:
    return make_report([folder], out=out, issued="2026-03-01T08:00:00Z", entries=entries)


def test_a_report_needs_nothing_but_itself(run: Path, tmp_path: Path) -> None:
    done = made(run, tmp_path)
    page = read_page(done.report)
    assert page.links == []
    assert not {"script", "link", "img", "iframe", "object"} & set(page.tags)
    text = done.report.read_text("utf-8")
    assert "url(" not in text
    assert "@import" not in text
    assert re.findall(r"https?://\S+", text) == []
    assert "default-src 'none'" in text
    assert done.report.stat().st_size < 1_000_000


def test_every_part_bears_the_identifier_and_the_end_is_clear(run: Path, tmp_path: Path) -> None:
    text = made(run, tmp_path).report.read_text("utf-8")
    number = re.search(r"report (\S+ / [0-9a-f]{12})", text)
    assert number is not None
    heads = re.findall(r"<h2>.*?</h2>", text)
    assert len(heads) >= 8
    assert all(number[1] in head for head in heads)
    assert text.rstrip().endswith("</html>")
    assert f"End of report {number[1]}" in text[-400:]
    assert "relate only to the items tested" in text[-700:]


def test_results_tell_place_limit_value_and_verdict(run: Path, tmp_path: Path) -> None:
    page = read_page(made(run, tmp_path).report)
    assert "speed of vent" in page.text
    assert "at least 5 rpm" in page.text
    assert "at most 6 rpm" in page.text
    assert "s.yaml:9" in page.text
    assert "pass" in page.words or any("pass" in word for word in page.words)
    assert any("FAIL" in word for word in page.words)
    assert "Decision rule" in page.text
    assert "no guard band" in page.text
    assert "every sample is in the file" in page.text.lower()
    assert "Likely cause: speed of vent was not at most 6 rpm" in page.text


def test_plots_show_cycles_curve_and_limits(run: Path, tmp_path: Path) -> None:
    text = made(run, tmp_path).report.read_text("utf-8")
    for wanted in ("first and last pass overlaid", "against pass", "both ways", "ceiling 80 %", "time of the run"):
        assert wanted in text, wanted
    assert text.count("<svg") == text.count("<figcaption>")
    assert text.count('role="img"') == text.count("aria-label=")


def test_a_trip_comes_with_its_cause_first_and_its_record(jammed: Path, tmp_path: Path) -> None:
    page = read_page(made(jammed, tmp_path).report)
    likely = page.text.index("Likely cause")
    assert likely < page.text.index("tripped")
    assert "jammed while turning" in page.text
    assert "Record around the trip" in page.text
    assert "the board's trail, every tick" in page.text
    assert "yes: " in page.text  # the board's digest of the limits is that of the bench file


def test_entries_are_shown_escaped_and_the_rest_is_told_as_missing(run: Path, tmp_path: Path) -> None:
    done = made(run, tmp_path, item="<script>alert(1)</script>&\x1b", customer="A & B")
    text = done.report.read_text("utf-8")
    assert "<script" not in text
    assert "&lt;script&gt;" in text
    assert "\x1b" not in text
    page = read_page(done.report)
    assert "A & B" in page.text
    assert "not entered" in page.text


def test_who_authorised_it_is_shown_and_the_list_of_the_clause_says_what_lacks(run: Path, tmp_path: Path) -> None:
    page = read_page(made(run, tmp_path / "a", item="vent no. 42", authorised="B. Boss").report)
    assert "Authorised by B. Boss The results relate only" in page.text
    assert "identification and condition Item, rig and environment: not entered (condition)" in page.text
    assert "who authorises the report end of the report p" in page.text
    page = read_page(made(run, tmp_path / "b").report)
    assert "Authorised by not entered" in page.text
    assert "Item, rig and environment: not entered (item, condition)" in page.text


def test_each_issue_has_an_identifier_of_its_own(run: Path) -> None:
    read = [read_run(run)]
    numbers = {
        report_id(read, Wish(issued=issued, entries=entries))
        for issued in ("2026-03-01T08:00:00Z", "2026-03-02T08:00:00Z")
        for entries in ({}, {"item": "vent no. 42"})
    }
    assert len(numbers) == 4


def test_times_of_the_head_and_of_the_record_can_be_brought_together(jammed: Path, tmp_path: Path) -> None:
    facts = gather(jammed)
    page = read_page(made(jammed, tmp_path).report)
    first = re.search(
        r"first step at ([\d.]+) (ms|s) of the run; 'into the run' at the head counts from there", page.text
    )
    assert first is not None
    into = re.search(r"([\d.]+) s into the run", page.text)
    assert into is not None
    begin_s = float(first[1]) / (1000 if first[2] == "ms" else 1)
    assert begin_s + float(into[1]) == pytest.approx(facts.of("tripped")[-1]["time_s"], abs=0.006)
    assert f"at {facts.of('tripped')[-1]['time_s']} s: overcurrent on vent: " in page.text


def test_a_run_on_a_simulated_board_says_so_and_compares_no_clocks(run: Path, tmp_path: Path) -> None:
    facts = gather(run)
    assert facts.is_simulated
    text = made(run, tmp_path).report.read_text("utf-8")
    assert "on a simulated board: it shows what the sequence does, and nothing about a real motor" in text
    assert "ppm" not in text
    assert "as the bench file has it" in text
    clocks = facts.manifest["clocks"]

    def told(**of_clocks: float) -> str:
        return method(replace(facts, manifest=facts.manifest | {"port": "COM3", "clocks": clocks | of_clocks}))

    assert "differ by less than 1e+02 ppm" in told(drift_ppm=26.0, device_s=10.0)
    assert "ran 26 ppm fast against the computer&#x27;s, give or take 0.28" in told(drift_ppm=26.0, device_s=3600.0)


def test_what_was_measured_stands_among_the_results_with_its_uncertainty(run: Path) -> None:
    zero = {"value": 0.003840637, "unit": "A", "standard_uncertainty": 0.000280086, "confidence": 0.95,
            "low": 0.003290344, "high": 0.004390930}  # fmt: skip
    inertia = {"value": 6.0112345e-6, "unit": "kg*m2", "standard_uncertainty": None, "low": None, "high": None}
    measured = {
        "procedure": "wiring",
        "sentence": "wired <well>.",
        "values": {"current_zero": zero, "inertia": inertia},
    }
    facts = gather(run)
    plain = replace(facts, manifest=facts.manifest | {"results": {"measured": measured}}, expectations={})
    text = results(plain, {})
    assert "wiring: wired &lt;well&gt;." in text
    assert "<td>current zero</td><td>0.00384 A</td><td>0.00028 A</td><td>0.00329 to 0.00439 A, 95 %</td>" in text
    assert "<td>inertia</td><td>6.011e-06 kg*m2</td><td>not recorded</td><td>not recorded</td>" in text


def test_the_resolution_is_told_about_the_speeds_of_the_run_at_the_coarsest_rate(run: Path) -> None:
    facts = gather(run)
    told = [{"period_ticks": ticks, "at_rpm": rpm, "rpm": rpm * share}
            for ticks, share in ((1, 0.01), (10, 0.05)) for rpm in (0.1, 1.0, 10.0, 100.0, 1000.0)]  # fmt: skip
    speed = {"columns": [{"column": "vent.speed_rpm", "resolution": told}]}
    facts = replace(facts, manifest=facts.manifest | {"speed": speed})
    text = results(facts, {"vent.speed_rpm": (-38.2, 0.0, 12.0)})
    table = text[text.index("<th") :].partition("<h3>Uncertainty</h3>")[2]
    assert re.findall(r"([\d.]+) rpm", table) == ["1", "0.05", "10", "0.5", "100", "5"]


def test_numbers_of_one_kind_have_the_same_decimals() -> None:
    assert alike((-60.0, 3.297e-05, 60.0)) == ["-60.00", "0.00", "60.00"]
    assert alike((0.0, -1e-9, 5760.0)) == ["0", "0", "5760"]
    assert alike((0.0, 0.0, 0.0)) == ["0", "0", "0"]


def test_a_wrong_way_trip_is_off_where_the_stall_trip_is() -> None:
    limits = {("stall_duty", 0): 0, ("wrong_counts", 0): 24, ("stall_duty", 1): 1500, ("wrong_counts", 1): 24}
    assert is_off(limits, "wrong_counts", 0)
    assert not is_off(limits, "wrong_counts", 1)


@pytest.mark.skipif(sys.platform == "win32", reason="whether a file is held alone is told by POSIX locks")
def test_a_run_that_is_still_written_is_not_told_as_dead_nor_its_motor_as_stopped(
    run: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    folder = tmp_path / "run"
    shutil.copytree(run, folder)
    manifest = gather(run).manifest | {"status": "running", "verdict": None, "stop_reason": None, "samples": None}
    (folder / "run.json").write_text(json.dumps(manifest), encoding="utf-8")
    events = AppendFile(folder / "events.jsonl", new=False)
    try:
        assert events.hold_alone()
        page = read_page(made(folder, tmp_path / "a").report)
        assert "under way The run was still being written when this report was made" in page.text
        assert "Likely cause" not in page.text
        assert main(["read", str(folder)]) == 2
        told = capsys.readouterr().out
        assert told.startswith("The run is under way: a program is still writing it.")
        assert "killed" not in told
    finally:
        events.close()
    page = read_page(made(folder, tmp_path / "b").report)
    assert "broken off no reason was written" in page.text
    assert "Likely cause: the program ended without a word" in page.text
    unknown = replace(gather(folder), is_held=None)
    explanation = explain(unknown)
    assert explanation is not None
    assert explanation.causes[0].sentence.startswith("the run is still under way, or the program ended without a word")
    assert "keep clear of the motor" in explanation.causes[0].next_step


def test_a_record_that_lacks_something_is_told_at_the_head_and_fails_a_case(run: Path, tmp_path: Path) -> None:
    whole = ElementTree.parse(made(run, tmp_path / "a").junit).find(".//testcase[@name='account of the samples']")
    assert whole is not None
    assert whole.find("failure") is None
    folder = tmp_path / "run"
    shutil.copytree(run, folder)
    rows = (folder / "samples.csv").read_bytes().splitlines(keepends=True)
    (folder / "samples.csv").write_bytes(b"".join(rows[:100]))
    done = made(folder, tmp_path / "b")
    page = read_page(done.report)
    told = page.text.index("The record is not what the run says that it is: ")
    assert told < page.text.index("Item, rig and environment")
    case = ElementTree.parse(done.junit).find(".//testcase[@name='account of the samples']/failure")
    assert case is not None
    assert "samples.csv was changed after the run" in str(case.get("message"))


def test_nothing_of_the_run_is_changed(run: Path, tmp_path: Path) -> None:
    names = ("run.json", "samples.csv", "events.jsonl")
    before = [(run / name).read_bytes() for name in names]
    made(run, tmp_path)
    assert [(run / name).read_bytes() for name in names] == before
    assert read_run(run).audit.exact


def test_the_same_run_gives_the_same_report(run: Path, tmp_path: Path) -> None:
    first = made(run, tmp_path / "a").report.read_bytes()
    assert made(run, tmp_path / "b").report.read_bytes() == first


def test_comparing_runs_flags_what_differs_before_any_result(run: Path, jammed: Path, tmp_path: Path) -> None:
    done = make_report([run, jammed], out=tmp_path, issued="2026-03-01T08:00:00Z")
    page = read_page(done.report)
    assert page.text.index("conditions differ") < page.text.index("Side by side") < page.text.index("Decision rule")
    assert "sequence file" in differing([gather(run), gather(jammed)])
    assert "bench file" not in differing([gather(run), gather(jammed)])


def test_one_changed_condition_is_named(tmp_path: Path) -> None:
    folders = []
    for name, change in (("a", ()), ("b", (("current: {at most: 2.5 A", "current: {at most: 2 A"),))):
        result, _ = run_case(tmp_path / name, Case("", duty=40, hold_ms=300, change=change), seed=1)
        assert result.folder is not None
        folders.append(gather(result.folder))
    found = differing(folders)
    assert found["limit trip_ma of vent"] == ["2500 mA", "2000 mA"]
    assert set(found) == {"bench file", "limit trip_ma of vent", "limit trip_ma of fan"}
    assert differing([folders[0], folders[0]]) == {}
    jammed = replace(folders[0], manifest=folders[0].manifest | {"port": "mock:?fault=jammed_shaft"})
    assert set(differing([folders[0], jammed])) == {"simulated"}


def test_the_command_writes_the_files_and_tells_where(
    run: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["report", str(run), "--out", str(tmp_path), "--entry", "item=vent, no. 42"]) == 0
    out = capsys.readouterr().out.splitlines()
    assert out[:2] == [str(tmp_path / "report.html"), str(tmp_path / "junit.xml")]
    assert "vent, no. 42" in (tmp_path / "report.html").read_text("utf-8")
    assert main(["report", str(run), "--out", str(tmp_path), "--entry", "colour=red"]) == 2
    assert "one of lab" in capsys.readouterr().err
    assert main(["report", str(tmp_path)]) == 2


@pytest.mark.parametrize(
    ("low", "high"), [(0.0, 1.0), (-42.0, 42.0), (11.97, 12.01), (0.0, 28_800.0), (-1e-3, 2e-3), (5.0, 5.0)]
)
def test_axes_have_a_few_round_ticks_inside(low: float, high: float) -> None:
    found = ticks(low, high)
    assert 1 <= len(found) <= 9
    assert low == high or len(found) >= 3
    assert all(low - 1e-9 <= value <= high + 1e-9 for value in found)


def test_a_chart_of_nothing_known_is_still_a_chart() -> None:
    chart = Chart((0.0, 1.0), (0.0, 1.0), "A", "s")
    assert chart.text("nothing").startswith("<svg")


def test_the_name_of_a_moment_hides_nothing_of_the_curve() -> None:
    """It stands above the plot: just before a trip is what one wants to see."""
    chart = Chart((0.0, 10.0), (0.0, 1.0), "A")
    chart.event(5.0, "trip: overcurrent")
    drawn = chart.text("a chart")
    heights = re.findall(r'<text x="[\d.]+" y="([\d.]+)" class="e"[^>]*>trip: overcurrent</text>', drawn)
    assert len(heights) == 1
    assert float(heights[0]) < float(chart.y(1.0))
