"""`ramprig life`: published figures from a command line and from a file, plans, and what it refuses."""

from __future__ import annotations

import json
import math
from pathlib import Path

import pytest

from ramprig.cli import main
from ramprig.cli.life import share_of
from ramprig.errors import UsageError

# NIST/SEMATECH e-Handbook 8.4.1.3 and 8.2.2.1: ten failures, ten units taken out at 500 h.
NIST = ("54", "187", "216", "240", "244", "335", "361", "373", "375", "386")


def figures_of(words: list[str], capsys: pytest.CaptureFixture[str]) -> dict[str, float]:
    assert main(["life", *words, "--json"]) == 0
    figures: dict[str, float] = json.loads(capsys.readouterr().out)
    return figures


def test_nists_example_from_the_command_line(capsys: pytest.CaptureFixture[str]) -> None:
    figures = figures_of([*NIST, *["500+"] * 10, "--unit", "h"], capsys)
    assert (figures["samples"], figures["failures"]) == (20, 10)
    assert (figures["shape"], figures["scale"]) == pytest.approx((1.7208, 606.5280), rel=1e-4)
    assert figures["life"] == pytest.approx(164.022, rel=1e-4)
    assert main(["life", *NIST, *["500+"] * 10, "--unit", "h"]) == 0
    text = capsys.readouterr().out
    assert "20 samples: 10 failed, 10 suspended" in text
    assert "shape    1.72" in text
    assert "B10              164 h, between" in text
    assert "it may be 1" in text


def test_a_file_gives_the_same_as_the_command_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "vents.csv"
    lines = ["time,outcome,count", *(f"{time},failed,1" for time in NIST), "500,suspended,10"]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    assert figures_of(["--file", str(path)], capsys) == figures_of([*NIST, *["500+"] * 10], capsys)


def test_more_confidence_gives_wider_bounds_and_another_share_another_life(capsys: pytest.CaptureFixture[str]) -> None:
    usual = figures_of([*NIST], capsys)
    surer = figures_of([*NIST, "--confidence", "99 %", "--share", "1%"], capsys)
    assert surer["life"] < usual["life"]
    assert surer["share"] == pytest.approx(0.01)
    wide = figures_of([*NIST, "--confidence", "0.99"], capsys)
    assert wide["low"] < usual["low"] < usual["life"] < usual["high"] < wide["high"]


def test_worn_out_parts_and_early_failures_are_told(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["life", "95", "98", "100", "101", "104", "107"]) == 0
    assert "they wear out" in capsys.readouterr().out
    assert main(["life", *(str(math.exp(k)) for k in range(0, 40, 2))]) == 0
    assert "early failures" in capsys.readouterr().out
    assert main(["life", "95", "104"]) == 0
    assert "fewer than 5 failures" in capsys.readouterr().out


def test_no_failure_is_a_success_run(capsys: pytest.CaptureFixture[str]) -> None:
    # Success run: R = (1 - C)^(1/n).
    figures = figures_of(["20000+"] * 22, capsys)
    assert figures["reliability"] == pytest.approx(0.1 ** (1 / 22))
    assert main(["life", *["20000+"] * 22]) == 0
    assert (
        "None failed by 20000 cycles: at least 90.1 % live that long, with 90 % confidence." in capsys.readouterr().out
    )


def test_a_known_shape_makes_use_of_one_failure(capsys: pytest.CaptureFixture[str]) -> None:
    figures = figures_of(["400", "500+", "500+", "--shape", "2"], capsys)
    # Weibayes with one failure: chi2(0.9, 4) / 2 = 3.8897 (tables).
    assert figures["scale_at_least"] == pytest.approx(math.sqrt((400**2 + 2 * 500**2) / 3.8897), rel=1e-4)
    assert figures["life_at_least"] == pytest.approx(figures["scale_at_least"] * math.sqrt(-math.log(0.9)))


def test_a_known_shape_makes_use_of_failures_at_one_time(capsys: pytest.CaptureFixture[str]) -> None:
    figures = figures_of(["400", "400", "500+", "--shape", "2"], capsys)
    # Weibayes with two failures: chi2(0.9, 6) / 2 = 5.3223 (tables).
    assert figures["scale_at_least"] == pytest.approx(math.sqrt((2 * 400**2 + 500**2) / 5.3223), rel=1e-4)


def test_failures_that_lie_close_together_have_a_large_shape(capsys: pytest.CaptureFixture[str]) -> None:
    # Of two failures the likelihood depends on shape * ln(time/time) alone, so that the shape goes with 1/ln ratio.
    ratio = math.log(18_700 / 5_400) / math.log(10_001 / 10_000)
    near, far = figures_of(["10000", "10001"], capsys), figures_of(["5400", "18700"], capsys)
    assert near["shape"] == pytest.approx(far["shape"] * ratio, rel=1e-6)
    assert near["low"] < near["life"] < near["high"]
    assert main(["life", "10000", "10001"]) == 0
    assert "Weibull shape    23995  (standard uncertainty 14143; above 1: they wear out)" in capsys.readouterr().out


def test_a_known_shape_far_from_one_gives_a_number(capsys: pytest.CaptureFixture[str]) -> None:
    # With a steep shape the longest time alone counts.
    assert figures_of(["100+", "1+", "--shape", "100"], capsys)["scale_at_least"] == pytest.approx(99.17, rel=1e-4)
    assert main(["life", "100+", "--shape", "100"]) == 0
    assert "1 sample: 0 failed, 1 suspended" in capsys.readouterr().out


def test_a_plan_says_how_many_and_how_long(capsys: pytest.CaptureFixture[str]) -> None:
    assert figures_of(["--plan", "20000"], capsys)["samples"] == 22  # ln 0.1 / ln 0.9 = 21.85
    figures = figures_of(["--plan", "20000", "--samples", "8", "--shape", "1.8"], capsys)
    assert figures["time_each"] == pytest.approx(20000 * (math.log(0.1) / math.log(0.9) / 8) ** (1 / 1.8))
    assert main(["life", "--plan", "20000", "--samples", "8", "--shape", "1.8"]) == 0
    text = capsys.readouterr().out
    assert "8 samples to 34950 each, of which at most 0 may fail, show a reliability of 90 %" in text
    assert "taking a Weibull shape of 1.8 as known" in text


@pytest.mark.parametrize(
    ("words", "wanted"),
    [
        ([], "give the times"),
        (["54", "--file", "x.csv"], "give the times"),
        (["54", "x"], "'x' is no time"),
        (["54", "0"], "'0' is no time"),
        (["54", "nan"], "'nan' is no time"),
        (["54", "500+"], "needs two at different times"),
        (["54", "60", "--shape", "2"], "2 failures tell the shape themselves"),
        (["54", "60", "--share", "100 %"], "write a share between 0 and 100 %"),
        (["54", "60", "--plan", "100"], "give it alone"),
        (["--plan", "100", "--samples", "5"], "needs a Weibull shape"),
        (["--plan", "100", "--samples", "0"], "--samples 1 or more"),
        (["--plan", "0"], "a life of 0"),
        (["54", "60", "--shape", "-1"], "lies between 0.1 and 100"),
        (["54", "60", "--shape", "nan"], "lies between 0.1 and 100"),
        (["54+", "--shape", "inf"], "lies between 0.1 and 100"),
        (["--plan", "inf"], "a life of inf; it must lie between 1e-20 and 1e+20"),
        (["54", "60", "--samples", "5"], "give --plan with them"),
        (["54", "1e300"], "a time of 1e+300; times lie between"),
        (["54", "6_0"], "'6_0' is no time"),
        (["54", "54"], "2 failures, all at one time; a Weibull fit needs two at different times"),
        (["100", "20000", "--share", "1 %", "--confidence", "99.99 %"], "too little is known to bound this life"),
    ],
)
def test_what_tells_nothing_is_refused(words: list[str], wanted: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["life", *words]) == 2
    assert wanted in capsys.readouterr().err


@pytest.mark.parametrize(
    ("text", "wanted"),
    [
        ("time\n54\n", "x.csv:1:1: the columns are time; time and outcome are wanted"),
        ("time,outcome\n54,failed\n-3,failed\n", "x.csv:3:1: the time is '-3'"),
        ("time,outcome\n54,broken\n", "x.csv:2:1: the outcome is 'broken'; one of failed, suspended is wanted"),
        ("time,outcome,count\n54,failed,0\n", "x.csv:2:1: the count is '0'"),
        ("time,outcome\n54\n", "the outcome is ''"),
        ("time,outcome\n54,failed\0\n", "x.csv:2:1: the outcome is 'failed\\x00'"),
        ('time,outcome\n"54,failed\n', "x.csv:2:1: the time is '54,failed\\n'"),
        ("time,outcome,time\n54,failed,7\n", "x.csv:1:1: the column 'time' stands twice"),
        ("time,outcome,count\n54,failed,1,000\n", "x.csv:2:1: there are more fields than heads; a number has no comma"),
        ("time,outcome\n", "holds no samples"),
        ("", "the columns are none"),
    ],
)
def test_a_wrong_file_is_refused_with_its_line(
    text: str, wanted: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "x.csv"
    path.write_text(text, encoding="utf-8")
    assert main(["life", "--file", str(path)]) == 2
    assert wanted in capsys.readouterr().err
    assert main(["life", "--file", str(tmp_path / "none.csv")]) == 2
    assert "cannot be read as times" in capsys.readouterr().err


@pytest.mark.parametrize(("text", "share"), [("90 %", 0.9), ("90%", 0.9), ("0.9", 0.9), ("0.5 %", 0.005)])
def test_shares(text: str, share: float) -> None:
    assert share_of(text, "--share") == pytest.approx(share)


@pytest.mark.parametrize("text", ["", "90", "0", "90 % x", "nan", "-1 %"])
def test_no_shares(text: str) -> None:
    with pytest.raises(UsageError, match="write a share"):
        share_of(text, "--share")
