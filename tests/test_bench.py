"""Bench files: every figure with its unit, limits in protocol units on the safe side, errors at the line, an echo."""

from __future__ import annotations

import re
from dataclasses import FrozenInstanceError
from fractions import Fraction
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from jsonschema import Draft202012Validator

from ramprig.bench import Bench, bench_of_text, bench_schema, duty_parts, echo_lines, load_bench
from ramprig.bench.limits import OFF_AT_ZERO
from ramprig.errors import FileError, UsageError
from ramprig.measure.tightening import tightened
from ramprig.mock.limits import OFF_AT_ZERO as BOARDS_OFF_AT_ZERO
from ramprig.quantity import DUTY, QuantityError, parse
from ramprig.yamlfile import Listing, Mapping, Node, Scalar, load_text
from ramprig_link.words import LIMITS, Per

VENT_FILE = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"

SMALL = """\
bench: small
port: {url: "mock:"}
board: {name: ramprig-mock, serial: any}
supply: {voltage: 12 V}
motors:
  vent:
    axis: 0
    gear: 50
    encoder: {lines: 12, decoding: x4, on: motor shaft, direction: same}
    rated: {current: 1 A}
    limits:
      duty: 80 %
      current: {at most: 3 A}
servos:
  latch:
    servo: 0
    neutral: 1500 us
    scale: 10 us/deg
    limits: {angle: -40 deg to 40 deg, slew: 60 deg/s}
"""


def small(old: str = "", new: str = "") -> Bench:
    """The small bench with one piece of its text replaced."""
    assert old in SMALL
    return bench_of_text(SMALL.replace(old, new, 1) if old else SMALL, "b.yaml")


def refusal(old: str, new: str) -> FileError:
    with pytest.raises(FileError) as caught:
        small(old, new)
    assert caught.value.place is not None
    return caught.value


@pytest.fixture(scope="module")
def vent() -> Bench:
    return load_bench(VENT_FILE)


def test_the_ready_bench_gives_every_limit_in_protocol_units(vent: Bench) -> None:
    assert vent.limits() == {
        ("lease_ms", 0): 500,
        ("stop_ticks", 0): 1000,
        ("under_mv", 0): 9000,
        ("over_mv", 0): 16000,
        ("supply_ticks", 0): 5,
        ("ceiling_duty", 0): 8000,  # 80 %
        ("slew_up_duty", 0): 10,  # 100 %/s is 0.1 % a millisecond
        ("slew_down_duty", 0): 10,  # 100 %/s
        ("dwell_ticks", 0): 300,
        ("still_counts", 0): 2,
        ("still_ticks", 0): 50,
        ("sense", 0): 1,
        ("trip_ma", 0): 2500,
        ("trip_ticks", 0): 5,
        ("offset_ma", 0): 4,
        ("rated_ma", 0): 900,
        ("thermal_s", 0): 60,
        ("stall_duty", 0): 1500,
        ("stall_counts", 0): 4,
        ("stall_ticks", 0): 300,
        ("wrong_counts", 0): 24,
        ("speed_counts", 0): 230,  # 75 rpm x 5760 counts / 60 s x 32 ms = 230.4
        ("pulse_min_us", 0): 1100,
        ("pulse_max_us", 0): 1900,
        ("pulse_slew_ns", 0): 600,  # 60 deg/s x 10 us/deg = 0.6 us a millisecond
        ("pulse_home_us", 0): 1500,
    }


def test_the_ready_bench_keeps_its_bytes_and_what_else_it_says(vent: Bench) -> None:
    assert vent.file_bytes == VENT_FILE.read_bytes()
    assert len(vent.digest_of_file) == 64
    assert vent.board.matches("ramprig-mock", "MOCK-0001")
    assert not vent.board.matches("other", "MOCK-0001")
    assert vent.safety.missing() == ("contact", "place"), "what stands in <...> is to be filled in"
    assert (vent.port.url, vent.port.baud, vent.port.dtr) == ("mock:", 115200, "leave")
    assert vent.log.period_s == 0.01
    with pytest.raises(FrozenInstanceError):
        vent.name = "other"  # type: ignore[misc]  # that is what is tested


def test_limits_come_in_the_order_of_the_digest_for_the_board_that_is_there() -> None:
    limits = small().limits(axes=2, servos=2)
    numbers = [(LIMITS[name].number, index) for name, index in limits]
    assert numbers == sorted(numbers)
    per_axis = sum(limit.per is Per.AXIS for limit in LIMITS.values())
    per_servo = sum(limit.per is Per.SERVO for limit in LIMITS.values())
    assert len(limits) == len(LIMITS) + per_axis + per_servo


def test_an_axis_that_the_bench_does_not_name_cannot_be_driven() -> None:
    assert small().limits(axes=3)["ceiling_duty", 2] == 0
    assert small().limits(axes=3)["ceiling_duty", 0] == 8000


def test_what_is_not_said_has_the_protocols_default() -> None:
    limits = small().limits()
    for name in ("slew_up_duty", "dwell_ticks", "stall_duty", "speed_counts", "over_mv", "lease_ms", "offset_ma"):
        assert limits[name, 0] == LIMITS[name].default


def test_the_default_stall_duty_stays_below_a_low_ceiling() -> None:
    assert small("duty: 80 %", "duty: 10 %").limits()["stall_duty", 0] == 1000


@pytest.mark.parametrize(
    ("said", "item", "number"),
    [
        ("slew: 33 %/s", "slew_up_duty", 3),  # lower is tighter
        ("dwell: 300.2 ms", "dwell_ticks", 301),  # higher is tighter
        ("standstill: {within: 2 counts, for: 50.5 ms}", "still_ticks", 51),
        ("stall: {duty: 20 %, within: 99.9 ms}", "stall_ticks", 99),
        ("stall: off", "stall_duty", 0),
        ("fall: 99 %/s", "slew_down_duty", 9),
    ],
)
def test_a_limit_is_rounded_to_the_tighter_side(said: str, item: str, number: int) -> None:
    assert small("duty: 80 %", f"duty: 80 %\n      {said}").limits()[item, 0] == number


@given(st.integers(min_value=200, max_value=5000), st.integers(min_value=1, max_value=200))
def test_a_limit_never_gets_looser_than_the_file_says(tick_us: int, times: int) -> None:
    bench = small("duty: 80 %", f"duty: 80 %\n      slew: {60 * times} %/s\n      dwell: {times}.5 ms")
    limits = bench.limits(tick_us=tick_us)
    assert limits["slew_up_duty", 0] * 1_000_000 <= 6000 * times * tick_us
    assert limits["dwell_ticks", 0] * tick_us >= times * 1000 + 500


def test_ticks_follow_the_boards_own_tick() -> None:
    limits = small("duty: 80 %", "duty: 80 %\n      dwell: 300 ms\n      slew: 100 %/s").limits(tick_us=500)
    assert (limits["dwell_ticks", 0], limits["slew_up_duty", 0]) == (600, 5)
    assert limits["pulse_slew_ns", 0] == 300


# What is replaced by what, the line of the error, a part of its message, and whether the JSON Schema refuses it too:
# what is wrong only beside another value, or by its size, is the reader's alone to refuse.
REFUSALS = [
    ("lines: 12", "cpr: 48", 9, "unknown key 'cpr' in 'encoder'; known keys: lines, decoding, on, direction", True),
    ("decoding: x4", "decoding: x2", 9, "the board counts every edge: write x4", False),
    (", decoding: x4", "", 9, "'decoding' is missing in 'encoder'", True),
    ("12 V", "12", 4, "found '12' without a unit; a voltage has its unit, V or mV: as in '12 V'", True),
    ("12 V", "24 V", 4, "found '24 V' and no 'allowed'; add it, such as 'allowed: 20 V to 28 V'", False),
    ("12 V", "12 V, allowed: 13 V to 16 V", 4, "the voltage, 12 V, lies outside '13 V to 16 V'", False),
    ("12 V", "12 V, allowed: at least 9 V", 4, "without an upper limit; as in '9 V to 16 V'", False),
    ("duty: 80 %", "duty: 140 %", 12, "found '140 %' for 'duty'; it must lie in 0 % to 100 %", False),
    ("duty: 80 %", "dutty: 80 %", 12, "unknown key 'dutty' in 'limits'; did you mean 'duty'?", True),
    ("duty: 80 %", "duty: 80 %\n      duty: 90 %", 13, "the key 'duty' stands twice", False),
    (
        "duty: 80 %",
        "duty: 80 %\n      slew: 1 %/s",
        13,
        "'1 %/s', beyond what a board can keep; the protocol's slew_up",
        False,
    ),
    ("duty: 80 %", "duty: 80 %\n      dwell: 2 min", 13, "dwell_ticks takes 1 ms to 1 min", False),
    ("duty: 80 %", "duty: 80 %\n      stall: {duty: 90 %, within: 1 s}", 13, "above the ceiling of the duty", False),
    ("at most: 3 A", "at most: 0.5 A", 13, "found '0.5 A', below the rated current; at least 1 A", False),
    ("at most: 3 A", "at most: 3 V", 13, "found '3 V', which is a voltage; a current is wanted", True),
    ("gear: 50", "gear: 0", 8, "a ratio must be greater than 0", True),
    ("axis: 0", "axis: 9", 7, "found 9 for 'axis'; it must lie in 0 to 3", True),
    ("-40 deg to 40 deg", "-200 deg to 40 deg", 19, "'-200 deg to 40 deg' asks for a pulse of -500 us", False),
    ("angle: -40 deg to 40 deg, ", "", 19, "the limits need either 'angle' or 'pulse'", False),
    ("-40 deg to 40 deg", "at least 3 deg", 19, "a range is wanted here, with 'to'", True),
    ("10 us/deg", "0 us/deg", 18, "it must differ from 0", False),
    (
        "10 us/deg",
        "10 us/deg\n    home: 60 deg",
        19,
        "home, 60 deg, lies outside the limits; its pulse is 2100 us",
        False,
    ),
    ("  latch:", "  vent:", 16, "'vent' is a motor and a servo", False),
    ("port: {url: ", "port: {usb serial: x, url: ", 2, "the port is named 2 times", False),
    ("serial: any", "serial: a b", 3, "found 'a b' for 'serial'; 1 to 24 of A-Z", True),
    ("bench: small", "bench: small\nmock: {faults: [jammed, Bad]}", 2, "found 'Bad'", True),
    ("bench: small", "bench: small\nmock: {faults: [{fault: jammed, motor: vant}]}", 2, "did you mean 'vent'?", False),
    ("bench: small", "bench: small\nlink: {lease: 20 ms}", 2, "it must lie in 50 ms to 5 s", False),
]


@pytest.mark.parametrize(("old", "new", "line", "message", "by_schema"), REFUSALS)
def test_what_does_not_fit_is_refused(old: str, new: str, line: int, message: str, by_schema: bool) -> None:
    error = refusal(old, new)
    assert message in str(error)
    assert error.place is not None
    assert error.place.line == line
    if "stands twice" not in message:  # to a schema, the file is no file yet
        tree = as_editors_see(load_text(SMALL.replace(old, new, 1), "f"))
        assert Draft202012Validator(bench_schema()).is_valid(tree) is not by_schema


def test_two_motors_on_one_axis_are_refused() -> None:
    start, end = SMALL.index("  vent:"), SMALL.index("servos:")
    twice = SMALL[:end] + SMALL[start:end].replace("vent:", "other:") + SMALL[end:]
    with pytest.raises(FileError, match=r"'other' and 'vent' are both on axis 0; 'vent' is in line 7"):
        bench_of_text(twice)


def test_a_motor_without_an_encoder_needs_a_dwell_of_its_own() -> None:
    encoder = "{lines: 12, decoding: x4, on: motor shaft, direction: same}"
    assert "without an encoder nothing else guards a reversal" in str(refusal(encoder, "none"))
    text = SMALL.replace(encoder, "none").replace("duty: 80 %", "duty: 80 %\n      dwell: 2 s")
    bench = bench_of_text(text)
    assert (bench.limits()["sense", 0], bench.limits()["stall_duty", 0]) == (0, 0)
    with pytest.raises(UsageError, match="'vent' has no encoder"):
        bench.motor("vent").rpm_of(100)
    with pytest.raises(FileError, match="a speed limit needs an encoder"):
        bench_of_text(text.replace("dwell: 2 s", "dwell: 2 s\n      speed: 60 rpm"))
    with pytest.raises(FileError, match="a stall limit needs an encoder"):
        bench_of_text(text.replace("dwell: 2 s", "dwell: 2 s\n      stall: {duty: 20 %, within: 1 s}"))


def test_no_limit_is_rounded_to_none_at_all() -> None:
    """Of these limits 0 is none to the board: 20 rpm of 64 counts a turn are 0.68 counts in 32 ms."""
    assert {limit.name for limit in LIMITS.values() if re.search("0 = .* off", limit.text)} == OFF_AT_ZERO
    assert OFF_AT_ZERO == BOARDS_OFF_AT_ZERO
    text = VENT_FILE.read_text("utf-8")
    coarse = text.replace("on: motor shaft", "on: output shaft")
    at_30 = bench_of_text(coarse.replace("speed: 75 rpm", "speed: 30 rpm"))
    assert at_30.limits()["speed_counts", 0] == 1
    with pytest.raises(FileError, match=r"'20 rpm', which the board would take for no limit at all; 29\.3 rpm is the"):
        bench_of_text(coarse.replace("speed: 75 rpm", "speed: 20 rpm")).limits()
    assert tightened(at_30, "vent", speed_rpm=20.0).limits()["speed_counts", 0] == 1
    with pytest.raises(FileError, match=r"a speed limit of 0 rpm is no limit at all; remove it"):
        bench_of_text(text.replace("speed: 75 rpm", "speed: 0 rpm"))
    with pytest.raises(FileError, match=r"a stall duty of 0 % is no limit at all; write 'stall: off'"):
        bench_of_text(text.replace("stall: {duty: 15 %", "stall: {duty: 0 %"))


def test_the_board_that_is_there_must_have_the_axes_and_the_duty() -> None:
    with pytest.raises(FileError, match="'vent' is on axis 0; this board has 0 axes"):
        small().limits(axes=0)
    with pytest.raises(FileError, match="'latch' is on servo 0; this board has 0 servo outputs"):
        small().limits(servos=0)
    with pytest.raises(FileError, match=r"b\.yaml:12:13: found '80 %', more than the board allows; .* at most 75 %"):
        small().limits(max_duty=7500)


def test_counts_speeds_and_angles_convert_both_ways() -> None:
    motor = small().motor("vent")
    assert motor.counts_per_turn == 2400  # 12 lines x4 x gear 50
    assert motor.turns_of(2400) == 1
    assert motor.degrees_of(-1200) == -180
    assert motor.rpm_of(2400) == 60
    assert motor.counts_of_degrees(90) == 600
    assert motor.counts_per_s_of(60) == 2400
    assert motor.counts_of_turns(Fraction(1, 2)) == 1200


def test_an_encoder_against_the_duty_still_gives_positive_positions() -> None:
    bench = small("direction: same", "direction: opposite")
    assert bench.limits()["sense", 0] == -1
    assert bench.motor("vent").turns_of(-2400) == 1


def test_an_encoder_behind_the_gear_is_not_multiplied_by_it() -> None:
    assert small("on: motor shaft", "on: output shaft").motor("vent").counts_per_turn == 48
    exact = small("gear: 50", "gear: 34.014").motor("vent").counts_per_turn
    assert exact == Fraction("1632.672")


def test_pulses_and_angles_convert_both_ways() -> None:
    servo = small().servo("latch")
    assert servo.pulse_us_of(0) == 1500
    assert servo.pulse_us_of(-40) == 1100
    assert servo.degrees_of(1900) == 40
    turned = small("10 us/deg", "-10 us/deg").servo("latch")
    assert turned.pulse_us_of(-40) == 1900
    assert (turned.low_deg, turned.high_deg) == (-40, 40)


def test_common_practice_of_servos_fits() -> None:
    # Common practice: 1.5 ms neutral, plus and minus 45 deg at 1.1 ms and 1.9 ms.
    old = "angle: -40 deg to 40 deg"
    text = SMALL.replace("10 us/deg", "8.889 us/deg").replace(old, "pulse: 1.1 ms to 1.9 ms")
    servo = bench_of_text(text).servo("latch")
    assert servo.low_deg == pytest.approx(-45, abs=0.01)
    assert (servo.pulse_us_of(45), servo.pulse_us_of(-45)) == (1900, 1100)


def test_an_unknown_motor_is_named_with_a_suggestion() -> None:
    with pytest.raises(UsageError, match="no motor is called 'vant'; did you mean 'vent'"):
        small().motor("vant")
    with pytest.raises(UsageError, match="no servo is called 'x'; servos: latch"):
        small().servo("x")


def test_a_duty_is_exact_to_a_hundredth_of_a_percent() -> None:
    assert duty_parts(parse("-12.34 %", DUTY)) == -1234
    with pytest.raises(QuantityError):
        duty_parts(parse("0.001 %", DUTY))


def test_the_echo_tells_what_the_file_means(vent: Bench) -> None:
    assert echo_lines(vent) == [
        "greenhouse vent drive: mock:, board ramprig-mock (any serial)",
        "supply: 12 V; trips below 9 V or above 16 V for 5 ms",
        "vent: 16 lines x4 x gear 90 = 5760 counts per output turn, rising with positive duty",
        "vent: duty up to 80 %, trips above 2.5 A for 5 ms, 900 mA for ever",
        "vent: speed_counts: '75 rpm' is held as 74.87 rpm",
        "latch: 1100 us to 1900 us = -40 deg to 40 deg, home 1500 us = 0 deg (angles are commanded, not measured)",
        "link: the board stops by itself after 500 ms of silence, and is off 1 s later at most",
        "safety: not said: contact, place",
    ]


def test_the_echo_tells_defaults_and_what_deserves_a_second_look() -> None:
    said = "bench: small\nsafety: {fuse: 2 A}"
    bench = bench_of_text(SMALL.replace("bench: small", said).replace("duty: 80 %", "duty: 80 %\n      fall: 100 %/s"))
    echo = "\n".join(echo_lines(bench))
    assert "vent: not said, so the default holds: slew_up_duty 20, dwell_ticks 250, still_counts 2" in echo
    assert "note: vent falls from its ceiling to zero in 800 ms, but a stop is cut after 500 ms" in echo
    assert "note: vent trips at 3 A, above the fuse of 2 A" in echo
    assert "safety: not said: contact, place, power cut, guard" in echo
    assert "12 lines x4 x gear 50 = 2400 counts per output turn" in echo


def test_the_echo_tells_of_a_servo_that_may_be_led_past_its_end_stops() -> None:
    text = VENT_FILE.read_text(encoding="utf-8")
    assert "past its end stop" not in "\n".join(echo_lines(bench_of_text(text)))
    echo = echo_lines(bench_of_text(text.replace("angle: -40 deg to 40 deg", "angle: -40 deg to 80 deg")))
    assert "note: latch may be led to 80 deg, past its end stop at 55 deg" in echo
    assert len([line for line in echo if "past its end stop" in line]) == 1


def test_every_bench_to_copy_leaves_open_who_answers_and_where() -> None:
    paths = sorted(VENT_FILE.parent.glob("*bench.yaml"))
    assert VENT_FILE in paths
    for path in paths:
        assert load_bench(path).safety.missing()[:2] == ("contact", "place"), path.name


def test_a_decimal_comma_in_braces_is_told_as_one() -> None:
    with pytest.raises(FileError, match="unknown key '5 A' in 'current'; a comma begins a new key in braces") as caught:
        small("{at most: 3 A}", "{at most: 2,5 A}")
    assert caught.value.place is not None
    assert caught.value.place.line == 13


def test_mock_faults_have_names_places_and_times() -> None:
    bench = small("bench: small", "bench: small\nmock: {seed: 7, faults: [jammed, {fault: encoder-dead, from: 2 s}]}")
    first, second = bench.mock.faults
    assert (bench.mock.seed, first.name, first.from_s, second.name, second.from_s) == (
        7,
        "jammed",
        0,
        "encoder-dead",
        2,
    )
    assert first.mark.line == 2


@pytest.mark.parametrize(
    ("port", "url"),
    [
        ('{url: "mock:"}', "mock:"),
        ("{usb serial: A50285BI}", "usb:A50285BI"),
        ("{usb path: 1-1.4}", "usb-path:1-1.4"),
        ("{url: COM5, baud: 9600, dtr: clear}", "COM5"),
    ],
)
def test_a_port_is_named_in_one_way(port: str, url: str) -> None:
    assert small('{url: "mock:"}', port).port.url == url


def as_editors_see(node: Node) -> object:
    """The tree as an editor's YAML gives it to a schema: numbers are numbers, everything else is text."""
    if isinstance(node, Mapping):
        return {entry.key.text: as_editors_see(entry.value) for entry in node}
    if isinstance(node, Listing):
        return [as_editors_see(item) for item in node.items]
    assert isinstance(node, Scalar)
    number = re.fullmatch(r"(?:0|[1-9][0-9]*)(\.[0-9]+)?", node.text) if node.plain else None
    return node.text if number is None else float(node.text) if number.group(1) else int(node.text)


def test_the_schema_is_valid_and_takes_the_good_files() -> None:
    schema = bench_schema()
    Draft202012Validator.check_schema(schema)
    validator = Draft202012Validator(schema)
    for text in (SMALL, VENT_FILE.read_text("utf-8")):
        assert [error.message for error in validator.iter_errors(as_editors_see(load_text(text, "f")))] == []


NASTY = (
    *(
        "",
        "~",
        "0",
        "-1",
        "1e30",
        "0 s",
        "0 us",
        "-5 A",
        "1e-30 A",
        "1e30 s",
        "1e30 V",
        "0 rpm",
        "1e30 rpm",
        "[]",
        "{}",
    ),
    *(
        "none",
        "off",
        "any",
        "yes",
        "0 us/deg",
        "1e30 us/deg",
        "0 V s/rad",
        "1e30 counts",
        "0 deg to 0 deg",
        "1/3",
        "x4",
    ),
    *("1e-30 %/s", "1e30 %/s", "0 us to 0 us", "at most 1e30 V", "*a", "0.001 %", "[a, a]", "{fault: x}", "'\u00b5'"),
)


def test_a_bench_with_any_value_replaced_is_a_bench_or_our_error() -> None:
    lines = VENT_FILE.read_text("utf-8").splitlines()
    refused = 0
    for at, line in enumerate(lines):
        match = re.match(r"( *[a-z ]+: +)[^#{ ][^#]*$", line.split("#")[0].rstrip())
        for nasty in NASTY[at % 6 :: 6] if match else ():  # every sixth: all together take half a minute
            assert match is not None
            text = "\n".join([*lines[:at], match.group(1) + nasty, *lines[at + 1 :]])
            try:
                bench = bench_of_text(text)
            except FileError as error:
                refused += error.place is not None and error.place.line >= 1
            else:
                assert echo_lines(bench), (line, nasty)
    assert refused > 200
