"""What a sequence file may not say: each refusal names the place, what was found and what would be right."""

from __future__ import annotations

from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ramprig.errors import FileError, UsageError
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.reading import read_sequence
from sequence_rig import plan_of, sequence_of, small_bench

UP = "- ramp: {motor: vent, to: 60 %, in: 600 ms}\n"

REFUSALS = [
    # ---- reading
    ("- romp: {motor: vent}", 3, 5, "unknown step 'romp'; did you mean 'ramp'?"),
    ("- hold", 3, 5, "found 'hold'; write 'hold: ' and what it does, such as 'hold: 2 s'"),
    ("- hold: 2", 3, 11, "found '2' without a unit; a duration has its unit, s, ms, us, min or h: as in '350 ms'"),
    (
        "- hold: 2 s\n  mark: x",
        4,
        5,
        "'mark' stands beside the step 'hold'; indent it deeper than 'hold' if it belongs to it, or begin a new step "
        "with '- '",
    ),
    ("- ramp: {motor: vent, to: 20 %}", 3, 11, "'in' is missing in 'ramp'; required: motor, to, in"),
    ("- ramp: {motor: vent, to: 20 %, im: 1 s}", 3, 35, "unknown key 'im' in 'ramp'; known keys: motor, to, in"),
    (
        "- ramp: {motor: vent, to: 20.001 %, in: 1 s}",
        3,
        29,
        "found '20.001 %'; it must be a multiple of 0.01 %",
    ),
    ("- ramp: {motor: vent, to: fast, in: 1 s}", 3, 29, "no value is named 'fast'; there are no named values here"),
    (
        "- reverse: {motor: vent, to: 0 %, in: 1 s}",
        3,
        32,
        "found 0 % for a reverse; a reverse ends at a duty; to stop use 'coast' or 'brake'",
    ),
    (
        "- repeat: {steps: [{hold: 1 s}]}",
        3,
        13,
        "this repeat does not say how often; a repeat has one of 'times', 'for', or 'until' with 'at most'",
    ),
    (
        "- repeat: {times: 2, for: 1 s, steps: [{hold: 1 s}]}",
        3,
        29,
        "'for' stands beside 'times'; a repeat has one of 'times', 'for', or 'until' with 'at most'",
    ),
    (
        "- wait: {speed of: vent, is: at least 5 rpm}",
        3,
        11,
        "'within' is missing in 'wait'; required: within",
    ),
    (
        "- expect: {speed of: vent, current of: vent, is: at least 5 rpm}",
        3,
        42,
        "'current of' stands beside 'speed of'; one is judged at a time",
    ),
    (
        "- expect: {counts of: vent, is: at least 5 counts, over: 1 s}",
        3,
        60,
        "'over' does not go with 'counts of'; it goes with 'speed of' and 'current of'",
    ),
    (
        "- expect: {speed of: vent, is: 20 rpm}",
        3,
        34,
        "found '20 rpm' without a tolerance; write '20 rpm +- 5 %', 'at least 20 rpm', 'at most 20 rpm' or a range "
        "with 'to'",
    ),
    (
        "- sweep: {servo: latch, shape: sine, from: 0 deg, to: 9 deg, period: 1 s, steps: 3}",
        3,
        84,
        "'steps' does not go with the shape sine; give 'period'",
    ),
    (
        "- sweep: {servo: latch, shape: steps, from: 0 deg, to: 9 deg, steps: 3}",
        3,
        12,
        "'pause' is missing in a sweep of the shape steps; give 'steps' and 'pause'",
    ),
    # ---- names
    ("- coast: vant", 3, 12, "this bench has no motor named 'vant'; did you mean 'vent'?"),
    ("- coast: latch", 3, 12, "'latch' is a servo; a motor is wanted: motors: vent, fan"),
    (
        "- move: {servo: vent, to: 0 deg, in: 1 s}",
        3,
        19,
        "'vent' is a motor; a servo is wanted: servos: latch, flap",
    ),
    # ---- limits
    (
        "- ramp: {motor: vent, to: 90 %, in: 2 s}",
        3,
        29,
        "found 90 %, above vent's ceiling; at most 80 % either way",
    ),
    (
        "- ramp: {motor: vent, to: 60 %, in: 200 ms}",
        3,
        39,
        "from 0 % to 60 % this asks for 300 %/s; vent's slew limit is 100 %/s; use 'in: 600 ms' or more",
    ),
    (
        UP + "- ramp: {motor: vent, to: 0 %, in: 200 ms}",
        4,
        38,
        "from 60 % to 0 % this asks for 300 %/s; vent's fall limit is 200 %/s; use 'in: 300 ms' or more",
    ),
    (
        UP + "- ramp: {motor: vent, to: -20 %, in: 2 s}",
        4,
        29,
        "vent is at 60 % here, so this would cross zero at speed; use 'reverse: {motor: vent, to: -20 %, ...}'",
    ),
    (
        UP + "- coast: vent\n- ramp: {motor: vent, to: -20 %, in: 2 s}",
        5,
        29,
        "vent was last driven the other way, and may still turn; use 'reverse: {motor: vent, to: -20 %, ...}'",
    ),
    (
        UP + "- reverse: {motor: vent, to: 20 %, in: 2 s}",
        4,
        32,
        "vent is driven that way already, at 60 %; a reverse goes to the other sign; use 'ramp' for the same one",
    ),
    (
        "- reverse: {motor: vent, to: -20 %, in: 1 s, dwell: 100 ms}",
        3,
        55,
        "found 100 ms, below vent's dwell limit; at least 300 ms",
    ),
    (
        "- sweep: {motor: vent, shape: triangle, from: -10 %, to: 10 %, period: 4 s}",
        3,
        60,
        "this sweep would cross zero at speed; sweep one direction, then use 'reverse'",
    ),
    (
        "- move: {servo: latch, to: 50 deg, in: 2 s}",
        3,
        30,
        "found 50 deg, outside latch's limits; -40 deg to 40 deg",
    ),
    (
        "- move: {servo: latch, to: 30 deg, in: 100 ms}",
        3,
        42,
        "from 0 deg to 30 deg in 100 ms is faster than latch's slew of 60 deg/s; use 'in: 500 ms' or more",
    ),
    (
        "- sweep: {servo: latch, shape: triangle, from: -30 deg, to: 30 deg, period: 1 s}",
        3,
        79,
        "a triangle of 1 s is faster than latch's slew limit; use 'period: 2 s' or more",
    ),
    # ---- what can never be
    (
        "- hold: 1 s\n- wait: {speed of: vent, is: at least 90 rpm, within: 2 s}",
        4,
        32,
        "vent never reaches 'at least 90 rpm'; 62 rpm rated, 80 % ceiling: about 49.6 rpm",
    ),
    (
        UP + "- wait: {speed of: vent, is: at most -5 rpm, within: 2 s}",
        4,
        32,
        "vent is driven at 60 % here and turns the other way than 'at most -5 rpm'; speeds have the sign of the duty "
        "that drives them",
    ),
    (
        "- hold: 100 ms\n- expect: {speed of: vent, is: at least 5 rpm, over: 1 s}",
        4,
        56,
        "the window of 1 s is longer than what has gone by here; at most 100 ms, or hold before it",
    ),
    (
        "- mark: one\n- expect: {counts of: vent, since: won, is: at least 5 counts}",
        4,
        38,
        "no mark 'won' is set before this step; did you mean 'one'?",
    ),
    (
        "- expect: {settling of: vent, to: 5 rpm +- 5 %, is: at most 1 s}",
        3,
        13,
        "vent was not ramped before this step; settling is counted from a ramp's end",
    ),
    (
        "- repeat: {times: 5, steps: [{mark: x}]}",
        3,
        13,
        "the steps of this repeat take no time; add a hold, or a motion that takes some",
    ),
    (
        "- repeat: {times: 5, steps: [{move: {servo: latch, to: 0 deg, in: 5 ms}}, {release: latch}]}",
        3,
        13,
        "this asks for 50 orders a second; the link carries 40: take longer over it",
    ),
    (
        "- hold: 1500 us",
        3,
        11,
        "1.5 ms is no whole number of ticks; a multiple of 1 ms is wanted",
    ),
    (
        "- together:\n    - [{coast: vent}]\n    - - hold: 1 s\n      - ramp: {motor: vent, to: 10 %, in: 1 s}",
        6,
        17,
        "'vent' is moved in two branches at once; the other is in line 4: move it in one branch only",
    ),
    (
        "- repeat:\n    times: 2\n    steps:\n      - ramp: {motor: vent, to: 20 %, in: 1 s}\n"
        "      - reverse: {motor: vent, to: -20 %, in: 1 s}\n",
        6,
        35,
        "vent is at -20 % here, so this would cross zero at speed, from the second pass of the repeat in line 4 on; "
        "use 'reverse: {motor: vent, to: 20 %, ...}'",
    ),
]


@pytest.mark.parametrize(("steps", "line", "column", "sentence"), REFUSALS, ids=range(len(REFUSALS)))
def test_a_refusal_points_to_the_place_and_says_what_would_be_right(
    steps: str, line: int, column: int, sentence: str, tmp_path: Path
) -> None:
    with pytest.raises(FileError) as caught:
        plan_of(tmp_path, steps)
    error = caught.value
    assert error.place is not None
    assert (error.place.line, error.place.column) == (line, column), str(error)
    said = f"{error.found}; {error.wanted}" if error.wanted else error.found
    assert said == sentence
    text = (tmp_path / "s.yaml").read_text().splitlines()[line - 1]
    assert str(error) == f"{tmp_path / 's.yaml'}:{line}:{column}: {sentence}\n    {text}\n    {' ' * (column - 1)}^"


def test_a_motor_driven_in_another_branch_may_be_waited_for(tmp_path: Path) -> None:
    steps = """
- hold: 1 s
- together:
    - - reverse: {motor: vent, to: -40 %, in: 500 ms}
      - hold: 1 s
    - - wait: {speed of: vent, is: at most -5 rpm, within: 3 s}
"""
    assert plan_of(tmp_path, steps).totals.waits == 2


def test_named_values_stand_for_quantities_and_are_set_from_outside(tmp_path: Path) -> None:
    head = "values: {drive: 40 %, passes: 2, rest: 1 s}\n"
    steps = "- repeat: {times: passes, steps: [{ramp: {motor: vent, to: drive, in: rest}}, {coast: vent}]}"
    plan = plan_of(tmp_path, steps, head=head)
    assert plan.totals.peak_duty == {"vent": 4000}
    assert plan.totals.least == 2 * (1000 + 200)
    plan = plan_of(tmp_path, steps, head=head, drive="20 %", passes="5")
    assert plan.totals.peak_duty == {"vent": 2000}
    assert plan.totals.least == 5 * (1000 + 100)
    with pytest.raises(UsageError, match=r"--set drove: no value has this name .* did you mean 'drive'\?"):
        plan_of(tmp_path, steps, head=head, drove="20 %")
    with pytest.raises(FileError, match=r"'drive' is '20 s', which does not fit here"):
        plan_of(tmp_path, steps, head=head, drive="20 s")


def test_a_value_that_nothing_uses_is_remarked_on(tmp_path: Path) -> None:
    plan = plan_of(tmp_path, "- hold: 1 s", head="values: {drive: 40 %}\n")
    assert plan.remarks == ("the value 'drive' is used by no step",)


def included(tmp_path: Path, text: str) -> None:
    (tmp_path / "inner.yaml").write_text(text, encoding="utf-8")


def test_an_included_file_gives_its_steps_with_its_own_values(tmp_path: Path) -> None:
    included(tmp_path, "sequence: inner\nvalues: {time: 1 s, duty: 10 %}\nsteps:\n  - hold: time\n")
    head = "values: {long: 3 s}\n"
    assert plan_of(tmp_path, "- include: inner.yaml", head=head).totals.least == 1000
    given = "- include: {file: inner.yaml, values: {time: long}}"
    assert plan_of(tmp_path, given, head=head).totals.least == 3000
    sequence = sequence_of(tmp_path, given, head=head)
    assert [Path(source.file).name for source in sequence.files] == ["s.yaml", "inner.yaml"]
    with pytest.raises(FileError, match=r"the included file has no value named 'tame'; did you mean 'time'\?"):
        plan_of(tmp_path, "- include: {file: inner.yaml, values: {tame: 1 s}}")


def test_a_mistake_in_an_included_file_points_into_it(tmp_path: Path) -> None:
    included(tmp_path, "sequence: inner\nsteps:\n  - hold: 1 s\n  - coast: vant\n")
    with pytest.raises(FileError) as caught:
        plan_of(tmp_path, "- include: inner.yaml")
    assert caught.value.place is not None
    assert Path(caught.value.place.file).name == "inner.yaml"
    assert (caught.value.place.line, caught.value.place.column) == (4, 12)


def test_a_missing_file_is_told_where_it_is_named(tmp_path: Path) -> None:
    with pytest.raises(FileError, match=r"s.yaml:3:14: cannot read '.*none.yaml': No such file"):
        plan_of(tmp_path, "- include: none.yaml")


def test_files_that_include_one_another_are_refused(tmp_path: Path) -> None:
    included(tmp_path, "sequence: inner\nsteps:\n  - include: s.yaml\n")
    with pytest.raises(FileError, match=r"'s.yaml' includes itself; break the circle s.yaml -> inner.yaml -> s.yaml"):
        plan_of(tmp_path, "- include: inner.yaml")


def test_inclusions_are_bounded(tmp_path: Path) -> None:
    for number in range(10):
        (tmp_path / f"f{number}.yaml").write_text(f"sequence: f\nsteps:\n  - include: f{number + 1}.yaml\n")
    (tmp_path / "f10.yaml").write_text("sequence: f\nsteps:\n  - hold: 1 s\n")
    with pytest.raises(FileError, match="too many files include one another; at most 8 deep"):
        read_sequence(tmp_path / "f0.yaml")
    (tmp_path / "inner.yaml").write_text("sequence: f\nsteps:\n  - hold: 1 s\n")
    with pytest.raises(FileError, match="at most 8 deep and 64 in all"):
        plan_of(tmp_path, "- include: inner.yaml\n" * 65)


ENDURANCE = (Path(__file__).resolve().parent.parent / "scripts" / "vent_endurance.yaml").read_text(encoding="utf-8")
STEPS_ONLY = ENDURANCE[ENDURANCE.index("  - repeat:") :]
PIECES = [*"{}[]%-#0", ": ", "- ", "\n", " ", "999999999", "*a", "&a ", '"', "vent", "latch", "\t"]


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_whatever_a_file_says_only_our_own_errors_come_out_and_they_have_a_place(
    data: st.DataObject, tmp_path: Path
) -> None:
    text = STEPS_ONLY
    for _ in range(data.draw(st.integers(1, 3))):
        begin = data.draw(st.integers(0, len(text) - 1))
        end = min(len(text), begin + data.draw(st.integers(0, 12)))
        text = text[:begin] + data.draw(st.sampled_from(PIECES)) + text[end:]
    path = tmp_path / "s.yaml"
    path.write_text(f"sequence: t\nvalues: {{drive: 40 %, passes: 2}}\nsteps:\n{text}", encoding="utf-8")
    error: FileError | None = None
    try:
        compile_plan(read_sequence(path), small_bench())
    except FileError as caught:
        error = caught
    if error is not None:
        assert error.place is not None
        assert error.place.line >= 1
        assert error.found
