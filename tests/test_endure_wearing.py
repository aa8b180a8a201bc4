"""Whole runs of the vent drive, new and wearing, judged as they go: quiet where nothing wears, and soon where it does.

On the firmware core and plant in C where there is a compiler, else on the mock. What the plant is told to wear is the
truth that findings are held against.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
import pytest

from ramprig.bench import Bench, bench_of_text
from ramprig.endure.live import LiveWatch, WearFound
from ramprig.endure.wear import Cycle, WearJudge
from ramprig.mock.core import why_not
from ramprig.mock.core.device import SimulatedDevice
from ramprig.mock.core.url import CorePort
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.sequence.cycle_watch import CycleWatch, Seen, TurnDone, Watched
from ramprig.sequence.executive import Progress
from ramprig.sequence.outcome import Outcome, Verdict
from ramprig.sequence.running import RunWish, run_sequence
from ramprig.sequence.wear_limits import OTHERS_DEFAULT, TurnKind, WearRules
from ramprig.session.blocks import Block
from sequence_rig import sequence_of

BENCH = (Path(__file__).parents[1] / "scripts" / "vent_bench.yaml").read_text("utf-8")
COUNTS_PER_TURN = 5760

ONE_WAY = """- cycle:
    name: open
    times: TIMES
    WEAR
    steps:
      - ramp: {motor: vent, to: 60 %, in: 600 ms}
      - hold: 450 ms
      - confirm: {position of: vent, is: at least 10 deg}
      - coast: {motor: vent, in: 600 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}"""

SLOW_RAMP = """- cycle:
    name: open
    times: TIMES
    WEAR
    steps:
      - ramp: {motor: vent, to: 40 %, in: 3 s}
      - hold: 450 ms
      - confirm: {position of: vent, is: at least 10 deg}
      - coast: {motor: vent, in: 600 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}
      - hold: 200 ms"""

REFERENCE = """- cycle:
    name: open
    times: TIMES
    WEAR
    check every: 1
    check:
      - reverse: {motor: vent, to: 20 %, in: 1 s, still within: 3 s}
      - coast: {motor: vent, in: 300 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}
      - hold: 200 ms
      - reverse: {motor: vent, to: -40 %, in: 4 s, still within: 3 s}
      - hold: 500 ms
      - coast: {motor: vent, in: 500 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}
    steps:
      - reverse: {motor: vent, to: 60 %, in: 800 ms, still within: 3 s}
      - hold: 1 s
      - coast: {motor: vent, in: 700 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}"""
PLAY_DEG = 0.6
WITH_PLAY = (
    BENCH.replace("lines: 16 ", "lines: 1440 ")
    .replace("on: motor shaft", "on: output shaft")
    .replace(
        "      sensor offset: 4 mA\n",
        f"      sensor offset: 4 mA\n      play: {PLAY_DEG} deg\n      output friction: 20 mN m\n",
    )
)
"""The encoder behind the gear, at 5760 counts a turn as before."""

Device = MockDevice | SimulatedDevice


AGES_FROM = 60
"""Cycles that are done before anything wears: no run-in, a baseline of 40, and some."""
SHORT = "wear: {run in: {cycles: 0, for: 0 s}, baseline: 40, limits: [LIMIT]}"
LATEST = 12
"""Cycles by which the end of the run may miss the true crossing of the limit, either way: noise counts, too."""


@dataclass
class Course:
    """What came of a run: its findings, and the way of the output, in turns, at the end of each cycle."""

    outcome: Outcome | None = None
    cycles: int = 0
    found: list[WearFound] = field(default_factory=list)
    turns: list[float] = field(default_factory=list)
    run_in: int = 0
    established: set[str] = field(default_factory=set)

    @property
    def failed(self) -> WearFound:
        """What ended the run."""
        assert self.outcome is not None
        assert self.outcome.verdict is Verdict.FAILED, self.outcome
        return next(each for each in self.found if each.level == "fail")

    def crossing(self, ages_from: int, *, per_1000: float, by: float) -> int:
        """The first cycle after which what wears has gained `by`, at `per_1000` in 1000 turns from that cycle on."""
        begun = self.turns[ages_from - 1]
        worn = [per_1000 * (turns - begun) / 1000.0 for turns in self.turns]
        return next(number for number, gained in enumerate(worn, 1) if gained >= by)


def drive(
    folder: Path,
    steps: str,
    wear: str,
    *,
    times: int,
    seed: int = 7,
    ages: tuple[str, float] | None = None,
    bench_text: str = BENCH,
) -> Course:
    """Run the cycles; `ages` is a fault of the plant with its strength, on from cycle AGES_FROM on."""
    bench = bench_of_text(bench_text, "bench.yaml")
    course = Course()
    watches: list[LiveWatch] = []

    class Watch(LiveWatch):
        way = 0
        last: int | None = None

        def done(self, turn: TurnDone) -> Seen:
            seen = super().done(turn)
            course.found += [each for each in seen.found if isinstance(each, WearFound)]
            if turn.number:
                course.cycles += 1
                course.turns.append(self.way / COUNTS_PER_TURN)
            return seen

        def on_block(self, block: Block) -> None:
            counts = block.column("counts", 0)
            steps = np.diff(counts, prepend=counts[0] if self.last is None else self.last)
            self.way += int(np.abs(steps).sum())
            self.last = int(counts[-1])
            super().on_block(block)

    def watching(watched: Watched) -> CycleWatch:
        watches.append(Watch(watched, say=lambda text: None))
        return watches[-1]

    port, device = make(bench, seed)

    def progress(now: Progress) -> None:
        if ages is not None and now.cycles_done >= AGES_FROM:
            device.faults.set(ages[0], ages[1])

    text = steps.replace("TIMES", str(times)).replace("WEAR", wear)
    sequence = sequence_of(folder, text, head="log: {period: 10 ms}\n")
    wish = RunWish(sequence=sequence, bench=bench, virtual=True, seed=seed, watching=watching)
    course.outcome = run_sequence(wish, port, progress=progress).outcome
    block = watches[0].judge.blocks[1, TurnKind.CYCLE]
    course.run_in = block.run_in
    course.established = {name for name, trend in block.features.items() if trend.established}
    return course


def make(bench: Bench, seed: int) -> tuple[MockPort | CorePort, Device]:
    """A port to a new board with the bench's drive, and the board."""
    setup = setup_of_bench(bench)
    if why_not() is not None:
        mock = MockDevice(setup, seed=seed)
        return MockPort(mock, pace="virtual", seed=seed), mock
    core = SimulatedDevice(setup, seed=seed)
    return CorePort(core, pace="virtual", seed=seed), core


EXPECTED = {
    "duration", "lowest supply", "vent: peak current", "vent: energy", "vent forward: steady current",
    "vent forward: steady speed", "vent forward: time to speed", "vent forward: coast-down time",
}  # fmt: skip


def no_alarm(folder: Path, *, times: int, seed: int) -> None:
    """A healthy run at the default rules."""
    course = drive(folder, ONE_WAY, "rest: 0 s", times=times, seed=seed)
    assert course.outcome is not None
    assert course.outcome.verdict is Verdict.PASSED, course.outcome
    assert [each.text for each in course.found] == [], f"seed {seed}"
    assert course.cycles == times
    assert course.established >= EXPECTED


def test_nothing_is_found_on_a_healthy_drive(tmp_path: Path) -> None:
    """420 cycles: some 200 of run-in, a hundred of baseline, a hundred that are judged."""
    no_alarm(tmp_path, times=420, seed=5)


@pytest.mark.soak
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_nothing_is_found_in_10000_healthy_cycles(tmp_path: Path, seed: int) -> None:
    no_alarm(tmp_path, times=10_000, seed=seed)


def test_friction_that_wears_ends_the_run_within_12_cycles_of_its_limit(tmp_path: Path) -> None:
    """It grows by some 0.27 % a cycle; the current for it is 0.84 of the whole, the rest is viscous."""
    coulomb, viscous = 1.5e-3, 8e-7 * 37.9 * 90 * 2 * math.pi / 60  # N m, the bench file's model at 37.9 rpm
    wear = SHORT.replace("LIMIT", "{feature: steady current, of: vent, going: forward, watch: +5 %, fail: +10 %}")
    course = drive(tmp_path, ONE_WAY, wear, times=200, ages=("friction_wear", 400.0))
    share = coulomb / (coulomb + viscous)
    crossing = course.crossing(AGES_FROM, per_1000=4.0 * share, by=0.10)
    assert course.failed.feature == "vent forward: steady current"
    assert abs(course.failed.number - crossing) <= LATEST, (course.failed.number, crossing)
    assert min(each.number for each in course.found) > AGES_FROM


def test_resistance_that_wears_ends_the_run_within_12_cycles_of_its_limit(tmp_path: Path) -> None:
    """What is measured is winding and brushes, 2.4 ohm at 20 degC, with the bridge's 0.1 ohm that does not wear."""
    wear = SHORT.replace("LIMIT", "{feature: resistance, of: vent, watch: +10 %, fail: +20 %}")
    course = drive(tmp_path, SLOW_RAMP, wear, times=200, ages=("resistance_wear", 300.0))
    crossing = course.crossing(AGES_FROM, per_1000=3.0 * 2.4 / 2.5, by=0.20)
    assert course.failed.feature == "vent: resistance"
    assert abs(course.failed.number - crossing) <= LATEST, (course.failed.number, crossing)
    assert min(each.number for each in course.found) > AGES_FROM


def test_play_that_wears_is_found_by_the_checks_within_12_of_its_limit(tmp_path: Path) -> None:
    wear = (
        "wear: {run in: {for: 0 s}, detectors: off, other features: ignore, "
        "checks: {baseline: 20, limits: [{feature: lost motion, of: vent, fail: at most 1.2 deg}]}}"
    )
    course = drive(tmp_path, REFERENCE, wear, times=130, ages=("play_wear", 20.0), bench_text=WITH_PLAY)
    crossing = course.crossing(AGES_FROM, per_1000=20.0, by=1.2 - PLAY_DEG)
    assert (course.failed.feature, course.failed.turn) == ("vent: lost motion", "check")
    assert abs(course.failed.number - crossing) <= LATEST, (course.failed.number, crossing)


def test_the_warming_of_fast_cycles_is_not_called_wear() -> None:
    """300 ms a cycle, a winding that warms by 20 K with 90 s: its resistance grows by 7.9 % (copper, IEC 60028)."""
    source = np.random.default_rng(4)
    values = []
    for number in range(3000):
        warmer_k = 20.0 * (1.0 - math.exp(-0.3 * number / 90.0))
        values.append(2.5 * (1.0 + 0.00393 * warmer_k) * (1.0 + 0.005 * source.normal()))

    def found(run_in_s: float) -> list[str]:
        wish = WearRules(
            block=1, name="x", turn=TurnKind.CYCLE, run_in_turns=20, run_in_s=run_in_s, baseline=100, detectors=True,
            drives=("vent",), limits=(), others=OTHERS_DEFAULT,
        )  # fmt: skip
        judge = WearJudge.of([wish], tick_us=1000)
        cycles = [
            Cycle(number=k + 1, block=1, part=1, begin_tick=300 * k, end_tick=300 * k + 299,
                  features={"vent: resistance": value})
            for k, value in enumerate(values)
        ]  # fmt: skip
        return [str(each) for cycle in cycles for each in judge.take(cycle)]

    assert found(5 * 90.0) == []
    assert found(0.0) != []
