"""The report of a thinned run says the same of the run as that of the full one, and says what was left out."""

from __future__ import annotations

import csv
import io
import re
import shutil
from pathlib import Path

import numpy as np
import pytest

from kept_runs import FULL, THIN, rehearsed
from ramprig.cli.read import summary
from ramprig.errors import RecordError
from ramprig.record.folder import CYCLE_RANGES_FILE, INTERVAL_RANGES_FILE
from ramprig.record.reading import audit, read_manifest
from ramprig.record.volumes import Stream
from ramprig.report.compare import differing
from ramprig.report.digest import Digest, digest_samples
from ramprig.report.envelope import Envelope
from ramprig.report.facts import gather
from ramprig.report.kept import read_ranges, said_of_thinning, thinning_of
from ramprig.report.making import intervals_csv, make_report
from ramprig.report.plots import against_time, overlays
from ramprig.report.svg import RIGHT, WIDTH


@pytest.fixture(scope="module")
def full(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return rehearsed(tmp_path_factory.mktemp("report") / "full", FULL)


@pytest.fixture(scope="module")
def thinned(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return rehearsed(tmp_path_factory.mktemp("report") / "thinned", THIN)


def digest(folder: Path) -> Digest:
    return digest_samples(gather(folder))


def numbers(data: bytes) -> tuple[list[str], np.ndarray[tuple[int, ...], np.dtype[np.float64]]]:
    head, *rows = csv.reader(io.StringIO(data.decode("utf-8"), newline=""))
    return head, np.array([[float(cell) if cell else np.nan for cell in row] for row in rows])


def test_the_intervals_of_a_thinned_run_are_those_of_all_samples(full: Path, thinned: Path) -> None:
    head, expected = numbers(intervals_csv(digest(full)))
    same, found = numbers(intervals_csv(digest(thinned)))
    assert same == head
    assert found.shape == expected.shape
    exact = [place for place, name in enumerate(head) if not name.endswith(".mean")]
    assert np.array_equal(found[:, exact], expected[:, exact], equal_nan=True)
    assert np.allclose(found, expected, rtol=1e-4, atol=1e-4, equal_nan=True)  # means: three decimals more than a value


def test_the_totals_and_the_ends_of_the_plots_are_those_of_all_samples(full: Path, thinned: Path) -> None:
    whole, less = digest(full), digest(thinned)
    assert less.rows < whole.rows / 4
    for column, (least, mean, greatest) in whole.totals.items():
        assert (less.totals[column][0], less.totals[column][2]) == (least, greatest)
        assert less.totals[column][1] == pytest.approx(mean, rel=1e-4, abs=1e-4)
        band, wide = whole.band(column), less.band(column)
        assert (np.nanmin(wide.least), np.nanmax(wide.greatest)) == (np.nanmin(band.least), np.nanmax(band.greatest))
        assert not wide.is_exact


def test_features_come_from_the_run_itself_or_not_at_all(full: Path, thinned: Path, tmp_path: Path) -> None:
    one, other = digest(full).features, digest(thinned).features
    assert len(one) == len(other) == 5  # three cycles and two checks
    assert [each.values() for each in one] == [each.values() for each in other]
    assert digest(rehearsed(tmp_path / "unwatched", THIN, watched=False)).features == []


def test_the_report_and_the_summary_say_what_was_left_out(full: Path, thinned: Path, tmp_path: Path) -> None:
    made = make_report([thinned], out=tmp_path, issued="2026-01-01T00:00:00Z")
    text = made.report.read_text("utf-8")
    assert "The log was thinned on purpose: every 50th row and ranges over each 1 s; full rate from 0 s before" in text
    assert "Every sample is in the file, thinned on purpose or told as lost" in text
    assert said_of_thinning(gather(full)) == ""
    manifest = read_manifest(thinned)
    lines = summary(manifest, audit(thinned))
    account = manifest["samples"]
    assert f"{account['written']} written, {account['thinned']} thinned; {account['written']} rows in the file" in str(
        lines
    )
    assert lines[-1].endswith(
        "every sample is in the file, thinned on purpose or told as lost, and no file was changed"
    )


def test_without_ranges_the_report_says_that_it_shows_kept_rows_alone(thinned: Path) -> None:
    assert said_of_thinning(gather(thinned)).endswith(
        "Ranges are of all samples, from cycle-ranges.csv, and the bands of the plots too, from interval-ranges.csv."
    )
    facts = gather(thinned)
    facts.folder = thinned.parent  # as if neither file were there
    assert "what lay between two of them is not known" in said_of_thinning(facts)
    rule = thinning_of(facts)
    assert rule is not None
    assert (rule.every, rule.ranges_s, rule.before_s, rule.after_s) == (50, 1.0, 0.0, 0.0)


def test_a_torn_last_line_of_a_ranges_file_is_left_out_and_a_broken_one_told(thinned: Path, tmp_path: Path) -> None:
    data = (thinned / CYCLE_RANGES_FILE).read_bytes()
    path = tmp_path / CYCLE_RANGES_FILE
    path.write_bytes(data[:-30])
    whole = list(read_ranges(thinned / CYCLE_RANGES_FILE, ("supply_v",)))
    assert list(read_ranges(path, ("supply_v",))) == whole[:-1]
    path.write_bytes(data[:-30] + b"\r\n")
    with pytest.raises(RecordError, match=r"cycle-ranges\.csv cannot be read as a ranges file"):
        list(read_ranges(path, ("supply_v",)))
    assert len(list(read_ranges(thinned / INTERVAL_RANGES_FILE, ("supply_v",)))) > 3


def test_ranges_that_a_loss_of_power_left_empty_in_part_are_read_up_to_there_and_the_audit_says_so(
    thinned: Path, tmp_path: Path
) -> None:
    folder = tmp_path / "run"
    shutil.copytree(thinned, folder)
    path = folder / CYCLE_RANGES_FILE
    lines = path.read_bytes().splitlines(keepends=True)
    rest = b"".join([lines[4][:9], bytes(300), *lines[6:]])
    path.write_bytes(b"".join(lines[:4]) + rest)
    whole = list(read_ranges(thinned / CYCLE_RANGES_FILE, ("supply_v",)))
    assert list(read_ranges(path, ("supply_v",))) == whole[:3]
    assert len(whole) > 4
    text = f"the end of cycle-ranges.csv is torn ({len(rest)} bytes) and was left out"
    assert text in audit(folder).statements
    assert audit(thinned).statements == ()


def test_an_envelope_is_widened_where_rows_were_left_out_and_nowhere_else() -> None:
    envelope = Envelope(["a"], intervals_max=10)
    envelope.add(np.array([0.0, 1.0, 2.0, 3.0]), {"a": np.array([1.0, 2.0, 3.0, 4.0])})
    envelope.widen(0.0, 1.0, 2, {"a": (-50.0, 0.0, 90.0)})  # both of its samples are there
    assert envelope.band("a").is_exact
    envelope.widen(2.0, 3.0, 11, {"a": (-5.0, 0.0, 9.0)})
    envelope.widen(4.0, 5.0, 11, {"a": (7.0, 7.5, 8.0)})
    band = envelope.band("a")
    assert band.least.tolist() == [1.0, 2.0, -5.0, -5.0, 7.0, 7.0]
    assert band.greatest.tolist() == [1.0, 2.0, 9.0, 9.0, 8.0, 8.0]
    assert band.mean.tolist() == [1.0, 2.0, 0.0, 0.0, 7.5, 7.5]
    assert envelope.is_widened
    assert not band.is_exact


def test_a_thinned_plot_holds_every_sample_and_its_line_is_no_single_row(full: Path, thinned: Path) -> None:
    less = digest(thinned)
    half_s = less.envelope.width_s / 2
    (piece,) = Stream([full / "samples.csv"])
    for column in ("vent.duty_pct", "vent.current_a", "supply_v"):
        wide = less.band(column)
        at = np.searchsorted(wide.time_s, piece.numbers["time_s"] - half_s)
        assert (np.abs(wide.time_s[at] - piece.numbers["time_s"]) <= half_s + 1e-6).all()
        assert (wide.least[at] <= piece.numbers[column]).all()
        assert (piece.numbers[column] <= wide.greatest[at]).all()
        jumps = np.abs(np.diff(wide.mean))  # a single row beside means would jump to an end of its range
        assert jumps.max() < 0.9 * (np.nanmax(wide.greatest) - np.nanmin(wide.least)), column


def test_an_envelope_of_ranges_alone_covers_their_time() -> None:
    envelope = Envelope(["a"], intervals_max=10)
    envelope.widen(0.0, 10.0, 1000, {"a": (1.0, 2.0, 3.0)})
    envelope.widen(10.0, 100.0, 9000, {"a": (0.0, 1.0, 5.0)})
    band = envelope.band("a")
    assert (band.least.min(), band.greatest.max()) == (0.0, 5.0)
    assert band.time_s[-1] > 90


def test_what_came_after_the_last_ranges_is_taken_from_the_rows(full: Path, thinned: Path, tmp_path: Path) -> None:
    """As a run that was killed leaves it: the span under way has no line."""
    folder = tmp_path / "killed"
    shutil.copytree(thinned, folder)
    data = (folder / CYCLE_RANGES_FILE).read_bytes()
    lines = data.splitlines(keepends=True)
    (folder / CYCLE_RANGES_FILE).write_bytes(b"".join(lines[:-2]))
    whole, less = digest(full), digest(folder)
    assert [row.samples for row in less.intervals[:-1]] == [row.samples for row in whole.intervals[:-1]]
    assert 0 < less.intervals[-1].samples < whole.intervals[-1].samples
    assert less.intervals[-1].end_s == whole.intervals[-1].end_s


def test_runs_that_were_thinned_otherwise_are_told_apart_when_compared(full: Path, thinned: Path) -> None:
    unlike = differing([gather(full), gather(thinned)])
    assert unlike["log thinned"][0] == "-"
    assert unlike["log thinned"][1].startswith("every 50th row and ranges over each 1 s; ")


REPEATED = """
sequence: repeated
bench: bench.yaml
log: {period: 10 ms, thin: {keep every: 50, ranges every: 7 s, before: 0 s, after: 0 s}}
steps:
  - repeat:
      times: 70
      steps:
        - sweep: {motor: vent, shape: triangle, from: 20 %, to: 60 %, period: 2 s}
"""


def test_without_cycles_the_intervals_are_of_the_time_that_ranges_fit_into(tmp_path: Path) -> None:
    found = digest(rehearsed(tmp_path / "repeated", "", sequence=REPEATED))
    assert [(row.number, row.samples) for row in found.intervals] == [
        (0, 6300),
        (1, 6300),
        (2, found.intervals[2].samples),
    ]
    manifest = read_manifest(next((tmp_path / "repeated" / "runs").iterdir()))
    assert sum(row.samples for row in found.intervals) == manifest["samples"]["received"]
    low, _, high = found.totals["vent.duty_pct"]
    assert low == 0
    assert high == pytest.approx(60.0, abs=0.5)  # the turning point of a sweep, which few of the rows show


def test_rows_far_apart_are_joined_where_they_were_thinned_and_said_to_be_what_was_kept(
    thinned: Path, tmp_path: Path
) -> None:
    folder = tmp_path / "rows"
    shutil.copytree(thinned, folder)
    (folder / CYCLE_RANGES_FILE).unlink()
    (folder / INTERVAL_RANGES_FILE).unlink()
    facts = gather(folder)
    plots = against_time(facts, digest_samples(facts))
    assert all(plot.caption.endswith(("of the rows that were kept)", "(every row that was kept)")) for plot in plots)
    duty = next(plot for plot in plots if plot.caption.startswith("vent: duty"))
    (line,) = re.findall(r'<path d="(M[^"]+)" fill="none"', duty.svg)
    assert line.count("h.1") == 0, "rows 500 ms apart would stand alone"
    drawn = overlays(facts, digest_samples(facts))
    assert drawn
    assert all(plot.caption.endswith("overlaid (of the rows that were kept)") for plot in drawn)
    for plot in drawn:
        for path in re.findall(r'<path d="(M[^"]+)" fill="none" stroke="#', plot.svg):
            assert max(float(x) for x in re.findall(r"(?:M| )([\d.]+) [\d.]+", path)) <= WIDTH - RIGHT + 0.1


BEATEN = """
sequence: beaten
bench: bench.yaml
log: {period: 10 ms, THIN}
steps:
  - repeat:
      times: 30
      steps:
        - ramp: {motor: vent, to: 60 %, in: 700 ms}
        - ramp: {motor: vent, to: 20 %, in: 300 ms}
"""


def test_a_duty_that_kept_rows_show_alike_was_not_held_for_that(tmp_path: Path) -> None:
    """Rows 1 s apart of a duty that comes back every second show always the same one."""
    rows = "thin: {keep every: 100, ranges every: 2 s, before: 0 s, after: 0 s}"
    found = digest(rehearsed(tmp_path / "beaten", "", sequence=BEATEN.replace("THIN", rows)))
    assert found.rows < 200
    assert {level.duty_pct for level in found.levels.values()} <= {0.0}
