"""Cycles: what a file may say of them, how they are carried out and counted, and the guard on starts per hour."""

from __future__ import annotations

import itertools
from collections import deque
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramprig.endure.cycles import CycleRecord, read_cycle_record
from ramprig.errors import FileError, RecordError
from ramprig.mock.device import MockDevice
from ramprig.mock.port import MockPort
from ramprig.record.appendfile import AppendFile
from ramprig.record.events import encode_line
from ramprig.sequence import executive
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.cycle_plan import BlockSoFar
from ramprig.sequence.cycle_run import CycleBook, PastStarts, RunSoFar
from ramprig.sequence.executive import Progress
from ramprig.sequence.happened import (
    CheckBegun,
    CheckCommanded,
    CheckDone,
    CycleBegun,
    CycleCommanded,
    CycleDone,
    CycleInterrupted,
)
from ramprig.sequence.outcome import Counted, Verdict
from ramprig.sequence.plan import Cycles
from ramprig.sequence.report import report_lines
from ramprig.sequence.spacing import StartsGuard
from ramprig.sequence.strands import Turn
from ramprig.session.events import HostSlept
from ramprig.session.session import Session
from sequence_rig import Rehearsal, plan_of, rehearse, sequence_of, small_bench

DRIVE = """
      - ramp: {motor: vent, to: 60 %, in: 600 ms}
      - hold: 200 ms
      - confirm: {position of: vent, is: at least 60 deg}
      - coast: {motor: vent, in: 300 ms}
"""


def cycle(keys: str, steps: str = DRIVE) -> str:
    """A sequence of one cycle step."""
    return f"- cycle:\n    {keys}\n    steps:{steps}"


def done(run: Rehearsal) -> list[CycleDone]:
    """The cycles that were done, in order."""
    return [event for event in run.events if isinstance(event, CycleDone)]


# ---- what a file may say -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("steps", "said"),
    [
        (cycle("name: x"), "does not say how often"),
        (cycle("{times: 2, for: 1 h}".strip("{}").replace(", ", "\n    ")), "'for' stands beside 'times'"),
        (cycle("times: 2\n    check every: 2"), "'check' is missing"),
        (cycle("times: 2\n    check: [{hold: 1 s}]"), "'check every' is missing"),
        (cycle("times: 2", " [{ramp: {motor: vent, to: 10 %, in: 1 s}}]"), "a cycle ends with vent at 10 %"),
        (cycle("times: 2", " [{confirm: {speed of: vent, is: 1 rpm to 2 rpm}}]"), "unknown key 'speed of'"),
        (cycle("times: 2", " [{confirm: {counts of: vent, is: at least 1 counts}}]"), "take no time"),
        (cycle("times: 2\n    starts per hour: 1", DRIVE + DRIVE), "starts vent 2 times"),
        ("- confirm: {counts of: vent, is: at least 1 counts}\n- hold: 1 s", "outside a cycle"),
        ("- repeat: {times: 2, steps: [{cycle: {times: 1, steps: [{hold: 1 s}]}}]}", "inside another step"),
        ("- ramp: {motor: vent, to: 10 %, in: 1 s}\n" + cycle("times: 2"), "a block of cycles begins with vent at"),
        (cycle("times: 0"), "found 0 for 'times'"),
    ],
)
def test_a_cycle_that_cannot_be_is_refused_where_it_stands(tmp_path: Path, steps: str, said: str) -> None:
    with pytest.raises(FileError, match=said) as caught:
        plan_of(tmp_path, steps)
    assert caught.value.place is not None


def test_a_sequence_that_could_not_be_resumed_is_refused_at_the_step(tmp_path: Path) -> None:
    """The mark is set before the first cycle only: a run that goes on later would not have it."""
    steps = "- mark: begin\n- hold: 1 s\n" + cycle("times: 2")
    tail = "\n- expect: {counts of: vent, since: begin, is: at least 1 counts}\n"
    assert plan_of(tmp_path, steps).counts_cycles
    with pytest.raises(FileError, match="when an interrupted run is resumed at the cycle in line 6"):
        plan_of(tmp_path, steps + tail)


@pytest.mark.parametrize(
    ("text", "resumes", "within_s", "after_trip"),
    [
        ("stop", 0, 120, False),
        ("{resume at most: 3}", 3, 120, False),
        ("{resume at most: 2, within: 5 min, after a trip: yes}", 2, 300, True),
    ],
)
def test_on_interruption_says_how_often_a_run_goes_on(
    tmp_path: Path, text: str, resumes: int, within_s: int, *, after_trip: bool
) -> None:
    policy = sequence_of(tmp_path, cycle("times: 2"), head=f"on interruption: {text}\n").interruptions
    assert (policy.resumes, float(policy.within_s), policy.after_trip) == (resumes, within_s, after_trip)
    assert policy.said


@pytest.mark.parametrize("text", ["go on", "{within: 1 min}", "{resume at most: 0}"])
def test_on_interruption_refuses_the_rest(tmp_path: Path, text: str) -> None:
    with pytest.raises(FileError):
        sequence_of(tmp_path, cycle("times: 2"), head=f"on interruption: {text}\n")


# ---- carried out ---------------------------------------------------------------------------------------------------


def test_a_rest_that_is_polled_without_looking_round_changes_nothing(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    keys = "times: 3\n    rest: 4 s\n    check every: 2\n    check: [{hold: 500 ms}]"

    def told(polls: int) -> tuple[int, list[object], list[list[int]]]:
        monkeypatch.setattr(executive, "QUIET_POLLS_MAX", polls)
        run = rehearse(tmp_path, cycle(keys))
        return len(run.progress), run.events, [run.ticks.tolist(), run.column("counts").tolist()]

    (rounds, events, samples), (rounds_all, events_all, samples_all) = told(20), told(0)
    assert rounds < rounds_all - 100
    assert events == events_all
    assert samples == samples_all


def test_nothing_moves_before_the_disk_holds_that_it_is_commanded(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    waits = [0]

    class Slow(CycleBook):
        """A count whose disk takes ten rounds for each cycle."""

        def command(self, turn: Turn) -> None:
            super().command(turn)
            self.pending = self._waits
            waits[0] = 10

        def _waits(self) -> int:
            waits[0] = max(0, waits[0] - 1)
            return waits[0]

    moved: list[tuple[int, bool]] = []

    def looks(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        assert device.controller is not None
        moved.append((waits[0], device.controller.drives[0].moving))

    monkeypatch.setattr(executive, "CycleBook", Slow)
    run = rehearse(tmp_path, cycle("times: 2"), meddle=looks)
    assert [event.outcome for event in done(run)] == ["confirmed", "confirmed"]
    assert sum(left > 0 for left, _ in moved) >= 2 * 9
    assert not any(moving for left, moving in moved if left > 0)


def test_a_cycle_fails_by_any_of_its_confirmations_whatever_the_later_ones_find(tmp_path: Path) -> None:
    far = "\n      - confirm: {position of: vent, is: at least 9000 deg}"
    run = rehearse(tmp_path, cycle("times: 1", DRIVE.replace("\n      - confirm", far + "\n      - confirm", 1)))
    assert [(event.outcome, len(event.found), event.expectations_held) for event in done(run)] == [("failed", 2, 1)]


def test_cycles_are_confirmed_rested_and_checked(tmp_path: Path) -> None:
    keys = "name: open\n    times: 4\n    rest: 2 s\n    check every: 2\n    check: [{hold: 500 ms}]"
    run = rehearse(tmp_path, cycle(keys))
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    assert run.outcome.cycles is not None
    assert (run.outcome.cycles.commanded, run.outcome.cycles.confirmed, run.outcome.cycles.failed) == (4, 4, 0)
    assert run.outcome.sentence.endswith("cycles: 4 commanded, 4 confirmed, 0 failed")
    turns = [type(event).__name__ for event in run.events if isinstance(event, CheckDone | CycleDone)]
    assert turns == ["CheckDone", "CycleDone", "CycleDone", "CheckDone", "CycleDone", "CycleDone", "CheckDone"]
    ends = {event.number: event.tick for event in done(run)}
    begins = {event.number: event.begin_tick for event in done(run)}
    assert begins[2] - ends[1] == 2000
    assert [event.after for event in run.events if isinstance(event, CheckBegun)] == [0, 2, 4]
    assert [event.tick for event in run.events if isinstance(event, CycleBegun)] == list(begins.values())
    order = [event.number for event in run.events if isinstance(event, CycleCommanded)]
    assert order == [1, 2, 3, 4]
    assert [event.after for event in run.events if isinstance(event, CheckCommanded)] == [0, 2, 4]
    assert run.outcome.overdue == 0
    resting = {now.doing for now in run.progress if now.cycle == 0 and now.elapsed_s > ends[1] / 1000.0}
    assert "rest until the next cycle" in resting
    assert all(now.doing != "rest until the next cycle" for now in run.progress if now.cycle)


def jam_second(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
    """The encoder is dead while the second cycle is on."""
    device.faults.set("encoder_dead", now.cycle == 2)


def test_a_cycle_whose_travel_is_not_seen_counts_as_failed_and_the_run_goes_on(tmp_path: Path) -> None:
    steps = cycle("times: 3", DRIVE.replace("60 %", "12 %").replace("at least 60 deg", "at least 4 deg"))
    run = rehearse(tmp_path, steps, meddle=jam_second)
    assert [event.outcome for event in done(run)] == ["confirmed", "failed", "confirmed"]
    assert run.outcome.verdict is Verdict.FAILED
    assert run.outcome.exit_code == 1
    assert "position of vent since cycle begin is at least 4 deg" in run.outcome.sentence
    assert [event.failed for event in done(run)] == [0, 1, 1]


def test_more_failed_cycles_than_allowed_end_the_run(tmp_path: Path) -> None:
    run = rehearse(tmp_path, cycle("times: 9\n    failed at most: 1", DRIVE.replace("60 deg", "9000 deg")))
    assert run.outcome.verdict is Verdict.FAILED
    assert run.outcome.sentence.startswith("2 cycles of 'cycle' have failed, 1 are allowed")
    assert len(done(run)) == 2
    assert run.outcome.stop_confirmed


def test_a_cycle_without_a_confirmation_is_counted_as_commanded_only(tmp_path: Path) -> None:
    run = rehearse(tmp_path, cycle("times: 2", " [{hold: 300 ms}]"))
    assert [event.outcome for event in done(run)] == ["commanded", "commanded"]
    assert run.outcome.cycles is not None
    assert (run.outcome.cycles.confirmed, run.outcome.cycles.unjudged) == (0, 2)
    assert any("no 'confirm'" in remark for remark in run.plan.remarks)


def test_cycles_for_a_time_are_whole_cycles_and_count_rests(tmp_path: Path) -> None:
    run = rehearse(tmp_path, cycle("for: 4 s\n    rest: 500 ms", " [{hold: 1 s}]"))
    begins = [event.begin_tick for event in done(run)]
    first = begins[0]
    assert all(begin - first < 4000 for begin in begins)
    assert done(run)[-1].tick - first >= 4000
    assert len(begins) == 3


def test_a_stop_in_a_cycle_is_written_down_as_broken_off(tmp_path: Path) -> None:
    def panic(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.cycle == 2 and now.doing.startswith("hold"):
            session.panic(1)

    run = rehearse(tmp_path, cycle("times: 5"), meddle=panic)
    assert run.outcome.verdict is Verdict.STOPPED
    (broken,) = [event for event in run.events if isinstance(event, CycleInterrupted)]
    assert broken.number == 2
    assert "stopped by the user" in broken.why
    assert str(run.outcome.cycles) == "2 commanded, 1 confirmed, 0 failed, 1 broken off"


def test_the_starts_of_a_check_are_written_down_before_it_moves(tmp_path: Path) -> None:
    def panic(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if device.controller is not None and device.controller.drives[0].moving:
            session.panic(1)

    keys = (
        "times: 2\n    check every: 1\n    check: [{ramp: {motor: vent, to: 30 %, in: 400 ms}}, {coast: {motor: vent}}]"
    )
    run = rehearse(tmp_path, cycle(keys), meddle=panic)
    assert run.outcome.verdict is Verdict.STOPPED
    (check,) = [event for event in run.events if isinstance(event, CheckCommanded)]
    assert (check.after, dict(check.starts)) == (0, {"vent": 1})
    assert not any(isinstance(event, CheckDone) for event in run.events)


def test_a_host_that_slept_is_told_in_the_last_sentence(tmp_path: Path) -> None:
    told: list[int] = []

    def sleep(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.elapsed_s > 0.3 and not told:
            told.append(1)
            session._core.tell(HostSlept(tick=None, host_s=port.clock.now(), slept_s=2580.0))

    run = rehearse(tmp_path, "- hold: 1 s", meddle=sleep)
    assert run.outcome.sentence.endswith("; the host slept 1 time, 43 min in all")
    assert run.outcome.slept_s == (2580.0,)


# ---- starts per hour -----------------------------------------------------------------------------------------------


def test_cycles_are_spaced_evenly_for_their_starts_per_hour(tmp_path: Path) -> None:
    """720 starts per hour: one each 5 s, and a cycle's length over 720 more."""
    run = rehearse(tmp_path, cycle("times: 4\n    starts per hour: 720"), head="log: {period: 20 ms}\n")
    begins = [event.begin_tick for event in done(run)]
    assert [later - begin for begin, later in itertools.pairwise(begins)] == [5002] * 3  # a cycle takes 1.1 s
    tick_s = run.plan.tick_us / 1e6
    assert run.plan.totals.least * tick_s <= run.outcome.elapsed_s <= run.plan.totals.most * tick_s
    assert run.progress[-1].left_s == pytest.approx(0.0, abs=0.6)


@pytest.mark.soak
def test_no_cycle_comes_sooner_than_an_hour_allows_its_starts(tmp_path: Path) -> None:
    run = rehearse(tmp_path, cycle("times: 3\n    starts per hour: 2"), head="log: {period: 1 s}\n")
    first, second, third = done(run)
    assert 1_800_000 <= second.begin_tick - first.begin_tick < 1_802_000
    assert third.begin_tick - first.tick >= 3_600_000
    assert third.begin_tick - first.tick < 3_602_000


def test_a_cycle_that_would_begin_after_its_time_is_not_waited_for(tmp_path: Path) -> None:
    run = rehearse(tmp_path, cycle("for: 12 s\n    starts per hour: 720"), head="log: {period: 20 ms}\n")
    assert len(done(run)) == 3  # at 0 s, 5 s and 10 s; one at 15 s would be too late
    tick_s = run.plan.tick_us / 1e6
    assert run.plan.totals.least * tick_s <= run.outcome.elapsed_s <= run.plan.totals.most * tick_s


@pytest.mark.parametrize(("age_s", "wait_s"), [(3590.0, 10), (3600.0, 0), (1.0, 3599)])
def test_the_starts_of_earlier_parts_of_the_run_count(tmp_path: Path, age_s: float, wait_s: int) -> None:
    (part,) = plan_of(tmp_path, cycle("times: 3\n    starts per hour: 2")).cycles
    so_far = RunSoFar(starts=(PastStarts("vent", 2, age_s), PastStarts("fan", 9, 1.0)))
    book = CycleBook(so_far, tick_s=0.001, write=lambda event: None, pending=lambda: 0)
    book.enter(part, 1_000_000)
    due = book.due(1_000_000)
    assert (due.turn, due.tick) == (Turn.CYCLE, 1_000_000 + wait_s * 1000)


@given(
    st.integers(1, 6),
    st.lists(st.tuples(st.integers(1, 3), st.integers(0, 2000)), min_size=1, max_size=40),
)
def test_no_rolling_hour_ever_has_more_starts_than_allowed(per_hour: int, turns: list[tuple[int, int]]) -> None:
    guard, now_s = StartsGuard(), 0.0
    made: deque[float] = deque()
    for count, length_s in turns:
        starts = min(count, per_hour)
        begin_s = guard.earliest_s({"vent": starts}, now_s, per_hour=per_hour)
        assert begin_s >= now_s
        made += [begin_s] * starts
        now_s = begin_s + length_s
        guard.note({"vent": starts}, now_s)
    for at_s in made:
        assert sum(at_s - 3600 < other <= at_s for other in made) <= per_hour


def test_a_start_waits_no_longer_than_its_share_and_a_full_hour_ask_for() -> None:
    guard = StartsGuard()
    guard.note({"vent": 1}, 0.0)
    assert guard.earliest_s({"vent": 1}, 1000.0, per_hour=4) == 1000.0  # its share of 900 s is over
    assert guard.earliest_s({"vent": 1}, 500.0, per_hour=4) == 900.0
    guard.note({"vent": 3}, 1000.0)
    assert guard.earliest_s({"vent": 1}, 1100.0, per_hour=4) == 1000.0 + 3600.0 / (4 // 3)


class Turned:
    """Goes through a block of a plan as a run does, each turn as long as it may be or as short, and keeps the begins
    and ends of its turns in ticks."""

    def __init__(self, part: Cycles, *, most: bool) -> None:
        book = CycleBook(RunSoFar(), tick_s=0.001, write=lambda event: None, pending=lambda: 0)
        tick = (part.before.totals.most if most else part.before.totals.least) if part.before is not None else 0
        book.enter(part, tick)
        self.turns: list[tuple[int, int, dict[str, int]]] = []
        while (due := book.due(tick)).turn is not Turn.OVER:
            book.command(due.turn)
            book.begin(due.tick)
            body, starts = (part.later, part.starts)
            if due.turn is Turn.CHECK:
                assert part.check is not None
                body, starts = part.check, part.check_starts
            tick = due.tick + (body.totals.most if most else body.totals.least)
            book.close(tick)
            self.turns.append((due.tick, tick, dict(starts)))
        self.over = tick


PLAIN = "\n      - ramp: {motor: vent, to: 60 %, in: 600 ms}\n      - coast: {motor: vent, in: 300 ms}\n"
OTHER = PLAIN.replace("vent", "fan")


@settings(max_examples=40, deadline=None)
@given(
    length=st.one_of(st.integers(1, 40).map("times: {}".format), st.integers(1, 4).map("for: {} h".format)),
    per_hour=st.integers(4, 24),
    every=st.integers(1, 6),
    steps=st.sampled_from([DRIVE, DRIVE * 2, DRIVE + OTHER]),
    check=st.sampled_from(["", PLAIN, PLAIN * 2, OTHER]),
    rest_s=st.sampled_from([0, 5, 300]),
)
def test_the_plan_bounds_the_time_of_spaced_cycles(
    tmp_path_factory: pytest.TempPathFactory,
    length: str,
    per_hour: int,
    every: int,
    steps: str,
    check: str,
    rest_s: int,
) -> None:
    keys = f"{length}\n    rest: {rest_s} s\n    starts per hour: {per_hour}"
    if check:
        keys += f"\n    check every: {every}\n    check:{check.rstrip()}"
    plan = plan_of(tmp_path_factory.mktemp("p"), cycle(keys, steps + "\n      - hold: 1 s\n"))
    (part,) = plan.cycles
    for most in (False, True):
        found = Turned(part, most=most)
        assert part.totals.least <= found.over <= part.totals.most
        for motor in part.starts:
            made = [(end, starts.get(motor, 0)) for _, end, starts in found.turns]
            for begin, _, starts in found.turns:
                recent = sum(count for end, count in made if begin - 3_600_000 < end <= begin)
                assert recent + starts.get(motor, 0) <= per_hour or not starts.get(motor)


def test_the_plan_tells_of_cycles_and_bounds_their_time(tmp_path: Path) -> None:
    keys = "name: open\n    times: 100\n    rest: 2 s\n    starts per hour: 30\n    check every: 50"
    keys += "\n    check: [{hold: 1 s}]"
    plan = plan_of(tmp_path, cycle(keys))
    tick_s = plan.tick_us / 1e6
    assert plan.totals.least * tick_s >= 3 * 3600  # 100 starts at 30 an hour: three whole hours of waiting
    assert plan.totals.most * tick_s < 3.5 * 3600
    text = "\n".join(report_lines(plan, small_bench()))
    assert "cycles    'open' x 100, rest 2 s, at most 30 starts per hour (one every 2 min), check every 50" in text
    assert "each cycle" in text
    left = compile_plan(sequence_of(tmp_path, cycle(keys)), small_bench(), so_far={1: BlockSoFar(done=90)})
    assert left.totals.least < plan.totals.least
    over = compile_plan(sequence_of(tmp_path, cycle(keys)), small_bench(), so_far={1: BlockSoFar(over=True)})
    assert over.cycles == ()
    assert over.counts_cycles


# ---- the count read back -------------------------------------------------------------------------------------------


def written(folder: Path, *events: dict[str, object]) -> CycleRecord:
    """What is read back of these lines."""
    file = AppendFile(folder / "cycles.jsonl")
    for event in events:
        line = {"tick": None, "time_s": None, "utc": "2027-01-15T08:00:00.000Z", "block": 1} | event
        file.append(encode_line(line))  # type: ignore[arg-type]  # plain JSON
    file.close()
    return read_cycle_record(folder)


COMMANDED = {"kind": "cycle_commanded", "number": 1}
DONE = {"kind": "cycle_done", "number": 1, "outcome": "confirmed", "run_s": 3.5, "starts": {"vent": 2}}


def test_the_count_is_what_was_written_down(tmp_path: Path) -> None:
    record = written(tmp_path, COMMANDED, DONE, COMMANDED | {"number": 2})
    assert (record.counted.commanded, record.counted.confirmed, record.open_number) == (2, 1, 2)
    assert record.blocks[1] == BlockSoFar(done=1, run_s=3.5)
    assert [line["number"] for line in record.cycles()] == [1]
    ages = sorted((past.count, past.age_s) for past in record.starts(1_800_000_060.0))
    assert ages == [(2, 0.0), (2, 60.0)]


def test_the_starts_of_a_cycle_that_was_broken_off_count_whether_it_was_told_or_not(tmp_path: Path) -> None:
    """Three lost links in an hour would else leave three cycles' starts out of it."""
    first, second, third = (COMMANDED | {"number": number, "starts": {"vent": 3}} for number in (1, 2, 3))
    told = {"kind": "cycle_interrupted", "number": 1, "utc": "2027-01-15T08:00:10.000Z"}
    record = written(tmp_path, first, told, second, third | {"utc": "2027-01-15T08:00:40.000Z"})
    ages = [(past.motor, past.count, past.age_s) for past in record.starts(1_800_000_060.0)]
    assert ages == [("vent", 3, 50.0), ("vent", 3, 20.0), ("vent", 3, 0.0)]
    assert record.counted.interrupted == 2  # the first was told, the second is shown by its successor


def test_the_starts_of_a_check_that_was_broken_off_count_too(tmp_path: Path) -> None:
    check = {"kind": "check_commanded", "after": 0, "starts": {"vent": 2}}
    record = written(tmp_path, check, check | {"utc": "2027-01-15T08:00:40.000Z"})
    ages = [(past.count, past.age_s) for past in record.starts(1_800_000_060.0)]
    assert ages == [(2, 20.0), (2, 0.0)]
    assert record.counted == Counted()


def test_a_cycle_that_starts_nothing_is_not_taken_to_start_what_the_one_before_did(tmp_path: Path) -> None:
    record = written(tmp_path, COMMANDED, DONE, COMMANDED | {"number": 2, "starts": {}})
    assert [past.age_s for past in record.starts(1_800_000_060.0)] == [60.0]


def test_a_cycle_that_follows_an_open_one_shows_that_this_was_broken_off(tmp_path: Path) -> None:
    record = written(tmp_path, COMMANDED, COMMANDED | {"number": 2}, DONE | {"number": 2})
    assert (record.counted.interrupted, record.counted.confirmed, record.open_number) == (1, 1, None)


@pytest.mark.parametrize(
    "events",
    [(DONE,), (COMMANDED, DONE, DONE), (COMMANDED, COMMANDED), (COMMANDED, COMMANDED | {"number": 3})],
)
def test_a_count_that_contradicts_itself_is_refused(tmp_path: Path, events: tuple[dict[str, object], ...]) -> None:
    with pytest.raises(RecordError, match="cannot be read as a count of cycles"):
        written(tmp_path, *events)
