"""Expectations on blocks: values, edges of bands, wrapping counts, missing samples, settling, standstill."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from ramprig.quantity import Band, parse_band
from ramprig.sequence.expect import Bearings, Eye, Finding
from ramprig.sequence.rig import Rig
from ramprig.sequence.ring import Ring
from ramprig.sequence.steps import By, Measure, What
from ramprig.session.blocks import Block, Layout
from ramprig.yamlfile import source_of
from ramprig_link.samples import channels_of
from sequence_rig import small_bench

MARK = source_of(b"x", "x").mark(1, 1)
MASK = 0b111
PERIOD = 10
COUNTS_PER_REV = 4 * 16 * 90


def measure(what: What, band: str, *, over_ms: int = 200, by: By = By.MEAN, settle: str = "") -> Measure:
    """A measurement of `vent`."""
    settled: Band | None = parse_band(settle, What.SPEED.kind) if settle else None
    return Measure(
        mark=MARK,
        marks={},
        what=what,
        motor="vent",
        band=parse_band(band, what.kind),
        over_s=Fraction(over_ms, 1000),
        by=by,
        since="",
        settle=settled,
    )


def ring_of(
    counts: list[int], current_ma: list[int] | None = None, *, first: int = 1000, lost: slice | None = None
) -> Ring:
    """Samples of `vent` every PERIOD ticks, in blocks of 7; `lost` ones never came."""
    layout = Layout(channels_of(MASK), PERIOD)
    ticks = 1000 + PERIOD * np.arange(len(counts), dtype=np.int64)
    currents = [0] * len(counts) if current_ma is None else current_ma
    wrapped = np.array(counts, dtype=np.int64).astype(np.int32)
    values = np.stack([np.zeros(len(counts), np.int32), wrapped, np.array(currents, np.int32)], axis=1)
    keep = np.ones(len(counts), dtype=bool)
    if lost is not None:
        keep[lost] = False
    ring = Ring(1_000_000)
    ticks, values = ticks[keep], values[keep]
    for begin in range(0, len(ticks), 7):
        ring.add(Block(ticks[begin : begin + 7], values[begin : begin + 7], layout))
    return ring


def find(ring: Ring, wanted: Measure, tick: int, bearings: Bearings | None = None) -> Finding:
    """What the ring says at a tick."""
    axis = Rig.of(small_bench()).axes["vent"]
    return Eye(ring, axis, 0.001).finding(wanted, tick, bearings or Bearings())


def steady(rpm: float, number: int = 200) -> list[int]:
    """Counts of a shaft that turns at `rpm`."""
    return [round(rpm / 60 * COUNTS_PER_REV * PERIOD / 1000 * i) for i in range(number)]


def test_the_mask_has_duty_counts_and_current_of_the_first_axis() -> None:
    names = [(channel.kind, channel.index) for channel in channels_of(MASK)]
    assert names == [("duty", 0), ("counts", 0), ("current_ma", 0)]


def test_a_mean_speed_is_the_counts_of_the_window_over_its_time() -> None:
    ring = ring_of(steady(31.25))  # 30 counts a sample, exactly
    found = find(ring, measure(What.SPEED, "31.25 rpm +- 0.001 rpm"), 2000)
    assert found.holds
    assert found.value == pytest.approx(31.25)
    assert found.text == "31.25 rpm"


@pytest.mark.parametrize(
    ("band", "holds"),
    [
        ("31.25 rpm to 40 rpm", True),
        ("20 rpm to 31.25 rpm", True),
        ("31.26 rpm to 40 rpm", False),
        ("at least 31.25 rpm", True),
        ("at most 31.25 rpm", True),
        ("at most 31.24 rpm", False),
        ("at least 31.26 rpm", False),
    ],
)
def test_a_band_includes_its_edges(band: str, holds: bool) -> None:
    assert find(ring_of(steady(31.25)), measure(What.SPEED, band), 2000).holds is holds


def test_a_window_ends_at_the_step_and_not_after_it() -> None:
    counts = [0] * 100 + [30 * (i + 1) for i in range(100)]
    ring = ring_of(counts)
    assert find(ring, measure(What.SPEED, "0 rpm +- 0.1 rpm"), 1990).holds
    half = find(ring, measure(What.SPEED, "at least 1 rpm"), 1990 + 100)
    assert half.value == pytest.approx(31.25 / 2)


def test_counts_that_wrap_do_not_disturb_a_speed_or_a_travel() -> None:
    begin = 2**31 - 1500
    counts = [begin + 30 * i for i in range(200)]
    ring = ring_of(counts)
    assert find(ring, measure(What.SPEED, "31.25 rpm +- 0.01 rpm", over_ms=1500), 2900).holds
    bearings = Bearings(counts={("", 0): int(np.int64(counts[0]).astype(np.int32))})
    travel = find(ring, measure(What.COUNTS, "3000 counts +- 0 counts"), 2000, bearings)
    assert (travel.holds, travel.value) == (True, 3000.0)
    position = find(ring, measure(What.POSITION, "187.5 deg +- 0.001 deg"), 2000, bearings)
    assert position.holds


def test_a_current_is_judged_by_its_size() -> None:
    ring = ring_of([0] * 100, [-1500] * 100)
    assert not find(ring, measure(What.CURRENT, "at most 1 A"), 1900).holds
    assert find(ring, measure(What.CURRENT, "1.5 A +- 1 mA"), 1900).holds


def test_every_sample_must_hold_where_that_is_asked() -> None:
    current = [500] * 100
    current[85] = 1200
    ring = ring_of([0] * 100, current)
    assert find(ring, measure(What.CURRENT, "at most 1 A"), 1900).holds
    every = find(ring, measure(What.CURRENT, "at most 1 A", by=By.EVERY_SAMPLE), 1900)
    assert (every.holds, every.value, every.text) == (False, 1.2, "500 mA to 1.2 A")
    before = find(ring, measure(What.CURRENT, "at most 1 A", by=By.EVERY_SAMPLE), 1840)
    assert before.holds


def test_every_single_speed_is_looked_at() -> None:
    counts = steady(31.25, 150)
    counts += [counts[-1] + 15 * (i + 1) for i in range(50)]
    ring = ring_of(counts)
    steady_part = measure(What.SPEED, "31.25 rpm +- 2 %", by=By.EVERY_SAMPLE)
    assert find(ring, steady_part, 2400).holds
    found = find(ring, steady_part, 2700)
    assert not found.holds
    assert found.value == pytest.approx(15.6, abs=1.0)


def test_without_its_samples_a_window_is_not_judged() -> None:
    ring = ring_of(steady(31.25), lost=slice(85, 95))
    found = find(ring, measure(What.SPEED, "at least 1 rpm"), 1990)
    assert not found.holds
    assert found.value is None
    assert "only 10 of 20 samples" in found.why
    assert find(ring_of(steady(31.25), lost=slice(90, 92)), measure(What.SPEED, "at least 1 rpm"), 1990).holds
    nothing = find(Ring(100), measure(What.CURRENT, "at least 1 A"), 1990)
    assert (nothing.holds, nothing.value) == (False, None)


def test_settling_is_the_time_from_the_ramps_end_to_the_last_speed_outside() -> None:
    counts = [0]
    for i in range(400):
        counts.append(counts[-1] + (20 if i < 150 else 30))
    ring = ring_of(counts)
    bearings = Bearings(ramp_ends={"vent": 2000})
    wanted = measure(What.SETTLING, "at most 1 s", settle="31.25 rpm +- 5 %")
    found = find(ring, wanted, 4000, bearings)
    assert found.holds
    assert found.value == pytest.approx(0.5, abs=0.08)  # the speed rises at 2.5 s; it is estimated over 50 ms
    early = find(ring, wanted, 2400, bearings)
    assert not early.holds
    assert early.value is None
    assert early.text.startswith("not settled 400 ms after the ramp")
    assert find(ring, wanted, 4000, Bearings(ramp_ends={"vent": 3000})).value == 0.0


def test_settling_is_not_judged_without_its_samples() -> None:
    wanted = measure(What.SETTLING, "at most 1 s", settle="31.25 rpm +- 5 %")
    bearings = Bearings(ramp_ends={"vent": 2000})
    found = find(ring_of(steady(31.25), lost=slice(120, 160)), wanted, 2900, bearings)
    assert (found.holds, found.value) == (False, None)
    assert found.why == "only 50 of 90 samples since the ramp's end are there"
    assert find(ring_of(steady(31.25), lost=slice(120, 128)), wanted, 2900, bearings).holds


def test_a_shaft_stands_still_when_its_counts_stay_in_the_band_for_the_time() -> None:
    axis = Rig.of(small_bench()).axes["vent"]
    assert (axis.still_counts, axis.still_ticks) == (2, 50)

    def still(counts: list[int], since: int) -> bool:
        return Eye(ring_of(counts), axis, 0.001).stands_still(since)

    assert still([0, 10, 20, 30, 31, 32, 30, 31, 32, 30], 1000)
    assert not still([0, 10, 20, 30, 30, 31, 32, 33, 33, 33], 1000)
    assert not still([30] * 6 + [34, 34, 30, 30], 1000), "what comes back was no standstill"
    assert not still([5] * 10, 1050), "the time counts from `since` on"
    assert still([5] * 10, 1030)


def test_the_ring_forgets_what_is_old_and_keeps_what_is_asked_for() -> None:
    ring = Ring(500)
    layout = Layout(channels_of(MASK), PERIOD)
    for begin in range(0, 10_000, 100):
        ticks = np.arange(begin, begin + 100, PERIOD, dtype=np.int64)
        values = np.stack([ticks.astype(np.int32)] * 3, axis=1)
        ring.add(Block(ticks, values, layout))
    assert ring.newest == 9990
    found, counts = ring.between("counts", 0, 9600, 9700)
    assert list(found) == list(range(9610, 9701, 10))
    assert list(counts) == list(found)
    assert len(ring.between("counts", 0, 0, 9_000)[0]) == 0
    assert ring.last_at("counts", 0, 9995) == 9990
    assert ring.last_at("counts", 0, 100) is None
    assert ring.covers(9999)
    assert not ring.covers(10_000)
