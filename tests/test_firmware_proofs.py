"""The firmware's proofs, explorations and fuzzing hold, and each seeded bug is caught by what the table says.

The whole of the proofs, the largest model and the seeded bugs against proofs and vectors take minutes and are marked
`soak`; `scripts/dev/prove.py` and `scripts/dev/fuzz.py` run them by hand.
"""

from __future__ import annotations

import dataclasses
import shutil
import subprocess
from pathlib import Path

import pytest
import toolchain
from dev import fuzz, proof_builds, prove

import core_device
from test_vectors_exchanges import VECTORS, differences

WRONG_TOOLS = prove.missing_tools()
needs_cc = pytest.mark.skipif(not toolchain.is_there(toolchain.CORE), reason=toolchain.why_not(toolchain.CORE))
needs_clang = pytest.mark.skipif(not toolchain.is_there(toolchain.FUZZING), reason=toolchain.why_not(toolchain.FUZZING))
needs_prover = pytest.mark.skipif(
    bool(WRONG_TOOLS), reason=f"nothing is proved here: {'; '.join(WRONG_TOOLS)} (Debian 12: {prove.PACKAGES})"
)

# Which model breaks, and how the witness calls it.
EXPLORED = {
    "CEILING_ONE_SIDED": ("ceiling", "S1"),
    "SLEW_DOUBLED": ("trips", "S2"),
    "START_UNGUARDED": ("dwell", "S3"),
    "DWELL_FROM_COMMAND": ("ceiling", "S3"),
    "STANDSTILL_IGNORED": ("dwell", "S3"),
    "REPEAT_RENEWS": ("trips", "TAG-3"),
    "LEASE_FORGOTTEN": ("trips", "S4"),
    "STOP_NEVER_CUT": ("trips", "S5, STOP-5"),
    "TRIP_CLEARS_ITSELF": ("trips", "S5"),
    "CLEAR_DESPITE_CAUSE": ("trips", "CLEAR-1"),
    "LOOSER_WHILE_ARMED": ("limits", "S6"),
    "ARM_ON_ANY_DIGEST": ("limits", "S6"),
    "SERVO_PAST_ITS_END": ("servo", "S7"),
    "OVERCURRENT_LATE": ("trips", "TRIP-3"),
    "LATE_ORDER_CARRIED_OUT": ("trips", "ORDER-2"),
    "MEMORY_FORGETS": ("trips", "TAG-3"),
}

# Which target finds it, what the sanitizer says, and within how many runs.
FUZZED = {
    "SQUARE_IN_INT": ("device", "signed integer overflow", 3000),
    "LINE_ONE_TOO_LONG": ("line", "out of bounds", 20_000),
}

# The part and the function whose contract cannot be proved.
PROVED = {
    "CEILING_ONE_SIDED": ("chain", "held_within"),
    "SLEW_DOUBLED": ("chain", "slewed"),
    "START_UNGUARDED": ("chain", "may_leave_zero"),
    "DWELL_FROM_COMMAND": ("chain", "set_duty"),
    "STANDSTILL_IGNORED": ("chain", "may_leave_zero"),
    "STOP_NEVER_CUT": ("latch", "rr_latch_stop_is_over"),
    "TRIP_CLEARS_ITSELF": ("latch", "rr_latch_off"),
    "SERVO_PAST_ITS_END": ("servo", "rr_servo_step_ns"),
    "OVERCURRENT_LATE": ("guard", "judge_current"),
    "SQUARE_IN_INT": ("heat", "rr_heat_take"),
}

# A vector of protocol/vectors/exchanges.json that the core with the bug answers otherwise.
EXCHANGED = {
    "CEILING_ONE_SIDED": "a ceiling tightened cuts a negative duty too",
    "SLEW_DOUBLED": "beat tells the state",
    "START_UNGUARDED": "disarm: refused for a demand that the dwell lock holds back",
    "DWELL_FROM_COMMAND": "the dwell lock: the other sign only after dwell_ticks at zero",
    "STANDSTILL_IGNORED": "the lock waits for standstill too",
    "REPEAT_RENEWS": "every new request renews the lease, a refused one too; "
    "a repeat, a garbled line and a bare one do not",
    "LEASE_FORGOTTEN": "bare who renews nothing",
    "STOP_NEVER_CUT": "a category 1 stop lasts stop_ticks at most",
    "TRIP_CLEARS_ITSELF": "bare who renews nothing",
    "CLEAR_DESPITE_CAUSE": "overcurrent: trip_ticks in a row, off in the same tick, no clear while it persists",
    "LOOSER_WHILE_ARMED": "a ceiling tightened while armed cuts the bridge in the next tick",
    "ARM_ON_ANY_DIGEST": "arm asks for the state off, a lease within its limits, and the right digest",
    "SERVO_PAST_ITS_END": "a servo's limits tightened during its swing hold it, either way, "
    "and are not loosened while armed",
    "OVERCURRENT_LATE": "overcurrent: trip_ticks in a row, off in the same tick, no clear while it persists",
    "LATE_ORDER_CARRIED_OUT": "the horizon",
    "MEMORY_FORGETS": "the same tag and body is answered letter for letter, not carried out again",
}


def explored(program: Path, model: str) -> tuple[bool, str]:
    """Whether the explorer found all sound, and what it printed."""
    done = subprocess.run([program, model], capture_output=True, text=True, check=False)
    assert done.returncode in (0, 1), done.stderr
    return done.returncode == 0, done.stdout


def test_every_seeded_bug_is_caught_by_something_quick() -> None:
    assert {bug.name for bug in proof_builds.seeded_bugs()} == set(EXPLORED) | set(FUZZED)
    assert [bug.number for bug in proof_builds.seeded_bugs()] == list(range(1, len(EXPLORED) + len(FUZZED) + 1))
    assert set(PROVED) | set(EXCHANGED) <= set(EXPLORED) | set(FUZZED)


def test_the_table_of_the_readme_names_every_seeded_bug() -> None:
    readme = (proof_builds.PROOFS / "README.md").read_text("utf-8")
    for bug in proof_builds.seeded_bugs():
        assert f"| {bug.number} | `{bug.name}` |" in readme


@needs_cc
def test_no_sequence_of_inputs_breaks_a_clause_in_the_small_models(tmp_path: Path) -> None:
    proof_builds.build_explorer(tmp_path / "explore")
    sound, told = explored(tmp_path / "explore", "quick")
    assert sound, told
    assert told.count(" states, ") == 31  # five models and one for each of the 26 limits
    assert told.endswith("no clause broken\n")


@needs_cc
@pytest.mark.soak
@pytest.mark.parametrize("spread", [False, True])
def test_no_sequence_of_inputs_breaks_a_clause_in_any_model(tmp_path: Path, spread: bool) -> None:
    proof_builds.build_explorer(tmp_path / "explore", spread=spread)
    sound, told = explored(tmp_path / "explore", "all")
    assert sound, told


@needs_cc
@pytest.mark.parametrize("name", EXPLORED)
def test_the_explorer_finds_the_seeded_bug_by_its_clause(tmp_path: Path, name: str) -> None:
    model, clause = EXPLORED[name]
    proof_builds.build_explorer(tmp_path / "explore", bug=proof_builds.bug_named(name), optimise=False)
    sound, told = explored(tmp_path / "explore", model)
    assert not sound
    assert f"broken: {clause}" in told


@needs_clang
@pytest.mark.parametrize(("target", "runs"), [("line", 20_000), ("device", 500)])
def test_a_short_fuzzing_finds_nothing(target: str, runs: int) -> None:
    outcome = fuzz.fuzz(target, runs=runs, seed=1, optimise=False)
    assert outcome.finding == ""
    assert outcome.runs >= runs
    assert outcome.coverage > 0


@needs_clang
@pytest.mark.parametrize("name", FUZZED)
def test_fuzzing_finds_the_seeded_bug(name: str) -> None:
    target, complaint, runs = FUZZED[name]
    outcome = fuzz.fuzz(target, bug=proof_builds.bug_named(name), runs=runs, seed=1, optimise=False)
    assert complaint in outcome.finding


def part_named(name: str) -> prove.Part:
    return next(part for part in prove.PARTS if part.name == name)


@needs_prover
def test_the_servos_contracts_are_proved(tmp_path: Path) -> None:
    verdict = prove.prove(part_named("servo"), "x86_16", prove.prepared(tmp_path))
    assert (verdict.unproved, verdict.trouble) == ((), "")
    assert verdict.proved == verdict.goals > 0


@needs_prover
@pytest.mark.soak
@pytest.mark.parametrize("machine", prove.MACHINES)
@pytest.mark.parametrize("part", prove.PARTS, ids=lambda part: part.name)
def test_all_contracts_are_proved(tmp_path: Path, part: prove.Part, machine: str) -> None:
    verdict = prove.prove(part, machine, prove.prepared(tmp_path))
    assert (verdict.unproved, verdict.trouble) == ((), "")
    assert verdict.proved == verdict.goals > 0


@needs_prover
@pytest.mark.soak
@pytest.mark.parametrize("name", PROVED)
def test_a_function_with_the_seeded_bug_cannot_be_proved(tmp_path: Path, name: str) -> None:
    part_name, function = PROVED[name]
    part = dataclasses.replace(part_named(part_name), functions=(function,))
    environment = prove.prepared(tmp_path)
    right = prove.prove(part, "x86_64", environment)
    wrong = prove.prove(part, "x86_64", environment, bug=proof_builds.bug_named(name), goal_s=3)
    assert right.proved == right.goals > 0
    assert wrong.proved < wrong.goals
    assert wrong.unproved


@needs_cc
@pytest.mark.soak
@pytest.mark.parametrize("name", EXCHANGED)
def test_a_vector_notices_the_seeded_bug(monkeypatch: pytest.MonkeyPatch, name: str) -> None:
    vector = next(vector for vector in VECTORS["vectors"] if vector["name"] == EXCHANGED[name])
    assert differences(vector, core_device.CoreDevice) == []
    plain = core_device.defines
    bug = proof_builds.bug_named(name)
    monkeypatch.setattr(core_device, "defines", lambda device: (*plain(device), f"-DRR_SEEDED_BUG={bug}"))
    assert differences(vector, core_device.CoreDevice) != []


def test_a_missing_tool_counts_nothing_as_proved(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr(shutil, "which", lambda name: None)
    assert prove.main([]) == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err.startswith("Nothing is proved here: frama-c is not installed")


@pytest.mark.parametrize(
    ("report", "proved", "unproved"),
    [
        ("[wp] [Z3 4.8.12] Goal typed_f_ensures : Valid (9ms)\n[wp] Proved goals:    2 / 2\n", 2, ()),
        ("[wp] [Failed] Goal typed_f_ensures\n[wp] Proved goals:    1 / 2\n", 1, ("f_ensures",)),
        ("[wp] [Z3 4.8.12] Goal typed_f_ensures : Timeout (10s)\n[wp] Proved goals:    1 / 2\n", 1, ("f_ensures",)),
    ],
)
def test_the_report_of_the_prover_is_read(report: str, proved: int, unproved: tuple[str, ...]) -> None:
    verdict = prove.read_report("f", "x86_64", report)
    assert (verdict.proved, verdict.goals, verdict.unproved, verdict.trouble) == (proved, 2, unproved, "")


def test_a_report_without_goals_is_trouble() -> None:
    assert prove.read_report("f", "x86_64", "[kernel] Frama-C aborted: invalid user input.").trouble
