"""The forecast: its intervals cover what the mock then does, its reduced night is the full one, and it is honest."""

from __future__ import annotations

import dataclasses
import json
import math
import random
from pathlib import Path

import numpy as np
import pytest

from measure_rig import drawn_bench
from ramprig.bench import Bench, load_bench
from ramprig.cli.files import read_pair
from ramprig.cli.main import main
from ramprig.errors import UsageError
from ramprig.measure.forecast.draws import Belief, belief_of, drawn_setup
from ramprig.measure.forecast.dutytype import duty_type
from ramprig.measure.forecast.forecast import Forecast, ForecastWish, Interval, Odds, forecast
from ramprig.measure.forecast.limits import margins
from ramprig.measure.forecast.montecarlo import Job, heat_a2, one_draw, periodic_heat_a2
from ramprig.measure.forecast.play import Play, core_is_there, play
from ramprig.measure.forecast.reduction import cut_of, night_of, warm_guess
from ramprig.measure.forecast.turns import follow
from ramprig.measure.known import Known, figures_of
from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.refusal import NotMeasurable
from ramprig.mock.core import why_not
from ramprig.sequence.compile import compile_plan
from ramprig.sequence.reading import Sequence, sequence_of_text

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"
ON_CORE = why_not() is None

SHORT = """
sequence: there and back
log: {period: 20 ms}
steps:
  - ramp: {motor: vent, to: 60 %, in: 700 ms}
  - hold: 1 s
  - reverse: {motor: vent, to: -45 %, in: 600 ms, still within: 20 s}
  - hold: 600 ms
  - coast: {motor: vent, in: 600 ms}
  - wait: {speed of: vent, is: -0.5 rpm to 0.5 rpm, within: 20 s}
"""

PASSES = """
sequence: to and fro
log: {{period: 20 ms}}
steps:
  - hold: 300 ms
  - repeat:
      {often}
      steps:
        - reverse: {{motor: vent, to: 75 %, in: 800 ms, still within: 5 s}}
        - hold: 1500 ms
        - reverse: {{motor: vent, to: -60 %, in: 800 ms, still within: 5 s}}
        - hold: 1 s
        - coast: {{motor: vent, in: 800 ms}}
        - hold: 700 ms
  - hold: 1 s
"""


def sequence(text: str) -> Sequence:
    """A sequence."""
    return sequence_of_text(text, "forecast test")


def heavy(bench: Bench) -> Bench:
    """A bench with a load that runs on for a while, so that waits for standstill depend on it, and a supply that takes
    back what braking gives, so that it does not trip."""
    motor, supply = bench.motors[0], bench.supply.model
    assert motor.model is not None
    assert supply is not None
    model = dataclasses.replace(motor.model, inertia_kgm2=4.0 * motor.model.inertia_kgm2)
    return dataclasses.replace(
        bench,
        motors=(dataclasses.replace(motor, model=model),),
        supply=dataclasses.replace(bench.supply, model=dataclasses.replace(supply, can_sink=True)),
    )


def believed(truth: Bench, seed: int) -> Belief:
    """What somebody believes of a bench who measured it: each figure off by chance, within its own uncertainty."""
    chance = random.Random(1000 + seed)
    belief = belief_of(truth)

    def off(figure: Measured) -> Measured:
        value = figure.value + figure.standard_uncertainty * chance.gauss(0.0, 1.0)
        # the uncertainty is that of the figure as believed: it does not know the truth
        return dataclasses.replace(figure, value=value if value > 0.2 * figure.value else figure.value)

    motors = {
        name: dataclasses.replace(known, figures={key: off(one) for key, one in sorted(known.figures.items())})
        for name, known in belief.motors.items()
    }
    return dataclasses.replace(
        belief, motors=motors, supply={key: off(one) for key, one in sorted(belief.supply.items())}
    )


def what_happens(steps: Sequence, bench: Bench, *, seed: int, on_core: bool) -> Play:
    """The run on the true bench."""
    return play(compile_plan(steps, bench), bench, belief_of(bench).setup, seed=seed, on_core=on_core)


def covered(seeds: range, draws: int, *, on_core: bool) -> dict[str, list[bool]]:
    """Whether the forecast intervals hold what the simulated bench then does."""
    steps = sequence(SHORT)
    held: dict[str, list[bool]] = {"peak current": [], "end temperature": [], "duration": []}
    for seed in seeds:
        bench = heavy(drawn_bench(seed).bench)
        true = what_happens(steps, bench, seed=77 + seed, on_core=on_core)
        if true.tripped:
            continue
        wish = ForecastWish(draws=draws, seed=seed, workers=1, on_core=ON_CORE)
        found = forecast(steps, bench, wish, belief=believed(bench, seed)).values
        motor = true.motors["vent"]
        held["peak current"].append(found["vent.peak_current"].holds(float(motor.peak_a.max())))
        held["end temperature"].append(found["vent.end_temperature"].holds(float(motor.winding_c[-1])))
        held["duration"].append(found["duration"].holds(true.elapsed_s, within=true.tick_s))
    return held


def test_forecast_intervals_cover_what_happens() -> None:
    held = covered(range(4), 20, on_core=False)
    for name, one in held.items():
        assert len(one) == 4
        assert np.mean(one) >= 0.5, name


@pytest.mark.soak
def test_forecast_intervals_cover_what_happens_on_200_benches() -> None:
    """Run by `python -m pytest -m soak tests/test_measure_forecast.py -s`; it prints the fractions."""
    held = covered(range(200), 60, on_core=ON_CORE)
    print({name: (len(one), float(np.mean(one))) for name, one in held.items()})
    for name in ("peak current", "end temperature", "duration"):
        assert 0.90 <= np.mean(held[name]) <= 0.99


# ---- the reduced night ---------------------------------------------------------------------------------------------


def hot_bench() -> Bench:
    """The vent with a winding that warms a good deal within a minute."""
    bench = load_bench(VENT)
    motor = bench.motors[0]
    assert motor.model is not None
    model = dataclasses.replace(motor.model, thermal_resistance_k_w=250.0, thermal_s=25.0)
    return dataclasses.replace(bench, motors=(dataclasses.replace(motor, model=model),))


@pytest.mark.skipif(not ON_CORE, reason="without a C compiler a full night takes minutes")
@pytest.mark.parametrize("often", ["times: 40", "for: 5 min"])
def test_the_reduced_run_is_the_full_one(often: str) -> None:
    steps, bench = sequence(PASSES.format(often=often)), hot_bench()
    cut = cut_of(steps, lambda one: compile_plan(one, bench).totals.least / 1000.0)
    assert cut is not None
    setup = drawn_setup(belief_of(bench), None)
    full = play(compile_plan(steps, bench), bench, setup, seed=4)
    cold = play(compile_plan(cut.cold, bench), bench, setup, seed=4)
    warm = warm_guess(cold, cut, {"vent": 25.0})
    hot = play(compile_plan(cut.hot, bench), bench, setup, seed=4, windings_c=warm)
    night = night_of(cut, cold, hot)
    motor = full.motors["vent"]
    assert float(motor.winding_c.max()) > 25.0, "it must warm for this to say anything"
    # waits end on the runner's grid of 50 ms, so that passes differ by up to 100 ms of 7.1 s
    assert abs(night.passes - len(full.passes[cut.place])) <= (0 if "times" in often else 1)
    assert night.elapsed_s == pytest.approx(full.elapsed_s, rel=7e-3 if "times" in often else 3e-2)
    assert night.energy_j == pytest.approx(float(full.energy_j.sum()), rel=7e-3 if "times" in often else 3e-2)
    rise = float(motor.winding_c.max()) - 22.0
    assert night.hottest_c["vent"] - 22.0 == pytest.approx(rise, rel=0.02)
    assert night.end_c["vent"] == pytest.approx(float(motor.winding_c[-1]), abs=0.02 * rise + 0.02)


CYCLES = """
sequence: to and fro, counted
log: {{period: 20 ms}}
steps:
  - hold: 300 ms
  - cycle:
      {keys}
      steps:
        - reverse: {{motor: vent, to: 75 %, in: 800 ms, still within: 5 s}}
        - hold: 1500 ms
        - confirm: {{position of: vent, is: at least 60 deg}}
        - reverse: {{motor: vent, to: -60 %, in: 800 ms, still within: 5 s}}
        - hold: 1 s
        - coast: {{motor: vent, in: 800 ms}}
        - hold: 700 ms
  - hold: 1 s
"""
CHECK = """check every: {every}
      check:
        - reverse: {{motor: vent, to: 40 %, in: 500 ms, still within: 5 s}}
        - hold: 3 s
        - coast: {{motor: vent, in: 800 ms}}
        - hold: 500 ms"""
KEYS = (
    "times: 40\n      rest: 1 s",
    "times: 40\n      starts per hour: 720",
    "times: 41\n      " + CHECK.format(every=1),
    "times: 40\n      starts per hour: 720\n      " + CHECK.format(every=3),
    "times: 40\n      rest: 2 s\n      starts per hour: 720\n      failed at most: 2\n      " + CHECK.format(every=10),
    "for: 8 min\n      starts per hour: 600\n      " + CHECK.format(every=9),
)


@pytest.mark.skipif(not ON_CORE, reason="without a C compiler a full night takes minutes")
@pytest.mark.parametrize("keys", KEYS)
def test_reduced_cycles_with_checks_and_spaced_starts_are_the_full_ones(keys: str) -> None:
    steps, bench = sequence(CYCLES.format(keys=keys)), hot_bench()
    plan = compile_plan(steps, bench)
    cut = cut_of(steps, lambda one: compile_plan(one, bench).totals.least / 1000.0)
    assert cut is not None
    assert cut.block is not None
    setup = drawn_setup(belief_of(bench), None)
    motors = {"vent": setup.plant.axes[0].motor}
    full = play(plan, bench, setup, seed=4)
    cold = play(compile_plan(cut.cold, bench), bench, setup, seed=4)
    warm = dict(follow(cut.block, plan.cycles[0], cold, None, motors).last_c)
    hot = play(compile_plan(cut.hot, bench), bench, setup, seed=4, windings_c=warm)
    night = follow(cut.block, plan.cycles[0], cold, hot, motors)
    motor = full.motors["vent"]
    assert float(motor.winding_c.max()) > 25.0, "it must warm for this to say anything"
    checks = sum(turn.check for turn in full.turns)
    assert (night.passes, night.checks) == (len(full.turns) - checks, checks)
    assert night.elapsed_s == pytest.approx(full.elapsed_s, rel=7e-3)
    assert night.energy_j == pytest.approx(float(full.energy_j.sum()), rel=7e-3)
    rise = float(motor.winding_c.max()) - 22.0
    assert night.hottest_c["vent"] - 22.0 == pytest.approx(rise, rel=0.02)
    assert night.end_c["vent"] == pytest.approx(float(motor.winding_c[-1]), abs=0.02 * rise + 0.02)


HEAVY = """
sequence: heavy, with long pauses
log: {{period: 20 ms}}
steps:
  - cycle:
      times: {times}
      starts per hour: 80
      steps:
        - ramp: {{motor: vent, to: 60 %, in: 1 s}}
        - hold: 20 s
        - coast: {{motor: vent, in: 1 s}}
"""


@pytest.mark.skipif(not ON_CORE, reason="without a C compiler a full night takes minutes")
def test_cycles_that_only_their_pauses_keep_from_an_overload_do_not_trip_in_a_forecast(tmp_path: Path) -> None:
    """Driven for 22 s of 45 s: the board's thermal model is well below its trip, and would be at it without pauses."""
    bench = vent_with(tmp_path, "current: 900 mA", "current: 86 mA")
    steps = sequence(HEAVY.format(times=14))
    plan = compile_plan(steps, bench)
    full = play(plan, bench, belief_of(bench).setup, seed=1)
    assert not full.tripped, full.tripped
    used = math.sqrt(float(heat_a2(full.motors["vent"].square_a2, full.row_s, 60.0).max())) / 0.086
    assert 0.75 < used < 0.95
    cut = cut_of(steps, lambda one: compile_plan(one, bench).totals.least / 1000.0)
    assert cut is not None
    cold = compile_plan(cut.cold, bench)
    assert "overload" in play(cold, bench, belief_of(bench).setup, seed=1).tripped, "it must trip without the pauses"
    job = Job(
        bench=bench,
        belief=belief_of(bench),
        cold=cold,
        hot=compile_plan(cut.hot, bench),
        cut=cut,
        part=plan.cycles[0],
        seed=1,
        on_core=True,
    )
    draw = one_draw(job, 0)
    assert draw.whole
    assert draw.trip == ""
    assert draw.motors["vent"].overload == pytest.approx(used, rel=0.01)


def test_a_night_of_many_cycles_is_followed_only_until_it_repeats() -> None:
    """Ten million cycles at once: what repeats is passed over, and the count and time come out all the same."""
    steps, bench = sequence(CYCLES.format(keys="times: 10000000\n      " + CHECK.format(every=1000))), hot_bench()
    plan = compile_plan(steps, bench)
    cut = cut_of(steps, lambda one: compile_plan(one, bench).totals.least / 1000.0)
    assert cut is not None
    assert cut.block is not None
    setup = drawn_setup(belief_of(bench), None)
    cold = play(compile_plan(cut.cold, bench), bench, setup, seed=4, on_core=ON_CORE)
    night = follow(cut.block, plan.cycles[0], cold, None, {"vent": setup.plant.axes[0].motor})
    assert (night.passes, night.checks) == (10_000_000, 10_001)
    assert plan.totals.least / 1000.0 <= night.elapsed_s <= 1.1 * plan.totals.least / 1000.0


def test_what_is_not_periodic_is_not_cut() -> None:
    bench = load_bench(VENT)

    def least_s(one: Sequence) -> float:
        return compile_plan(one, bench).totals.least / 1000.0

    assert cut_of(sequence(SHORT), least_s) is None
    assert cut_of(sequence(PASSES.format(often="times: 4")), least_s) is None
    assert cut_of(sequence(PASSES.format(often="times: 400")), least_s) is not None


def test_periodic_heat_is_that_of_many_passes() -> None:
    square = np.concatenate([np.full(300, 2.0), np.zeros(200)])
    many = heat_a2(np.tile(square, 50), 0.01, 20.0)
    assert periodic_heat_a2(square, 0.01, 20.0, 50) == pytest.approx(float(many[-500:].max()), rel=1e-9)
    # cold: theta = I^2 (1 - e^(-t/tau)), the form of IEC 60255-149
    constant = heat_a2(np.full(1000, 4.0), 0.01, 20.0)
    assert constant[-1] == pytest.approx(4.0 * (1.0 - math.exp(-0.5)), rel=1e-9)


# ---- core and mock, seeds, cores -----------------------------------------------------------------------------------


@pytest.mark.skipif(not ON_CORE, reason="there is no C compiler")
def test_core_and_mock_show_the_same() -> None:
    steps, bench = sequence(SHORT), drawn_bench(3).bench
    core = what_happens(steps, bench, seed=9, on_core=True)
    mock = what_happens(steps, bench, seed=9, on_core=False)
    assert core_is_there(belief_of(bench).setup)
    for name in ("peak_a", "lasting_a", "speed_rad_s", "square_a2", "duty", "winding_c"):
        np.testing.assert_allclose(
            getattr(core.motors["vent"], name), getattr(mock.motors["vent"], name), rtol=1e-9, atol=1e-12
        )
    np.testing.assert_allclose(core.bus_high_v, mock.bus_high_v, rtol=1e-12)
    np.testing.assert_allclose(core.energy_j, mock.energy_j, rtol=1e-9, atol=1e-12)


def test_the_same_seed_gives_the_same_forecast_on_any_number_of_cores() -> None:
    steps, bench = sequence(SHORT), load_bench(VENT)
    one = forecast(steps, bench, ForecastWish(draws=20, workers=1))
    two = forecast(steps, bench, ForecastWish(draws=20, workers=2))
    other = forecast(steps, bench, ForecastWish(draws=20, workers=1, seed=2))
    assert one.to_json() == two.to_json()
    assert one.values != other.values


# ---- what is told --------------------------------------------------------------------------------------------------


def vent_with(tmp_path: Path, before: str, after: str) -> Bench:
    """The vent's bench with a part of its file replaced."""
    text = VENT.read_text("utf-8")
    assert before in text
    path = tmp_path / "bench.yaml"
    path.write_text(text.replace(before, after), "utf-8")
    return load_bench(path)


def margin_of(found: Forecast, name: str) -> str:
    """The verdict on a limit."""
    return next(one.verdict for one in found.margins if one.name == name)


def test_limits_that_do_not_fit_are_named_with_the_step(tmp_path: Path) -> None:
    steps = sequence(SHORT)
    wish = ForecastWish(draws=20, workers=1)
    loose = forecast(steps, load_bench(VENT), wish)
    assert margin_of(loose, "current trip") == "loose"
    assert not loose.trip.times
    tight = forecast(steps, vent_with(tmp_path, "speed: 75 rpm", "speed: 45 rpm"), wish)
    found = next(one for one in tight.margins if one.name == "speed trip")
    assert found.verdict == "tight"
    assert found.step.startswith("line ")
    assert "the speed trip of vent" in tight.sentence


def test_a_run_that_always_trips_gives_no_numbers(tmp_path: Path) -> None:
    bench = vent_with(tmp_path, "speed: 75 rpm", "speed: 20 rpm")
    with pytest.raises(NotMeasurable, match="overspeed"):
        forecast(sequence(SHORT), bench, ForecastWish(draws=20, workers=1))


FAST_FALL = """
sequence: fast fall
steps:
  - repeat:
      times: {times}
      steps:
        - ramp: {{motor: vent, to: 70 %, in: 800 ms}}
        - hold: 500 ms
        - coast: {{motor: vent, in: 40 ms}}
        - hold: 500 ms
"""


@pytest.mark.parametrize("times", [1, 40])
def test_a_supply_that_shuts_down_is_an_end_like_a_trip(tmp_path: Path, times: int) -> None:
    bench = vent_with(tmp_path, "fall: 100 %/s", "fall: 2000 %/s")
    fast = sequence(FAST_FALL.format(times=times))
    with pytest.raises(NotMeasurable, match="come to their end: overvoltage"):
        forecast(fast, bench, ForecastWish(draws=20, workers=1))
    path = tmp_path / "bench.yaml"
    path.write_text(path.read_text("utf-8").replace("9 V to 16 V", "9 V to 24 V"), "utf-8")
    with pytest.raises(NotMeasurable, match="come to their end"):
        forecast(fast, load_bench(path), ForecastWish(draws=20, workers=1))


def test_measured_constants_take_the_place_of_the_model(tmp_path: Path) -> None:
    text = VENT.read_text("utf-8") + (
        "measured:\n  vent:\n    constants:\n      date: '2026-03-01'\n      board: 'mock'\n      run: 'r1'\n"
        "      values:\n        resistance_20: 2.60 ohm +- 0.02 ohm (95 %, dof 42)\n"
        "        constant: 0.0195 V*s +- 0.0001 V*s (95 %)\n"
    )
    path = tmp_path / "bench.yaml"
    path.write_text(text, "utf-8")
    bench = load_bench(path)
    known: Known = figures_of(bench, bench.motors[0])
    assert known.measured == {"resistance_20", "constant"}
    assert known.figures["resistance_20"].value == pytest.approx(2.6)
    assert known.figures["resistance_20"].expanded() == pytest.approx(0.02)
    assert "measured on 2026-03-01" in known.source
    assert "from the model, assumed" in known.source
    bare = dataclasses.replace(bench.motors[0], model=None)
    with pytest.raises(NotMeasurable, match="lack coulomb"):
        figures_of(bench, bare)


def test_odds_and_intervals() -> None:
    # Clopper and Pearson: 0 of 200 is below 1 - 0.025^(1/200) = 1.828 %
    none = Odds.count(0, 200)
    assert none.low == 0.0
    assert none.high == pytest.approx(1.0 - 0.025 ** (1 / 200), rel=1e-9)
    assert str(Odds.count(200, 200)).startswith("100 % (200 of 200 draws; between 98 % and 100 %)")
    assert str(Odds.count(200, 201)).startswith("100 % (200 of 201 draws; between 97 % and 100 %)")
    interval = Interval.of([float(value) for value in range(1, 200)], "s")
    assert (interval.low, interval.median, interval.high) == pytest.approx((5.0, 100.0, 195.0))
    assert interval.coverage == 0.95
    assert str(Interval(2e-14, 0.0, 1.4e-12, "J")) == "0 J in every draw"
    few = Interval.of([float(value) for value in range(1, 22)], "s")
    assert (few.low, few.median, few.high) == pytest.approx((1.0, 11.0, 21.0))
    assert few.coverage == pytest.approx(20 / 22), "a further draw is one of 22 alike, and an extreme in two cases"
    assert str(Interval(30381.2, 30380.9, 30382.6, "s")) == "8 h 26 min in every draw"
    assert str(Interval(30381.2, 29100.0, 31000.0, "s")) == "8 h 26 min (8 h 5 min to 8 h 37 min)"
    assert str(Interval(32.13, 32.13, 32.24, "s")) == "32.13 s (32.13 to 32.24)"


@pytest.mark.parametrize(
    ("wish", "message"),
    [
        (ForecastWish(draws=3), "3 draws: at least 20"),
        (ForecastWish(draws=10**9), "at most 100000"),
        (ForecastWish(seed=-1), "a seed of -1: 0 or more"),
        (ForecastWish(workers=0), "0 processes: at least 1"),
        (ForecastWish(most_s=math.nan), "within nan s: more than 0 s"),
    ],
)
def test_a_wish_that_makes_no_sense_is_refused(wish: ForecastWish, message: str) -> None:
    with pytest.raises(UsageError, match=message):
        forecast(sequence(SHORT), load_bench(VENT), wish)


def test_limits_of_a_motor_that_the_run_does_not_move_are_not_called_loose() -> None:
    pair = read_pair(VENT.parent / "latch_check.yaml", bench=None, values={})
    job = Job(
        bench=pair.bench, belief=belief_of(pair.bench), cold=compile_plan(pair.sequence, pair.bench), hot=None,
        cut=None, part=None, seed=1, on_core=ON_CORE,
    )  # fmt: skip
    found = margins(pair.bench, [one_draw(job, 0)], tick_us=1000)
    assert [(one.name, one.used_high, one.verdict) for one in found if one.subject == "vent"] == [
        ("current trip", 0.0, "fits"), ("overload trip", 0.0, "fits"), ("speed trip", 0.0, "fits")
    ]  # fmt: skip


@pytest.mark.skipif(not ON_CORE, reason="without a C compiler a run of 20 s takes long")
def test_a_supply_that_an_overvoltage_has_shut_down_uses_nothing_of_its_lower_limit() -> None:
    pair = read_pair(VENT.parent / "jammed_vent.yaml", bench=None, values={})
    setup = drawn_setup(belief_of(pair.bench), np.random.default_rng([1, 3]))
    found = play(compile_plan(pair.sequence, pair.bench), pair.bench, setup, seed=4)
    assert found.tripped.startswith("overvoltage")
    assert found.bus_high_v.max() > 16.0
    assert found.bus_low_v.min() > 11.0


def pattern(*parts: tuple[float, float]) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    """A duty: pairs of value and seconds, a value each 10 ms."""
    return np.concatenate([np.full(round(seconds * 100), value) for value, seconds in parts])


def test_duty_types() -> None:
    def word(duty: np.ndarray[tuple[int, ...], np.dtype[np.float64]], *, periodic: bool, brakes: bool = False) -> str:
        square = duty**2
        return duty_type(duty, square, 0.01, tau_s=60.0, periodic=periodic, brakes=brakes).word

    assert word(pattern((0.5, 300.0)), periodic=False) == "S1"
    assert word(pattern((0.0, 10.0), (0.5, 30.0), (0.0, 300.0)), periodic=False) == "S2"
    assert word(pattern((0.5, 60.0), (0.0, 90.0)), periodic=True) == "S3"
    assert word(pattern((0.5, 60.0), (0.0, 90.0)), periodic=True, brakes=True) == "S5"
    assert word(pattern((0.6, 60.0), (0.1, 60.0)), periodic=True) == "S6"
    assert word(pattern((0.6, 60.0), (0.4, 60.0)), periodic=True) == "S8"
    assert word(pattern((0.3, 5.0), (0.6, 9.0), (0.0, 4.0), (0.4, 7.0)), periodic=False) == "S9"
    ramps = np.concatenate([np.linspace(0.0, 0.6, 200), np.full(100, 0.6), np.linspace(0.6, 0.0, 200), np.zeros(300)])
    assert word(ramps, periodic=True) == "S4"
    found = duty_type(pattern((0.5, 6.0), (0.0, 9.0)), pattern((1.0, 6.0), (0.0, 9.0)), 0.01, tau_s=60, periodic=True)
    assert "S2 120 min" in duty_type(pattern((0.5, 7200.0), (0.0, 9.0)), pattern((0.5, 7200.0), (0.0, 9.0)), 0.01,
                                     tau_s=9000.0, periodic=False).why  # fmt: skip
    assert found.factor == pytest.approx(0.4)
    assert "40 %" in found.why


def test_the_command_prints_text_and_json(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "short.yaml"
    path.write_text(SHORT, "utf-8")
    words = ["forecast", str(path), "--bench", str(VENT), "--draws", "20", "--workers", "1"]
    assert main(words) == 1, "the upper limit of the supply is too tight for this fall"
    text = capsys.readouterr().out
    assert "with assumed uncertainties" in text
    assert "no draw trips; too tight: the upper limit of supply" in text.splitlines()[-1]
    assert "TOO TIGHT for line 7" in text
    assert main([*words, "--json"]) == 1
    told = json.loads(capsys.readouterr().out)
    assert told["odds"]["trip"]["times"] == 0
    assert told["values"]["vent.peak_current"]["low"] < told["values"]["vent.peak_current"]["high"]
