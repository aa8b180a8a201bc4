"""The ATmega328P firmware on the emulated board: boot, resets, trips, encoder, line faults, logging, the store."""

from __future__ import annotations

from pathlib import Path

import pytest
from dev.emulated_board import EmulatedBoard, eeprom_image

from avr_builds import WHY_NOT, emulator, program
from ramprig_link.samples import decode_data

ALL_CHANNELS = 0x53007
"""Duty, counts and current of the axis, both servos, supply and state."""

pytestmark = [pytest.mark.skipif(bool(WHY_NOT), reason=WHY_NOT), pytest.mark.process]


def board(**options: object) -> EmulatedBoard:
    return EmulatedBoard(emulator(), program(), **options)  # type: ignore[arg-type]  # passed on as given


def started(**options: object) -> EmulatedBoard:
    """A board past its start, its shaft and supply by a script, its trips out of the way."""
    made = board(**options)
    made.command("script 0 0 12000")
    made.run_us(150_000)
    return made


def driving(*, lease_ms: int = 500) -> EmulatedBoard:
    """A board that drives its bridge forward, with no encoder to be judged by."""
    made = started()
    for name, value in (("sense", 0), ("stall_duty", 0), ("lease_ms", 5000)):
        made.set_limit(name, value)
    assert made.arm(lease_ms)[0] == "ok"
    assert made.ask(f"ramp 0 2000 0 {made.tick() + 40}")[0] == "ok"
    made.run_us(300_000)
    assert made.probe()["duty"] == pytest.approx(2000, abs=40)
    return made


def notices(made: EmulatedBoard) -> list[str]:
    """Words and fields of the notices so far, without number and tick."""
    split = [line.split(" ") for line in made.lines if line.startswith("N")]
    return [" ".join([fields[1], *fields[3:]]) for fields in split]


def test_at_power_on_every_output_is_off_from_the_first_microseconds() -> None:
    with board() as made:
        for _ in range(40):
            made.run_us(25)
            found = made.probe()
            assert (found["enabled"], found["duty"], found["pulse0_half_us"], found["pulse1_half_us"]) == (0, 0, 0, 0)
        made.run_us(20_000)
        assert notices(made) == ["boot 1 power"]


@pytest.mark.parametrize(
    ("cause", "expected"),
    [
        ("power", ["boot 1 power"]),
        ("external", ["boot 1 external"]),
        ("brownout", ["boot 1 brownout", "trip restarted 0 2 0", "off tripped"]),
        ("watchdog", ["boot 1 watchdog", "trip restarted 0 3 0", "off tripped"]),
    ],
)
def test_the_cause_of_a_reset_is_told(cause: str, expected: list[str]) -> None:
    with board(cause=cause) as made:
        made.run_us(30_000)
        assert notices(made) == expected


def test_a_brownout_while_driving_switches_off_and_trips_and_counts_the_boot() -> None:
    with driving() as made:
        made.lines.clear()
        made.command("reset brownout")
        assert made.probe()["enabled"] == 0
        made.run_us(40_000)
        assert notices(made) == ["boot 2 brownout", "trip restarted 0 2 0", "off tripped"]
        assert made.probe()["duty"] == 0


def test_overcurrent_switches_the_bridge_off_within_a_tick_of_its_last_reading() -> None:
    with driving() as made:
        made.set_limit("trip_ticks", 1)
        made.lines.clear()
        made.command("script 0 5000 12000")
        made.command("mark")
        made.run_us(20_000)
        found = made.probe()
        assert found["marked"] == 0
        assert found["enabled"] == 0
        # the converter's round (520 us) until a mean holds the new current, then one tick
        assert found["off_us"] <= 1000 + 520 + 500
        assert [line for line in notices(made) if line.startswith("trip overcurrent")]


def test_the_bridge_is_off_within_the_tick_that_reads_an_overcurrent() -> None:
    """The reading is written between two ticks; the tick's work is done within its budget of 400 us."""
    with EmulatedBoard(emulator(), program(scripted=True)) as made:
        made.run_us(150_000)
        for name, value in (("sense", 0), ("stall_duty", 0), ("trip_ticks", 1)):
            made.set_limit(name, value)
        assert made.ask("log 1 7 packed")[0] == "ok"
        made.arm()
        made.ask(f"ramp 0 2000 0 {made.tick() + 40}")
        made.run_us(250_000)
        tick_us = made.probe()["tick_cycle"] // 16
        made.run_us((tick_us + 900 - made.now_us) % 1000)
        made.command("set scripted_current_ma 2 5000")
        assert made.probe()["enabled"] == 1
        ticks = made.probe()["ticks"]
        made.run_us(500)  # the next tick, up to its 400th us
        found = made.probe()
        assert found["ticks"] == ticks + 1
        assert (found["enabled"], found["duty"]) == (0, 0)


def test_a_break_stops_below_the_parser() -> None:
    with driving() as made:
        made.lines.clear()
        made.run_us(0, b"02 ramp 0 100")  # half a line
        made.command("break")
        made.command("mark")
        made.run_us(20_000)
        assert made.probe()["off_us"] <= 2_500
        assert notices(made)[:2] == ["trip line_break 0 0 0", "off tripped"]


def test_a_lost_link_stops_in_order() -> None:
    with driving() as made:
        made.run_us(800_000)
        assert [line for line in notices(made) if line.startswith(("trip", "stop", "off"))] == [
            "trip link_lost 0 500 500",
            "stop 1 trip",
            "off tripped",
        ]
        assert made.probe()["enabled"] == 0


def test_the_two_bridge_inputs_are_never_driven_at_once() -> None:
    with driving(lease_ms=5000) as made:
        assert made.ask(f"ramp 0 -2000 300 {made.tick() + 40}")[0] == "ok"
        made.run_us(1_500_000)
        found = made.probe()
        assert found["duty"] == pytest.approx(-2000, abs=40)
        assert found["both"] == 0


def test_servo_pulses_have_half_microsecond_steps() -> None:
    with started() as made:
        made.arm()
        assert made.ask(f"swing 1 1501 1 {made.tick() + 40}")[0] == "ok"
        seen = set()
        for _ in range(240):
            made.run_us(250)  # a step lasts one tick, give or take when in it the work is done
            seen.add(made.probe()["pulse1_half_us"])
        assert {3000, 3001, 3002} <= seen
        assert made.probe()["pulse0_half_us"] == 0


@pytest.mark.parametrize(
    ("current_ma", "supply_mv"), [(0, 12000), (4, 9000), (-4, 11988), (1000, 15000), (-7000, 21400)]
)
def test_current_and_supply_are_read_as_the_chips_converter_has_them(current_ma: int, supply_mv: int) -> None:
    """Code = V x 1024 / reference, rounded down (ATmega328P data sheet, "ADC conversion result"); scales of board.h."""
    with started() as made:
        made.command(f"script 0 {current_ma} {supply_mv}")
        made.run_us(20_000)
        fields = made.ask("state")
        current_code = (2_500_000 + 185 * current_ma) * 1024 // 5_000_000
        supply_code = supply_mv * 10_000 // 43 * 1024 // 5_000_000
        assert int(fields[9]) == (current_code - 512) * 27_027 // 1024
        assert int(fields[5]) == supply_code * 21_500 // 1024


def test_a_servo_at_the_pins_turns_as_far_as_its_pulse_says() -> None:
    """At its end stop it would draw 0.7 A for ever, through the supply's 0.15 ohm; at rest it draws 8 mA."""
    with board() as made:
        made.run_us(150_000)
        at_rest_mv = int(made.ask("state")[5])
        made.arm()
        made.ask(f"swing 0 1700 1 {made.tick() + 40}")
        for _ in range(20):
            made.run_us(30_000)
            made.ask("beat")
        assert made.probe()["pulse0_half_us"] == 3400
        assert int(made.ask("state")[5]) >= at_rest_mv - 21  # a step of the converter


def test_no_count_is_lost_at_40000_counts_a_second_with_logging_on() -> None:
    with started() as made:
        assert made.ask("log 1 7 packed")[0] == "ok"
        before = int(made.ask("state")[8])
        pins_before = made.probe()["counts"]
        for counts_per_s in (40_000, -40_000, 40_000):
            made.command(f"script {counts_per_s} 300 12000")
            made.run_us(400_000)
        made.command("script 0 0 12000")
        made.run_us(20_000)
        turned = made.probe()["counts"] - pins_before
        assert turned == pytest.approx(16_000, abs=10)
        assert int(made.ask("state")[8]) - before == turned
        assert made.ask("counters")[-1] == "0"  # illegal transitions


def test_500_samples_a_second_at_115200_baud_arrive_whole_with_all_channels() -> None:
    with started() as made:
        made.command("script 8000 400 12000")
        first = int(made.ask(f"log 2 {ALL_CHANNELS} packed")[2])
        made.lines.clear()
        made.run_us(2_000_000)
        ended = made.ask("log 0 0 packed")
        made.run_us(30_000)
        blocks = [decode_data(line[4:]) for line in made.lines if line.startswith("D")]
        ticks = [block.first_tick + 2 * row for block in blocks for row in range(block.rows)]
        assert ticks == list(range(first, first + 2 * int(ended[3]), 2))
        assert len(ticks) >= 1000
        assert made.ask("counters")[-2] == "0"  # dropped
        assert made.garbled == 0


def test_1000_samples_a_second_of_a_moving_motor_arrive_whole() -> None:
    with started() as made:
        made.command("script 40000 300 12000")
        assert made.ask("log 1 7 packed")[0] == "ok"
        made.run_us(1_000_000)
        made.ask("log 0 0 packed")
        assert made.ask("counters")[-2] == "0"


def test_a_framing_error_spoils_its_line_and_nothing_else() -> None:
    with started() as made:
        made.lines.clear()
        made.run_us(0, b"0a be")
        made.command("framing 97")
        made.run_us(20_000, b"t 1234\n")
        assert notices(made) == ["garbled 1"]
        assert made.ask("beat")[0] == "ok"


def test_noise_on_the_line_leads_to_refusals_never_to_a_wrong_order() -> None:
    with started() as made:
        made.command("noise 40")
        for _ in range(60):
            made.run_us(8_000, b"07 limit trip_ma 0 1999 0000\n")  # a wrong check, with and without noise
        made.command("noise 0")
        made.run_us(10_000, b"\n")
        assert made.ask("limit trip_ma 0")[2] == "2000"
        assert int(made.ask("counters")[3]) >= 50


def test_a_lost_encoder_trips_as_a_stall() -> None:
    with started() as made:
        made.set_limit("stall_ticks", 100)
        made.arm()
        made.ask(f"ramp 0 2000 0 {made.tick() + 20}")
        made.command("lost_encoder 1")
        made.command("script 3000 200 12000")
        for _ in range(8):
            made.run_us(60_000)
            made.ask("beat")
        assert "trip stall 0 2000 100" in notices(made)
        assert made.probe()["enabled"] == 0


def test_limits_survive_power_off(tmp_path: Path) -> None:
    image = tmp_path / "eeprom"
    image.write_bytes(eeprom_image(41, {0: 700}))  # place 0 is lease_ms
    with started(eeprom=image) as made:
        assert notices(made) == ["boot 42 power"]
        assert made.ask("limit lease_ms 0")[2] == "700"
        made.set_limit("trip_ma", 1234)
        made.run_us(100_000)
        made.command("reset power")
        made.run_us(40_000)
        assert made.ask("limit trip_ma 0")[2] == "1234"
        assert made.ask("limit lease_ms 0")[2] == "700"


@pytest.mark.parametrize("cut_us", [2_000, 9_000, 15_000, 19_500, 22_000, 26_000, 60_000])
def test_power_cut_while_a_limit_is_written_leaves_the_old_or_the_new(cut_us: int) -> None:
    with started() as made:
        made.set_limit("trip_ma", 1500)
        made.run_us(100_000)
        made.set_limit("trip_ma", 1600)
        made.run_us(cut_us)
        made.command("reset power")
        made.run_us(40_000)
        assert made.ask("limit trip_ma 0")[2] in ("1500", "1600")
