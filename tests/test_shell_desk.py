"""The desk against the mock in virtual time: what is typed moves as it should, and every end is a standstill."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from ramprig.errors import LinkError, LinkLost, RamprigError, RecordError, Refused, StoppedByUser, Tripped, UsageError
from ramprig.record.reading import audit, read_manifest
from ramprig.record.recorder import Recorder
from ramprig.shell import commands as c
from ramprig.shell.hold import FIRST_S, Hold
from ramprig.shell.logbook import DISK_PATIENCE_S
from ramprig.shell.words import WORDS, filled_example, read_line
from ramprig_link.words import State
from shell_bench import BENCH, SCRIPTS, DeskBench


@pytest.fixture
def bench(tmp_path: Path) -> Iterator[DeskBench]:
    desk_bench = DeskBench(tmp_path / "runs")
    yield desk_bench
    if not desk_bench.desk.dead:
        assert desk_bench.desk.close()
    assert desk_bench.duty == 0


def armed(bench: DeskBench) -> DeskBench:
    bench.type("arm")
    return bench


def void(_: object) -> None:
    """For a lambda whose result is not wanted."""


class Watched:
    """Records the duty at the bridge while something is under way, and does things at times."""

    def __init__(self) -> None:
        self.bench: DeskBench | None = None
        self.duties: list[int] = []
        self.script: list[tuple[float, Callable[[DeskBench], None]]] = []
        self._start_s = 0.0

    def __call__(self) -> None:
        bench = self.bench
        if bench is None:
            return
        self.duties.append(bench.duty)
        now_s = bench.port.clock.now() - self._start_s
        while self.script and self.script[0][0] <= now_s:
            self.script.pop(0)[1](bench)

    def later(self, act: Callable[[DeskBench], None]) -> None:
        """Do this the next time."""
        assert self.bench is not None
        self.script.append((self.bench.port.clock.now() - self._start_s + 0.001, act))

    def begin(self, bench: DeskBench) -> None:
        self.bench = bench
        self._start_s = bench.port.clock.now()


@pytest.fixture
def watched(tmp_path: Path) -> Iterator[tuple[DeskBench, Watched]]:
    watch = Watched()
    desk_bench = DeskBench(tmp_path / "runs", aside=watch)
    desk_bench.type("arm")
    watch.begin(desk_bench)
    yield desk_bench, watch
    watch.bench = None
    if not desk_bench.desk.dead:
        assert desk_bench.desk.close()
    assert desk_bench.duty == 0


# ---- arming ------------------------------------------------------------------------------------------------------


def test_opening_leaves_the_outputs_off_and_arming_says_what_may_move(bench: DeskBench) -> None:
    assert bench.desk.snapshot.state == "off"
    said = "\n".join(bench.type("arm"))
    assert "vent up to 80 %" in said
    assert "latch -40 to 40 deg" in said
    assert "not an emergency stop" in said
    assert bench.desk.snapshot.state == "armed"
    assert bench.duty == 0


@pytest.mark.parametrize("line", ["jog vent 20 % for 1 s", "ramp vent 10 %", "move latch 10 deg", "coast vent"])
def test_nothing_moves_without_arming(bench: DeskBench, line: str) -> None:
    with pytest.raises(UsageError, match="'arm' enables them"):
        bench.type(line)


def test_the_idle_desk_keeps_the_lease_and_disarm_ends_it(bench: DeskBench) -> None:
    armed(bench).let_pass(3.0)
    assert bench.desk.snapshot.state == "armed"
    bench.type("disarm")
    assert bench.desk.snapshot.state == "off"


# ---- motors ------------------------------------------------------------------------------------------------------


def test_a_jog_for_a_time_reaches_its_duty_and_ends_at_zero(watched: tuple[DeskBench, Watched]) -> None:
    bench, watch = watched
    before_s = bench.port.clock.now()
    bench.type("jog vent -20 % for 1 s")
    assert min(watch.duties) == -2000
    assert max(watch.duties) == 0
    assert bench.duty == 0
    assert 1.0 <= bench.port.clock.now() - before_s <= 2.0
    assert bench.desk.snapshot.state == "armed"


def test_a_held_key_turns_the_motor_and_letting_go_stops_it(watched: tuple[DeskBench, Watched]) -> None:
    bench, watch = watched
    hold = Hold(ceiling_duty=8000, duty=1500)
    now = bench.port.clock.now
    watch.script = [
        (0.1, lambda b: hold.press(1, now())),
        (0.3, lambda b: hold.change(5)),
        (0.1 + FIRST_S + 1.0, lambda b: hold.press(-1, now())),
        (0.1 + FIRST_S + 3.0, lambda b: hold.leave()),
    ]
    bench.perform(c.JogHold(BENCH.motor("vent"), hold))
    assert max(watch.duties) == 2000
    assert min(watch.duties) == -2000
    first_back = next(i for i, duty in enumerate(watch.duties) if duty < 0)
    assert 0 in watch.duties[watch.duties.index(2000) : first_back]
    assert bench.duty == 0


def test_releasing_a_held_key_acts_within_a_quarter_of_a_second(watched: tuple[DeskBench, Watched]) -> None:
    bench, watch = watched
    hold = Hold(ceiling_duty=8000, duty=3000)
    now = bench.port.clock.now
    released: list[float] = []
    falling: list[float] = []

    def look(b: DeskBench) -> None:
        if b.duty < 3000 and not falling:
            falling.append(now())
            hold.leave()
        elif not falling:
            watch.later(look)

    def release(b: DeskBench) -> None:
        released.append(now())
        hold.release()
        watch.later(look)

    watch.script = [(0.0, lambda b: hold.press(1, now())), (0.55, release)]
    bench.perform(c.JogHold(BENCH.motor("vent"), hold))
    assert falling[0] - released[0] < 0.25


def test_a_ramp_stays_and_changes_direction_only_at_zero(bench: DeskBench) -> None:
    armed(bench).type("ramp vent 30 %")
    bench.let_pass(1.0)
    assert bench.duty == 3000
    with pytest.raises(UsageError, match="bring it to 0 % first"):
        bench.type("ramp vent -30 %")
    with pytest.raises(UsageError, match="coast vent"):
        bench.type("jog vent 20 % for 1 s")
    with pytest.raises(Refused, match="moving"):
        bench.type("disarm")
    bench.type("coast vent")
    bench.let_pass(1.0)
    assert bench.duty == 0
    bench.type("ramp vent -10 % in 500 ms")
    bench.let_pass(2.0)
    assert bench.duty == -1000


def test_brake_falls_to_zero_and_rests_braked(bench: DeskBench) -> None:
    armed(bench).type("ramp vent 20 %")
    bench.let_pass(0.6)
    assert "brakes" in bench.type("brake vent")[0]
    bench.let_pass(1.0)
    assert bench.duty == 0
    assert bench.desk.snapshot.state == "armed"


@pytest.mark.parametrize(
    ("line", "wanted"),
    [
        ("jog vent 81 % for 1 s", "above the ceiling"),
        ("jog vent 0 % for 1 s", "is none"),
        ("jog vent 10 % for 2 h", "lasts from"),
        ("ramp vent 80 % in 1 ms", "write 'in 800 ms' or more"),
        ("move latch 60 deg", "-40 deg to 40 deg"),
        ("move latch 30 deg in 10 ms", "write 'in 500 ms' or more"),
        ("jog vent", "needs a terminal"),
        ("log stop", "'log start' begins one"),
        ("mark here", "'log start' begins one"),
        ("trail vent", "keeps no trail"),
        ("wait 2 h", "at most 1 h"),
    ],
)
def test_what_cannot_be_is_refused_and_nothing_moves(bench: DeskBench, line: str, wanted: str) -> None:
    armed(bench)
    with pytest.raises(UsageError) as refused:
        bench.type(line)
    assert wanted in str(refused.value)
    bench.let_pass(0.5)
    assert bench.duty == 0
    assert bench.desk.snapshot.state == "armed"


# ---- servos ------------------------------------------------------------------------------------------------------


def test_a_servo_is_led_by_its_slew_and_its_first_pulse_is_announced(bench: DeskBench) -> None:
    said = armed(bench).type("move latch 20 deg")
    assert any("its first pulse sends it to its home" in line for line in said)
    bench.let_pass(1.0)
    assert bench.desk.snapshot.servos[0].degrees == pytest.approx(20.0)
    assert not any("first pulse" in line for line in bench.type("move latch -20 deg in 2 s"))
    bench.let_pass(2.5)
    assert bench.desk.snapshot.servos[0].degrees == pytest.approx(-20.0)
    bench.type("move latch off")
    bench.let_pass(0.5)
    assert bench.desk.snapshot.servos[0].degrees is None


# ---- stopping ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("category", [0, 1])
def test_a_panic_ends_what_is_under_way_and_is_confirmed(watched: tuple[DeskBench, Watched], category: int) -> None:
    bench, watch = watched
    watch.script = [(1.0, lambda b: void(b.desk.panic(category)))]
    with pytest.raises(StoppedByUser):
        bench.type("jog vent 30 % for 20 s")
    assert bench.duty == 0
    assert any("stop confirmed" in line for line in bench.hear())
    assert bench.desk.snapshot.state == "off"
    assert isinstance(bench.desk.failed, StoppedByUser)
    bench.type("arm")  # and it can go on


def test_a_panic_while_idle_is_taken_up(bench: DeskBench) -> None:
    armed(bench).type("ramp vent 30 %")
    bench.let_pass(0.5)
    bench.desk.panic(1)
    assert any("stop confirmed" in line for line in bench.let_pass(3.0))
    assert bench.duty == 0


@pytest.mark.parametrize("word", ["stop", "cut"])
def test_stop_and_cut_are_words_too(bench: DeskBench, word: str) -> None:
    armed(bench).type("ramp vent 30 %")
    bench.let_pass(1.0)
    assert any("stop confirmed" in line for line in bench.type(word))
    assert bench.duty == 0


def test_a_log_whose_disk_makes_no_progress_stops_the_motor(bench: DeskBench, monkeypatch: pytest.MonkeyPatch) -> None:
    armed(bench).type("log start stuck")
    bench.type("ramp vent 30 %")
    bench.let_pass(1.0)
    assert bench.duty > 0
    recorder = bench.desk._log._recorder
    assert recorder is not None
    monkeypatch.setattr(recorder, "liveness_s", lambda: DISK_PATIENCE_S + 0.1)
    said = bench.let_pass(1.0)
    assert said[0] == "stopping: the disk makes no progress"
    assert any(line.startswith("stop confirmed") for line in said)
    assert bench.duty == 0
    monkeypatch.undo()
    bench.type("log stop")
    troubles = read_manifest(recorder.folder.path)["disk_troubles"]
    assert troubles == [{"kind": "disk_stalled", "text": "the disk makes no progress"}]


def test_a_panic_before_the_device_is_known_reaches_the_port(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    bench = DeskBench(tmp_path)
    bench.desk._session = None
    sent: list[bytes] = []

    def urgent(data: bytes) -> bool:
        sent.append(data)
        return True

    monkeypatch.setattr(bench.port, "urgent", urgent)
    assert bench.desk.panic(0)
    assert b"stop" in sent[0]
    assert sent[0].startswith(b"\n")


def test_a_jammed_shaft_trips_and_the_reason_is_told(watched: tuple[DeskBench, Watched]) -> None:
    bench, _ = watched
    bench.type("log start jam")
    bench.fault("jammed_shaft")
    with pytest.raises(Tripped, match="stall on vent"):
        bench.type("jog vent 40 % for 5 s")
    assert bench.duty == 0
    said = bench.let_pass(2.0)
    assert any("trail of the trip is in the log" in line for line in said)
    assert "stall on vent: 40 %" in bench.type("why")[0]
    assert any("records" in line for line in bench.type("trail vent"))
    with pytest.raises(Tripped):
        bench.type("ramp vent 10 %")
    with pytest.raises(UsageError, match="'clear'"):
        bench.type("arm")
    bench.fault("jammed_shaft", 0.0)
    bench.type("clear")
    bench.type("arm")
    assert bench.desk.snapshot.state == "armed"
    bench.type("log stop")
    (run,) = (bench.desk._runs).iterdir()
    assert (run / "trail.csv").exists()
    bench.type("disarm")


def test_the_likely_cause_of_a_trip_is_said_at_once_without_a_log(bench: DeskBench, tmp_path: Path) -> None:
    armed(bench).type("ramp vent 70 % in 1 s")
    bench.let_pass(2.0)
    bench.fault("jammed_shaft")
    said = bench.let_pass(2.0)
    tripped = next(place for place, line in enumerate(said) if line.startswith("TRIPPED: overcurrent on vent"))
    after = said[tripped + 1 :]
    after.remove("all outputs are off (state tripped)")
    assert after[0] == "likely   vent jammed while turning: something stopped the shaft."
    assert after[1].startswith("because  the shaft turned at up to 4")
    assert any(line.startswith("next     With the power cut, turn the shaft by hand") for line in after)
    assert bench.type("why")[1:] == after
    assert not (tmp_path / "runs").exists() or not list((tmp_path / "runs").iterdir())
    bench.fault("jammed_shaft", 0.0)
    bench.type("clear")


@pytest.mark.parametrize(
    "error", [OSError(28, "No space left on device"), TypeError("a bug of ours"), ImportError("half")]
)
def test_what_cannot_be_explained_hides_no_trip(
    bench: DeskBench, error: Exception, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(*_: object, **__: object) -> None:
        raise error

    monkeypatch.setattr("tempfile.TemporaryDirectory", full)
    armed(bench)
    bench.fault("jammed_shaft")
    with pytest.raises(Tripped, match="stall on vent"):
        bench.type("jog vent 40 % for 5 s")
    said = bench.let_pass(2.0)
    assert any(line.startswith(f"the cause could not be looked for: {type(error).__name__}") for line in said)
    bench.fault("jammed_shaft", 0.0)
    bench.type("clear")


def test_a_sequence_run_in_the_shell_tells_the_likely_cause(bench: DeskBench) -> None:
    bench.fault("jammed_shaft")
    with pytest.raises(RamprigError, match="tripped"):
        bench.type(f"run {SCRIPTS / 'jog_check.yaml'}")
    said = bench.hear()
    likely = next(place for place, line in enumerate(said) if line.startswith("likely   vent"))
    assert likely < next(place for place, line in enumerate(said) if line.startswith("tripped: "))
    bench.fault("jammed_shaft", 0.0)
    bench.type("clear")


def test_a_trip_between_two_commands_is_kept_until_it_is_cleared(bench: DeskBench) -> None:
    armed(bench).type("ramp vent 30 %")
    bench.fault("jammed_shaft")
    bench.let_pass(2.0)
    assert isinstance(bench.desk.failed, Tripped)
    assert bench.desk.snapshot.state == "tripped"
    bench.fault("jammed_shaft", 0.0)
    bench.type("clear")
    assert bench.desk.failed is None


def test_a_lost_link_is_told_and_reopening_starts_disarmed(watched: tuple[DeskBench, Watched]) -> None:
    bench, watch = watched
    bench.type("log start")
    watch.script = [(1.0, lambda b: b.fault("unplug"))]
    with pytest.raises(LinkLost):
        bench.type("jog vent 30 % for 20 s")
    said = bench.hear()
    lost = next(place for place, line in enumerate(said) if "LINK LOST" in line)
    assert said[lost + 1].startswith("likely   the cable was pulled")
    assert bench.desk.dead
    assert bench.desk.snapshot.state == "no link"
    with pytest.raises(LinkError, match="'reopen'"):
        bench.type("state")
    watch.bench = None
    bench.type("reopen")
    assert bench.desk.snapshot.state == "off"
    bench.type("arm")


def test_a_lost_link_ends_the_log_in_order(bench: DeskBench) -> None:
    bench.type("log start")
    bench.let_pass(1.0)
    bench.fault("unplug")
    said = "\n".join(bench.let_pass(2.0))
    assert "samples received" in said
    assert "could not be ended" not in said
    (folder,) = bench.runs.iterdir()
    manifest = read_manifest(folder)
    assert manifest["verdict"] == "link lost"
    assert manifest["stop_reason"].endswith("the cable was pulled out (fault unplug)")
    assert audit(folder).exact


def test_after_a_lost_link_and_a_vain_reopen_the_outputs_are_not_called_off(bench: DeskBench) -> None:
    armed(bench).type("ramp vent 30 %")
    bench.fault("unplug")
    bench.let_pass(2.0)
    bench.again_faults = ("deaf",)
    with pytest.raises(LinkLost):
        bench.type("reopen")
    assert bench.desk.snapshot.state == "no link"
    with pytest.raises(LinkError, match="'reopen'"):
        bench.type("state")
    assert not bench.desk.close()


def test_a_lost_link_is_not_laid_to_a_trip_that_was_cleared(bench: DeskBench) -> None:
    armed(bench).type("ramp vent 60 %")
    bench.let_pass(2.0)
    bench.fault("jammed_shaft")
    assert any("jammed" in line for line in bench.let_pass(2.0))
    bench.fault("jammed_shaft", 0.0)
    bench.type("clear")
    bench.let_pass(1.0)
    bench.fault("unplug")
    said = bench.let_pass(2.0)
    assert any(line.startswith("likely   the cable was pulled") for line in said)
    assert not any("jammed" in line for line in said)


def test_a_stop_that_is_not_confirmed_says_to_cut_the_power(watched: tuple[DeskBench, Watched]) -> None:
    bench, watch = watched

    def cut_off(b: DeskBench) -> None:
        b.fault("deaf")
        b.desk.panic(1)

    watch.script = [(1.0, cut_off)]
    with pytest.raises(RamprigError):
        bench.type("jog vent 30 % for 20 s")
    assert any("NOT CONFIRMED" in line and "cut the power" in line for line in bench.hear())
    assert bench.desk.snapshot.state == "NOT CONFIRMED"
    bench.fault("deaf", 0.0)
    watch.bench = None
    bench.type("reopen")
    bench.type("clear")
    assert bench.desk.snapshot.state == "off"


# ---- log ---------------------------------------------------------------------------------------------------------


def test_a_log_has_every_sample_the_marks_and_the_account(bench: DeskBench) -> None:
    bench.type("log start bring-up")
    with pytest.raises(UsageError, match="already"):
        bench.type("log start")
    armed(bench).type("jog vent 20 % for 1 s")
    bench.type("mark vent open")
    bench.type("note a remark")
    said = bench.type("log stop")[-1]
    (run,) = bench.desk._runs.iterdir()
    account = json.loads((run / "run.json").read_text("utf-8"))["samples"]
    assert account["lost"] == 0
    assert f"{account['received']} of {account['expected']} samples received, 0 lost" in said
    rows = (run / "samples.csv").read_text("ascii").splitlines()
    assert len(rows) == account["received"] + 1
    kinds = [json.loads(line)["kind"] for line in (run / "events.jsonl").read_text("utf-8").splitlines()]
    assert "marked" in kinds
    assert "noted" in kinds


# ---- sequences, help ---------------------------------------------------------------------------------------------


def test_a_sequence_runs_from_inside_and_leaves_the_shell_disarmed(bench: DeskBench) -> None:
    said = armed(bench).type(f"run {SCRIPTS / 'jog_check.yaml'}")
    assert any(line.startswith("passed") for line in said)
    assert any(line.startswith("the run is in") for line in said)
    assert bench.desk.snapshot.state == "off"


def test_checking_a_sequence_moves_nothing(bench: DeskBench) -> None:
    ticks = bench.port.clock.now()
    said = bench.type(f"check {SCRIPTS / 'jog_check.yaml'}")
    assert any("vent to 20 %" in line for line in said)
    assert bench.port.clock.now() == ticks


NEEDS_LOG = ("mark", "note")
REFUSED_AS_IT_SHOULD_BE = {"clear": Refused, "trail": UsageError}
FILES = {"run": "jog_check.yaml", "check": "jog_check.yaml"}


@pytest.mark.parametrize("name", WORDS)
def test_the_examples_of_the_help_do_what_they_say(
    bench: DeskBench, name: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(SCRIPTS)
    if name != "arm":
        armed(bench)
    if name in NEEDS_LOG:
        bench.type("log start")
    for example in WORDS[name].examples:
        command = read_line(filled_example(example, BENCH), BENCH)
        assert command is not None
        if isinstance(command, c.JogHold):
            hold = Hold(ceiling_duty=8000)
            hold.leave()
            command = c.JogHold(command.motor, hold)
        if isinstance(command, c.RunFile | c.CheckFile):
            command = type(command)(FILES[name])  # the file of the example runs for longer than a test should
        if name in REFUSED_AS_IT_SHOULD_BE:
            with pytest.raises(REFUSED_AS_IT_SHOULD_BE[name]):
                bench.perform(command)
        else:
            bench.perform(command)
            bench.let_pass(1.0)
    assert State.TRIPPED.word != bench.desk.snapshot.state


def test_a_disk_that_fills_up_while_a_motor_turns_stops_it_confirmed_and_leaves_the_desk_in_use(
    bench: DeskBench, monkeypatch: pytest.MonkeyPatch
) -> None:
    bench.type("log start x")
    bench.type("arm")

    def full(*_: object) -> None:
        raise RecordError("the disk is full")

    monkeypatch.setattr(Recorder, "on_block", full)
    with pytest.raises(RecordError, match="the disk is full"):
        bench.type("jog vent 30 % for 3 s")
    bench.let_pass(1.0)
    assert any(line.startswith("stop confirmed: outputs off") for line in bench.said)
    assert bench.duty == 0
    assert bench.desk.snapshot.state == "off"
    bench.type("arm")
