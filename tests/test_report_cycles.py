"""Cycles in a report: laid over each other without their rests, and their features judged by the streaming trends."""

from __future__ import annotations

import csv
import json
import re
from pathlib import Path

import numpy as np
import pytest

from explain_cases import Case, run_case
from ramprig.endure.features import CycleFeatures, Span
from ramprig.endure.motorfeatures import DriveFeatures, MotorFeatures
from ramprig.report.checks import checks_table
from ramprig.report.digest import Digest, Interval, digest_samples
from ramprig.report.envelope import Envelope
from ramprig.report.facts import Facts, gather
from ramprig.report.making import make_report
from ramprig.report.plots import by_cycle
from ramprig.report.trends import seen_of

STEPS = """- cycle:
    times: 7
    rest: 3 s
    steps:
      - ramp: {motor: vent, to: 50 %, in: 600 ms}
      - hold: 600 ms
      - confirm: {position of: vent, is: at least 10 deg}
      - coast: {motor: vent, in: 500 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}"""


@pytest.fixture(scope="module")
def facts(tmp_path_factory: pytest.TempPathFactory) -> Facts:
    result, _ = run_case(tmp_path_factory.mktemp("cycles"), Case("", steps=STEPS), seed=4)
    assert result.folder is not None
    return gather(result.folder)


def test_cycles_are_laid_over_each_other_without_their_rests(facts: Facts) -> None:
    digest = digest_samples(facts)
    assert [window.number for window in digest.windows] == [1, 4, 7]
    for window in digest.windows:
        assert 1.5 < window.end_s - window.begin_s < 3.5
        assert window.begin_s == pytest.approx(facts.passes[window.number - 1], abs=0.01)
        band = window.envelope.band("vent.duty_pct")
        assert float(np.nanmax(band.greatest)) == 50.0
        assert float(band.time_s[0]) >= -0.02
        assert float(band.time_s[-1]) <= window.end_s - window.begin_s + 0.02


def test_a_report_counts_cycles_and_shows_their_features(facts: Facts, tmp_path: Path) -> None:
    done = make_report([facts.folder], out=tmp_path, issued="2026-03-01T08:00:00Z")
    text = done.report.read_text("utf-8")
    for wanted in ("cycles commanded", "confirmed by the encoder", "first and last cycle overlaid", "of each cycle"):
        assert wanted in text, wanted
    assert "No trend is judged: that takes more than 120 cycles" in text
    for wanted in ("vent forward: steady current", "vent forward: coast-down time", "vent: energy"):
        assert f"{wanted} of each cycle" in text, wanted
    (path,) = done.features
    with open(path, encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    path.unlink()
    assert [row["number"] for row in rows] == [str(number) for number in range(1, 8)]
    assert {row["outcome"] for row in rows} == {"confirmed"}
    assert all(float(row["vent forward: steady current (A)"]) > 0.0 for row in rows)
    assert not [name for name in rows[0] if name.startswith("vent backward")]  # it never went there


def test_a_feature_that_ages_is_shown_in_the_report_of_its_run() -> None:
    facts, digest = made_up(np.ones(300))
    for number in range(1, 301):
        drive = DriveFeatures(steady_current_a=0.3 * (1 + 0.001 * max(0, number - 200)))
        motor = MotorFeatures(forward=drive, position_error_rev=0.001 * number)
        span = Span(number=number, part=1, begin_tick=0, end_tick=1000, outcome="confirmed")
        digest.features.append(
            CycleFeatures(
                span=span, samples=100, left_out=0, duration_s=1.0, lowest_supply_v=12.0, motors={"vent": motor}
            )
        )
    found = {trend.name: trend for trend in seen_of(facts, digest).drawn}
    assert list(found) == ["duration", "lowest supply", "vent forward: steady current"]
    assert found["duration"].findings == ()
    current = found["vent forward: steady current"]
    assert current.unit == "A"
    assert 200 < current.findings[0].cycle <= 300


def test_an_interruption_is_told(facts: Facts, tmp_path: Path) -> None:
    for name in ("samples.csv", "events.jsonl", "vent", "bench.yaml"):
        if (facts.folder / name).is_file():
            (tmp_path / name).write_bytes((facts.folder / name).read_bytes())
    interruption = {"number": 1, "text": "interruption 1: the board restarted", "reason": "it browned out",
                    "resumed_utc": "2026-03-01T08:00:00Z"}  # fmt: skip
    manifest = dict(facts.manifest) | {"interruptions": [interruption]}
    (tmp_path / "run.json").write_text(json.dumps(manifest), encoding="utf-8")
    text = make_report([tmp_path], out=tmp_path / "out", issued="").report.read_text("utf-8")
    assert "interruption 1</td><td>the board restarted; before: it browned out" in text


def made_up(values: np.ndarray[tuple[int], np.dtype[np.float64]]) -> tuple[Facts, Digest]:
    """A run of cycles whose greatest currents are these."""
    facts = Facts(Path("made-up"), {"columns": ["vent.duty_pct", "vent.current_a"]})
    facts.passes = [13.0 * number for number in range(len(values) + 1)]
    facts.pass_numbers = list(range(1, len(facts.passes) + 1))
    digest = Digest(("vent.current_a",), Envelope(["vent.current_a"]), interval_edges=len(facts.passes))
    digest.interval_numbers = facts.pass_numbers
    digest.intervals = [
        Interval(number, 0.0, 13.0, 1300, {"vent.current_a": (-0.1, 0.05, float(value))})
        for number, value in enumerate(values, 1)
    ]
    return facts, digest


def test_a_current_that_grows_is_found_and_a_steady_one_is_not() -> None:
    random = np.random.default_rng(8)
    noise = 1 + random.normal(0, 0.02, 600)
    steady = 0.9 * noise
    growing = steady * (1 + 0.0005 * np.maximum(0, np.arange(600) - 150))
    (calm,) = seen_of(*made_up(steady)).drawn
    (found,) = seen_of(*made_up(growing)).drawn
    assert calm.name == "vent: greatest current"
    assert calm.findings == ()
    assert calm.judged.established
    assert found.findings
    assert 150 < found.findings[0].cycle < 600


def test_checks_are_told_by_their_first_and_last() -> None:
    def check(after: int, speed_rpm: float, begin: int = 0) -> CycleFeatures:
        motor = MotorFeatures(forward=DriveFeatures(steady_speed_rpm=speed_rpm), position_error_rev=0.001)
        span = Span(number=0, part=1, begin_tick=begin, end_tick=1000, after=after)
        return CycleFeatures(
            span=span, samples=100, left_out=0, duration_s=1.0, lowest_supply_v=12.0, motors={"vent": motor}
        )

    text = checks_table([check(0, 20.0), check(100, 19.5), check(200, 18.0)], {})
    assert "3 checks were done, the first after 0 cycles and the last after 200" in text
    row = next(row for row in text.split("<tr>") if "vent forward: steady speed" in row)
    assert re.findall(r"<td[^>]*>([^<]*)</td>", row)[1:] == ["20", "18", "-10.0 %", "rpm"]
    error = next(row for row in text.split("<tr>") if "vent: position error" in row)
    assert "%" not in error
    assert checks_table([check(0, 20.0)], {}) == ""
    blocks = {(1, 0): (1, "open"), (1, 1): (2, "shut <&>")}
    several = [check(0, 20.0), check(9, 19.0), check(0, 40.0, begin=1), check(9, 42.0, begin=1)]
    text = checks_table(several, blocks)
    assert text.count("<h3>") == 2
    assert "of &#x27;shut &lt;&amp;&gt;&#x27;</h3>" in text
    assert [change for change in re.findall(r"[+-][\d.]+ %", text) if "0.0" not in change] == ["-5.0 %", "+5.0 %"]


def test_features_beyond_the_bound_are_counted(facts: Facts, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("ramprig.report.digest.FEATURES_MAX", 5)
    done = make_report([facts.folder], out=tmp_path, issued="")
    assert "have the first 5 cycles and checks; 2 later ones are in cycles.jsonl alone." in done.report.read_text(
        "utf-8"
    )
    done.features[0].unlink()


def test_few_cycles_have_no_trend() -> None:
    assert seen_of(*made_up(np.ones(4))).drawn == ()


def test_a_report_of_few_cycles_says_that_no_trend_is_judged(tmp_path: Path) -> None:
    result, _ = run_case(tmp_path, Case("", steps=STEPS.replace("times: 7", "times: 2")), seed=4)
    assert result.folder is not None
    text = make_report([result.folder], out=tmp_path / "out", issued="").report.read_text("utf-8")
    assert "No trend is judged: that takes more than 120 cycles." in text


def test_a_long_tests_plot_stays_small_and_keeps_its_spike() -> None:
    values = np.full(10_000, 0.9)
    values[7_777] = 1.7
    facts, digest = made_up(values)
    (plot,) = by_cycle(facts, seen_of(facts, digest).drawn)
    assert len(plot.svg) < 60_000
    (polygon,) = re.findall(r'<polygon points="([^"]*)"', plot.svg)
    heights = [float(point.split(",")[1]) for point in polygon.split()]
    # The spike is told alone; all else lies on one level, and heights count downwards.
    assert min(heights) < np.median(heights) - 20.0
    assert sum(height < np.median(heights) - 0.5 for height in heights) == 1
