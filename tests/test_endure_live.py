"""Wear judged while a run is under way: the features of the log itself, watched, able to end the run, and resumed."""

from __future__ import annotations

import copy
import json
import random
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import numpy as np
import pytest

from endure_crash import CYCLES as FEW
from endure_crash import Host, Killed, Process
from ramprig.endure import features, live
from ramprig.endure.doorsheet import door_sheet
from ramprig.endure.features import cycle_features
from ramprig.endure.live import LiveWatch
from ramprig.endure.resume import read_broken
from ramprig.endure.trends import Level
from ramprig.endure.wear import WearJudge, as_recorded
from ramprig.errors import Place, UsageError
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.record.reading import read_events, read_manifest
from ramprig.report.digest import digest_samples
from ramprig.report.explain import explain_folder
from ramprig.report.facts import gather
from ramprig.report.making import make_report
from ramprig.report.trends import cycles_of, seen_of, wear_of
from ramprig.sequence.columns import bench_columns
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.cycle_watch import CycleWatch, TurnDone, Watched
from ramprig.sequence.executive import Progress
from ramprig.sequence.outcome import Verdict
from ramprig.sequence.rig import Rig
from ramprig.sequence.running import RunResult, RunWish, run_sequence
from ramprig.sequence.wear_limits import TurnKind, rules_of
from ramprig.session.blocks import Block, Layout
from sequence_rig import sequence_of, small_bench

WEAR = "wear: {run in: {cycles: 2, for: 5 s}, baseline: 10, LIMITS}"
STEPS = """- cycle:
    name: open
    times: TIMES
    WEAR
    check every: 20
    check: [{ramp: {motor: vent, to: 30 %, in: 300 ms}}, {hold: 500 ms}, {coast: {motor: vent, in: 300 ms}}]
    steps:
      - ramp: {motor: vent, to: 50 %, in: 500 ms}
      - hold: 500 ms
      - confirm: {position of: vent, is: at least 10 deg}
      - coast: {motor: vent, in: 300 ms}
      - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 3 s}"""


CYCLES_OF_1 = (1, TurnKind.CYCLE)


@dataclass
class Looked:
    """A run that was carried out, what was said in it, and who looked on."""

    result: RunResult
    said: list[str]
    watch: LiveWatch

    @property
    def folder(self) -> Path:
        assert self.result.folder is not None
        return self.result.folder

    @property
    def lines(self) -> list[dict[str, Any]]:
        """The count of cycles."""
        return [json.loads(line) for line in (self.folder / "cycles.jsonl").read_text("utf-8").splitlines()]


def look(
    folder: Path,
    *,
    steps: str = STEPS,
    limits: str = "",
    wear: str = WEAR,
    times: int,
    meddle: Callable[[Progress, MockDevice], None] | None = None,
) -> Looked:
    """Run the cycles on the mock, with these limits."""
    bench = small_bench()
    steps = steps.replace("TIMES", str(times)).replace("WEAR", wear.replace(", LIMITS", limits and f", {limits}"))
    sequence = sequence_of(folder, steps, head="log: {period: 5 ms}\n")
    device = MockDevice(setup_of_bench(bench), seed=3)
    said: list[str] = []
    watches: list[LiveWatch] = []

    def watching(watched: Watched) -> CycleWatch:
        watches.append(LiveWatch(watched, say=said.append))
        return watches[-1]

    def progress(now: Progress) -> None:
        if meddle is not None:
            meddle(now, device)

    wish = RunWish(sequence=sequence, bench=bench, runs=folder / "runs", virtual=True, seed=3, watching=watching)
    result = run_sequence(wish, MockPort(device, pace="virtual", seed=3), progress=progress)
    (watch,) = watches
    return Looked(result, said, watch)


def stiffer(times: float, *, from_cycle: int) -> Callable[[Progress, MockDevice], None]:
    """Friction that is so many times as large from this cycle on."""
    fresh_nm: list[float] = []

    def meddle(now: Progress, device: MockDevice) -> None:
        axis = device.plant.axes[0]
        fresh_nm.append(axis.coulomb_nm)
        axis.coulomb_nm = fresh_nm[0] * (times if now.cycles_done >= from_cycle - 1 else 1.0)

    return meddle


@pytest.fixture(scope="module")
def worn(tmp_path_factory: pytest.TempPathFactory) -> Looked:
    """A run that a limit to wear ends: the friction doubles from cycle 25 on."""
    limits = "limits: [{feature: steady current, of: vent, going: forward, watch: +10 %, fail: +25 %}]"
    return look(tmp_path_factory.mktemp("worn"), limits=limits, times=60, meddle=stiffer(2.0, from_cycle=25))


# ---- what is recorded ------------------------------------------------------------------------------------------------


def test_the_recorded_features_are_those_of_the_log_digit_by_digit(worn: Looked) -> None:
    done = [line for line in worn.lines if line["kind"] in ("cycle_done", "check_done")]
    from_file = list(cycle_features(worn.folder))
    assert len(done) == len(from_file) > 25
    for line, computed in zip(done, from_file, strict=True):
        assert line["features"] == as_recorded(computed.values())
        assert (line["samples"], line["left_out"]) == (computed.samples, computed.left_out)
        assert line["features"]["vent forward: steady current"] > 0.0


def test_a_cycle_beyond_its_bound_is_recorded_as_a_reader_of_the_log_gets_it(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(features, "CYCLE_ROWS_MAX", 150)
    monkeypatch.setattr(live, "BATCH_ROWS", 16)
    run = look(tmp_path, limits="", times=3)
    done = [line for line in run.lines if line["kind"] in ("cycle_done", "check_done")]
    assert len(done) >= 3
    for line, computed in zip(done, cycle_features(run.folder), strict=True):
        assert line["features"] == as_recorded(computed.values())
        assert (line["samples"], line["left_out"]) == (computed.samples, computed.left_out)
        assert line["left_out"] > 0


def test_the_rules_in_force_are_on_record(worn: Looked) -> None:
    rules, checks = rules_of(read_manifest(worn.folder)["settings"]["wear"])
    assert (rules.name, rules.run_in_turns, rules.run_in_s, rules.baseline) == ("open", 2, 5.0, 10)
    assert rules.drives == ("vent", "latch", "flap")
    assert [limit.feature for limit in rules.limits] == ["vent forward: steady current"]
    assert rules == worn.watch.judge.blocks[CYCLES_OF_1].rules
    assert (checks.turn, checks.run_in_turns, checks.baseline, checks.detectors) == (TurnKind.CHECK, 1, 10, False)


@pytest.mark.parametrize(("times", "remarks"), [(12, 1), (13, 0)])
def test_cycles_too_few_for_a_baseline_are_remarked_on(tmp_path: Path, times: int, remarks: int) -> None:
    limits = "limits: [{feature: energy, of: vent, fail: +25 %}]"
    steps = STEPS.replace("TIMES", str(times)).replace("WEAR", WEAR.replace("LIMITS", limits))
    found = compile_plan(sequence_of(tmp_path, steps), small_bench()).remarks
    said = [text for text in found if "too few" in text]
    assert said == ["12 cycles of 'open' are too few to judge a change: that takes more than 12"][:remarks]


def test_the_door_sheet_says_which_wear_ends_the_run(tmp_path: Path) -> None:
    limits = "limits: [{feature: energy, of: vent, watch: +10 %}, {feature: energy, of: fan, fail: +25 %}]"
    fan = STEPS.replace("      - confirm:", "      - ramp: {motor: fan, to: 20 %, in: 300 ms}\n      - confirm:")
    fan = fan.replace("      - wait:", "      - coast: {motor: fan, in: 300 ms}\n      - wait:")
    steps = fan.replace("TIMES", "30").replace("WEAR", WEAR.replace("LIMITS", limits))
    sequence, bench = sequence_of(tmp_path, steps), small_bench()
    sheet = door_sheet(
        bench, sequence, compile_plan(sequence, bench), start_unix_s=1.8e9, latest_end_unix_s=1.9e9, host="pc"
    )
    assert sheet.text().count("it ends by itself once") == 1
    assert "it ends by itself once fan: energy is beyond +25 %: worn" in sheet.text()


# ---- what it leads to ------------------------------------------------------------------------------------------------


def test_a_limit_to_wear_ends_the_run_in_order_with_a_sentence_that_says_it_all(worn: Looked) -> None:
    outcome = worn.result.outcome
    assert outcome.verdict is Verdict.FAILED
    assert outcome.exit_code == 1
    assert outcome.stop_confirmed
    assert outcome.sentence.startswith("vent forward: steady current: fail limit at cycle 27, ")
    assert "; beyond +25 % (above " in outcome.sentence
    assert " in 3 of the last 5 cycles: 25, 26, 27; cycles: 27 commanded, 27 confirmed, 0 failed" in outcome.sentence
    assert " mA against " in outcome.sentence
    assert str(outcome.place).endswith("s.yaml:7:68")  # the limit itself
    manifest = read_manifest(worn.folder)
    assert (manifest["verdict"], manifest["status"]) == ("failed", "finished")
    assert manifest["results"]["exit_code"] == 1


def test_what_is_found_is_an_event_before_the_cycle_that_shows_it_and_a_line_for_the_user(worn: Looked) -> None:
    events, _ = read_events(worn.folder / "events.jsonl")
    found = [event for event in events if event["kind"] == "wear_found"]
    assert [event["text"] for event in found] == worn.said
    levels = {event["level"] for event in found}
    assert levels == {"watch", "fail"}
    first = next(event for event in found if event["feature"] == "vent forward: steady current")
    assert first["number"] >= 25
    done = {line["number"]: line for line in worn.lines if line["kind"] == "cycle_done"}
    for event in found:
        assert event["tick"] == done[event["number"]]["tick"]
    (failing,) = [event for event in found if event["level"] == "fail"]
    assert failing["cycles"] == [25, 26, 27]
    assert failing["limit"].startswith("+25 % (above ")
    assert failing["now"] > 1.25 * failing["baseline"]


def test_the_report_says_what_the_run_said(worn: Looked, tmp_path: Path) -> None:
    facts = gather(worn.folder)
    judge, findings = wear_of(facts, cycles_of(facts, ()))
    assert [str(finding) for _, finding in findings] == worn.said
    assert judge == worn.watch.judge
    made = make_report([worn.folder], out=tmp_path, issued="")
    text = made.report.read_text("utf-8")
    for said in worn.said:
        assert said in text.replace("&#x27;", "'")
    suite = ElementTree.parse(made.junit).getroot().find("testsuite")
    assert suite is not None
    cases = {case.get("name"): case for case in suite.iter("testcase") if case.get("classname") == "wear 'open'"}
    failed = cases["vent forward: steady current: watch +10 %, fail +25 %, 3 of 5"].find("failure")
    assert failed is not None
    assert "fail limit at cycle 27" in str(failed.get("message"))
    others = cases["every other feature: watch +- 10 %, 3 of 5"]
    assert others.find("failure") is None
    assert re.match(r"\d+ of \d+ features had a complete baseline\n", others.findtext("system-out") or "")


def test_the_end_is_explained(worn: Looked) -> None:
    explanation = explain_folder(worn.folder)
    assert explanation is not None
    assert explanation.likely is not None
    assert explanation.likely.key == "wear"
    assert "vent forward: steady current is " in explanation.likely.sentence
    assert "gear, bearings, brushes" in explanation.likely.next_step


def test_a_run_that_wear_has_ended_is_over(worn: Looked) -> None:
    with pytest.raises(UsageError, match="came to its end"):
        read_broken(worn.folder, now_unix_s=2e9)


def test_what_is_only_to_be_watched_ends_nothing_and_is_told_at_the_end(tmp_path: Path) -> None:
    run = look(tmp_path, limits="detectors: off", times=22, meddle=stiffer(1.5, from_cycle=18))
    outcome = run.result.outcome
    assert outcome.verdict is Verdict.PASSED
    assert "; to watch: " in outcome.sentence
    assert "vent forward: steady current beyond" not in outcome.sentence
    assert run.watch.judge.blocks[CYCLES_OF_1].features["vent forward: steady current"].level is Level.WATCH
    assert all(": watch limit at cycle " in said for said in run.said)


def test_a_limit_in_the_features_unit_needs_no_baseline(tmp_path: Path) -> None:
    limits = "limits: [{feature: peak current, of: vent, fail: at most 100 mA, cycles: 1 of 1}]"
    run = look(tmp_path, limits=limits, times=30)
    assert run.result.outcome.verdict is Verdict.FAILED
    assert "vent: peak current: fail limit at cycle " in run.result.outcome.sentence
    assert "beyond 'at most 100 mA' in 1 of the last 1 cycles" in run.result.outcome.sentence
    text = make_report([run.folder], out=tmp_path / "out", issued="").report.read_text("utf-8")
    (said,) = run.said
    section = text.partition("Cycle over cycle</span>")[2].partition("</section>")[0].replace("&#x27;", "'")
    assert f"<td>{said}</td>" in section  # of three cycles, which are too few to be drawn
    assert "no trend is judged: that takes more than 12 cycles or 11 checks" in section.lower()
    assert "of each cycle" not in section
    assert run.watch.judge.blocks[CYCLES_OF_1].turns - run.watch.judge.blocks[CYCLES_OF_1].run_in == 1


def test_without_a_folder_wear_ends_a_run_too(tmp_path: Path) -> None:
    bench = small_bench()
    steps = STEPS.replace("TIMES", "30").replace(
        "WEAR",
        WEAR.replace("5 s", "0 s").replace(
            "LIMITS", "limits: [{feature: duration, fail: at most 1 s, cycles: 2 of 2}]"
        ),
    )
    sequence = sequence_of(tmp_path, steps, head="log: {period: 5 ms}\n")
    port = MockPort(MockDevice(setup_of_bench(bench), seed=3), pace="virtual", seed=3)
    said: list[str] = []
    wish = RunWish(sequence=sequence, bench=bench, virtual=True, watching=live.watching(said.append))
    result = run_sequence(wish, port)
    assert result.folder is None
    assert result.outcome.verdict is Verdict.FAILED
    assert "cycles: 3, 4; cycles: 4 commanded" in result.outcome.sentence


def test_where_wear_is_off_nothing_is_judged_and_the_features_are_recorded_all_the_same(tmp_path: Path) -> None:
    run = look(tmp_path, wear="wear: off", times=16, meddle=stiffer(3.0, from_cycle=14))
    assert run.result.outcome.verdict is Verdict.PASSED
    assert "to watch" not in run.result.outcome.sentence
    assert run.said == []
    assert read_manifest(run.folder)["settings"]["wear"] == []
    done = [line for line in run.lines if line["kind"] == "cycle_done"]
    assert all(line["features"]["vent forward: steady current"] > 0.0 for line in done)
    text = make_report([run.folder], out=tmp_path / "out", issued="").report.read_text("utf-8")
    assert "No trend is judged: the sequence says &#x27;wear: off&#x27;." in text
    assert "vent forward: steady current of each cycle" in text


def test_between_cycles_nothing_is_kept_however_long_that_lasts() -> None:
    columns = bench_columns(small_bench(), tick_us=1000)
    watch = LiveWatch(Watched(rules=[], columns=columns, tick_us=1000), say=lambda text: None)
    layout = Layout.of(Rig.of(small_bench()).mask, 10)

    def come(first: int, count: int) -> None:
        for tick in range(first, first + 10 * count, 200):
            ticks = np.arange(tick, tick + 200, 10, dtype=np.int64)
            watch.on_block(Block(ticks, np.zeros((20, len(layout.channels)), np.int32), layout))

    come(0, 20_000)
    assert watch._pieces == []
    assert watch._rows < live.BATCH_ROWS
    watch.commanded()
    come(200_000, 4000)
    watch.begun(210_000)
    come(240_000, 1000)
    seen = watch.done(TurnDone(number=1, block=1, begin_tick=210_000, end_tick=249_990, after=0))
    assert seen.samples == 4000
    assert seen.features["duration"] == pytest.approx(39.99)
    assert watch._pieces == []


@pytest.mark.parametrize("early", [0, 20, 300])
def test_samples_from_before_a_long_cycle_take_no_room_in_its_bound(
    monkeypatch: pytest.MonkeyPatch, early: int
) -> None:
    """They may have come in the same piece as its first ones."""
    monkeypatch.setattr(features, "CYCLE_ROWS_MAX", 1000)
    monkeypatch.setattr(live, "BATCH_ROWS", 400)
    columns = bench_columns(small_bench(), tick_us=1000)
    watch = LiveWatch(Watched(rules=[], columns=columns, tick_us=1000), say=lambda text: None)
    layout = Layout.of(Rig.of(small_bench()).mask, 10)

    def come(first: int, end: int) -> None:
        for tick in range(first, end, 200):
            ticks = np.arange(tick, tick + 200, 10, dtype=np.int64)
            watch.on_block(Block(ticks, np.zeros((20, len(layout.channels)), np.int32), layout))

    begin = 10 * early
    watch.commanded()
    come(0, begin + 200)
    watch.begun(begin)
    come(begin + 200, begin + 32_000)
    seen = watch.done(TurnDone(number=1, block=1, begin_tick=begin, end_tick=begin + 31_990, after=0))
    assert (seen.samples, seen.left_out) == (1000, 2200)


# ---- when the judge itself is at fault -------------------------------------------------------------------------------


def look_in_vain(
    folder: Path, monkeypatch: pytest.MonkeyPatch, *, limits: str = "", at: str = "done", cycle: int = 5
) -> tuple[RunResult, list[str]]:
    """A run whose judge raises in `at` at this cycle, as `ramprig run` would carry it out."""
    seen: list[int] = []

    class Faulty(LiveWatch):
        def done(self, turn: TurnDone) -> Any:  # Any: as the class it stands for
            seen.append(turn.number)
            if at == "done" and turn.number >= cycle:
                raise ValueError("shapes")
            return super().done(turn)

        def on_block(self, block: Block) -> None:
            if at == "on_block" and cycle - 1 in seen:
                raise MemoryError
            super().on_block(block)

        def too_worn(self) -> tuple[str, Place | None]:
            if at == "too_worn" and cycle - 1 in seen:
                raise LookupError("worst")
            return super().too_worn()

        def to_watch(self) -> str:
            if at == "to_watch":
                raise OverflowError
            return super().to_watch()

        def __init__(self, watched: Watched, *, say: Callable[[str], None]) -> None:
            if at == "__init__":
                raise KeyError("line")
            super().__init__(watched, say=say)

    monkeypatch.setattr(live, "LiveWatch", Faulty)
    bench, said = small_bench(), list[str]()
    steps = STEPS.replace("TIMES", "8").replace("WEAR", WEAR.replace(", LIMITS", limits))
    sequence = sequence_of(folder, steps, head="log: {period: 5 ms}\n")
    port = MockPort(MockDevice(setup_of_bench(bench), seed=3), pace="virtual", seed=3)
    wish = RunWish(
        sequence=sequence, bench=bench, runs=folder / "runs", virtual=True, seed=3, watching=live.watching(said.append)
    )
    return run_sequence(wish, port), said


@pytest.mark.parametrize(
    ("at", "since", "cycle"),
    [
        ("done", "from cycle 5 on, by a fault of this program (ValueError: shapes)", 5),
        ("on_block", "from the present cycle on, by a fault of this program (MemoryError: )", 5),
        ("__init__", "from here on, by a fault of this program (KeyError: 'line')", 1),
    ],
)
def test_a_fault_of_the_judge_does_not_end_a_run_that_nothing_of_wear_is_to_end(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, at: str, since: str, cycle: int
) -> None:
    result, said = look_in_vain(tmp_path, monkeypatch, at=at)
    assert result.outcome.verdict is Verdict.PASSED
    assert result.outcome.cycles is not None
    assert result.outcome.cycles.confirmed == 8
    assert said == [f"wear is not judged {since}"]
    assert result.outcome.sentence.endswith(f"; wear is not judged {since}")
    assert result.folder is not None
    events, _ = read_events(result.folder / "events.jsonl")
    (told,) = [event for event in events if event["kind"] == "wear_unjudged"]
    assert told["text"] == said[0]
    assert "test_endure_live.py" in told["trace"]
    done = [json.loads(line) for line in (result.folder / "cycles.jsonl").read_text("utf-8").splitlines()]
    known = {line["number"]: bool(line["features"]) for line in done if line["kind"] == "cycle_done"}
    assert known == {number: number < cycle for number in range(1, 9)}
    made = make_report([result.folder], out=tmp_path / "out", issued="")
    assert said[0] in made.report.read_text("utf-8").replace("&#x27;", "'")
    skipped = ElementTree.parse(made.junit).findall(".//testcase[@name='every other feature: watch +- 10 %, 3 of 5']")
    assert [case.find("skipped") is not None for case in skipped] == [True, True]  # of the cycles, and of the checks


@pytest.mark.parametrize(("at", "kind"), [("too_worn", "LookupError: worst"), ("to_watch", "OverflowError: ")])
def test_a_fault_in_what_the_judge_is_asked_does_not_end_the_run_either(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, at: str, kind: str
) -> None:
    result, said = look_in_vain(tmp_path, monkeypatch, at=at)
    assert result.outcome.verdict is Verdict.PASSED
    assert said == [f"wear is not judged from the present cycle on, by a fault of this program ({kind})"]
    assert result.outcome.sentence.endswith(said[0])


def test_a_fault_of_the_judge_stops_a_run_in_order_that_a_limit_to_wear_was_to_end(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    limits = ", limits: [{feature: energy, of: vent, fail: +50 %}]"
    result, said = look_in_vain(tmp_path, monkeypatch, limits=limits)
    outcome = result.outcome
    assert (outcome.verdict, outcome.stop_confirmed, outcome.exit_code) == (Verdict.STOPPED, True, 5)
    assert outcome.sentence.startswith(f"stopped because {said[0]}; cycles: 5 commanded, 5 confirmed, 0 failed")
    assert said[0].endswith("; the limits that are to end the run cannot be relied on")
    assert result.folder is not None
    assert read_broken(result.folder, now_unix_s=2e9).so_far.counted.done == 5  # it can be gone on with


def test_two_blocks_of_cycles_are_judged_and_told_apart(tmp_path: Path) -> None:
    """The second one drives harder from its first cycle on: that is no change."""
    second = STEPS.replace("name: open", "name: hard").replace("to: 50 %, in: 500 ms", "to: 58 %, in: 600 ms")
    run = look(tmp_path, steps=f"{STEPS}\n{second}", limits="other features: {watch: +- 20 %}", times=14)
    assert run.result.outcome.verdict is Verdict.PASSED
    assert run.said == []
    blocks = {key: block.turns for key, block in run.watch.judge.blocks.items() if key[1] is TurnKind.CYCLE}
    assert blocks == {(1, TurnKind.CYCLE): 14, (2, TurnKind.CYCLE): 14}
    facts = gather(run.folder)
    names = [trend.name for trend in seen_of(facts, digest_samples(facts)).drawn]
    assert "'open' vent forward: steady speed" in names
    assert "'hard' vent forward: steady speed" in names


# ---- gone on with ----------------------------------------------------------------------------------------------------

CYCLES = 22
CRASH_WEAR = "wear: {run in: {cycles: 2, for: 3 s}, baseline: 10, limits: [LIMIT]}\n      check every: 2"


@dataclass
class Snapshots:
    """The judge of each part as it began, and what it was after so many turns of the run."""

    begun: list[WearJudge] = field(default_factory=list)
    after: dict[int, WearJudge] = field(default_factory=dict)


def turns(judge: WearJudge) -> int:
    """How many cycles and checks it has seen."""
    return sum(block.turns for block in judge.blocks.values())


def watch_host(host: Host, monkeypatch: pytest.MonkeyPatch) -> Snapshots:
    """Have every part of the host's run leave what its judge was."""
    snapshots = Snapshots()

    class Watch(LiveWatch):
        def __init__(self, watched: Watched, *, say: Callable[[str], None]) -> None:
            super().__init__(watched, say=say)
            snapshots.begun.append(copy.deepcopy(self.judge))

        def done(self, turn: Any) -> Any:  # Any: as the class it stands for
            seen = super().done(turn)
            snapshots.after[turns(self.judge)] = copy.deepcopy(self.judge)
            return seen

    monkeypatch.setattr(live, "LiveWatch", Watch)
    path = host.folder / "crash.yaml"
    text = path.read_text("utf-8").replace("check every: 2", CRASH_WEAR)
    limit = "{feature: energy, of: vent, watch: +- 3 %, fail: +90 %}"
    path.write_text(text.replace("LIMIT", limit).replace(f"times: {FEW}", f"times: {CYCLES}"), "utf-8")
    return snapshots


def die_and_resume(folder: Path, monkeypatch: pytest.MonkeyPatch, point: int) -> None:
    """A run that dies at a random operation and goes on, its judge compared with what it was."""
    chance = random.Random(f"wear {point}")
    host = Host(folder, seed=point)
    snapshots = watch_host(host, monkeypatch)
    process = Process(die_at=chance.randrange(1200, 3600))
    with pytest.raises(Killed):
        host.run(process)
    process.cut_power(chance)
    record = host.record()
    kept = len(record.cycles()) + len(record.checks())
    assert 0 < record.counted.done < CYCLES
    host.pause(3.0)
    host.run(Process(), resume=True)
    _, second = snapshots.begun
    assert second == snapshots.after[kept]
    facts = gather(host.run_folder)
    judge, _ = wear_of(facts, cycles_of(facts, ()))
    assert judge == snapshots.after[max(snapshots.after)]
    assert judge.blocks[CYCLES_OF_1].turns == CYCLES
    assert judge.blocks[CYCLES_OF_1].run_in > 2 + 1  # the windings have cooled while nobody drove them


@pytest.mark.parametrize("point", range(2))
def test_a_resumed_run_judges_as_if_it_had_never_been_interrupted(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, point: int
) -> None:
    die_and_resume(tmp_path, monkeypatch, point)


@pytest.mark.soak
@pytest.mark.parametrize("point", range(2, 40))
def test_the_same_at_forty_moments(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, point: int) -> None:
    die_and_resume(tmp_path, monkeypatch, point)


def test_a_run_that_died_while_wear_was_ending_it_ends_at_once_when_it_is_resumed(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def host_in(name: str) -> Host:
        (tmp_path / name).mkdir()
        host = Host(tmp_path / name, seed=1)
        watch_host(host, monkeypatch)
        path = host.folder / "crash.yaml"
        text = path.read_text("utf-8").replace("fail: +90 %", "fail: at most 0.1 J, cycles: 1 of 1")
        path.write_text(text, "utf-8")
        return host

    whole = Process()
    assert host_in("whole").run(whole).outcome.verdict is Verdict.FAILED
    host = host_in("broken")
    with pytest.raises(Killed):
        host.run(Process(die_at=whole.operations - 12))
    done = host.record().counted.done
    host.pause(3.0)
    result = host.run(Process(), resume=True)
    assert result.outcome.verdict is Verdict.FAILED
    assert f"vent: energy: fail limit at cycle {done}" in result.outcome.sentence
    counted = host.record().counted
    assert (counted.commanded, counted.done) == (done, done)
    events, _ = read_events(host.run_folder / "events.jsonl")
    resumed = next(place for place, event in enumerate(events) if event["kind"] == "run_resumed")
    assert "armed" not in [event["kind"] for event in events[resumed:]]  # nothing moves any more


def test_a_resumed_run_keeps_the_limits_that_it_began_with(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    host = Host(tmp_path, seed=1)
    snapshots = watch_host(host, monkeypatch)
    with pytest.raises(Killed):
        host.run(Process(die_at=1500))
    path = host.run_folder / "run.json"
    manifest = json.loads(path.read_text("utf-8"))
    manifest["settings"]["wear"][0]["baseline"] = 12  # as if the program had had another default then
    path.write_text(json.dumps(manifest), "utf-8")
    host.pause(3.0)
    host.run(Process(), resume=True)
    assert snapshots.begun[1].blocks[CYCLES_OF_1].rules.baseline == 12
    assert read_manifest(host.run_folder)["settings"]["wear"][0]["baseline"] == 12
