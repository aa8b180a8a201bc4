"""Which clauses the acceptance covers: all with a "must", but for those of which it says why not."""

from __future__ import annotations

import re

from ramprig.accept.coverage import UNTESTABLE, covered
from ramprig.accept.examine import all_checks
from ramprig.accept.lines import CLAUSES
from ramprig.accept.vectors import exchanges, line_vectors
from test_spec_clauses import SPEC, clauses

PARTLY = {"WHO-3", "BAD-6", "RUN-1"}
"""Clauses that a check covers in part, and of which UNTESTABLE says what is left."""


def known() -> dict[str, str]:
    return clauses(SPEC.read_text("utf-8"))


def test_every_clause_with_a_must_is_covered_or_said_not_to_be_testable() -> None:
    required = {name for name, text in known().items() if re.search(r"\bmust\b", text)}
    cover = covered(all_checks(), CLAUSES)
    assert sorted(required - set(cover) - set(UNTESTABLE)) == []


def test_no_clause_is_both_covered_and_untestable_but_those_covered_in_part() -> None:
    assert set(covered(all_checks(), CLAUSES)) & set(UNTESTABLE) == PARTLY


def test_checks_name_clauses_that_exist() -> None:
    assert sorted((set(covered(all_checks(), CLAUSES)) | set(UNTESTABLE)) - set(known())) == []


def test_checks_have_names_and_sentences_of_their_own() -> None:
    checks = all_checks()
    assert len({check.name for check in checks}) == len(checks)
    for check in checks:
        assert check.text.endswith("."), check.name
        assert check.clauses, check.name


def test_many_vectors_are_put_to_a_live_board() -> None:
    assert len(line_vectors()) > 100
    assert {vector.clause for vector in line_vectors()} > {"LINE-2", "CHECK-2", "FIELD-1", "BAD-3", "BAD-5"}
    assert {"TAG-3", "TAG-4", "TAG-5"} <= {clause for exchange in exchanges() for clause in exchange.clauses}
