"""Plans: lengths are computed and equal what a run takes, repeats cost nothing, orders keep to the limits."""

from __future__ import annotations

import math
import time
import tracemalloc
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from ramprig.quantity import format_bytes
from ramprig.record.columns import predicted_bytes
from ramprig.sequence.columns import bench_columns
from ramprig.sequence.happened import Marked
from ramprig.sequence.outcome import Verdict
from ramprig.sequence.plan import Branches, Motion, Order, Part, Run, Series, Standstill, Totals
from ramprig.sequence.report import report_lines
from ramprig.sequence.shapes import sine, sine_strokes, stairs, triangle
from ramprig.sequence.strands import Begin, Fork, Hang, Look, Note, Pass, Reach, Resumed, Send, walk
from sequence_rig import plan_of, rehearse, small_bench

NIGHT_PASSES = 100_000
CEILING_DUTY = 8000
SLEW_UP_DUTY, SLEW_DOWN_DUTY = 10, 20
PULSE_US = (1100, 1900)


def orders_of(part: Part, at: int) -> tuple[list[Order], int]:
    """All orders of a part that begins at `at`, waits taking no time, and its end."""
    found: list[Order] = []

    def follow(inner: Part, begin: int) -> int:
        steps = walk(inner, begin)
        ask = next(steps, None)
        while ask is not None:
            resumed = Resumed(getattr(ask, "tick", 0))
            match ask:
                case Send(order=order):
                    found.append(order)
                case Fork(tick=tick, parts=parts):
                    resumed = Resumed(max(follow(part, tick) for part in parts))
                case Hang(tick=tick, part=Standstill(dwell=dwell)):
                    resumed = Resumed(tick + dwell)
                case Look(tick=tick):
                    resumed = Resumed(tick, holds=True)
                case Reach() | Begin() | Note() | Pass() | Hang():
                    pass
            try:
                ask = steps.send(resumed)
            except StopIteration as over:
                return int(over.value)
        raise AssertionError("a walk that asks for nothing")

    end = follow(part, at)
    return found, end


# ---- totals --------------------------------------------------------------------------------------------------------


def test_a_night_of_passes_is_one_part_compiled_at_once_in_little_memory(tmp_path: Path) -> None:
    steps = f"""
- repeat:
    times: {NIGHT_PASSES}
    steps:
      - reverse: {{motor: vent, to: 40 %, in: 400 ms}}
      - sweep: {{servo: latch, shape: sine, from: -20 deg, to: 20 deg, period: 2200 ms, passes: 3}}
      - reverse: {{motor: vent, to: -40 %, in: 400 ms}}
      - repeat: {{times: 1000, steps: [hold: 1 s]}}
"""
    tracemalloc.start()
    begin_s = time.process_time()
    plan = plan_of(tmp_path, steps)
    took_s = time.process_time() - begin_s
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert took_s < 2.0  # a generous bound: it takes some 10 ms
    assert peak < 4_000_000
    totals = plan.totals
    assert totals.reversals == 2 * NIGHT_PASSES - 1
    assert totals.starts == {"vent": 2 * NIGHT_PASSES}
    per_pass = 4 * 400 + 2 * 300 + 3 * 2200 + 1000 * 1000
    first = -400 + 334  # nothing to ramp down from; the latch has 20 deg to go at 60 deg/s
    assert totals.least == NIGHT_PASSES * per_pass + first + 200  # and down from 40 % at the end
    assert len(report_lines(plan, small_bench())) < 40


def test_nested_repeats_are_compiled_in_time_that_grows_with_their_depth_only(tmp_path: Path) -> None:
    depth = 9
    text = "hold: 1 s"
    for _ in range(depth):
        text = f"repeat: {{times: 10, steps: [{{{text}}}]}}"
    begin_s = time.process_time()
    plan = plan_of(tmp_path, f"- {text}")
    assert plan.totals.least == 1000 * 10**depth
    assert time.process_time() - begin_s < 2.0


def test_totals_of_a_together_are_those_of_its_longest_branch(tmp_path: Path) -> None:
    plan = plan_of(
        tmp_path,
        """
- together:
    - - hold: 2 s
    - - ramp: {motor: vent, to: 40 %, in: 500 ms}
      - coast: vent
- hold: 1 s
""",
    )
    assert plan.totals == Totals(3000, 3000, orders=2, starts={"vent": 1}, peak_duty={"vent": 4000})


def test_a_repeat_for_a_time_whose_passes_are_known_is_counted_beforehand(tmp_path: Path) -> None:
    plan = plan_of(tmp_path, "- repeat: {for: 1 s, steps: [hold: 300 ms]}")
    assert plan.totals.least == plan.totals.most == 1200


def test_the_report_of_a_plan(tmp_path: Path) -> None:
    (tmp_path / "inner.yaml").write_text("sequence: inner\nsteps:\n  - hold: 1 s\n")
    plan = plan_of(
        tmp_path,
        """
- ramp: {motor: vent, to: 40 %, in: 400 ms}
- repeat:
    times: 200
    steps:
      - include: inner.yaml
      - expect: {speed of: vent, is: at least 10 rpm, over: 500 ms, else: stop}
- reverse: {motor: vent, to: -40 %, in: 400 ms}
- wait: {speed of: vent, is: at most -10 rpm, within: 2 s}
- together:
    - [{hold: 1 s}]
    - [{move: {servo: latch, to: 10 deg, in: 500 ms}}]
""",
    )
    columns = bench_columns(small_bench(), tick_us=1000)
    least, most = (format_bytes(predicted_bytes(columns, rows, period_ticks=10)) for rows in (20271, 21041))
    assert report_lines(plan, small_bench()) == [
        "t",
        "bench     test bench (bench.yaml)",
        "takes     3 min 22.7 s and what 2 waits take; 3 min 30.4 s at the longest",
        "motor     vent: 2 starts, peak duty 40 %, 1 reversal in all; 2 A if the shaft is held (trips above 2.5 A)",
        "orders    5, expectations 200",
        f"log       every 10 ms, about 20271 rows, {least}; 21041 rows, {most} at the longest",
        "remark    the steps end with vent at -40 %: brought to zero in 200 ms at the end",
        "",
        "          at         for    line  what",
        "    0.000 s       400 ms       3  vent to 40 % in 400 ms",
        "    0.400 s   3 min 20 s       5  repeat x 200",
        "    0.400 s          1 s       7    include inner.yaml",
        "    0.400 s          1 s      ~3      hold 1 s",
        "    1.400 s                    8    expect speed of vent is at least 10 rpm over 500 ms, else stop",
        "  200.400 s       400 ms       9  vent to 0 % in 400 ms",
        "  200.800 s       300 ms       9  dwell 300 ms, vent still within 5 s",
        "  201.100 s+      400 ms       9  vent to -40 % in 400 ms",
        "  201.500 s+                  10  wait until speed of vent is at most -10 rpm over 200 ms, 2 s at most",
        "  201.500 s+         1 s      12  together, 2 branches",
        "  201.500 s+         1 s      12    branch 1",
        "  201.500 s+         1 s      12      hold 1 s",
        "  201.500 s+      500 ms      13    branch 2",
        "  201.500 s+      500 ms      13      latch to 10 deg in 500 ms",
        "  202.500 s+      200 ms     end  all motors to zero",
    ]


# ---- shapes --------------------------------------------------------------------------------------------------------


@given(
    low=st.integers(-10_000, 10_000),
    high=st.integers(-10_000, 10_000),
    period=st.integers(400, 20_000),
    error=st.floats(2.0, 60.0),
)
def test_a_sine_of_strokes_stays_within_its_error(low: int, high: int, period: int, error: float) -> None:
    count = sine_strokes(low, high, period, error=error, shortest=20)
    strokes = sine(low, high, period, count)
    assert count % 2 == 0
    assert sum(stroke.ticks for stroke in strokes) == period
    assert strokes[-1].value == low
    assert strokes[count // 2 - 1].value == high
    if 4 < count < 400 and count < period // 20 - 2:
        nodes = [0, *(stroke.after + stroke.ticks for stroke in strokes)]
        ticks = np.arange(period)
        line = np.interp(ticks, nodes, [low, *(stroke.value for stroke in strokes)])
        ideal = (low + high) / 2 - (high - low) / 2 * np.cos(2 * np.pi * ticks / period)
        slope = math.pi * abs(high - low) / period  # of the sine, a tick: nodes stand on whole ticks
        assert np.abs(line - ideal).max() <= error * 1.05 + 0.5 + slope


def test_stairs_and_triangle() -> None:
    assert [(s.after, s.ticks, s.value) for s in stairs(0, 90, 3, 10, 100)] == [
        (0, 10, 30),
        (110, 10, 60),
        (220, 10, 90),
        (330, 10, 60),
        (440, 10, 30),
        (550, 10, 0),
    ]
    assert [(s.after, s.ticks, s.value) for s in triangle(5, 9, 101)] == [(0, 50, 9), (50, 51, 5)]


# ---- random sequences ----------------------------------------------------------------------------------------------

DUTIES = [10, 20, 30, 40, 50, 60]


@st.composite
def motor_steps(draw: st.DrawFn, motor: str) -> list[str]:
    """Steps of one motor that can be carried out; without waits."""
    steps: list[str] = []
    duty = 0
    for _ in range(draw(st.integers(1, 4))):
        match draw(st.sampled_from(("ramp", "hold", "ease", "sweep"))):
            case "ramp":
                duty, before = draw(st.sampled_from(DUTIES)), duty
                length = max(abs(duty - before) * 10, 20) + draw(st.integers(0, 300))
                steps.append(f"ramp: {{motor: {motor}, to: {duty} %, in: {length} ms}}")
            case "hold":
                steps.append(f"hold: {draw(st.integers(1, 400))} ms")
            case "ease":
                duty = 0
                steps.append(f"{draw(st.sampled_from(('coast', 'brake')))}: {motor}")
            case _:
                low, high = draw(st.sampled_from(((10, 30), (40, 20))))
                duty = low
                steps.append(
                    f"sweep: {{motor: {motor}, shape: steps, from: {low} %, to: {high} %, steps: 2, pause: 60 ms}}"
                )
    return steps


@st.composite
def servo_steps(draw: st.DrawFn) -> list[str]:
    """Steps of the servo that can be carried out."""
    steps = []
    for _ in range(draw(st.integers(1, 3))):
        angle = draw(st.integers(-20, 20))
        steps.append(f"move: {{servo: latch, to: {angle} deg, in: {draw(st.integers(700, 1000))} ms}}")
    return steps


@st.composite
def sequences(draw: st.DrawFn) -> str:
    """A small sequence as YAML list items, without waits."""

    def listed(steps: list[str]) -> str:
        return "[" + ", ".join(f"{{{step}}}" for step in steps) + "]"

    items = [f"- {step}" for step in draw(motor_steps("vent"))]
    branches = [draw(motor_steps("fan")), draw(servo_steps())]
    items.append("- together: [" + ", ".join(listed(branch) for branch in branches) + "]")
    loop = ["hold: 50 ms", "ramp: {motor: vent, to: 20 %, in: 700 ms}", *draw(motor_steps("vent")), "coast: vent"]
    items.append(f"- repeat: {{times: {draw(st.integers(1, 2))}, steps: {listed(loop)}}}")
    return "\n".join(items) + "\n- mark: end"


QUIET = [HealthCheck.function_scoped_fixture, HealthCheck.too_slow]


@settings(max_examples=60, deadline=None, suppress_health_check=QUIET)
@given(steps=sequences())
def test_the_walk_of_a_plan_takes_its_total_and_keeps_to_the_limits(steps: str, tmp_path: Path) -> None:
    plan = plan_of(tmp_path, steps)
    orders, end = orders_of(plan.root, 1000)
    assert end - 1000 == plan.totals.least == plan.totals.most
    assert len(orders) == plan.totals.orders
    duty = {0: 0, 1: 0}
    until = {0: 0, 1: 0}
    for order in sorted((o for o in orders if o.kind.value == "ramp"), key=lambda o: o.start):
        assert order.start >= until[order.index]
        assert abs(order.value) <= 8000
        slew = 10 if abs(order.value) > abs(duty[order.index]) else 20
        assert abs(order.value - duty[order.index]) <= slew * order.ticks
        duty[order.index] = order.value
        until[order.index] = order.start + order.ticks
    assert duty == {0: 0, 1: 0}


@settings(max_examples=8, deadline=None, suppress_health_check=QUIET)
@given(steps=sequences())
def test_a_run_without_waits_takes_what_the_plan_says_to_the_tick(steps: str, tmp_path: Path) -> None:
    run = rehearse(tmp_path, "- mark: begin\n" + steps, head="log: {period: 1 ms}\n")
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    assert np.all(np.diff(run.ticks) == 1)
    for axis in (0, 1):
        size = np.abs(run.column("duty", axis))
        steps_up = np.diff(size)
        assert size.max() <= CEILING_DUTY  # S1
        assert steps_up.max() <= SLEW_UP_DUTY  # S2
        assert steps_up.min() >= -SLEW_DOWN_DUTY
    pulses = run.column("pulse_us", 0)
    pulsing = pulses[pulses > 0]
    assert pulsing.min() >= PULSE_US[0]  # S7
    assert pulsing.max() <= PULSE_US[1]
    assert np.abs(np.diff(pulsing)).max() <= 1  # 600 ns a tick, shown in whole us
    marks = {event.name: event.tick for event in run.of(Marked) if isinstance(event, Marked)}
    body = run.plan.root.parts[0]
    assert marks["end"] - marks["begin"] == body.totals.least
    assert run.outcome.overdue == 0


@settings(max_examples=8, deadline=None, suppress_health_check=QUIET)
@given(
    turns=st.lists(st.tuples(st.sampled_from(DUTIES), st.booleans(), st.integers(0, 300)), min_size=1, max_size=4),
    seed=st.integers(0, 1000),
)
def test_the_sign_never_changes_at_speed(turns: list[tuple[int, bool, int]], seed: int, tmp_path: Path) -> None:
    steps: list[str] = []
    sign = 1
    for duty, other, hold in turns:
        word = "reverse" if other else "ramp"
        sign = -sign if other else sign
        value = sign * duty
        down = ", down in: 600 ms" if other and steps else ""
        steps.append(f"- {word}: {{motor: vent, to: {value} %, in: 700 ms{down}}}\n- hold: {hold} ms")
    run = rehearse(tmp_path, "\n".join(steps), head="log: {period: 2 ms}\n", seed=seed)
    assert run.outcome.verdict is Verdict.PASSED, run.outcome
    duty_at, counts = np.sign(run.column("duty")), run.column("counts")
    driven = np.flatnonzero(duty_at)
    for last, first in pairwise(driven):
        if duty_at[last] != duty_at[first]:
            assert (first - last) * 2 >= 300
            rest = counts[first - 25 : first]
            assert rest.max() - rest.min() <= 3


def test_branches_and_motions_are_parts_with_text(tmp_path: Path) -> None:
    plan = plan_of(tmp_path, "- together: [[{hold: 1 s}], [{move: {servo: latch, to: 10 deg, in: 1 s}}]]")
    body = plan.root.parts[0]
    assert isinstance(body, Series)
    branches = body.parts[0]
    assert isinstance(branches, Branches)
    inner = branches.parts[1]
    assert isinstance(inner, Series)
    move = inner.parts[0]
    assert isinstance(move, Run)
    assert move.motions == (Motion(move.motions[0].kind, 0, move.motions[0].strokes, 1000),)
    assert move.text == "latch to 10 deg in 1 s"


@pytest.mark.parametrize("number", [0, 1, 3])
def test_totals_add_up(number: int) -> None:
    one = Totals(10, 20, orders=2, waits=1, judgements=1, reversals=1, starts={"a": 2}, peak_duty={"a": 5})
    many = Totals()
    for _ in range(number):
        many = many.then(one)
    assert one.times(number) == many
