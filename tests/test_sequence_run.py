"""Runs of small sequences on the mock in virtual time: every kind of step, waits, expectations, and how runs end."""

from __future__ import annotations

from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from ramprig.mock.device import MockDevice
from ramprig.mock.port import MockPort
from ramprig.sequence.ending import TAIL_S
from ramprig.sequence.executive import Progress
from ramprig.sequence.happened import Marked, PassBegun, WaitEnded
from ramprig.sequence.outcome import Judged, Verdict
from ramprig.session.blocks import Block
from ramprig.session.events import DwellHeld, StopJudged, Tripped
from ramprig.session.session import Session
from ramprig.session.stop import StopRun
from ramprig_link.words import State
from sequence_rig import Rehearsal, rehearse

STILL_COUNTS = 2
DWELL_TICKS = 300
LEASE_TICKS = 500
STOP_TICKS = 500


def at_tick(run: Rehearsal, tick: int, kind: str, index: int = 0) -> int:
    """The logged value at `tick` or just before."""
    place = int(np.searchsorted(run.ticks, tick, side="right")) - 1
    return int(run.column(kind, index)[place])


def marks(run: Rehearsal) -> dict[str, int]:
    """Ticks of the marks by name."""
    return {event.name: event.tick for event in run.of(Marked) if isinstance(event, Marked)}


def judged(run: Rehearsal) -> list[bool]:
    """The verdicts of the expectations in order."""
    return [event.held for event in run.of(Judged) if isinstance(event, Judged)]


def test_a_ramp_reaches_its_duty_on_time_and_a_run_ends_at_zero(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- mark: begin
- ramp: {motor: vent, to: 40 %, in: 500 ms}
- mark: up
- hold: 300 ms
""",
    )
    assert run.outcome.verdict is Verdict.PASSED
    assert run.outcome.exit_code == 0
    at = marks(run)
    assert at["up"] - at["begin"] == 500
    assert at_tick(run, at["begin"], "duty") == 0
    assert at_tick(run, at["begin"] + 250, "duty") == pytest.approx(2000, abs=8 * 5)
    assert at_tick(run, at["up"] + 5, "duty") == 4000
    assert run.column("duty")[-1] == 0
    assert run.outcome.stop_confirmed
    assert any("brought to zero" in remark for remark in run.plan.remarks)


def test_reverse_never_changes_the_sign_at_speed(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- ramp: {motor: vent, to: 60 %, in: 600 ms}
- hold: 500 ms
- reverse: {motor: vent, to: -50 %, in: 500 ms, down in: 300 ms}
- hold: 500 ms
- reverse: {motor: vent, to: 30 %, in: 400 ms, down in: 400 ms, dwell: 500 ms}
- hold: 200 ms
""",
        head="log: {period: 1 ms}\n",
    )
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    duty, counts = run.column("duty"), run.column("counts")
    signs = np.sign(duty)
    driven = np.flatnonzero(signs)
    turns = [(a, b) for a, b in pairwise(driven) if signs[a] != signs[b]]
    assert len(turns) == 2
    for last, first in turns:
        assert first - last - 1 >= DWELL_TICKS
        rest = counts[first - 50 : first]
        assert rest.max() - rest.min() <= STILL_COUNTS + 1
    assert not run.of(DwellHeld)  # the plan waited; the device never had to
    assert run.outcome.overdue == 0


def test_coast_and_brake_bring_to_zero_and_rest_as_asked(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- ramp: {motor: vent, to: 60 %, in: 600 ms}
- hold: 400 ms
- coast: vent
- mark: coasting
- hold: 50 ms
- expect: {speed of: vent, is: at least 1 rpm, over: 50 ms}
- wait: {speed of: vent, is: -1 rpm to 1 rpm, within: 5 s}
- ramp: {motor: vent, to: 60 %, in: 600 ms}
- hold: 400 ms
- brake: {motor: vent, in: 300 ms}
- mark: braking
- hold: 200 ms
- expect: {speed of: vent, is: -1 rpm to 1 rpm, over: 50 ms}
""",
    )
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    at = marks(run)
    braking_bit = 1 << 5
    assert at_tick(run, at["coasting"] + 20, "state") & braking_bit == 0
    assert at_tick(run, at["braking"] + 20, "state") & braking_bit


def test_servo_steps_move_inside_the_limits(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- move: {servo: latch, to: 20 deg, in: 500 ms}
- mark: there
- sweep: {servo: latch, shape: sine, from: -20 deg, to: 20 deg, period: 2200 ms, passes: 2}
- mark: swept
- sweep: {servo: latch, shape: steps, from: -20 deg, to: 10 deg, steps: 3, pause: 100 ms}
- sweep: {servo: latch, shape: triangle, from: -20 deg, to: 20 deg, period: 1400 ms}
- release: latch
- hold: 100 ms
- mark: released
""",
        head="log: {period: 1 ms}\n",
    )
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    at = marks(run)
    pulses = run.column("pulse_us")
    assert at_tick(run, at["there"], "pulse_us") == 1700
    assert at_tick(run, at["swept"], "pulse_us") == 1300
    assert at_tick(run, at["released"], "pulse_us") == 0
    pulsing = pulses[pulses > 0]
    assert pulsing.min() == 1300
    assert pulsing.max() == 1700
    assert run.outcome.overdue == 0
    ticks = run.ticks
    inside = (ticks >= at["swept"] - 4400) & (ticks <= at["swept"])
    t = (ticks[inside] - (at["swept"] - 4400)) / 2200
    ideal = 1500 - 200 * np.cos(2 * np.pi * t)
    assert np.abs(pulses[inside] - ideal).max() <= 2.5 + 2  # a quarter of a degree, rounding, and the device's slew


def test_a_motor_sweeps_in_steps(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- sweep: {motor: fan, shape: steps, from: 0 %, to: 40 %, steps: 2, pause: 200 ms}
- mark: end
""",
    )
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    levels = {
        int(value)
        for value, count in zip(*np.unique(run.column("duty", 1), return_counts=True), strict=True)
        if count > 20
    }
    assert levels == {0, 2000, 4000}
    assert run.column("duty").max() == 0


def test_together_joins_at_the_later_branch_and_waits_stay_in_their_branch(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- mark: begin
- together:
    - - ramp: {motor: vent, to: 40 %, in: 400 ms}
      - wait: {speed of: vent, is: at least 15 rpm, within: 3 s}
      - mark: fast
      - hold: 200 ms
      - coast: vent
    - - move: {servo: latch, to: 10 deg, in: 300 ms}
      - mark: latched
      - hold: 2 s
    - - ramp: {motor: fan, to: 30 %, in: 300 ms}
      - hold: 100 ms
- mark: joined
""",
    )
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    at = marks(run)
    assert at["latched"] - at["begin"] == 300
    assert at["joined"] - at["begin"] == 2300
    assert at["begin"] + 400 < at["fast"] < at["begin"] + 2300
    assert at_tick(run, at["begin"] + 305, "duty", 1) == 3000
    assert at_tick(run, at["begin"] + 305, "pulse_us") == 1600


def test_a_wait_goes_on_when_it_comes_true_and_ends_the_run_when_not(tmp_path: Path) -> None:
    steps = """
- ramp: {motor: vent, to: 40 %, in: 400 ms}
- wait: {speed of: vent, is: at least RPM, within: 1500 ms}
- mark: fast
"""
    run = rehearse(tmp_path, steps.replace("RPM", "20 rpm"))
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    (wait,) = run.of(WaitEnded)
    assert isinstance(wait, WaitEnded)
    assert 0 < wait.waited_ticks < 800
    run = rehearse(tmp_path, steps.replace("RPM", "40 rpm"))
    assert run.outcome.verdict is Verdict.FAILED
    assert "wait until speed of vent" in run.outcome.sentence
    assert "after 1.5 s" in run.outcome.sentence
    assert 1.9 < run.outcome.elapsed_s < 2.3
    assert run.outcome.place is not None
    assert run.outcome.place.line == 5
    assert run.outcome.stop_confirmed
    assert run.column("duty")[-1] == 0
    assert "fast" not in marks(run)


@pytest.mark.parametrize(("limit", "verdict"), [("60 ms", Verdict.FAILED), ("100 ms", Verdict.PASSED)])
def test_a_wait_holds_by_the_samples_of_its_time_however_late_the_host_looks(
    limit: str, verdict: Verdict, tmp_path: Path
) -> None:
    """The speed is reached between 60 ms and 100 ms after the ramp; the host looks at it some 300 ms after."""
    away: list[float] = []

    def go_away(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if not away and now.elapsed_s > 0.3:
            away.append(now.elapsed_s)
            until_s = port.clock.now() + 0.35
            while port.clock.now() < until_s:
                port.read(until_s - port.clock.now())

    steps = f"""
- ramp: {{motor: vent, to: 40 %, in: 400 ms}}
- wait: {{speed of: vent, is: at least 20 rpm, within: {limit}}}
"""
    run = rehearse(tmp_path, steps, meddle=go_away)
    assert len(away) == 1
    assert run.outcome.verdict is verdict, run.outcome


def test_repeats_by_times_by_time_and_until_a_measurement(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- repeat:
    times: 3
    steps:
      - ramp: {motor: vent, to: 30 %, in: 300 ms}
      - coast: {motor: vent, in: 300 ms}
- mark: counted
- repeat: {for: 1 s, steps: [{hold: 300 ms}]}
- mark: timed
- ramp: {motor: vent, to: 10 %, in: 100 ms}
- repeat:
    until: {speed of: vent, is: at least 12 rpm, over: 100 ms}
    at most: 9
    steps:
      - ramp: {motor: vent, to: 20 %, in: 100 ms}
      - hold: 100 ms
      - ramp: {motor: vent, to: 40 %, in: 200 ms}
""",
    )
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    passes = [event for event in run.of(PassBegun) if isinstance(event, PassBegun)]
    lines = [int(event.place.split(":")[-2]) for event in passes]
    at = marks(run)
    assert lines.count(5) == 3
    assert at["timed"] - at["counted"] == 1200  # whole passes: four of 300 ms
    assert 1 <= lines.count(14) <= 9
    assert run.outcome.passes == len(passes)


def test_a_repeat_until_that_never_holds_fails(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- repeat:
    until: {current of: vent, is: at least 2 A, over: 100 ms}
    at most: 2
    steps: [{hold: 200 ms}]
""",
    )
    assert run.outcome.verdict is Verdict.FAILED
    assert "after the last pass" in run.outcome.sentence


def test_a_failed_expectation_lets_the_run_go_on_and_else_stop_ends_it(tmp_path: Path) -> None:
    steps = """
- ramp: {motor: vent, to: 40 %, in: 400 ms}
- hold: 1 s
- expect: {speed of: vent, is: at least 50 rpm, over: 200 msELSE}
- hold: 300 ms
- expect: {speed of: vent, is: 15 rpm to 35 rpm, over: 200 ms}
- mark: end
"""
    run = rehearse(tmp_path, steps.replace("ELSE", ""))
    assert run.outcome.verdict is Verdict.FAILED
    assert run.outcome.exit_code == 1
    assert judged(run) == [False, True]
    assert (run.outcome.held, run.outcome.failed) == (1, 1)
    assert "end" in marks(run)
    assert run.outcome.place is not None
    assert run.outcome.place.line == 6
    run = rehearse(tmp_path, steps.replace("ELSE", ", else: stop"))
    assert run.outcome.verdict is Verdict.FAILED
    assert judged(run) == [False]
    assert "end" not in marks(run)
    assert run.outcome.stop_confirmed


def test_expectations_of_every_kind(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- mark: begin
- ramp: {motor: vent, to: 40 %, in: 400 ms}
- hold: 1500 ms
- expect: {speed of: vent, is: 24.5 rpm +- 10 %, over: 500 ms}
- expect: {speed of: vent, is: 20 rpm to 30 rpm, over: 500 ms, by: every sample}
- expect: {current of: vent, is: 20 mA to 300 mA, over: 500 ms}
- expect: {settling of: vent, to: 24.5 rpm +- 10 %, is: at most 600 ms}
- expect: {counts of: vent, since: begin, is: 3000 counts to 5000 counts}
- expect: {position of: vent, since: begin, is: 0.5 rev to 1 rev}
- expect: {counts of: fan, is: -1 counts to 1 counts}
""",
    )
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    assert judged(run) == [True] * 7


def overload(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
    """Jams the shaft half a second into the run."""
    if now.elapsed_s > 1.2:
        device.faults.set("jammed_shaft", True)


def test_a_trip_ends_the_run_with_why_and_trail(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- ramp: {motor: vent, to: 70 %, in: 700 ms}
- hold: 3 s
- mark: never
""",
        meddle=overload,
    )
    assert run.outcome.verdict is Verdict.TRIPPED
    assert run.outcome.exit_code == 3
    assert run.outcome.sentence.startswith("overcurrent on vent: ")
    assert "more than 2.5 A for 5 ms" in run.outcome.sentence
    assert "s into the run" in run.outcome.sentence
    assert "never" not in marks(run)
    trails = run.of(Block)
    assert len(trails) == 2
    assert isinstance(trails[0], Block)
    assert int(np.abs(trails[0].column("current_ma", 0)).max()) > 2500
    assert run.of(Tripped)
    assert run.column("duty")[-1] == 0
    assert run.outcome.stop_confirmed


def test_a_cable_pulled_out_ends_the_run_and_the_device_stops_itself(tmp_path: Path) -> None:
    def unplug(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.elapsed_s > 1.0:
            device.faults.set("unplug", True)

    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 5 s", meddle=unplug)
    assert run.outcome.verdict is Verdict.LINK_LOST
    assert run.outcome.exit_code == 4
    assert not run.outcome.stop_confirmed
    for _ in range(LEASE_TICKS + STOP_TICKS + 1):
        run.device.tick()
    assert run.device.controller is not None
    assert run.device.controller.state is not State.ARMED
    assert [drive.duty for drive in run.device.controller.drives] == [0, 0]


def test_a_user_stop_ends_the_run_confirmed(tmp_path: Path) -> None:
    def panic(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.elapsed_s > 1.0:
            session.panic(1)

    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 5 s", meddle=panic)
    assert run.outcome.verdict is Verdict.STOPPED
    assert run.outcome.exit_code == 5
    assert run.outcome.stop_confirmed
    assert run.column("duty")[-1] == 0


def test_the_log_of_a_run_that_the_user_stops_has_its_tail_and_is_accounted_for_to_the_last_sample(
    tmp_path: Path,
) -> None:
    sessions: list[Session] = []

    def panic(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        sessions[:] = [session]
        if now.elapsed_s > 1.0:
            session.panic(1)

    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 5 s", meddle=panic)
    (judged,) = run.of(StopJudged)
    assert isinstance(judged, StopJudged)
    assert judged.tick is not None
    assert run.ticks[-1] >= judged.tick + round(TAIL_S / 0.001) - 10
    accounting = sessions[0].accounting
    assert accounting is not None
    assert accounting.complete


def test_a_stop_that_is_not_confirmed_is_the_end_of_the_runs_sentence(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(StopRun, "_moved", lambda *_: [True])

    def panic(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.elapsed_s > 1.0:
            session.panic(1)

    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 5 s", meddle=panic)
    assert run.outcome.verdict is Verdict.STOPPED
    assert not run.outcome.stop_confirmed
    assert run.outcome.sentence == (
        "stopped by the user; stop NOT CONFIRMED: cut the power (the shaft has not come to rest)"
    )


@pytest.mark.parametrize("moment", ["state", "trail"])
def test_a_stop_asked_for_while_a_trip_is_looked_into_leaves_the_trip_told(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, moment: str
) -> None:
    asked: list[str] = []
    true_ask = getattr(Session, moment)

    def ask(session: Session, *args: int) -> object:
        if session.trip is not None and not asked:
            asked.append(moment)
            session.panic(1)
        return true_ask(session, *args)

    monkeypatch.setattr(Session, moment, ask)

    def jam(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.elapsed_s > 1.0:
            device.faults.set("jammed_shaft", True)

    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 5 s", meddle=jam)
    assert asked
    assert run.outcome.verdict is Verdict.TRIPPED
    assert run.outcome.sentence.startswith("stall on vent: 40 % and no motion for 300 ms, ")
    assert run.outcome.stop_confirmed
    assert run.of(StopJudged)
    assert run.of(Block)  # the trail


@pytest.mark.parametrize(
    "step", ["move: {servo: latch, to: 20 deg, in: 500 ms}", "ramp: {motor: vent, to: 40 %, in: 1 s}"]
)
def test_outputs_that_go_off_by_a_stop_of_somebody_else_end_the_run(tmp_path: Path, step: str) -> None:
    typed: list[float] = []

    def type_stop(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if now.elapsed_s > 1.0 and not typed:
            typed.append(now.elapsed_s)
            port.urgent(b"\nstop\n")

    run = rehearse(tmp_path, f"- {step}\n- hold: 4 s", meddle=type_stop)
    assert run.outcome.verdict is Verdict.STOPPED
    assert run.outcome.sentence == "the board switched its outputs off, and not for this run (bare stop)"
    assert run.outcome.stop_confirmed
    assert run.outcome.elapsed_s < 2.0


def test_a_trip_whose_notice_was_lost_is_still_the_reason_of_the_end(tmp_path: Path) -> None:
    spoilt: list[bytes] = []

    def jam(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        pump = session._core.pump
        if now.elapsed_s < 1.0 or device.faults.get("jammed_shaft"):
            return
        device.faults.set("jammed_shaft", True)
        read = pump._read_until

        def spoil(until_s: float) -> bytes:
            data = read(until_s)
            if b" trip " in data and not spoilt:
                spoilt.append(data)
                data = data.replace(b" trip ", b" tr1p ", 1)
            return data

        pump._read_until = spoil

    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 5 s", meddle=jam)
    assert spoilt
    assert run.outcome.verdict is Verdict.TRIPPED
    assert run.outcome.sentence.startswith("stall on vent: 40 % and no motion for 300 ms, ")


def test_a_host_that_is_late_makes_the_device_stop_itself(tmp_path: Path) -> None:
    def nap(now: Progress, device: MockDevice, session: Session, port: MockPort) -> None:
        if 1.0 < now.elapsed_s < 2.0:
            port.read(0.0)
            end_s = port.clock.now() + 1.2
            while port.clock.now() < end_s:
                port.read(end_s - port.clock.now())

    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 5 s", meddle=nap)
    assert run.outcome.verdict is Verdict.TRIPPED
    assert "link lost" in run.outcome.sentence
    assert run.column("duty")[-1] == 0


def test_standstill_that_does_not_come_ends_the_run(tmp_path: Path) -> None:
    run = rehearse(
        tmp_path,
        """
- ramp: {motor: vent, to: 60 %, in: 600 ms}
- hold: 500 ms
- reverse: {motor: vent, to: -20 %, in: 500 ms, down in: 300 ms, still within: 60 ms}
""",
    )
    assert run.outcome.verdict is Verdict.FAILED
    assert "still turned" in run.outcome.sentence
    assert run.column("duty").min() == 0


def test_progress_rises_from_0_to_1_and_names_the_step(tmp_path: Path) -> None:
    run = rehearse(tmp_path, "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 1 s\n- coast: vent")
    fractions = [now.fraction for now in run.progress]
    assert fractions == sorted(fractions)
    assert fractions[0] == 0.0
    assert fractions[-1] == pytest.approx(1.0, abs=0.01)
    assert any("hold 1 s" in now.doing for now in run.progress)
    assert run.progress[-1].left_s == pytest.approx(0.0, abs=0.02)


def test_the_same_seed_gives_the_same_run(tmp_path: Path) -> None:
    steps = "- ramp: {motor: vent, to: 40 %, in: 400 ms}\n- hold: 300 ms"
    first, second = (rehearse(tmp_path, steps, seed=7) for _ in range(2))
    assert np.array_equal(first.column("counts"), second.column("counts"))
    assert np.array_equal(first.column("current_ma"), second.column("current_ma"))
