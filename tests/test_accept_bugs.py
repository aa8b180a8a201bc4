"""Each seeded bug of the core is found by the acceptance, by the clause it breaks, or is one that cannot be seen."""

from __future__ import annotations

import re

import pytest

from accept_boards import accepted, bugged_core_port, core_port, restarter
from ramprig.accept.trial import Trial
from ramprig.mock.core import why_not
from ramprig.mock.core.build import firmware

pytestmark = pytest.mark.skipif(why_not() is not None, reason=why_not() or "")

# number: (the check that finds it, clauses that must fail; the first is the one that seeded.h names)
FOUND = {
    1: ("ceiling", "S1 CHAIN-1"),
    2: ("ramps-and-slew", "S2 CHAIN-2"),
    3: ("first-motion", "S3 CHAIN-3"),
    4: ("reversal-waits-for-dwell", "S3"),
    5: ("reversal-waits-for-standstill", "S3"),
    6: ("lease-renewals", "LEASE-1 LEASE-2"),
    7: ("lost-link", "S4 LEASE-2"),
    8: ("stop-is-cut-short", "S4 STOP-5"),
    9: ("late-orders", "S5"),
    10: ("supply-trips", "CLEAR-1"),
    11: ("limits-while-armed", "S6 LIMIT-3"),
    12: ("arming", "S6 ARM-2"),
    13: ("servo-ends", "S7"),
    14: ("overcurrent", "TRIP-3"),
    15: ("late-orders", "ORDER-2"),
    16: ("exactly-once", "TAG-3"),
    18: ("overlong-lines", "LINE-5 BAD-3"),
}

# What a host cannot see of the core on this processor, and why; test_accept_emulated.py finds it on an ATmega328P.
UNSEEN = {
    17: "an int of 32 bits or more wraps to the right square; where an int has 16 bits, TRIP-8 fails",
}
NOTICED_WHERE_SEEN = {17: "TRIP-8"}
CHECK_OF = {17: "overload"}


def seeded() -> dict[int, str]:
    """The bugs of seeded.h and the clause each is said to break."""
    root = firmware()
    assert root is not None
    text = (root / "core" / "seeded.h").read_text("ascii")
    return {int(n): clause for n, clause in re.findall(r'X\((\d+),\s*\w+,\s*"([A-Z0-9-]+)"', text)}


@pytest.mark.parametrize("number", FOUND)
def test_a_seeded_bug_fails_by_the_clause_it_breaks(number: int, monkeypatch: pytest.MonkeyPatch) -> None:
    check, clauses = FOUND[number]
    verdict = accepted(bugged_core_port(number, monkeypatch), only=check)
    assert set(clauses.split()) <= set(verdict.failed), verdict.failed
    assert verdict.exit_code == 1
    assert verdict.unrestored == []


@pytest.mark.parametrize("number", [7, 16])
def test_a_seeded_bug_does_not_spoil_the_rest_of_the_acceptance(number: int, monkeypatch: pytest.MonkeyPatch) -> None:
    port = bugged_core_port(number, monkeypatch)
    verdict = accepted(port, restart=restarter(port))
    assert set(FOUND[number][1].split()) <= set(verdict.failed)
    passed = [result for result in verdict.results if result.word == "passed"]
    assert len(passed) > len(verdict.results) // 2
    assert verdict.unrestored == []


@pytest.mark.parametrize("number", UNSEEN)
def test_a_bug_that_need_not_show_is_blamed_on_nothing_else(number: int, monkeypatch: pytest.MonkeyPatch) -> None:
    verdict = accepted(bugged_core_port(number, monkeypatch), only=CHECK_OF[number])
    assert [result.check.name for result in verdict.results] == ["every-line", CHECK_OF[number]]
    assert not verdict.failed or NOTICED_WHERE_SEEN[number] in verdict.failed


def test_an_overcurrent_is_judged_by_the_trail_where_samples_are_dropped(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(Trial, "row", lambda trial, tick: None)
    verdict = accepted(core_port(), only="overcurrent")
    assert verdict.failed == {}
    assert [result.word for result in verdict.results] == ["passed", "passed"]
    assert any("from the trail" in note for note in verdict.results[1].notes)
    assert "TRIP-3" in accepted(bugged_core_port(14, monkeypatch), only="overcurrent").failed


def test_every_seeded_bug_is_in_one_of_the_tables_under_its_clause() -> None:
    bugs = seeded()
    assert sorted([*FOUND, *UNSEEN]) == sorted(bugs)
    assert {number: clauses.split()[0] for number, (_, clauses) in FOUND.items()} == {
        number: bugs[number] for number in FOUND
    }
    assert {number: bugs[number] for number in UNSEEN} == NOTICED_WHERE_SEEN


def test_the_table_of_the_proofs_names_the_clauses_by_which_a_board_is_refused() -> None:
    root = firmware()
    assert root is not None
    table = (root / "proofs" / "README.md").read_text("utf-8")
    told = {
        int(row[1]): row[2] for row in re.finditer(r"^\| (\d+) \| `[A-Z_]+` \|.*\| ([^|]+) \|$", table, re.MULTILINE)
    }
    clauses = {number: " ".join(re.findall(r"[A-Z]+-?\d+(?:-\d+)?\b", text)) for number, text in told.items()}
    for number, (_, expected) in FOUND.items():
        assert clauses[number] == expected
    for number, expected in NOTICED_WHERE_SEEN.items():
        assert expected in told[number]
