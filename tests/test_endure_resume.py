"""Interruptions of every kind: what goes on by itself, what only by hand, what never, and what the record tells."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from endure_crash import CYCLES, START_UNIX_S, Host, Killed, Process
from ramprig.endure import resume as endure_resume
from ramprig.endure.interruption import Cause, cause_of_manifest
from ramprig.endure.resume import Broken, read_broken
from ramprig.errors import FileError, Place, Refused, UsageError, WrongDevice
from ramprig.record.reading import audit, read_events, read_manifest, read_notes, read_samples, sample_files
from ramprig.sequence.outcome import Verdict
from ramprig_link.words import Cause as BootCause

GO_ON = "on interruption: {resume at most: 2, within: 20 s}"
LATE_S = 4.0
"""Into the run, in the second cycle."""


def once(what: str, after_s: float = LATE_S) -> Callable[[Host], None]:
    """A hook that does something to the board once, at this time of the run."""
    done: list[str] = []

    def meddle(host: Host) -> None:
        if done or host.now_unix_s() < START_UNIX_S + after_s:
            return
        done.append(what)
        match what:
            case "unplug":
                host.device.faults.set("unplug", True)
                host.away_until_s = host.unix_s + 5.0
            case "restart":
                host.device.restart(BootCause.BROWNOUT)
            case fault:
                host.device.faults.set(fault, True)

    return meddle


def replug(host: Host) -> None:
    """Have the cable back at the next opening: a fault of the mock lasts until it is switched off."""
    pause = host.pause

    def pause_and_plug(seconds: float) -> None:
        pause(seconds)
        host.device.faults.set("unplug", False)

    host.pause = pause_and_plug  # type: ignore[method-assign]  # the test's own host


@pytest.mark.parametrize(("what", "cause"), [("unplug", Cause.LINK), ("restart", Cause.RESTART)])
def test_a_lost_link_or_a_restart_is_gone_on_with_by_itself_where_the_sequence_says_so(
    tmp_path: Path, what: str, cause: Cause
) -> None:
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once(what)
    replug(host)
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.PASSED, result.outcome
    assert result.outcome.sentence.endswith(f"; interrupted 1 time: {cause}")
    assert read_manifest(host.run_folder)["stop_reason"] == result.outcome.sentence
    assert host.opened >= 2
    assert host.said[0].startswith("interrupted: ")
    assert host.said[1] == "looking for the board for 20 s at most"
    folder = host.run_folder
    (told,) = read_manifest(folder)["interruptions"]
    assert (told["cause"], told["by"], told["number"]) == (cause.value, "policy", 1)
    assert told["down_s"] > 0
    assert audit(folder).exact, audit(folder).statements
    counted = host.record().counted
    assert (counted.confirmed, counted.failed) == (CYCLES, 0)
    assert counted.confirmed <= host.witness.done <= counted.confirmed + counted.interrupted
    assert [event["part"] for event in read_events(folder / "events.jsonl")[0] if event["kind"] == "run_resumed"] == [2]
    assert "interruption 1: " in audit(folder).interruptions[0]


def test_without_a_word_in_the_sequence_an_interrupted_run_stops(tmp_path: Path) -> None:
    host = Host(tmp_path)
    host.meddle = once("restart")
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.TRIPPED
    assert result.outcome.restarted
    assert "the device restarted" in result.outcome.sentence
    assert host.opened == 1


def test_by_itself_it_goes_on_no_more_often_than_said(tmp_path: Path) -> None:
    host = Host(tmp_path, policy="on interruption: {resume at most: 1, within: 20 s}")
    count: list[float] = []

    def meddle(host: Host) -> None:
        now_s = host.now_unix_s()
        if host.record_exists() and now_s > (count[-1] if count else START_UNIX_S + 2.0) + 2.5:
            count.append(now_s)
            host.device.restart(BootCause.BROWNOUT)

    host.meddle = meddle
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.TRIPPED
    assert len(read_manifest(host.run_folder)["interruptions"]) == 1
    host.meddle = lambda host: None
    assert host.run(Process(), resume=True).outcome.verdict is Verdict.PASSED  # by hand it may
    assert [each["by"] for each in read_manifest(host.run_folder)["interruptions"]] == ["policy", "command"]


def test_who_does_not_wait_for_the_board_gets_the_run_as_it_is(tmp_path: Path) -> None:
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("unplug")

    def stopped(seconds: float) -> None:
        raise KeyboardInterrupt

    host.pause = stopped  # type: ignore[method-assign]  # the test's own host
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.LINK_LOST
    assert result.outcome.sentence.endswith("; not gone on with: the user stopped it")
    assert result.folder == host.run_folder
    assert [note["text"] for note in read_notes(host.run_folder)] == ["not gone on with: the user stopped it"]


def test_a_board_that_does_not_come_back_ends_the_run(tmp_path: Path) -> None:
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("unplug")  # and nobody plugs it in again
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.LINK_LOST
    assert "the board did not come back within 20 s" in result.outcome.sentence
    assert result.outcome.sentence.count("port1: the cable was pulled out") == 1
    assert "stop NOT CONFIRMED: cut the power (the device did not acknowledge the stop)" in result.outcome.sentence
    assert read_manifest(host.run_folder)["verdict"] == "link lost"
    (note,) = read_notes(host.run_folder)
    assert note["by"] == "ramprig"
    assert note["text"].startswith("not gone on with: the board did not come back")


def test_a_clock_that_is_set_back_does_not_lengthen_the_time_in_which_it_may_go_on(tmp_path: Path) -> None:
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("unplug")
    pause, looks = host.pause, list[float]()

    def set_back(seconds: float) -> None:
        pause(seconds)
        looks.append(seconds)
        if len(looks) == 2:
            host.forget_clock()
            host.unix_s -= 3600.0
        host.away_until_s = host.unix_s + 5.0

    host.pause = set_back  # type: ignore[method-assign]  # the test's own host
    result = host.run(Process())
    assert "the board did not come back within 20 s" in result.outcome.sentence
    assert len(looks) <= 12


def test_a_host_that_slept_while_it_looked_for_the_board_moves_nothing(tmp_path: Path) -> None:
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("unplug")
    replug(host)
    pause = host.pause

    def sleep(seconds: float) -> None:
        pause(seconds)
        host.forget_clock()
        host.unix_s += 6 * 3600.0

    host.pause = sleep  # type: ignore[method-assign]  # the test's own host
    result = host.run(Process())
    assert host.opened == 1
    assert result.outcome.sentence.endswith("; not gone on with: the board did not come back within 20 s")


def test_a_host_that_was_away_for_longer_than_allowed_moves_nothing_by_itself(tmp_path: Path) -> None:
    """A laptop that is opened in the morning: the board has stopped by its lease hours ago."""
    host = Host(tmp_path, policy=GO_ON)

    def sleep(host: Host) -> None:
        if host.now_unix_s() >= START_UNIX_S + LATE_S and not slept:
            slept.append(True)
            assert host._clock is not None
            host._clock.advance(40.0)

    slept: list[bool] = []
    host.meddle = sleep
    result = host.run(Process())
    assert (result.outcome.verdict, result.outcome.trip, host.opened) == (Verdict.TRIPPED, "link_lost", 1)
    assert "not gone on with: the computer did not look after the run for 40" in result.outcome.sentence
    assert read_manifest(host.run_folder)["results"]["host_away_s"] == pytest.approx(40.0, abs=1.0)
    assert host.run(Process(), resume=True).outcome.verdict is Verdict.PASSED  # by hand it may


def test_the_record_is_not_read_while_there_is_no_port_to_go_on_at(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """That of a week is large, and the board is looked for every two seconds."""
    reads: list[float] = []

    def counted(folder: Path, *, now_unix_s: float) -> Broken:
        reads.append(now_unix_s)
        return read_broken(folder, now_unix_s=now_unix_s)

    monkeypatch.setattr(endure_resume, "read_broken", counted)
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("unplug")  # for 5 s
    replug(host)
    assert host.run(Process()).outcome.verdict is Verdict.PASSED
    assert len(reads) == 1


def test_a_file_that_cannot_be_read_any_more_ends_the_run_as_it_was(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def unreadable(folder: Path, *, now_unix_s: float) -> Broken:
        raise FileError("found a tab", place=Place("crash.yaml", 1, 1))

    monkeypatch.setattr(endure_resume, "read_broken", unreadable)
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("restart")
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.TRIPPED
    assert result.outcome.sentence.endswith("; not gone on with: crash.yaml:1:1: found a tab")


def test_after_a_trip_it_never_goes_on_by_itself_and_by_hand_only_where_told(tmp_path: Path) -> None:
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("jammed_shaft")
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.TRIPPED
    assert result.outcome.trip in ("overcurrent", "stall")
    assert host.opened == 1
    host.meddle = lambda host: None
    host.device.faults.set("jammed_shaft", False)
    host.pause(2.0)
    with pytest.raises(Refused, match="ended by a trip"):
        host.run(Process(), resume=True)
    assert host.run(Process(), resume=True, after_trip=True).outcome.verdict is Verdict.PASSED
    assert read_manifest(host.run_folder)["interruptions"][0]["cause"] == Cause.TRIP.value


def test_where_the_sequence_says_so_it_goes_on_after_a_trip_too(tmp_path: Path) -> None:
    host = Host(tmp_path, policy="on interruption: {resume at most: 1, within: 20 s, after a trip: yes}")
    host.meddle = once("jammed_shaft")
    pause = host.pause

    def pause_and_free(seconds: float) -> None:
        host.device.faults.set("jammed_shaft", False)
        pause(seconds)

    host.pause = pause_and_free  # type: ignore[method-assign]  # the test's own host
    assert host.run(Process()).outcome.verdict is Verdict.PASSED


def test_a_trip_other_than_the_interruptions_own_is_somebodys_to_look_at(tmp_path: Path) -> None:
    host = Host(tmp_path)
    jam = once("jammed_shaft", 1.9)  # in the drive of the first cycle

    def jam_and_die(host: Host) -> None:
        jam(host)
        process.dead = bool(host.device.faults.get("jammed_shaft"))

    process = Process()
    host.meddle = jam_and_die
    with pytest.raises(Killed):
        host.run(process)
    host.pause(3.0)  # driven on against a held shaft until the board trips by itself
    host.device.faults.set("jammed_shaft", False)
    host.meddle = lambda host: None
    with pytest.raises(Refused, match="look at the bench first"):
        host.run(Process(), resume=True)
    assert host.run(Process(), resume=True, after_trip=True).outcome.verdict is Verdict.PASSED


@pytest.mark.parametrize("full_at", [200, 350, 417, 460, 555])
def test_a_full_disk_stops_the_run_and_it_goes_on_when_there_is_room(tmp_path: Path, full_at: int) -> None:
    host = Host(tmp_path)
    result = host.run(Process(full_at=full_at))
    assert result.outcome.verdict is Verdict.NOT_RECORDED
    assert result.outcome.stop_confirmed
    assert "by the user" not in result.outcome.sentence  # nobody did
    assert "; cycles: " in result.outcome.sentence
    manifest = read_manifest(host.run_folder)
    assert cause_of_manifest(manifest) is Cause.DISK
    confirmed = host.record().counted.confirmed
    assert confirmed <= host.witness.done <= confirmed + 1
    assert host.run(Process(), resume=True).outcome.verdict is Verdict.PASSED
    counted = host.record().counted
    assert counted.confirmed == CYCLES
    found = audit(host.run_folder)
    unwritten = read_manifest(host.run_folder)["parts"][0]["samples"]["unwritten"]
    assert (found.missing, found.unexpected) == (unwritten, 0)
    assert any("the disk is full" in text for text in found.statements)
    assert not [text for text in found.statements if text.startswith("part 2")]


def test_another_board_or_other_limits_are_refused_and_nothing_is_written(tmp_path: Path) -> None:
    host = Host(tmp_path)
    with pytest.raises(Killed):
        host.run(Process(die_at=400))
    before = (host.run_folder / "run.json").read_bytes()
    host.pause(3.0)
    host.device.faults.set("second_board", True)
    with pytest.raises(WrongDevice, match="serial"):
        host.run(Process(), resume=True)
    assert (host.run_folder / "run.json").read_bytes() == before
    host.device.faults.set("second_board", False)
    assert host.run(Process(), resume=True).outcome.verdict is Verdict.PASSED


def test_the_copies_in_the_folder_are_used_where_the_files_have_changed(tmp_path: Path) -> None:
    host = Host(tmp_path)
    with pytest.raises(Killed):
        host.run(Process(die_at=400))
    path = tmp_path / "crash.yaml"
    path.write_text(path.read_text("utf-8").replace(f"times: {CYCLES}", "times: 9"), "utf-8")
    broken = read_broken(host.run_folder, now_unix_s=host.now_unix_s())
    assert [Path(name).name for name in broken.changed] == ["crash.yaml"]
    host.pause(3.0)
    host.run(Process(), resume=True)
    assert host.record().counted.confirmed == CYCLES
    host_copy = host.run_folder / "crash.yaml"
    host_copy.write_text("sequence: other\n", "utf-8")
    assert any("crash.yaml was changed" in text for text in audit(host.run_folder).statements)


def test_copies_stand_for_files_that_lay_in_other_folders(tmp_path: Path) -> None:
    """All copies lie side by side in the run folder, two of one name among them; the files themselves are gone."""
    host = Host(tmp_path)
    for folder in ("parts", "parts/more"):
        (tmp_path / folder).mkdir()
    path = tmp_path / "crash.yaml"
    whole = path.read_text("utf-8")
    (tmp_path / "parts" / "end.yaml").write_text("sequence: a\nsteps:\n  - include: more/end.yaml\n", "utf-8")
    (tmp_path / "parts" / "more" / "end.yaml").write_text(
        "sequence: b\nvalues: {wait: 1 s}\nsteps:\n  - hold: wait\n", "utf-8"
    )
    path.write_text(whole + "  - include: {file: parts/end.yaml}\n", "utf-8")
    with pytest.raises(Killed):
        host.run(Process(die_at=400))
    names = [entry["name"] for entry in read_manifest(host.run_folder)["inputs"]]
    shutil.rmtree(tmp_path / "parts")
    broken = read_broken(host.run_folder, now_unix_s=host.now_unix_s())
    assert [Path(name).name for name in broken.changed] == ["end.yaml", "end.yaml"]
    assert [source.file for source in broken.sequence.files] == names[1:]
    path.write_text(whole, "utf-8")  # the host of this test reads the file itself before it resumes
    host.pause(3.0)
    assert host.run(Process(), resume=True).outcome.verdict is Verdict.PASSED
    assert host.record().counted.confirmed == CYCLES


def test_a_run_that_came_to_its_end_or_has_no_cycles_is_not_gone_on_with(tmp_path: Path) -> None:
    host = Host(tmp_path)
    host.run(Process())
    with pytest.raises(UsageError, match="came to its end"):
        host.run(Process(), resume=True)
    other = tmp_path / "other"
    other.mkdir()
    plain = Host(other)
    path = other / "crash.yaml"
    path.write_text("sequence: plain\nbench: bench.yaml\nsteps: [{hold: 10 s}]\n", "utf-8")
    with pytest.raises(Killed):
        plain.run(Process(die_at=250))
    with pytest.raises(UsageError, match="no 'cycle'"):
        plain.run(Process(), resume=True)


def test_a_run_that_is_under_way_cannot_be_resumed(tmp_path: Path) -> None:
    host = Host(tmp_path)
    seen: list[str] = []

    def meddle(host: Host) -> None:
        if host.record_exists() and not seen:
            other = Host.__new__(Host)
            other.__dict__ |= host.__dict__ | {"meddle": lambda host: None}
            with pytest.raises(UsageError, match="this run is under way"):
                other.run(Process(), resume=True)
            seen.append("refused")
            host.device.restart(BootCause.BROWNOUT)

    host.meddle = meddle
    host.run(Process())
    assert seen == ["refused"]


def test_rows_and_times_go_on_over_the_parts(tmp_path: Path) -> None:
    host = Host(tmp_path, policy=GO_ON)
    host.meddle = once("restart")
    host.run(Process())
    one, two = [read_samples(path) for path in sample_files(host.run_folder)]
    assert two.ticks[0] < one.ticks[-1]  # the board's ticks began anew ...
    assert two.numbers["time_s"][0] > one.numbers["time_s"][-1]  # ... and the time of the run did not
    account = read_manifest(host.run_folder)["samples"]
    assert account["written"] == len(one) + len(two)
    assert {logging["part"] for logging in account["loggings"]} == {1, 2}


def test_times_go_on_though_the_wall_clock_was_set_back(tmp_path: Path) -> None:
    host = Host(tmp_path)
    with pytest.raises(Killed):
        host.run(Process(die_at=400))
    host.pause(3.0)
    host.unix_s -= 7200.0
    host.forget_clock()
    host.run(Process(), resume=True)
    one, two = [read_samples(path).numbers["time_s"] for path in sample_files(host.run_folder)]
    assert two[0] > one[-1]
    assert read_manifest(host.run_folder)["interruptions"][0]["down_s"] == 0
    assert audit(host.run_folder).exact


def test_the_latest_end_ends_the_run_in_order_and_holds_for_its_later_parts(tmp_path: Path) -> None:
    host = Host(tmp_path)
    host.latest_end_unix_s = START_UNIX_S + 4.0
    result = host.run(Process())
    assert result.outcome.verdict is Verdict.STOPPED
    assert result.outcome.sentence.startswith("ended in order at its latest end, 2027-01-15T08:00:04Z")
    assert result.outcome.stop_confirmed
    with pytest.raises(UsageError, match="has gone by"):
        host.run(Process(), resume=True)


def test_limits_that_differ_are_refused(tmp_path: Path) -> None:
    host = Host(tmp_path)
    with pytest.raises(Killed):
        host.run(Process(die_at=400))
    host.pause(3.0)
    path = host.run_folder / "run.json"
    text = path.read_text("utf-8")
    digest = read_manifest(host.run_folder)["limits_digest"]
    path.write_text(text.replace(digest, "0000"), "utf-8")
    with pytest.raises(WrongDevice, match="limits of the digest"):
        host.run(Process(), resume=True)
