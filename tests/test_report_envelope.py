"""Envelopes lose no spike, whatever the pieces, and the digest of a run finds its cycles and its curve."""

from __future__ import annotations

import csv
import io
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from explain_cases import Case, run_case
from ramprig.report.digest import Digest, digest_samples
from ramprig.report.envelope import Envelope
from ramprig.report.facts import Facts, gather
from ramprig.report.making import intervals_csv


@given(
    st.lists(st.one_of(st.just(math.nan), st.floats(-1e6, 1e6)), min_size=1, max_size=400),
    st.integers(1, 60),
    st.integers(0, 2**32 - 1),
)
def test_every_sample_lies_within_its_interval_and_every_extreme_is_kept(
    values: list[float], piece: int, seed: int
) -> None:
    random = np.random.default_rng(seed)
    times = np.cumsum(random.choice([0.01, 0.01, 0.01, 0.02, 0.5], len(values)), dtype=np.float64)
    column = np.array(values)
    envelope = Envelope(["a"], intervals_max=32)
    for begin in range(0, len(values), piece):
        envelope.add(times[begin : begin + piece], {"a": column[begin : begin + piece]})
    band = envelope.band("a")
    assert int(band.samples.sum()) == len(values)
    assert len(band.time_s) <= 32
    known = column[~np.isnan(column)]
    if len(known):
        assert np.nanmin(band.least) == known.min()
        assert np.nanmax(band.greatest) == known.max()
        inside = ~np.isnan(band.mean)
        room = 1e-9 * max(1.0, float(np.abs(known).max()))
        assert (band.mean[inside] >= band.least[inside] - room).all()
        assert (band.mean[inside] <= band.greatest[inside] + room).all()
    near = np.abs(times[:, None] - band.time_s[None, :]) <= envelope.width_s * 0.5001  # both, at an edge
    within = (column[:, None] >= band.least[None, :]) & (column[:, None] <= band.greatest[None, :])
    assert ((near & within).any(axis=1) | np.isnan(column)).all()


def test_one_spike_among_a_million_samples_is_seen() -> None:
    envelope = Envelope(["a"])
    for begin in range(0, 1_000_000, 50_000):
        values = np.zeros(50_000)
        if begin == 400_000:
            values[123] = 7.5
        envelope.add((begin + np.arange(50_000)) / 100, {"a": values})
    band = envelope.band("a")
    assert band.greatest.max() == 7.5
    assert int(band.samples.sum()) == 1_000_000
    assert float(band.time_s[band.greatest.argmax()]) == pytest.approx(4001.23, abs=envelope.width_s)


def test_few_samples_are_kept_one_by_one() -> None:
    envelope = Envelope(["a"])
    envelope.add(np.arange(300) / 100, {"a": np.arange(300.0)})
    assert envelope.band("a").is_exact
    assert envelope.band("a").mean.tolist() == list(range(300))


STEPS = """- repeat:
    times: 4
    steps:
      - sweep: {motor: vent, shape: steps, from: 20 %, to: 60 %, steps: 4, pause: 600 ms}
      - sweep: {motor: vent, shape: steps, from: 60 %, to: 20 %, steps: 4, pause: 600 ms}
      - expect: {speed of: vent, is: at least 5 rpm}"""


@pytest.fixture(scope="module")
def stepped(tmp_path_factory: pytest.TempPathFactory) -> tuple[Facts, Digest]:
    folder = tmp_path_factory.mktemp("stepped")
    result, _ = run_case(folder, Case("", steps=STEPS), seed=3)
    assert result.folder is not None
    facts = gather(result.folder)
    return facts, digest_samples(facts)


def test_the_cycles_of_a_run_are_found(stepped: tuple[Facts, Digest]) -> None:
    facts, digest = stepped
    assert len(facts.passes) == 4
    assert [window.number for window in digest.windows] == [1, 2, 3]
    rows = {row.number: row for row in digest.intervals}
    assert set(rows) == {0, 1, 2, 3, 4}
    assert sum(row.samples for row in digest.intervals) == digest.rows
    assert rows[2].begin_s == pytest.approx(facts.passes[1], abs=0.02)
    assert rows[2].columns["vent.duty_pct"][2] == 60.0


def test_the_curve_has_both_ways_and_no_ramps(stepped: tuple[Facts, Digest]) -> None:
    _, digest = stepped
    levels = digest.curve("vent")
    assert {level.duty_pct for level in levels} >= {20.0, 60.0}
    assert len({level.duty_pct for level in levels}) <= 6
    both = {level.duty_pct for level in levels if level.is_growing} & {
        level.duty_pct for level in levels if not level.is_growing
    }
    assert both
    fastest = max(levels, key=lambda level: level.mean)
    assert fastest.duty_pct == 60.0
    assert fastest.mean == pytest.approx(37.9, rel=0.03)  # the steady speed of the mock at 60 %


def test_the_table_of_intervals_reads_back(stepped: tuple[Facts, Digest]) -> None:
    _, digest = stepped
    rows = list(csv.DictReader(io.StringIO(intervals_csv(digest).decode("utf-8"))))
    assert [int(row["number"]) for row in rows] == [0, 1, 2, 3, 4]
    assert float(rows[1]["vent.duty_pct.greatest"]) == 60.0
    assert int(rows[3]["samples"]) == digest.intervals[3].samples


def test_ticks_that_begin_anew_do_not_run_backwards(tmp_path: Path) -> None:
    result, _ = run_case(tmp_path, Case("", duty=40, hold_ms=500), seed=1)
    assert result.folder is not None
    path = result.folder / "samples.csv"
    rows = path.read_bytes().splitlines(keepends=True)
    path.write_bytes(b"".join(rows) + b"".join(rows[1:]))
    digest = digest_samples(gather(result.folder))
    assert digest.rows == 2 * (len(rows) - 1)
    assert int(digest.band("supply_v").samples.sum()) == digest.rows
