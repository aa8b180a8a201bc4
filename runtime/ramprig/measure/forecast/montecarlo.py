"""Many runs of one sequence, each on a bench drawn from what is known, spread over all cores; seeded.

Draw number n has a random source of its own, made from the seed and n: the result does not depend on the number of
cores. Draw 0 has every figure at its value.
"""

from __future__ import annotations

import math
import multiprocessing
import os
import time
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from fractions import Fraction
from functools import partial

import numpy as np

from ramprig.bench import Bench
from ramprig.mock.plant import MotorParameters
from ramprig.mock.setup import MockSetup
from ramprig.sequence.outcome import Verdict
from ramprig.sequence.plan import Cycles, Plan
from ramprig.sequence.rig import Rig

from .draws import Belief, drawn_setup
from .play import Floats, MotorPlay, Play, play
from .reduction import Cut, Night, alike_of, night_of, warm_guess
from .turnlines import row_of
from .turns import follow

CHUNK = 5
"""Draws handed to a core at a time."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Job:
    """What every draw is made from: plans of the whole sequence or, where it is `cut`, of its cold and hot parts.

    `part` is the plan's part of a block of cycles that is cut.
    """

    bench: Bench
    belief: Belief
    cold: Plan
    hot: Plan | None
    cut: Cut | None
    part: Cycles | None
    seed: int
    on_core: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorDraw:
    """One motor in one draw: extremes, with the steps where they were. `overload` is the square root of the overload
    trip's heat at its highest over its limit: 1 trips."""

    peak_a: float
    peak_step: str
    lasting_a: float
    lasting_step: str
    speed_rad_s: float
    speed_step: str
    overload: float
    hottest_c: float
    end_c: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Draw:
    """One draw. `trip` says why it tripped, empty where it did not; `failed` what was not as expected.

    `whole` tells that it came to its end, so that its time, energy and end temperatures are those of the whole run.
    `pause_s` is the shortest pause between two cycles that comes of spacing their starts.
    """

    whole: bool
    trip: str
    trip_step: str
    failed: str
    elapsed_s: float
    energy_j: float
    bus_high_v: float
    bus_high_step: str
    bus_low_v: float
    bus_low_step: str
    passes: int
    pause_s: float
    motors: Mapping[str, MotorDraw]


def one_draw(job: Job, number: int) -> Draw:
    """Carry a draw out. Raises what opening a device raises."""
    random = np.random.default_rng([job.seed, number]) if number else None
    setup = drawn_setup(job.belief, random)
    bench = packed_bench(job)
    cold = play(job.cold, bench, setup, seed=number + 1, on_core=job.on_core)
    if job.cut is None or job.hot is None or not _went_through(cold, job.cold):
        return _draw(job, setup, cold, None)
    parameters = _parameters(job, setup)
    if job.cut.block is None or job.part is None:
        warm = warm_guess(cold, job.cut, {name: motor.thermal_time_s for name, motor in parameters.items()})
    else:
        warm = dict(follow(job.cut.block, job.part, cold, None, parameters).last_c)
    hot = play(job.hot, bench, setup, seed=number + 1, windings_c=warm, on_core=job.on_core)
    return _draw(job, setup, cold, hot)


def packed_bench(job: Job) -> Bench:
    """The bench for cycles that are simulated without the pauses between them: its overload trip is off, since by the
    board's model the motors grow hotter than they will. How hot they truly grow is reckoned with the pauses in."""
    if job.part is None or job.part.starts_per_hour is None:
        return job.bench
    off = {motor.name: replace(motor.settings["rated_ma"], value=Fraction(0)) for motor in job.bench.motors}
    motors = (replace(one, settings={**one.settings, "rated_ma": off[one.name]}) for one in job.bench.motors)
    return replace(job.bench, motors=tuple(motors))


def _parameters(job: Job, setup: MockSetup) -> dict[str, MotorParameters]:
    return {name: setup.plant.axes[axis].motor for name, axis in job.belief.axis_of.items()}


def _went_through(run: Play, plan: Plan) -> bool:
    """Whether all steps were carried out: an expectation that stops the run ends it early, too."""
    return not run.tripped and run.elapsed_s >= plan.totals.least * run.tick_s - run.row_s


def _draw(job: Job, setup: MockSetup, cold: Play, hot: Play | None) -> Draw:
    runs = [cold] if hot is None else [cold, hot]
    last = runs[-1]
    plans = [job.cold, job.hot] if job.hot is not None else [job.cold]
    whole = len(runs) == len(plans) and all(_went_through(run, plan) for run, plan in zip(runs, plans, strict=True))
    night = _night(job, setup, cold, hot) if hot is not None and whole else None
    motors = {}
    for name in cold.motors:
        parts = [(run, run.motors[name]) for run in runs]
        motors[name] = _motor(job, name, parts, night)
        if night is not None:
            motors[name] = replace(motors[name], hottest_c=night.hottest_c[name], end_c=night.end_c[name])
    trip, trip_step = next(((run.tripped, run.place) for run in runs if run.tripped), ("", ""))
    over = next((name for name, one in motors.items() if one.overload >= 1.0), None)
    if not trip and over is not None:
        trip, trip_step = f"overload: {over} grows too hot by the board's own model in the course of the run", ""
    failed = next((run.sentence for run in runs if run.verdict is not Verdict.PASSED and not run.tripped), "")
    too_many = "" if night is None else _too_many_failed(job, runs, night.passes)
    if too_many:
        failed, whole = too_many, False
    high, high_step = _extreme([(run, run.bus_high_v) for run in runs])
    low, low_step = _extreme([(run, -run.bus_low_v) for run in runs])
    return Draw(
        whole=whole,
        trip=trip,
        trip_step=trip_step,
        failed=failed,
        elapsed_s=last.elapsed_s if night is None else night.elapsed_s,
        energy_j=float(cold.energy_j.sum()) if night is None else night.energy_j,
        bus_high_v=high,
        bus_high_step=high_step,
        bus_low_v=-low,
        bus_low_step=low_step,
        passes=0 if night is None else night.passes,
        pause_s=0.0 if night is None else night.pause_s,
        motors=motors,
    )


def _night(job: Job, setup: MockSetup, cold: Play, hot: Play) -> Night | None:
    if job.cut is None:
        return None
    if job.cut.block is None or job.part is None:
        return night_of(job.cut, cold, hot)
    found = follow(job.cut.block, job.part, cold, hot, _parameters(job, setup))
    return Night(
        passes=found.passes,
        elapsed_s=found.elapsed_s,
        energy_j=found.energy_j,
        hottest_c=found.hottest_c,
        end_c=found.end_c,
        pause_s=found.pause_s,
    )


def _too_many_failed(job: Job, runs: list[Play], cycles: int) -> str:
    """Why the run would end before its time, if cycles fail as often as among those simulated; empty if it does not."""
    block = None if job.cut is None else job.cut.block
    if block is None or block.failed_most is None:
        return ""
    done = [turn for run in runs for turn in run.turns if not turn.check]
    failed = sum(turn.failed for turn in done)
    if failed * cycles <= block.failed_most * len(done):
        return ""
    return f"{failed} of {len(done)} cycles simulated fail: more than {block.failed_most} would of {cycles}"


def _motor(job: Job, name: str, parts: list[tuple[Play, MotorPlay]], night: Night | None) -> MotorDraw:
    peak, peak_step = _extreme([(run, motor.peak_a) for run, motor in parts])
    lasting, lasting_step = _extreme([(run, motor.lasting_a) for run, motor in parts])
    speed, speed_step = _extreme([(run, motor.speed_rad_s) for run, motor in parts])
    rig = Rig.of(job.bench, tick_us=job.cold.tick_us)
    index = rig.axes[name].index
    rated_a, tau_s = rig.limits["rated_ma", index] / 1000.0, float(rig.limits["thermal_s", index])
    pause_s = 0.0 if night is None else night.pause_s
    heat = [
        float(heat_a2(with_pauses(run, motor.square_a2, pause_s), run.row_s, tau_s).max(initial=0.0))
        for run, motor in parts
    ]
    if night is not None and job.cut is not None:
        heat.append(_night_heat_a2(job.cut, parts[0], night, tau_s))
    return MotorDraw(
        peak_a=peak,
        peak_step=peak_step,
        lasting_a=lasting,
        lasting_step=lasting_step,
        speed_rad_s=speed,
        speed_step=speed_step,
        overload=math.sqrt(max(heat)) / rated_a if rated_a else 0.0,
        hottest_c=max(float(motor.winding_c.max(initial=-273.0)) for _, motor in parts),
        end_c=float(parts[-1][1].winding_c[-1]),
    )


def _extreme(parts: list[tuple[Play, Floats]]) -> tuple[float, str]:
    """The greatest value, and the step where it was."""
    run, values = max(parts, key=lambda part: float(part[1].max(initial=-np.inf)))
    row = int(values.argmax())
    return float(values[row]), run.step_at(row)


def heat_a2(square_a2: Floats, row_s: float, tau_s: float) -> Floats:
    """The heat of the overload trip, from 0: a first-order lag of the square of the current (IEC 60255-149)."""
    decay = math.exp(-row_s / tau_s)
    block = max(1, int(tau_s / row_s))
    found, last = np.empty(len(square_a2)), 0.0
    for begin in range(0, len(square_a2), block):
        part = square_a2[begin : begin + block]
        fade = decay ** np.arange(1, len(part) + 1)
        found[begin : begin + block] = fade * (last + (1.0 - decay) * np.cumsum(part / fade))
        last = float(found[begin + len(part) - 1])
    return found


def _night_heat_a2(cut: Cut, part: tuple[Play, MotorPlay], night: Night, tau_s: float) -> float:
    """The highest heat of the board's model at the end of the night, with a check after many cycles."""
    run, motor = part
    alike = alike_of(run, cut)
    square = with_pause(motor.square_a2[alike.begin : alike.end], night.pause_s * alike.passes, run.row_s)
    check = next((turn for turn in run.turns if turn.check), None)
    rows = slice(0, 0) if check is None else slice(row_of(run, check.begin), row_of(run, check.end))
    passes = max(1, night.passes // alike.passes)
    return periodic_heat_a2(square, run.row_s, tau_s, passes, then=motor.square_a2[rows])


def with_pause(values: Floats, pause_s: float, row_s: float) -> Floats:
    """The rows, and those of a pause after them, in which nothing is driven."""
    return np.concatenate([values, np.zeros(round(pause_s / row_s))])


def with_pauses(run: Play, values: Floats, pause_s: float) -> Floats:
    """The rows of a run, with a pause before each turn but the first that the simulation left out."""
    rows = round(pause_s / run.row_s)
    if not rows:
        return values
    places = [row_of(run, turn.begin) for turn in run.turns[1:]]
    return np.insert(values, np.repeat(places, rows), 0.0)


NOTHING: Floats = np.empty(0)


def periodic_heat_a2(square_a2: Floats, row_s: float, tau_s: float, passes: int, *, then: Floats = NOTHING) -> float:
    """The highest heat in the last of so many equal passes and in what comes `then`: that of each from 0, and what is
    left from before."""
    once = heat_a2(square_a2, row_s, tau_s)
    if not len(once):
        return 0.0
    kept = math.exp(-len(once) * row_s / tau_s)
    begin = float(once[-1]) * (1.0 - kept ** (passes - 1)) / (1.0 - kept)
    highest = float((once + begin * _left(len(once), row_s, tau_s)).max())
    if not len(then):
        return highest
    end = float(once[-1]) + begin * kept
    return max(highest, float((heat_a2(then, row_s, tau_s) + end * _left(len(then), row_s, tau_s)).max()))


def _left(rows: int, row_s: float, tau_s: float) -> Floats:
    """What is left of a heat of 1 after each row."""
    left: Floats = np.exp(-row_s / tau_s * np.arange(1, rows + 1))
    return left


def cores() -> int:
    """How many cores this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return max(1, len(os.sched_getaffinity(0)))
    return os.cpu_count() or 1


def draws_of(
    job: Job,
    wanted: int,
    *,
    workers: int | None = None,
    most_s: float = math.inf,
    progress: Callable[[int, int], None] = lambda done, of: None,
) -> list[Draw]:
    """Draw 0 and `wanted` more, fewer where they would take longer than about `most_s`; at least 20 more."""
    begin_s = time.perf_counter()
    found = [one_draw(job, 0)]
    took_s = time.perf_counter() - begin_s
    workers = min(cores() if workers is None else workers, max(1, wanted))
    fitting = int(most_s * workers / max(took_s, 1e-3)) if math.isfinite(most_s) else wanted
    number = min(wanted, max(20, fitting))
    for draw in _mapped(partial(one_draw, job), number, workers):
        found.append(draw)
        progress(len(found) - 1, number)
    return found


def _mapped(work: Callable[[int], Draw], number: int, workers: int) -> Iterator[Draw]:
    if workers <= 1:
        yield from map(work, range(1, number + 1))
        return
    # A fresh process each: a copy of one with threads is not safe, and is not to be had on every system.
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(workers, mp_context=context) as pool:
        yield from pool.map(work, range(1, number + 1), chunksize=CHUNK)
