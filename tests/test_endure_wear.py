"""The judge of wear: run-in and baseline, which features it looks at, and blocks and checks each by their own rules."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from ramprig.endure import features
from ramprig.endure.motorfeatures import MotorFeatures
from ramprig.endure.servotiming import ServoFeatures
from ramprig.endure.wear import Cycle, WearJudge
from ramprig.sequence.cycle_watch import place_of
from ramprig.sequence.wear_limits import Threshold, TurnKind, WearLimit, WearRules
from ramprig.sequence.wear_words import FEATURE_WORDS, Whose, drive_of, full_names, word_of

CYCLES_OF_1 = (1, TurnKind.CYCLE)


def rules(**changes: Any) -> WearRules:  # Any: whatever the rules take
    limit = WearLimit(
        feature="vent: energy", watch=Threshold(text="+10 %", high=0.1), fail=None, k=2, n=3, place="f.yaml:1:1"
    )
    usual: dict[str, Any] = {
        "block": 1, "name": "open", "turn": TurnKind.CYCLE, "run_in_turns": 3, "run_in_s": 60.0, "baseline": 10,
        "detectors": True,
        "drives": ("vent",), "limits": (limit,), "others": None,
    }  # fmt: skip
    return WearRules(**(usual | changes))


def cycle(number: int, *, at_s: float, part: int = 1, others: dict[str, float] | None = None) -> Cycle:
    begin = round(at_s * 1000)
    return Cycle(
        number=number, block=1, part=part, begin_tick=begin, end_tick=begin + 900,
        features={"vent: energy": 1.0} | (others or {}),
    )  # fmt: skip


def test_the_run_in_lasts_for_its_cycles_and_its_time_and_comes_again_after_an_interruption() -> None:
    judge = WearJudge.of([rules()], tick_us=1000)
    block = judge.blocks[CYCLES_OF_1]
    for number in range(1, 9):
        judge.take(cycle(number, at_s=5.0 + 10.0 * number))
    assert block.run_in == 6  # those that begin less than 60 s after the first one
    for number in range(9, 13):
        judge.take(cycle(number, at_s=20.0 * number, part=2))
    assert block.run_in == 6 + 3
    slow = WearJudge.of([rules()], tick_us=1000)
    for number in range(1, 9):
        slow.take(cycle(number, at_s=100.0 * number))
    assert slow.blocks[CYCLES_OF_1].run_in == 3


def test_features_of_motors_that_are_not_driven_are_not_judged() -> None:
    others = WearLimit(feature="", watch=Threshold(text="+- 1 %", low=-0.01, high=0.01), fail=None)
    judge = WearJudge.of([rules(run_in_turns=0, run_in_s=0.0, others=others)], tick_us=1000)
    source = np.random.default_rng(1)
    for number in range(1, 60):
        noise = {"fan: peak current": float(source.uniform(0.1, 9.0)), "vent: position error": float(source.normal())}
        judge.take(cycle(number, at_s=float(number), others={"duration": 1.0} | noise))
    assert list(judge.blocks[CYCLES_OF_1].features) == ["vent: energy", "duration"]
    assert judge.to_watch() == []


def test_every_feature_that_is_computed_has_its_word_and_unit() -> None:
    span = features.Span(number=1, part=1, begin_tick=0, end_tick=1)
    made = features.CycleFeatures(
        span=span, samples=0, left_out=0, duration_s=1.0, lowest_supply_v=1.0, motors={"vent": MotorFeatures()},
        servos={"latch": ServoFeatures()},
    )  # fmt: skip
    names = list(made.values())
    assert {word_of(name) for name in names} == set(FEATURE_WORDS)
    for name in names:
        word = FEATURE_WORDS[word_of(name)]
        assert features.unit_of(name) == word.unit, name
        assert features.is_judged(name) == (not word.on_request), name
        drive = {Whose.CYCLE: "", Whose.SERVO: "latch"}.get(word.whose, "vent")
        assert drive_of(name) == drive
        assert name in full_names(word_of(name), drive, None)


def test_few_checks_are_a_baseline() -> None:
    checks = rules(turn=TurnKind.CHECK, run_in_turns=1, run_in_s=0.0, baseline=3, detectors=False)
    judge = WearJudge.of([checks], tick_us=1000)
    found: list[str] = []
    for count, energy_j in enumerate((9.0, 1.0, 1.02, 0.98, 1.3, 1.05, 1.2), 1):
        turn = cycle(0, at_s=100.0 * count, others={"vent: energy": energy_j})
        found += map(str, judge.take(turn))
    assert found == [
        "vent: energy: watch limit at check 7, 1.2 J against 1 J at first (+20.0 %); beyond +10 % (above 1.1 J) "
        "in 2 of the last 3 checks: 5, 7"
    ]


def test_blocks_are_judged_each_by_its_own_rules() -> None:
    judge = WearJudge.of([rules(run_in_turns=0, run_in_s=0.0)], tick_us=1000)
    other = Cycle(number=1, block=2, part=1, begin_tick=0, end_tick=900, features={"vent: energy": 99.0})
    assert judge.take(other) == []
    assert judge.blocks[CYCLES_OF_1].turns == 0


@pytest.mark.parametrize(
    ("text", "place"), [("a/b.yaml:3:14", "a/b.yaml:3:14"), ("C:\\x.yaml:3:1", "C:\\x.yaml:3:1"), ("", "None")]
)
def test_a_place_is_read_back(text: str, place: str) -> None:
    assert str(place_of(text)) == place
