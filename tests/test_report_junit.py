"""junit.xml is valid against the published schema, counts what it holds, and carries no control characters."""

from __future__ import annotations

import random
import re
from collections import Counter
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as st

from explain_cases import Case, case_of, run_case
from ramprig.record.reading import audit
from ramprig.report.facts import Expectation, Facts, gather
from ramprig.report.junit import Case as JunitCase
from ramprig.report.junit import cases_of, junit_xml
from ramprig.report.results import results

SCHEMA = Path(__file__).parent / "data" / "junit-10.xsd"
"""By Gregory Boissinot (MIT licence, its notice inside), as pytest's source distribution 9.2.0 carries it."""

Valid = Callable[[str], bool]
FAILING = """- ramp: {motor: vent, to: 40 %, in: 500 ms}
- hold: 1 s
- expect: {speed of: vent, is: at least 60 rpm}
- expect: {current of: vent, is: at most 2 A}"""


@pytest.fixture(scope="module")
def is_valid() -> Valid:
    xmlschema = pytest.importorskip("xmlschema", reason="needs the package xmlschema")
    schema: Any = xmlschema.XMLSchema(SCHEMA)  # Any: the package has no types
    return lambda text: bool(schema.is_valid(text))


def facts_of(folder: Path, case: Case) -> Facts:
    result, _ = run_case(folder, case, seed=1)
    assert result.folder is not None
    return gather(result.folder)


@pytest.fixture(scope="module")
def failed(tmp_path_factory: pytest.TempPathFactory) -> Facts:
    return facts_of(tmp_path_factory.mktemp("failed"), Case("", steps=FAILING))


@pytest.fixture(scope="module")
def tripped(tmp_path_factory: pytest.TempPathFactory) -> Facts:
    return facts_of(tmp_path_factory.mktemp("tripped"), case_of("jam", random.Random(2)))


def test_what_is_written_is_valid_and_counts_itself(failed: Facts, tripped: Facts, is_valid: Valid) -> None:
    text = junit_xml([failed, tripped], [audit(failed.folder), audit(tripped.folder)])
    assert is_valid(text)
    assert text.count('name="account of the samples"') == 2
    root = ElementTree.fromstring(text)
    suites = root.findall("testsuite")
    assert [suite.get("name") for suite in suites] == [failed.name, tripped.name]
    for node in (root, *suites):
        assert node.get("tests") == str(len(list(node.iter("testcase"))))
        assert node.get("failures") == str(len(list(node.iter("failure"))))
        assert node.get("errors") == str(len(list(node.iter("error"))))
    for suite in suites:
        assert suite.get("skipped") == str(len(list(suite.iter("skipped"))))


def test_the_schema_refuses_what_it_should(failed: Facts, is_valid: Valid) -> None:
    text = junit_xml([failed])
    assert not is_valid(text.replace("<testsuites ", '<testsuites skipped="0" '))
    assert not is_valid(text.replace(' time="', ' time="1.75041', 1))
    assert not is_valid(text.replace("<testcase classname", "<testcase nonsense"))


def test_each_expectation_and_each_limit_is_one_case(failed: Facts) -> None:
    cases = list(cases_of(failed))
    names = [(case.group, case.name) for case in cases]
    assert len(set(names)) == len(names)
    wanted = [case for case in cases if case.name.startswith("speed of vent")]
    assert len(wanted) == 1
    assert "at least 60 rpm" in wanted[0].failure
    assert "s.yaml:6" in wanted[0].group
    assert "last found" in wanted[0].out
    held = next(case for case in cases if case.name.startswith("current of vent"))
    assert held.failure == ""
    limits = [case for case in cases if case.group == "limits"]
    assert {case.name for case in limits} >= {"vent: trip_ma", "vent: stall_duty", "under_mv", "over_mv", "lease_ms"}
    assert not any(case.failure for case in limits)
    assert any(case.skipped for case in limits if case.name == "vent: speed_counts")  # off in this bench file


def test_values_found_stand_in_one_unit(tmp_path: Path) -> None:
    steps = """- repeat:
    times: 2
    steps:
      - ramp: {motor: vent, to: 40 %, in: 500 ms}
      - hold: 1 s
      - expect: {current of: vent, is: at most 2 A}
      - expect: {position of: vent, is: at least 5 deg}"""
    facts = facts_of(tmp_path, Case("", steps=steps))
    current, position = facts.expectations.values()
    assert re.fullmatch(r"[\d.]+ mA( to [\d.]+ mA)?", current.span), current.span
    assert re.fullmatch(r"[\d.]+ deg to [\d.]+ deg", position.span), position.span
    assert f"{position.span}, last {position.last_found}" in results(facts, {})
    assert position.last_found == position.span.partition(" to ")[2]
    case = next(case for case in cases_of(facts) if case.name.startswith("current of vent"))
    assert f"values: {current.span}" in case.out


def test_a_run_without_expectations_shows_what_else_there_is(tmp_path: Path) -> None:
    steps = """- cycle:
    times: 2
    steps:
      - ramp: {motor: vent, to: 40 %, in: 500 ms}
      - coast: {motor: vent, in: 300 ms}"""
    facts = facts_of(tmp_path, Case("", steps=steps))
    assert not facts.expectations
    page = results(facts, {})
    for wanted in (
        "No expectation was judged.",
        "<dt>cycles commanded</dt><dd>2</dd>",
        "<dt>not judged</dt><dd>2</dd>",
        "<h3>Uncertainty</h3>",
    ):
        assert wanted in page, wanted
    (facts.folder / "s.yaml").unlink()
    assert "Expectations that were not judged cannot be told: its copy of the sequence" in results(facts, {})


def test_a_trip_fails_its_limit_and_the_run(tripped: Facts) -> None:
    cases = {(case.group, case.name): case for case in cases_of(tripped)}
    assert "tripped" in cases["run", "carried out to its end"].failure
    assert "likely" in cases["run", "carried out to its end"].out
    failing = [name for (group, name), case in cases.items() if group == "limits" and case.failure]
    assert failing in (["vent: trip_ma"], ["vent: stall_duty"])


@pytest.mark.parametrize(("otherwise", "is_whole"), [("", True), (", else: stop", False)])
def test_a_run_that_an_expectation_ended_was_not_carried_out_to_its_end(
    tmp_path: Path, otherwise: str, is_whole: bool
) -> None:
    steps = f"""- hold: 500 ms
- expect: {{current of: vent, is: at least 1 A{otherwise}}}
- hold: 500 ms"""
    facts = facts_of(tmp_path, Case("", steps=steps))
    assert (facts.verdict, facts.carried_out) == ("failed", is_whole)
    case = next(cases_of(facts))
    assert bool(case.failure) == (not is_whole)
    results = dict(facts.manifest["results"])
    del results["carried_out"]  # as it was written before this was recorded
    before = replace(facts, manifest=facts.manifest | {"results": results})
    case = next(cases_of(before))
    assert case.failure == ""
    assert case.skipped == "whether every step was carried out was not written down"


def test_a_trip_that_no_part_of_the_run_followed_is_a_failure_of_its_limit(failed: Facts) -> None:
    trip = {"kind": "tripped", "trip": "overvoltage", "index": 0, "value": 17000, "bound": 16000, "time_s": 3.0}
    for outlived in (0, 1):
        facts = replace(failed, outlived=Counter(tripped=outlived), events={"tripped": [trip]})
        case = next(case for case in cases_of(facts) if case.name == "over_mv")
        assert bool(case.failure) == (not outlived), "it came while the run was stopped at its end"
        assert ("the run was gone on with" in case.out) == bool(outlived)


AHEAD = """- hold: 500 ms
- expect: {current of: vent, is: at most 2 A}
- ramp: {motor: vent, to: 40 %, in: 500 ms}
- hold: 10 s
- expect: {speed of: vent, is: at least 5 rpm}
- repeat:
    times: 3
    steps:
      - hold: 1 s
      - expect: {current of: vent, is: at most 1.9 A, over: 500 ms}"""


def test_a_run_that_failed_by_a_wait_is_not_green(tmp_path: Path, is_valid: Valid) -> None:
    steps = """- ramp: {motor: vent, to: 40 %, in: 500 ms}
- wait: {speed of: vent, is: at least 60 rpm, within: 1 s}"""
    facts = facts_of(tmp_path, Case("", steps=steps))
    assert facts.verdict == "failed"
    failures = [case for case in cases_of(facts) if case.failure]
    assert [(case.group, case.name) for case in failures] == [("run", "carried out to its end")]
    assert "within" in failures[0].failure or "wait" in failures[0].failure
    assert is_valid(junit_xml([facts]))


def test_what_the_run_never_came_to_judge_is_skipped_with_the_reason(tmp_path: Path, is_valid: Valid) -> None:
    facts = facts_of(tmp_path, Case("", steps=AHEAD, faults=("jammed_shaft",)))
    assert facts.verdict == "tripped"
    cases = [case for case in cases_of(facts) if case.group not in ("run", "limits")]
    assert [case.name.partition(" is ")[0] for case in cases] == ["current of vent", "speed of vent", "current of vent"]
    assert [bool(case.skipped) for case in cases] == [False, True, True]
    assert cases[1].skipped == "not judged: the run ended before (tripped)"
    assert "s.yaml:8:" in cases[1].group
    text = junit_xml([facts])
    assert is_valid(text)
    suite = ElementTree.fromstring(text).find("testsuite")
    assert suite is not None
    assert suite.get("skipped") == str(len(list(suite.iter("skipped"))))
    page = results(facts, {})
    assert page.count("<td>not judged</td>") == 2
    assert "Of these, 2: not judged: the run ended before (tripped)." in page


def test_a_run_that_passed_has_judged_all(tmp_path: Path) -> None:
    facts = facts_of(tmp_path, Case("", steps=AHEAD))
    assert facts.verdict == "passed"
    assert not any(case.skipped for case in cases_of(facts) if case.group != "limits")


def test_a_copy_of_the_sequence_that_is_gone_is_told(tmp_path: Path, is_valid: Valid) -> None:
    facts = facts_of(tmp_path, Case("", steps=AHEAD, faults=("jammed_shaft",)))
    (facts.folder / "s.yaml").unlink()
    told = [case for case in cases_of(facts) if case.name == "expectations that were not judged"]
    assert len(told) == 1
    assert "s.yaml" in told[0].skipped
    assert is_valid(junit_xml([facts]))


def test_a_run_that_broke_off_is_an_error(failed: Facts, is_valid: Valid) -> None:
    broken = Facts(failed.folder, failed.manifest | {"status": "running", "stop_reason": None, "results": None})
    assert is_valid(junit_xml([broken]))
    assert next(cases_of(broken)).error.startswith("broken off")


@given(st.text(), st.text(alphabet=st.characters(codec="utf-8"), max_size=30))
def test_no_noise_of_a_serial_line_breaks_the_file(noise: str, more: str) -> None:
    dirty = f"\x00\x1b[31m{noise}]]>&<\x7f{more}\ufffe"
    case = JunitCase(dirty, dirty, dirty, failure=dirty)
    node = ElementTree.fromstring(case.xml())
    for text in (node.get("name"), node.get("classname"), node.findtext("system-out")):
        assert text is not None
        assert "\x1b" not in text
        assert "\x00" not in text


def test_noise_in_a_run_leaves_a_valid_file(failed: Facts, is_valid: Valid) -> None:
    noisy = Facts(failed.folder, failed.manifest | {"stop_reason": "garbled: \x00\x1b[2J\x9b \ud800", "run": "a\x01b"})
    noisy.expectations = {("f:1:1", "x"): Expectation("f:1:1", "speed\x02 is <&>")}
    assert is_valid(junit_xml([noisy]))
