"""Features of cycles: right for motions whose figures are known, found as they age, quiet while they do not."""

from __future__ import annotations

import json
import math
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

from explain_cases import Case, run_case
from ramprig.endure import features, motorfeatures
from ramprig.endure.features import (
    CycleFeatures,
    FeatureWalk,
    Span,
    cycle_features,
    is_judged,
    named,
    spans_of,
    unit_of,
)
from ramprig.endure.trends import Finding, Level, TrendWatch
from ramprig.errors import RecordError
from ramprig.mock.device import MockDevice
from ramprig.mock.plant import VENT_BENCH, Plant
from ramprig.mock.port import MockPort
from ramprig.record.folder import FORMAT
from ramprig.record.scan import Piece
from ramprig.report.making import make_report
from ramprig.sequence.executive import Progress
from ramprig.session.session import Session

NAMES = ["tick", "time_s", *(f"vent.{name}" for name in motorfeatures.CHANNELS), "supply_v", "state"]
Columns = dict[str, list[float]]


def piece_of(rows: list[dict[str, float]]) -> Piece:
    numbers = {
        name: np.array([row.get(name, math.nan) for row in rows])
        for name in (*(f"vent.{channel}" for channel in motorfeatures.CHANNELS), "supply_v")
    }
    return Piece(np.array([row["tick"] for row in rows], np.int64), numbers)


def known_rows() -> list[dict[str, float]]:
    """100 samples a second: a ramp of 20 %/s to 40 % forward, hold, off, then backward in one step, and off.

    The speed is 1 rpm for each percent, follows at once, and falls by 40 rpm/s; 1000 counts a turn of the shaft; it
    breaks away at 10 %. The current is 0.5 A forward and 0.6 A backward, 2 A for one sample.
    """
    rows, duty, speed, position = [], 0.0, 0.0, 0.0
    for k in range(1201):
        at = k / 100.0
        if at < 0.5:
            duty = 0.0
        elif at < 2.5:
            duty = 20.0 * (at - 0.5)
        elif at < 4.5:
            duty = 40.0
        elif at < 6.5:
            duty = 0.0
        elif at < 10.0:
            duty = -40.0
        else:
            duty = 0.0
        if duty > 0:
            speed = duty if duty >= 10.0 else 0.0
        elif duty < 0:
            speed = -40.0
        else:
            speed = math.copysign(max(0.0, abs(speed) - 0.4), speed)
        position += speed / 6000.0
        current = 2.0 if k == 300 else 0.5 * (duty > 0) - 0.6 * (duty < 0)
        rows.append(
            {"tick": 10.0 * k, "vent.duty_pct": duty, "vent.counts": float(round(position * 1000)),
             "vent.position_rev": position, "vent.speed_rpm": speed, "vent.current_a": current, "supply_v": 12.0}
        )  # fmt: skip
    return rows


def walked(rows: list[dict[str, float]], spans: list[Span], *, pieces: int = 1) -> list[CycleFeatures]:
    walk = FeatureWalk(NAMES, spans, tick_us=1000)
    found = []
    for part in np.array_split(np.arange(len(rows)), pieces):
        found += walk.take(1, piece_of([rows[k] for k in part]))
    return found + walk.close_part(1)


WHOLE = Span(number=1, part=1, begin_tick=0, end_tick=12_000)


def test_the_features_of_a_known_motion() -> None:
    (found,) = walked(known_rows(), [WHOLE])
    vent = found.motors["vent"]
    assert found.duration_s == 12.0
    assert found.samples == 1201
    assert found.lowest_supply_v == 12.0
    assert vent.peak_current_a == 2.0
    assert vent.forward.steady_current_a == pytest.approx(0.5)
    assert vent.backward.steady_current_a == pytest.approx(0.6)
    assert vent.forward.steady_speed_rpm == pytest.approx(40.0)
    assert vent.forward.time_to_speed_s == pytest.approx(1.9, abs=0.011)  # 38 rpm of 40 at 20 rpm/s
    assert vent.backward.time_to_speed_s == pytest.approx(0.01, abs=0.011)
    assert vent.forward.coast_down_s == pytest.approx(0.95, abs=0.021)  # from 40 rpm to 2 at 40 rpm/s
    assert vent.forward.breakaway_duty_pct == pytest.approx(10.0, abs=0.8)  # two counts of 1000 later
    assert math.isnan(vent.backward.breakaway_duty_pct)  # a step is no slow ramp
    # Forward 12 V 0.5 A over a mean duty of 20 % for 2 s and 40 % for 2 s; backward 12 V 0.6 A at 40 % for 3.5 s; and
    # one sample more of 1.5 A.
    energy = 12 * 0.5 * (0.2 * 2 + 0.4 * 2) + 12 * 0.6 * 0.4 * 3.5 + 12 * 1.5 * 0.4 * 0.01
    assert vent.energy_j == pytest.approx(energy, rel=0.01)
    rows = known_rows()
    assert vent.position_error_rev == pytest.approx(rows[-1]["vent.position_rev"] - rows[0]["vent.position_rev"])
    peak = max(row["vent.position_rev"] for row in rows)
    assert vent.travel_ratio == pytest.approx((peak - rows[-1]["vent.position_rev"]) / peak)


@pytest.mark.parametrize("pieces", [2, 7, 400])
def test_pieces_of_any_size_give_the_same(pieces: int) -> None:
    spans = [
        Span(number=1, part=1, begin_tick=0, end_tick=6400),
        Span(number=2, part=1, begin_tick=6450, end_tick=9000),
    ]
    whole = walked(known_rows(), spans)
    parted = walked(known_rows(), spans, pieces=pieces)
    assert [each.span.number for each in parted] == [1, 2]
    assert [each.samples for each in parted] == [641, 256]
    for one, other in zip(whole, parted, strict=True):
        assert one.values() == pytest.approx(other.values(), nan_ok=True)


def test_a_cycle_without_samples_or_motion_has_no_features() -> None:
    (found,) = walked([{"tick": 10.0 * k, "vent.duty_pct": 0.0} for k in range(100)], [WHOLE])
    values = found.values()
    assert values.pop("duration") == 12.0
    assert all(math.isnan(value) for value in values.values())
    assert walked([], [WHOLE]) == []


def test_a_cycle_that_begins_with_a_slow_ramp_shows_its_break_away_duty() -> None:
    (found,) = walked(known_rows()[55:], [Span(number=1, part=1, begin_tick=550, end_tick=12_000)])
    assert found.motors["vent"].forward.breakaway_duty_pct == pytest.approx(10.0, abs=0.8)
    assert found.motors["vent"].forward.time_to_speed_s == pytest.approx(1.85, abs=0.011)


def test_a_motor_that_is_under_way_when_the_cycle_begins_has_no_time_to_speed() -> None:
    (found,) = walked(known_rows()[100:], [Span(number=1, part=1, begin_tick=1000, end_tick=12_000)])
    forward = found.motors["vent"].forward
    assert math.isnan(forward.time_to_speed_s)
    assert math.isnan(forward.breakaway_duty_pct)
    assert forward.steady_speed_rpm == pytest.approx(40.0)
    assert forward.coast_down_s == pytest.approx(0.95, abs=0.021)


@pytest.mark.parametrize("seed", range(40))
def test_whatever_comes_gives_numbers_that_can_be(seed: int) -> None:
    source = np.random.default_rng(seed)
    count = int(source.integers(0, 120))
    times = np.cumsum(source.choice([0.0, 0.01, 0.3, 2.0], count), dtype=np.float64)

    def channel(scale: float) -> npt.NDArray[np.float64]:
        steps = source.choice([-1.0, -0.5, 0.0, 0.5, 1.0], -(-count // 8))
        values: npt.NDArray[np.float64] = np.repeat(steps, 8)[:count].astype(np.float64) * scale
        values[source.random(count) < 0.1 * source.integers(0, 3)] = math.nan
        return values

    scales = zip(motorfeatures.CHANNELS, (60.0, 1000.0, 1.0, 40.0, 0.5), strict=True)
    found = motorfeatures.motor_features(times, {name: channel(scale) for name, scale in scales}, channel(12.0))
    for drive in (found.forward, found.backward):
        for seconds in (drive.time_to_speed_s, drive.coast_down_s):
            assert math.isnan(seconds) or 0.0 <= seconds <= times[-1] - times[0]
        assert math.isnan(drive.breakaway_duty_pct) or 0.0 < drive.breakaway_duty_pct <= 60.0
    assert math.isnan(found.peak_current_a) or 0.0 <= found.peak_current_a <= 0.5
    assert math.isnan(found.travel_ratio) or found.travel_ratio >= 0.0


def test_a_cycle_too_long_is_cut_and_counted(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(features, "CYCLE_ROWS_MAX", 700)
    (found,) = walked(known_rows(), [WHOLE], pieces=5)
    assert (found.samples, found.left_out) == (700, 501)


def test_names_and_units() -> None:
    (found,) = walked(known_rows(), [WHOLE])
    names = list(found.values())
    assert named("steady_current_a") == "steady current"
    assert "vent forward: steady current" in names
    units = {name.rpartition(": ")[2]: unit_of(name) for name in names}
    assert units == {
        "duration": "s", "lowest supply": "V", "peak current": "A", "energy": "J", "position error": "rev",
        "travel ratio": "", "steady current": "A", "steady speed": "rpm", "time to speed": "s", "coast-down time": "s",
        "break-away duty": "%", "break-away current": "A", "start delay": "s", "lost motion": "deg",
        "resistance": "ohm",
    }  # fmt: skip
    assert [name for name in names if not is_judged(name)] == ["vent: position error"]


def test_a_line_that_lacks_its_ticks_is_refused() -> None:
    with pytest.raises(RecordError, match="begin_tick"):
        spans_of([{"kind": "cycle_done", "number": 1, "tick": 5}])


# ---- a recorded run --------------------------------------------------------------------------------------------------

STEPS = """- cycle:
    times: 4
    rest: 1 s
    check every: 2
    check:
      - ramp: {motor: vent, to: 30 %, in: 500 ms}
      - hold: 800 ms
      - coast: {motor: vent, in: 500 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}
    steps:
      - ramp: {motor: vent, to: 50 %, in: 600 ms}
      - hold: 1 s
      - confirm: {position of: vent, is: at least 10 deg}
      - coast: {motor: vent, in: 500 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}"""


def test_a_recorded_run_has_features_for_each_cycle_and_check(tmp_path: Path) -> None:
    result, _ = run_case(tmp_path, Case("", steps=STEPS), seed=4)
    assert result.folder is not None
    found = list(cycle_features(result.folder))
    assert [each.span.number for each in found] == [0, 1, 2, 0, 3, 4, 0]
    done = [
        line
        for line in map(json.loads, (result.folder / "cycles.jsonl").read_text("utf-8").splitlines())
        if line["kind"] == "cycle_done"
    ]
    cycles = [each for each in found if not each.span.is_check]
    assert [each.duration_s for each in cycles] == [
        pytest.approx((line["tick"] - line["begin_tick"]) / 1000) for line in done
    ]
    for each in found:
        forward = each.motors["vent"].forward
        # The vent drive at no load: speed in proportion to duty, less the friction's share; the ramps are known.
        low, high = (12, 25) if each.span.is_check else (25, 40)
        assert low < forward.steady_speed_rpm < high
        assert 0.3 < forward.time_to_speed_s < 1.0
        assert 0.2 < forward.coast_down_s < 2.0
        assert each.motors["vent"].energy_j > 0.0
        assert each.motors["vent"].peak_current_a > forward.steady_current_a > 0.0


AGEING_FROM_S = 350.0
ONE_WAY = """- cycle:
    times: 178
    rest: 100 ms
    steps:
      - ramp: {motor: vent, to: 60 %, in: 700 ms}
      - hold: 600 ms
      - confirm: {position of: vent, is: at least 10 deg}
      - coast: {motor: vent, in: 500 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}"""


def test_ageing_while_a_run_is_recorded_is_found_in_its_folder_within_30_cycles(tmp_path: Path) -> None:
    # The friction grows by 0.15 % of its first value a second, 0.36 % a cycle, from the 146th cycle or so on.
    fresh_nm: list[float] = []

    def age(now: Progress, device: MockDevice, port: MockPort, session: Session) -> None:
        del port, session
        axis = device.plant.axes[0]
        fresh_nm.append(axis.coulomb_nm)
        axis.coulomb_nm = fresh_nm[0] * (1.0 + 0.0015 * max(0.0, now.elapsed_s - AGEING_FROM_S))

    result, _ = run_case(tmp_path, Case("", steps=ONE_WAY, meddle=age), seed=4)
    assert result.folder is not None
    watch, found, since = TrendWatch(), [], 0
    for each in cycle_features(result.folder):
        if not since and each.span.begin_tick > AGEING_FROM_S * 1000.0:
            since = each.span.number
        found += watch.add(each.span.number, {k: v for k, v in each.values().items() if is_judged(k)})
    assert since > 125
    assert found[0].feature == "vent forward: steady current"
    assert since < found[0].cycle <= since + 30
    assert found[0].change > 0.0
    text = make_report([result.folder], out=tmp_path / "out", issued="").report.read_text("utf-8")
    assert str(found[0]) in text


def test_a_run_in_parts_is_read_part_by_part(tmp_path: Path) -> None:
    # The board restarted: the ticks of the second part begin anew.
    heads = [name for name in NAMES if name != "state"]
    for name in ("samples.csv", "samples_2.csv"):
        rows = [dict(row) | {"time_s": row["tick"] / 1000} for row in known_rows()]
        lines = [",".join(heads)]
        lines += [",".join([f"{row['tick']:.0f}", *(f"{row[head]:.6f}" for head in heads[1:])]) for row in rows]
        (tmp_path / name).write_text("\n".join(lines) + "\n", encoding="utf-8")
    parts = [{"part": 1, "samples_file": "samples.csv"}, {"part": 2, "samples_file": "samples_2.csv"}]
    manifest = {"format": FORMAT, "columns": heads, "clocks": {"tick_us": 1000}, "parts": parts}
    (tmp_path / "run.json").write_text(json.dumps(manifest), encoding="utf-8")
    assert list(cycle_features(tmp_path)) == []
    done = [
        {"kind": "cycle_done", "number": number, "part": part, "begin_tick": 0, "tick": 12_000, "outcome": "confirmed"}
        for number, part in ((1, 1), (3, 2))
    ]
    lost = {"kind": "cycle_interrupted", "number": 2, "part": 2}
    text = "".join(json.dumps(line) + "\n" for line in (done[0], lost, done[1]))
    (tmp_path / "cycles.jsonl").write_text(text, encoding="utf-8")
    one, two = cycle_features(tmp_path)
    assert (one.span.number, two.span.number, two.span.part) == (1, 3, 2)
    assert one.values() == pytest.approx(two.values(), nan_ok=True)
    assert one.motors["vent"].forward.steady_speed_rpm == pytest.approx(40.0)


# ---- the mock's drive, new and ageing --------------------------------------------------------------------------------

CYCLES = 330
AGES_FROM = 180
SAMPLE_MS = 10
CYCLE_MS = 1000


def simulated(*, ageing: bool, cycles: int = CYCLES) -> list[Finding]:
    """The mock's plant driven open loop: 200 ms up to 50 %, 500 ms held, off; features judged as they come.

    Ageing, its friction grows by 0.1 % and its resistance by 0.05 % of the first value with each cycle from AGES_FROM.
    It begins as warm as it becomes, so that it is not the warming that is found.
    """
    plant = Plant(VENT_BENCH, seed=5)
    axis = plant.axes[0]
    axis.winding_c += 4.0
    fresh_nm, fresh_ohm = axis.coulomb_nm, axis.resistance_20_ohm
    spans = [
        Span(number=k + 1, part=1, begin_tick=k * CYCLE_MS, end_tick=(k + 1) * CYCLE_MS - 1) for k in range(cycles)
    ]
    walk, watch, found = FeatureWalk(NAMES, spans, tick_us=1000), TrendWatch(), []
    last = plant.read_counts(0)
    for cycle in range(cycles):
        age = max(0, cycle - AGES_FROM) if ageing else 0
        axis.coulomb_nm = fresh_nm * (1.0 + 0.001 * age)
        axis.resistance_20_ohm = fresh_ohm * (1.0 + 0.0005 * age)
        rows = []
        for ms in range(CYCLE_MS):
            axis.duty = min(5000, ms * 25) if ms < 700 else 0
            if ms % SAMPLE_MS == 0:
                counts = plant.read_counts(0)
                rows.append(
                    {
                        "tick": float(cycle * CYCLE_MS + ms),
                        "vent.duty_pct": axis.duty / 100,
                        "vent.counts": float(counts),
                        "vent.position_rev": counts / 5760,
                        "vent.speed_rpm": (counts - last) / 5760 * 60000 / SAMPLE_MS,
                        "vent.current_a": plant.read_current_ma(0) / 1000,
                        "supply_v": plant.read_supply_mv() / 1000,
                    }
                )
                last = counts
            plant.step()
        for done in walk.take(1, piece_of(rows)):
            found += watch.add(done.span.number, {k: v for k, v in done.values().items() if is_judged(k)})
    assert watch.features["vent forward: steady current"].established
    return found


def test_the_mocks_ageing_motor_is_found_within_60_cycles() -> None:
    found = simulated(ageing=True, cycles=AGES_FROM + 70)
    assert found
    assert AGES_FROM < found[0].cycle <= AGES_FROM + 60
    current = next(each for each in found if each.feature == "vent forward: steady current")
    assert current.level is Level.WATCH
    assert current.change > 0.0


def test_a_healthy_motor_raises_no_alarm() -> None:
    assert simulated(ageing=False) == []
