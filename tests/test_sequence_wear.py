"""Limits to wear: what a file may say of them, what becomes of it on a bench, and what is refused where it stands."""

from __future__ import annotations

import json
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.bench import bench_of_text
from ramprig.errors import FileError, RecordError
from ramprig.quantity import QuantityError
from ramprig.record.events import jsonable
from ramprig.sequence.reading import sequence_of_text
from ramprig.sequence.rig import Rig
from ramprig.sequence.schema import sequence_schema
from ramprig.sequence.steps import Cycle
from ramprig.sequence.wear_limits import Threshold, WearRules, rules_of
from ramprig.sequence.wear_plan import wear_rules
from ramprig.sequence.wear_shape import share_threshold
from ramprig.sequence.wear_words import FEATURE_WORDS, Whose, full_names, show_feature, word_of
from sequence_rig import BENCH, small_bench

FILE = """sequence: x
steps:
  - cycle:
      name: open
      times: 5
      WEAR
      steps: [{hold: 1 s}]
"""


def cycle_of(wear: str) -> Cycle:
    """The cycle of a file with this section, which begins at line 6, column 7."""
    (step,) = sequence_of_text(FILE.replace("WEAR", wear), "wear.yaml").steps
    assert isinstance(step, Cycle)
    return step


def rules(wear: str, *driven: str) -> WearRules:
    """Its rules on the small bench, where it drives these motors."""
    driven_here = set(driven or ("vent",))
    found = wear_rules(Rig.of(small_bench()), cycle_of(wear), block=1, driven=driven_here, driven_in_check=None)
    return found[0]


def limit(text: str) -> str:
    return f"wear: {{limits: [{{{text}}}]}}"


def test_without_a_word_everything_is_watched_and_nothing_ends_the_run() -> None:
    found = rules("rest: 1 s")
    assert found.limits == ()
    assert found.detectors
    assert not found.can_fail
    assert (found.run_in_turns, found.baseline) == (20, 100)
    assert found.run_in_s == 5 * 60.0  # five of the thermal time constants that the bench file says
    other = found.limit_of("vent: energy")
    assert other is not None
    assert other.watch == Threshold(text="+- 10 %", low=-0.1, high=0.1)
    assert list(found.lines()) == [
        "'open' after a run-in of 20 cycles and 5 min, against the 100 cycles after it",
        "every feature: watch +- 10 %, 3 of 5 cycles",
        "sudden changes, slow ones and drifts: watch (figures of this program, no standard)",
        "none of these ends the run",
    ]


def test_wear_off_judges_nothing() -> None:
    assert both("wear: off") == ()


def both(wear: str) -> tuple[WearRules, ...]:
    """The rules of cycles that drive `vent`, and of checks that drive `fan`."""
    rig = Rig.of(small_bench())
    return wear_rules(rig, cycle_of(wear), block=1, driven={"vent"}, driven_in_check={"fan"})


def test_checks_have_limits_of_their_own() -> None:
    cycles, checks = both(
        "wear:\n"
        "        limits: [{feature: energy, of: vent, fail: +5 %}]\n"
        "        checks: {baseline: 4, limits: [{feature: lost motion, of: fan, fail: at most 4 deg}]}"
    )
    assert cycles.drives == ("vent", "latch", "flap")
    assert checks.drives == ("fan", "latch", "flap")
    assert (checks.run_in_turns, checks.baseline, checks.detectors) == (1, 4, False)
    assert list(checks.lines()) == [
        "checks of 'open' after a run-in of 1 check and 5 min, against the 4 checks after it",
        "fan: lost motion: fail at most 4 deg, 3 of 5 checks",
        "every other feature: watch +- 10 %, 3 of 5 checks",
    ]
    assert len(both("wear: {checks: off}")) == 1
    with pytest.raises(FileError, match="this limits a check, and the cycle has none"):
        rules("wear: {checks: {limits: [{feature: energy, of: vent, fail: +5 %}]}}")


def test_what_a_file_says_is_in_force() -> None:
    found = rules(
        "wear:\n"
        "        run in: {cycles: 30, for: 10 min}\n"
        "        baseline: 50\n"
        "        limits:\n"
        "          - {feature: steady current, of: vent, going: forward, watch: +10 %, fail: +25 %, cycles: 4 of 7}\n"
        "          - {feature: coast-down time, of: vent, fail: -30 %}\n"
        "          - {feature: position error, of: vent, fail: -3.6 deg to 7.2 deg}\n"
        "          - {feature: lowest supply, watch: at least 11 V}\n"
        "        other features: ignore\n"
        "        detectors: off"
    )
    assert (found.run_in_turns, found.run_in_s, found.baseline, found.detectors) == (30, 600.0, 50, False)
    assert found.can_fail
    by_name = {each.feature: each for each in found.limits}
    assert list(by_name) == [
        "vent forward: steady current",
        "vent forward: coast-down time",
        "vent backward: coast-down time",
        "vent: position error",
        "lowest supply",
    ]
    current = by_name["vent forward: steady current"]
    assert (current.k, current.n, current.place) == (4, 7, "wear.yaml:10:13")
    assert current.fail == Threshold(text="+25 %", high=0.25)
    error = by_name["vent: position error"].fail
    assert error is not None
    assert not error.is_share
    assert (error.low, error.high) == pytest.approx((-0.01, 0.02))  # turns of the output shaft
    assert by_name["lowest supply"].watch == Threshold(text="at least 11 V", low=11.0, is_share=False)
    assert found.limit_of("vent: energy") is None
    assert found.limit_of("vent backward: steady current") is None


@pytest.mark.parametrize(
    ("wear", "at", "said"),
    [
        ("wear: {limit: []}", "limit:", "unknown key 'limit' in 'wear'; did you mean 'limits'?"),
        ("wear: {limits: []}", "[]", "found 0 items"),
        ("wear: {baseline: 5}", "5}", "found 5 for 'baseline'"),
        ("wear: {run in: 20}", "20}", "a mapping is wanted for 'run in'"),
        ("wear: {detectors: maybe}", "maybe}", "found 'maybe'"),
        ("wear: {other features: {cycles: 3 of 5}}", "{cycles", "neither 'watch' nor 'fail'"),
        (limit("feature: energi, of: vent, fail: +1 %"), "energi", "did you mean 'energy'?"),
        (limit("feature: energy, fail: +1 %"), "{feature", "'of' is missing beside 'energy'"),
        (limit("feature: duration, of: vent, fail: +1 %"), "vent", "'of' does not go with 'duration'"),
        (limit("feature: energy, of: vent, going: forward, fail: +1 %"), "forward", "it has no direction"),
        (limit("feature: energy, of: vent"), "{feature", "neither 'watch' nor 'fail'"),
        (limit("feature: energy, of: vent, fail: 25 %"), "25 %", "found '25 %' without a sign; write '+' for a growth"),
        (limit("feature: energy, of: vent, watch: +25 %, fail: +10 %"), "+10 %", "before 'watch', +25 %"),
        (limit("feature: energy, of: vent, watch: at least 1 J, fail: at least 2 J"), "at least 2", "before 'watch'"),
        ("wear: {other features: {watch: +- 10 %, fail: +- 5 %}}", "+- 5 %", "'fail' lies farther out than 'watch'"),
        (limit("feature: energy, of: vent, fail: +0 %"), "+0 %", "found a change of 0 %"),
        (limit("feature: energy, of: vent, fail: at most 3 A"), "at most 3 A", "found '3 A', which is a current"),
        (limit("feature: energy, of: vent, fail: +1 %, cycles: 6 of 5"), "6 of 5", "found '6 of 5' for 'cycles'"),
        (limit("feature: position error, of: vent, fail: +3 %"), "+3 %", "a feature that lies about zero"),
        (limit("feature: travel ratio, of: vent, fail: at most 3"), "at most 3}", "found 'at most 3' for 'fail'"),
        (limit("feature: move time, of: lotch, fail: +1 %"), "lotch", "no servo 'lotch'; did you mean 'latch'?"),
        (limit("feature: energy, of: vant, fail: +1 %"), "vant", "no motor 'vant'; did you mean 'vent'?"),
        (limit("feature: energy, of: fan, fail: +1 %"), "fan", "'fan' is not driven here"),
        (
            "wear: {limits: [{feature: energy, of: vent, fail: +1 %}, {feature: energy, of: vent, fail: +2 %}]}",
            "{feature: energy, of: vent, fail: +2",
            "a second limit of 'vent: energy'; the first is in line 6",
        ),
    ],
)  # fmt: skip
def test_what_cannot_be_is_refused_where_it_stands(wear: str, at: str, said: str) -> None:
    with pytest.raises(FileError) as caught:
        rules(wear)
    assert said in str(caught.value)
    place = caught.value.place
    assert place is not None
    assert (place.file, place.line) == ("wear.yaml", 6)
    assert caught.value.text is not None
    assert caught.value.text[place.column - 1 :].startswith(at)


def test_a_motor_without_an_encoder_has_no_speed_to_limit() -> None:
    text = BENCH.replace("encoder: {lines: 16, decoding: x4, on: motor shaft, direction: same}", "encoder: none", 1)
    text = re.sub(r"      standstill: .*\n|      stall: .*\n", "", text, count=2)
    bench = bench_of_text(text, "bench.yaml")
    step = cycle_of(limit("feature: steady speed, of: vent, fail: -10 %"))
    with pytest.raises(FileError, match="'vent' has no encoder, so its steady speed is not measured"):
        wear_rules(Rig.of(bench), step, block=1, driven={"vent"}, driven_in_check=None)


# ---- thresholds ------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "low", "high"),
    [
        ("+25 %", None, 0.25), ("-20%", -0.2, None), ("+- 10 %", -0.1, 0.1), ("+/- 10 %", -0.1, 0.1),
        ("+-10%", -0.1, 0.1), ("-5 % to +10 %", -0.05, 0.1), ("+ 2.5 %", None, 0.025),
    ],
)  # fmt: skip
def test_changes_are_read_as_they_are_written(text: str, low: float | None, high: float | None) -> None:
    found = share_threshold(text)
    assert found is not None
    assert (found.low, found.high) == (low, high)


@given(st.text(max_size=20))
def test_no_text_does_more_than_be_refused(text: str) -> None:
    try:
        found = share_threshold(text)
    except QuantityError:
        return
    assert found is None or found.is_share


@pytest.mark.parametrize("baseline", [2.0, -2.0])
def test_a_share_is_one_of_the_baselines_size(baseline: float) -> None:
    both = Threshold(text="", low=-0.1, high=0.25)
    assert both.ends(baseline) == pytest.approx((baseline - 0.2, baseline + 0.5))
    assert both.is_beyond(baseline + 0.51, baseline)
    assert both.is_beyond(baseline - 0.21, baseline)
    assert not both.is_beyond(baseline + 0.49, baseline)
    absolute = Threshold(text="", low=1.0, high=3.0, is_share=False)
    assert absolute.ends(baseline) == (1.0, 3.0)
    assert [absolute.is_beyond(value, baseline) for value in (0.9, 1.0, 3.0, 3.1)] == [True, False, False, True]


# ---- the record and the words ----------------------------------------------------------------------------------------


def test_the_record_gives_the_rules_back() -> None:
    found = rules(limit("feature: energy, of: vent, watch: +10 %, fail: at most 30 J"))
    assert rules_of(json.loads(json.dumps(jsonable([found])))) == (found,)
    assert rules_of(None) == ()
    with pytest.raises(RecordError, match="the wear limits in run"):
        rules_of([{"block": 1}])


def test_every_feature_has_a_unit_of_its_kind() -> None:
    for name, word in FEATURE_WORDS.items():
        assert (word.kind is None) == (word.unit == "")
        assert word.kind is None or word.kind.unit(word.unit) is not None
        motor = "" if word.whose is Whose.CYCLE else "vent"
        assert {word_of(full) for full in full_names(name, motor, None)} == {name}
    assert show_feature("vent: position error", 0.25) == "90 deg"
    assert show_feature("vent forward: steady current", 0.3125) == "312.5 mA"
    assert show_feature("vent: travel ratio", 0.98765) == "0.9877"


def test_an_editor_is_told_the_same() -> None:
    jsonschema = pytest.importorskip("jsonschema", reason="needs the package jsonschema")
    validator = jsonschema.Draft202012Validator(sequence_schema())

    def document(wear: object) -> dict[str, object]:
        return {"sequence": "x", "steps": [{"cycle": {"times": 5, "wear": wear, "steps": [{"hold": "1 s"}]}}]}

    good = {"feature": "energy", "of": "vent", "watch": "+- 10 %", "fail": "at most 30 J", "cycles": "3 of 5"}
    wears: list[object] = ["off", {"run in": {"cycles": 3, "for": "1 min"}, "limits": [good], "detectors": "off"}]
    wears.append({"other features": "ignore"})
    for wear in wears:
        assert validator.is_valid(document(wear)), wear
    for bad in ({"limits": [good | {"feature": "energi"}]}, {"limits": [{"of": "vent"}]}, {"base": 3}, "on"):
        assert not validator.is_valid(document(bad)), bad
