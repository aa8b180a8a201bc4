"""The report of a run that was interrupted and gone on with: the interruption is told, and not as the run's end."""

from __future__ import annotations

import csv
import io
import re
from collections import Counter
from collections.abc import Callable
from dataclasses import replace

import pytest

from endure_crash import START_UNIX_S, Host, Process
from ramprig.cli.read import summary
from ramprig.endure.notes import add_note
from ramprig.record.reading import audit
from ramprig.report.account import account
from ramprig.report.digest import digest_samples
from ramprig.report.explain import explain
from ramprig.report.facts import Expectation, Facts, gather
from ramprig.report.junit import cases_of
from ramprig.report.making import intervals_csv, make_report
from ramprig.report.sections import item_and_rig
from ramprig.sequence.outcome import Verdict

PICTURE = b"no real picture"


def held_up_once() -> Callable[[Host], None]:
    """Have the board not hear anything for a while, in the second cycle, as where the computer is held up."""
    done: list[bool] = []

    def meddle(host: Host) -> None:
        if host.now_unix_s() > START_UNIX_S + 4.0 and not done:
            done.append(True)
            host.device.faults.set("deaf", True)

    return meddle


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Facts:
    folder = tmp_path_factory.mktemp("interrupted")
    host = Host(folder, policy="on interruption: {resume at most: 2, within: 20 s}")
    host.meddle = held_up_once()
    pause = host.pause

    def pause_and_hear(seconds: float) -> None:
        pause(seconds)
        host.device.faults.set("deaf", False)

    host.pause = pause_and_hear  # type: ignore[method-assign]  # the test's own host
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.PASSED, result.outcome
    (folder / "brush.jpg").write_bytes(PICTURE)
    add_note(host.run_folder, "brush 4.2 mm", unix_s=host.now_unix_s(), by="A.M.", photos=[folder / "brush.jpg"])
    return gather(host.run_folder)


def test_an_interruption_is_told_among_the_deviations_and_not_as_the_end(run: Facts) -> None:
    page = make_report([run.folder], out=run.folder / "out", issued="2026-03-01T08:00:00Z").report.read_text("utf-8")
    names = re.findall(r"<h2><span>\d+&ensp;([^<]+)</span>", page)
    assert len(names) >= 8
    assert names[0] == "Item, rig and environment"
    assert names.index("Record around the trip") == names.index("Deviations and interruptions") + 1
    assert '<td class="t">interruption 1</td>' in page
    assert "<dt>lasted, interruptions included</dt>" in page
    assert "<dt>last part, planned at least</dt>" in page
    assert "<td>brush 4.2 mm (A.M.) [note-1-1.jpg]</td>" in page


def test_a_limit_that_the_run_went_on_after_is_no_failure(run: Facts) -> None:
    assert [case for case in cases_of(run) if case.failure or case.error] == []
    told = next(case for case in cases_of(run) if case.name == "lease_ms")
    assert "the run was gone on with" in told.out


def test_a_trip_that_the_board_holds_and_tells_again_is_one_trip(run: Facts) -> None:
    assert (run.folder / "events.jsonl").read_text("utf-8").count('"kind":"tripped"') == 2
    assert run.counts["tripped"] == len(run.of("tripped")) == run.outlived["tripped"] == 1


def test_what_the_run_outlived_is_not_why_it_ended(run: Facts) -> None:
    judged = Expectation("s.yaml:9:9", "speed of vent is at most 5 rpm")
    judged.take({"held": False, "found": "6 rpm", "value": 6.0, "time_s": 12.0})
    failed = replace(
        run,
        manifest=run.manifest | {"verdict": "failed", "stop_reason": "speed of vent is at most 5 rpm: found 6 rpm"},
        expectations={("s.yaml:9:9", judged.text): judged},
        events=run.events | {"restarted": [{"cause": "watchdog"}], "host_slept": [{"slept_s": 100.0}]},
        outlived=run.outlived + Counter(restarted=1, host_slept=1),
    )
    explanation = explain(failed)
    assert explanation is not None
    assert [cause.key for cause in explanation.causes] == ["expectation"]


def test_intervals_are_called_by_their_cycles(run: Facts) -> None:
    """A cycle that was commanded and never begun has none."""
    assert run.pass_numbers == [1, 2, 3]
    later = replace(run, pass_numbers=[1, 2, 4])
    rows = list(csv.reader(io.StringIO(intervals_csv(digest_samples(later)).decode("utf-8"))))
    assert [row[0] for row in rows[1:]] == ["0", "1", "2", "4"]


def test_a_part_without_an_account_is_not_told_as_whole(run: Facts) -> None:
    whole = account(run, audit(run.folder))
    assert "Every sample is in the file or told as lost, and no file was changed." in whole
    assert len(re.findall(r"<tr><td>[12]</td>", whole)) == 2
    first, last = run.manifest["parts"]
    samples = run.manifest["samples"] | {"parts_without_account": [1]}
    broken = first | {"samples": None, "verdict": None, "status": "broken off"}
    less = account(
        replace(run, manifest=run.manifest | {"samples": samples, "parts": [broken, last]}), audit(run.folder)
    )
    assert "<td>1</td><td>broken off</td>" in less
    assert "no account" in less
    assert "Every sample of the parts with an account is in the file or told as lost; what came after the last" in less
    lines = summary(run.manifest | {"samples": samples}, audit(run.folder))
    assert lines[-1].endswith("what came after the last row of part 1 is not known, and no file was changed")


def test_a_picture_that_is_gone_is_told_beside_its_note(run: Facts) -> None:
    (run.folder / "note-1-1.jpg").rename(run.folder / "elsewhere.jpg")
    try:
        assert "[note-1-1.jpg, MISSING]" in item_and_rig(run, {})
    finally:
        (run.folder / "elsewhere.jpg").rename(run.folder / "note-1-1.jpg")


def test_rows_from_before_a_break_are_told_apart(run: Facts) -> None:
    manifest = run.manifest
    written = int(manifest["samples"]["written"])
    short = manifest | {"samples": manifest["samples"] | {"written": written - 100}}
    lines = "\n".join(summary(short, audit(run.folder)))
    assert f"; {written} rows in" in lines
    assert "100 of them from before a break, of which there is no account" in lines
    assert "no account" not in "\n".join(summary(manifest, audit(run.folder)))
