"""Ageing of each kind is found by a reference between loaded cycles, each by its own feature; a healthy drive is quiet.

The vent drive's plant in C, its encoder on the output behind a play of 0.6 deg. Each cycle drives it under a load that
differs from cycle to cycle, then come the reference's slow ramps without load, whose features are judged at the default
figures. From AGES_FROM on one thing wears. What the plant says has worn is the truth that the findings are held
against: they come no sooner than the wear begins, and no later than LATEST cycles after it has reached 10 %.
"""

from __future__ import annotations

import dataclasses
import math
import random
from dataclasses import dataclass, field

import numpy as np
import pytest

from c_plant import CPlant
from ramprig.endure.features import FeatureWalk, Span, is_judged
from ramprig.endure.motorfeatures import CHANNELS
from ramprig.endure.trends import Finding, TrendWatch
from ramprig.mock.core import why_not
from ramprig.mock.plant import VENT_BENCH
from ramprig.record.scan import Piece

pytestmark = pytest.mark.skipif(why_not() is not None, reason=why_not() or "")

CYCLES = 320
AGES_FROM = 150
CROSSES_AT = 0.10
"""Share of its first value that what wears has gained where it is to be found: `watch` at the default figures."""
LATEST = {"friction_wear": 0, "resistance_wear": 0, "play_wear": 60}
"""Cycles after the true crossing by which the finding must have come."""
SHOWS = {
    "friction_wear": "vent forward: break-away current",
    "resistance_wear": "vent: resistance",
    "play_wear": "vent: lost motion",
}
PLAY_DEG = 0.6
RATES = {"friction_wear": 50.0, "resistance_wear": 50.0, "play_wear": 0.3}
"""Per 1000 turns: % and degrees; an eighth of a per cent of the new drive's in a cycle."""
SAMPLE_MS = 10
COUNTS_PER_REV = 5760.0
OFFSET_MA = 4
SPEED_SAMPLES = 5

Ways = tuple[tuple[float, float], ...]
LOADED: Ways = ((60, 0.6), (60, 0.6), (0, 0.7), (0, 0.4), (-60, 0.6), (-60, 0.6), (0, 0.7), (0, 0.5))
"""Duties in %, each reached in a straight line in so many seconds; a fall faster than 100 %/s would lift the supply."""
REFERENCE: Ways = (
    *((20, 1.0), (0, 0.3), (0, 0.6)),  # the play is taken up
    *((8, 0.8), (0, 0.1), (0, 0.5)),  # break-away
    *((-40, 3.0), (-40, 0.6), (0, 0.5), (0, 0.8)),  # resistance and lost motion, then steady current and speed
)


def duties(ways: Ways) -> list[int]:
    """The duty of each sample, 1/10000."""
    found, now = [], 0.0
    for duty_pct, seconds in ways:
        many = round(seconds * 1000 / SAMPLE_MS)
        found += [round(100 * (now + (duty_pct - now) * (k + 1) / many)) for k in range(many)]
        now = duty_pct
    return found


@dataclass(slots=True)
class Drive:
    """The plant, and what its encoder has told so far."""

    plant: CPlant
    tick: int = 0
    counts: list[int] = field(default_factory=lambda: [0] * (SPEED_SAMPLES + 1))

    def run(self, ways: Ways) -> tuple[int, int, Piece]:
        """First and last tick, and the samples, as they are logged."""
        rows, begun = [], self.tick
        for duty in duties(ways):
            self.plant.drive(0, duty)
            counts, current_ma = self.plant.read(0)
            self.counts = [*self.counts[1:], counts]
            speed = (counts - self.counts[0]) / COUNTS_PER_REV * 60_000 / SAMPLE_MS / SPEED_SAMPLES
            current_a = (current_ma - OFFSET_MA) / 1000
            rows.append((duty / 100, counts, counts / COUNTS_PER_REV, speed, current_a, self.plant.supply_mv() / 1000))
            self.plant.step(SAMPLE_MS)
            self.tick += SAMPLE_MS
        columns = np.array(rows, float).T
        numbers = {f"vent.{name}": column for name, column in zip(CHANNELS, columns, strict=False)}
        ticks = np.arange(begun, self.tick, SAMPLE_MS, dtype=np.int64)
        return begun, self.tick - SAMPLE_MS, Piece(ticks, numbers | {"supply_v": columns[-1]})


def new_drive(seed: int) -> Drive:
    motor = dataclasses.replace(VENT_BENCH.axes[0].motor, play_rad=math.radians(PLAY_DEG), output_friction_nm=0.02)
    encoder = dataclasses.replace(VENT_BENCH.axes[0].encoder, on_output=True, lines=1440)
    axis = dataclasses.replace(VENT_BENCH.axes[0], motor=motor, encoder=encoder)
    return Drive(CPlant(dataclasses.replace(VENT_BENCH, axes=(axis,)), seed=seed))


NAMES = [*(f"vent.{name}" for name in CHANNELS), "supply_v"]


def values_of(drive: Drive, number: int, ways: Ways) -> dict[str, float]:
    """The features that are judged."""
    begun, ended, piece = drive.run(ways)
    walk = FeatureWalk(
        NAMES, [Span(number=number, part=1, begin_tick=begun, end_tick=ended)], tick_us=1000, on_output=["vent"]
    )
    (found,) = walk.take(1, piece)
    return {name: value for name, value in found.values().items() if is_judged(name)}


@dataclass(slots=True)
class Course:
    """What a test showed: `crossed` is the first cycle after which what wears has gained CROSSES_AT, 0 for never."""

    findings: list[Finding] = field(default_factory=list)
    crossed: int = 0
    loaded: list[dict[str, float]] = field(default_factory=list)
    reference: list[dict[str, float]] = field(default_factory=list)


def worn(drive: Drive, wear: str) -> float:
    """The share that the plant says has been gained."""
    friction, resistance, play_rad = drive.plant.worn(0)
    gained = {"friction_wear": friction, "resistance_wear": resistance, "play_wear": math.degrees(play_rad) / PLAY_DEG}
    return gained[wear]


def course(wear: str | None, *, seed: int, cycles: int = CYCLES) -> Course:
    drive, watch, found, drawn = new_drive(seed), TrendWatch(), Course(), random.Random(seed)
    for number in range(1, cycles + 1):
        if number == AGES_FROM and wear is not None:
            drive.plant.fault(wear, 0, RATES[wear])
        drive.plant.load(0, drawn.uniform(0.02, 0.12))
        found.loaded.append(values_of(drive, number, LOADED))
        drive.plant.load(0, 0.0)
        found.reference.append(values_of(drive, number, REFERENCE))
        found.findings += watch.add(number, found.reference[-1])
        if wear is not None and not found.crossed and worn(drive, wear) >= CROSSES_AT:
            found.crossed = number
    assert watch.features["vent: lost motion"].established
    return found


def check_found(wear: str, found: Course) -> None:
    """Found by the feature that is its own, in time, and not mistaken for another kind of wear."""
    assert AGES_FROM < found.crossed < CYCLES - LATEST[wear]
    assert found.findings[0].cycle >= AGES_FROM
    cycles = {each: [one.cycle for one in found.findings if one.feature == each] for each in SHOWS.values()}
    assert AGES_FROM < min(cycles[SHOWS[wear]]) <= found.crossed + LATEST[wear]
    assert [each for each, at in cycles.items() if at] == [SHOWS[wear]]


@pytest.mark.parametrize("wear", sorted(SHOWS))
def test_each_kind_of_ageing_is_found_by_its_own_feature_within_the_stated_cycles(wear: str) -> None:
    check_found(wear, course(wear, seed=1))


@pytest.mark.soak
@pytest.mark.parametrize("wear", sorted(SHOWS))
@pytest.mark.parametrize("seed", range(3, 9))
def test_each_kind_of_ageing_is_found_whatever_the_noise(wear: str, seed: int) -> None:
    check_found(wear, course(wear, seed=seed))


def test_a_healthy_drive_is_quiet_and_its_reference_does_not_follow_the_load() -> None:
    found = course(None, seed=2)
    assert found.findings == []
    spread = {}
    for kind, rows in (("loaded", found.loaded), ("reference", found.reference)):
        values = np.array([row["vent backward: steady current"] for row in rows])
        spread[kind] = float(values.std() / values.mean())
    assert spread["loaded"] > 5.0 * spread["reference"]


@pytest.mark.soak
def test_a_healthy_drive_is_quiet_for_10000_cycles() -> None:
    assert course(None, seed=2, cycles=10_000).findings == []
