"""What the simulated board sees: encoder counts, motor current, and both with faults."""

from __future__ import annotations

import math
import random
import statistics

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.mock.plant import (
    VENT_BENCH,
    CurrentSensor,
    Encoder,
    EncoderParameters,
    Plant,
    PlantFault,
    QuadratureDecoder,
    SensorParameters,
    set_fault,
)
from ramprig.mock.plant.sensors import GRAY_UP, X4_STEPS

# ---- x4 decoding --------------------------------------------------------------------------------------------------

# TI eQEP truth table, SPRUIX1B table 15-3: previous edge, present edge, direction of the count. Up is +1.
TI_ROWS = [
    ("A rises", "B rises", +1),
    ("A rises", "B falls", -1),
    ("A rises", "A falls", None),  # the direction turns round
    ("A falls", "B falls", +1),
    ("A falls", "B rises", -1),
    ("A falls", "A rises", None),
    ("B rises", "A rises", -1),
    ("B rises", "A falls", +1),
    ("B falls", "A falls", -1),
    ("B falls", "A rises", +1),
]


def edge(state: int, name: str) -> int | None:
    """The state (A is bit 1, B bit 0) after an edge, None where that edge is impossible."""
    bit = 2 if name[0] == "A" else 1
    rises = name.endswith("rises")
    if bool(state & bit) == rises:
        return None
    return state ^ bit


@pytest.mark.parametrize(("first", "second", "direction"), TI_ROWS)
def test_decoder_follows_the_truth_table(first: str, second: str, direction: int | None) -> None:
    tried = 0
    for start in range(4):
        middle = edge(start, first)
        end = None if middle is None else edge(middle, second)
        if middle is None or end is None:
            continue
        step_one = X4_STEPS[4 * start + middle]
        step_two = X4_STEPS[4 * middle + end]
        assert step_one is not None
        assert step_two is not None
        if direction is None:
            assert step_two == -step_one
            tried += 1
        elif step_one == step_two:  # the same direction twice: the table's row
            assert step_two == direction
            tried += 1
    assert tried


def test_the_four_rows_misprinted_in_old_manuals_are_not_copied() -> None:
    # SPRUG05A, SPRUI07, SPNU562 and SPRUH22 print increment and decrement exchanged where the previous edge is B.
    decoder = QuadratureDecoder(a=False, b=True)
    assert decoder.step(True, True) == -1  # after B rose, A rises: down
    decoder = QuadratureDecoder(a=True, b=True)
    assert decoder.step(False, True) == +1  # after B rose, A falls: up
    decoder = QuadratureDecoder(a=True, b=False)
    assert decoder.step(False, False) == -1  # after B fell, A falls: down
    decoder = QuadratureDecoder(a=False, b=False)
    assert decoder.step(True, False) == +1  # after B fell, A rises: up


def test_a_line_is_four_counts_either_way() -> None:
    decoder = QuadratureDecoder()
    for state in (*GRAY_UP[1:], GRAY_UP[0]):
        decoder.step(bool(state & 2), bool(state & 1))
    assert decoder.count == 4
    for state in reversed(GRAY_UP):
        decoder.step(bool(state & 2), bool(state & 1))
    assert decoder.count == 0
    assert decoder.illegal == 0


@given(st.lists(st.sampled_from([-1, 0, 1]), max_size=200))
def test_any_legal_walk_counts_its_steps(walk: list[int]) -> None:
    decoder = QuadratureDecoder()
    position = 0
    for move in walk:
        position += move
        state = GRAY_UP[position & 3]
        assert decoder.step(bool(state & 2), bool(state & 1)) == position
    assert decoder.illegal == 0


@pytest.mark.parametrize("start", range(4))
def test_a_change_of_both_phases_counts_nothing_and_is_noticed(start: int) -> None:
    decoder = QuadratureDecoder(bool(start & 2), bool(start & 1))
    assert decoder.step(not start & 2, not start & 1) == 0
    assert decoder.illegal == 1


# ---- encoder ------------------------------------------------------------------------------------------------------

COUNT_RAD = math.tau / 64.0


def encoder() -> Encoder:
    return Encoder(EncoderParameters(lines=16), randomness=random.Random(5))


def test_counts_are_the_angle_rounded_down() -> None:
    found = encoder()
    angles = (0.0, 0.99, 1.01, -0.01, -1.01, 63.5, 64.5)
    assert [found.read(part * COUNT_RAD) for part in angles] == [0, 0, 1, -1, -2, 63, 64]


@pytest.mark.parametrize(("turns", "counts"), [(2**25, -(2**31)), (2**25 - 1, 2**31 - 64), (-(2**25) - 1, 2**31 - 64)])
def test_counter_wraps_at_32_bits(turns: int, counts: int) -> None:
    assert encoder().read(turns * math.tau + COUNT_RAD / 2) == counts


def test_swapped_phases_count_the_wrong_way_from_where_they_were() -> None:
    found = encoder()
    assert found.read(100.5 * COUNT_RAD) == 100
    found.phases_swapped = True
    assert found.read(110.5 * COUNT_RAD) == 90
    found.phases_swapped = False
    assert found.read(111.5 * COUNT_RAD) == 91


def test_dead_encoder_freezes_and_loses_what_it_missed() -> None:
    found = encoder()
    found.read(10.5 * COUNT_RAD)
    found.dead = True
    assert found.read(500.5 * COUNT_RAD) == 10
    found.dead = False
    assert found.read(501.5 * COUNT_RAD) == 11


def test_one_channel_alone_goes_to_and_fro_by_one() -> None:
    found = encoder()
    found.one_channel = True
    seen = [found.read((position + 0.5) * COUNT_RAD) for position in range(100)]
    assert set(seen) == {0, 1}
    assert seen[:8] == [0, 1, 1, 0, 0, 1, 1, 0]


def test_one_channel_agrees_with_the_decoder_fed_one_channel() -> None:
    found, decoder = encoder(), QuadratureDecoder()
    found.one_channel = True
    walk = random.Random(7)
    position = 0
    for _ in range(500):
        position += walk.choice((-1, 1))
        assert found.read((position + 0.5) * COUNT_RAD) == decoder.step(bool(GRAY_UP[position & 3] & 2), False)


def test_noisy_counts_differ_by_one_at_most_and_leave_no_error() -> None:
    found = encoder()
    found.noisy = True
    seen = {found.read(40.5 * COUNT_RAD) for _ in range(100)}
    assert seen == {39, 40, 41}
    found.noisy = False
    assert found.read(40.5 * COUNT_RAD) == 40


# ---- current sensor -----------------------------------------------------------------------------------------------


def sensor(**values: float) -> CurrentSensor:
    usual: dict[str, float] = {"offset_ma": 0.0, "noise_ma": 0.0}
    parameters = SensorParameters(**(usual | values))  # type: ignore[arg-type]  # whole numbers where asked for
    return CurrentSensor(parameters, randomness=random.Random(11))


def test_reading_is_signed_rounded_and_offset() -> None:
    assert [sensor().read(amps) for amps in (1.2344, 1.2346, -1.2344, -1.2346)] == [1234, 1235, -1234, -1235]
    assert sensor(offset_ma=-30.0).read(0.1) == 70
    assert [sensor(step_ma=10).read(amps) for amps in (0.124, 0.126, -0.124)] == [120, 130, -120]


def test_reading_saturates_within_its_range() -> None:
    found = sensor(range_ma=5001, step_ma=2, noise_ma=50.0)
    assert {found.read(9.0) for _ in range(50)} == {5000}
    assert {found.read(-9.0) for _ in range(50)} == {-5000}


def test_noise_has_the_mean_and_spread_it_says() -> None:
    found = sensor(noise_ma=20.0, offset_ma=5.0)
    seen = [found.read(1.0) for _ in range(20_000)]
    # Bounds: four standard errors for the seed's table of 4096 and 20000 draws from it.
    assert statistics.fmean(seen) == pytest.approx(1005.0, abs=4 * 20.0 * math.sqrt(1 / 4096 + 1 / 20_000))
    assert statistics.stdev(seen) == pytest.approx(20.0, rel=4 * math.sqrt(0.5 / 4096 + 0.5 / 20_000))
    assert max(seen) < 1005 + 5 * 20


def test_noise_is_drawn_only_when_read() -> None:
    often, seldom = Plant(seed=1), Plant(seed=1)
    readings = []
    for plant, every in ((often, 1), (seldom, 7)):
        for tick in range(70):
            plant.step()
            if tick % every == 0:
                readings.append(plant.read_current_ma(0))
    assert readings[:10] == readings[70:]


def test_the_same_seed_gives_the_same_readings() -> None:
    def readings(seed: int) -> list[tuple[int, int, int, int]]:
        plant = Plant(VENT_BENCH, seed=seed)
        set_fault(plant, PlantFault.NOISY_COUNTS)
        seen = []
        for tick in range(500):
            plant.axes[0].duty = 40 * (tick % 200) - 4000
            plant.step()
            seen.append(
                (plant.read_counts(0), plant.read_current_ma(0), plant.read_supply_mv(), plant.read_temperature_dc(0))
            )
        return seen

    assert readings(4) == readings(4)
    assert readings(4) != readings(5)


# ---- faults by name -----------------------------------------------------------------------------------------------


def after(fault: PlantFault | None, *, off_again: bool = False) -> tuple[int, float, float]:
    """Counts, current in A as read (without noise), and true speed, after 300 ms at 40 %."""
    plant = Plant(VENT_BENCH, seed=2)
    plant.sensors[0].noise_ma = 0.0
    if fault is not None:
        set_fault(plant, fault)
        if off_again:
            set_fault(plant, fault, on=False)
    plant.axes[0].duty = 4000
    for _ in range(300):
        plant.step()
        plant.read_counts(0)
    return plant.read_counts(0), plant.read_current_ma(0) / 1000.0, plant.axes[0].speed_rad_s


def test_each_fault_shows_as_what_it_is() -> None:
    counts, amps, speed = after(None)
    assert counts > 400
    assert after(PlantFault.PHASES_SWAPPED) == (-counts, amps, speed)
    turned_back, same_amps, back_speed = after(PlantFault.LEADS_SWAPPED)
    assert (turned_back, same_amps) == (-counts - 1, amps)
    assert back_speed == pytest.approx(-speed)
    assert after(PlantFault.ENCODER_DEAD) == (0, amps, speed)
    assert after(PlantFault.ONE_CHANNEL)[0] in (0, 1)
    assert abs(after(PlantFault.NOISY_COUNTS)[0] - counts) <= 1
    assert after(PlantFault.JAMMED)[0] == 0
    assert after(PlantFault.JAMMED)[1] > 5 * amps
    assert after(PlantFault.CURRENT_OFFSET)[1] == pytest.approx(amps + 0.350)


@pytest.mark.parametrize("fault", list(PlantFault))
def test_each_fault_can_be_switched_off_again(fault: PlantFault) -> None:
    assert after(fault, off_again=True) == after(None)
