"""Quantities: read exactly with their unit, refused with what would be right, printed as an engineer reads them."""

from __future__ import annotations

import math
from collections.abc import Callable
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig import quantity as q
from ramprig.quantity import Kind, QuantityError


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("350 ms", q.DURATION, "0.35"),
        ("90 s", q.DURATION, "90"),
        ("1 h 30 min", q.DURATION, "5400"),
        ("1h30min", q.DURATION, "5400"),
        ("2 s 500 ms", q.DURATION, "2.5"),
        ("0 s", q.DURATION, "0"),
        ("20%", q.DUTY, "20"),
        ("-0.1 %", q.DUTY, "-0.1"),
        ("+20 %", q.DUTY, "20"),
        ("100 %/s", q.DUTY_RATE, "100"),
        ("1.25 A", q.CURRENT, "1.25"),
        ("350 mA", q.CURRENT, "0.35"),
        ("12 V", q.VOLTAGE, "12"),
        ("1e3 rpm", q.SPEED, "1000"),
        ("1.0e+3 rpm", q.SPEED, "1000"),
        ("2 rev/s", q.SPEED, "120"),
        ("60 deg/s", q.SPEED, "10"),
        ("60 deg/s", q.ANGLE_RATE, "60"),
        ("0.5 rev", q.ANGLE, "180"),
        ("1.5 ms", q.PULSE, "1500"),
        ("20 kHz", q.FREQUENCY, "20000"),
        ("-5 degC", q.TEMPERATURE, "-5"),
        ("24 counts", q.COUNTS, "24"),
        ("60 g cm2", q.INERTIA, "6e-6"),
        ("19.5 mN m/A", q.MOTOR_CONSTANT, "0.0195"),
        ("1500 \u00b5s", q.PULSE, "1500"),
        ("2.4 \u03a9", q.RESISTANCE, "2.4"),
        ("25 \u00b0C", q.TEMPERATURE, "25"),
        ("\u221220 %", q.DUTY, "-20"),
    ],
)
def test_a_quantity_is_read_exactly(text: str, kind: Kind, value: str) -> None:
    assert q.parse(text, kind).value == Fraction(value)


def test_radians_are_read_to_a_double() -> None:
    assert q.parse("1 rad", q.ANGLE).to("deg") == pytest.approx(57.29577951308232, rel=1e-15)
    assert q.parse("100 rad/s", q.SPEED).to("rpm") == pytest.approx(954.9296585513721, rel=1e-15)


def test_a_speed_constant_becomes_its_motor_constant() -> None:
    # 1 V s/rad is 60 / (2 pi) rpm/V the other way up; the two constants of a DC motor are reciprocal (SI).
    assert q.parse("500 rpm/V", q.MOTOR_CONSTANT).to("V s/rad") == pytest.approx(60 / (2 * math.pi * 500))
    assert q.parse("500 rpm/V", q.MOTOR_CONSTANT).to("rpm/V") == pytest.approx(500)


@pytest.mark.parametrize(
    ("text", "kind", "message"),
    [
        ("1:30", q.DURATION, "colon can mean hours or minutes; write the units out, such as '1 h 30 min' or '90 s'"),
        ("01:30", q.DURATION, "colon"),
        ("1:30.5", q.DURATION, "colon"),
        ("90", q.DURATION, "found '90' without a unit; a duration has its unit, s, ms, us, min or h: as in '350 ms'"),
        ("20", q.DUTY, "found '20' without a unit; a duty has its unit, %: write '20 %'"),
        ("12.34567", q.DUTY, "found '12.34567' without a unit; a duty has its unit, %: write '12.35 %'"),
        ("0.4", q.DUTY, "found '0.4' without a unit; a duty has its unit, %: write '40 %' for 0.4 of full drive"),
        ("-0.33333", q.DUTY, "a duty has its unit, %: write '-33.33 %' for -0.33333 of full drive"),
        ("0", q.DUTY, "found '0' without a unit; a duty has its unit, %: write '0 %'"),
        ("010 %", q.DUTY, "found '010 %', with a leading zero; write '10 %'"),
        ("08 %", q.DUTY, "write '8 %'"),
        ("1,5 A", q.CURRENT, "the decimal sign is the point; write '1.5 A'"),
        ("1,000 rpm", q.SPEED, "write '1000 rpm' or '1.000 rpm'"),
        ("1 000 rpm", q.SPEED, "with a thousands separator; write '1000 rpm'"),
        ("1'000 rpm", q.SPEED, "write '1000 rpm'"),
        ("1_000 rpm", q.SPEED, "with an underscore; write '1000 rpm'"),
        ("0x1F %", q.DUTY, "not decimal; write '31 %'"),
        ("0b101 %", q.DUTY, "write '5 %'"),
        (".inf", q.SPEED, "a number must be finite"),
        (".nan A", q.CURRENT, "a number must be finite"),
        ("-inf A", q.CURRENT, "a number must be finite"),
        (".5 A", q.CURRENT, "write '0.5 A'"),
        ("5. A", q.CURRENT, "write '5 A'"),
        ("5 V#x", q.VOLTAGE, "a comment needs a blank before the '#'"),
        ("2 m", q.DURATION, "an unknown unit; write '2 min'"),
        ("5 ma", q.CURRENT, "write '5 mA'"),
        ("20 HZ", q.FREQUENCY, "write '20 Hz'"),
        ("20 percent", q.DUTY, "write '20 %'"),
        ("20 V", q.DUTY, "found '20 V', which is a voltage; a duty is wanted, in %, such as 20 %"),
        ("20 furlongs", q.DUTY, "an unknown unit; a duty is wanted, in %"),
        ("fast", q.SPEED, "found 'fast'; a speed is wanted, such as 45 rpm"),
        ("", q.CURRENT, "found ''; a current is wanted"),
        ("-5 s", q.DURATION, "a duration cannot be negative"),
        ("1 min 90 s", q.DURATION, "after 'min' comes a part of less than 1 min"),
        ("30 min 1 h", q.DURATION, "after 'min' comes a part of less than 1 min"),
        ("1 s 2", q.DURATION, "as in '1 h 30 min'"),
        ("1 h -5 min", q.DURATION, "as in '1 h 30 min'"),
        ("1e99 A", q.CURRENT, "exponent of at most 30"),
        ("1e" + "9" * 5000 + " A", q.CURRENT, "at most 40 characters"),
        ("1" * 5000 + " A", q.CURRENT, "at most 40 characters"),
        ("0 rpm/V", q.MOTOR_CONSTANT, "it must not be 0"),
    ],
)
def test_what_is_refused_says_what_would_be_right(text: str, kind: Kind, message: str) -> None:
    with pytest.raises(QuantityError) as caught:
        q.parse(text, kind)
    assert message in str(caught.value)


@pytest.mark.parametrize("kind", q.ALL_KINDS, ids=lambda kind: kind.name)
def test_every_kind_reads_its_own_example_and_units(kind: Kind) -> None:
    assert q.parse(kind.example, kind).value != 0
    for unit in kind.units:
        for spelling in (unit.symbol, *unit.aliases):
            assert q.parse(f"3 {spelling}", kind).exactly(unit.symbol) == 3
    assert any(unit.shown for unit in kind.units)


def outcome(read: Callable[..., object], *args: object) -> object:
    """What `read` gives, or the one error it may raise."""
    try:
        return read(*args)
    except QuantityError as error:
        return error


@given(st.text(max_size=30), st.sampled_from(q.ALL_KINDS))
def test_any_text_gives_a_quantity_or_our_error(text: str, kind: Kind) -> None:
    assert isinstance(outcome(q.parse, text, kind), q.Quantity | QuantityError)
    assert str(outcome(q.parse_band, text, kind)).isascii()


@given(st.text(alphabet="0123456789.,:_eE+-xo/ smhin%atleo", max_size=24))
def test_any_number_like_text_gives_a_value_or_our_error(text: str) -> None:
    assert isinstance(outcome(q.parse, text, q.DURATION), q.Quantity | QuantityError)
    assert isinstance(outcome(q.parse_count, text), int | QuantityError)
    assert isinstance(outcome(q.parse_ratio, text), Fraction | QuantityError)


@pytest.mark.parametrize(("text", "value"), [("0", 0), ("12", 12), ("-3", -3)])
def test_a_count_is_a_whole_number(text: str, value: int) -> None:
    assert q.parse_count(text) == value


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("00123", "leading zero; write '123'"),
        ("1_000", "write '1000'"),
        ("1e3", "write '1000'"),
        ("12.0", "write '12'"),
        ("12.5", "it must be a whole number"),
        ("12 ms", "a whole number without a unit is wanted here"),
        ("0x1F", "write '31'"),
        ("0x_", "a whole number"),
        ("yes", "a whole number is wanted"),
        ("1,000", "write '1000'"),
        ("9" * 5000, "at most 40 characters"),
    ],
)
def test_other_counts_are_refused(text: str, message: str) -> None:
    with pytest.raises(QuantityError) as caught:
        q.parse_count(text)
    assert message in str(caught.value)


@pytest.mark.parametrize(("text", "value"), [("90", "90"), ("34.014", "34.014"), ("3249/196", "3249/196")])
def test_a_ratio_is_exact(text: str, value: str) -> None:
    assert q.parse_ratio(text) == Fraction(value)


@pytest.mark.parametrize(("text", "wanted"), [("90:1", "'90'"), ("3249 : 196", "'3249/196'")])
def test_a_ratio_with_a_colon_is_told_as_we_write_it(text: str, wanted: str) -> None:
    with pytest.raises(QuantityError, match=f"with a colon; write {wanted}"):
        q.parse_ratio(text)


@pytest.mark.parametrize("text", ["0", "-2", "1/0", "90 rpm", "a", "", "1/2/3", "010"])
def test_other_ratios_are_refused(text: str) -> None:
    with pytest.raises(QuantityError):
        q.parse_ratio(text)


@pytest.mark.parametrize(
    ("text", "kind", "low", "high"),
    [
        ("50 rpm +- 5 %", q.SPEED, "47.5", "52.5"),
        ("50 rpm +/- 2 rpm", q.SPEED, "48", "52"),
        ("50 rpm \u00b1 2 rpm", q.SPEED, "48", "52"),
        ("-50 rpm +- 10 %", q.SPEED, "-55", "-45"),
        ("40 rpm to 60 rpm", q.SPEED, "40", "60"),
        ("-60 rpm to -40 rpm", q.SPEED, "-60", "-40"),
        ("at least 40 rpm", q.SPEED, "40", None),
        ("at most 2 A", q.CURRENT, None, "2"),
        ("25 degC +- 2 K", q.TEMPERATURE, "23", "27"),
        ("20 % +- 0.5 %", q.SHARE, None, None),
    ],
)
def test_a_band_has_its_bounds(text: str, kind: Kind, low: str | None, high: str | None) -> None:
    if kind is q.SHARE:
        with pytest.raises(QuantityError, match="of the value or of full scale"):
            q.parse_band(text, kind)
        return
    band = q.parse_band(text, kind)
    assert (band.low, band.high) == (Fraction(low) if low else None, Fraction(high) if high else None)


def test_a_band_holds_its_bounds_and_never_a_nan() -> None:
    band = q.parse_band("40 rpm to 60 rpm", q.SPEED)
    assert [band.holds(value) for value in (39.9, 40.0, 60.0, 60.1, math.nan)] == [False, True, True, False, False]


@pytest.mark.parametrize(
    ("text", "kind", "message"),
    [
        ("50 rpm", q.SPEED, "without a tolerance; write '50 rpm +- 5 %', 'at least 50 rpm'"),
        ("40 to 60 rpm", q.SPEED, "write both units: '40 rpm to 60 rpm'"),
        ("9 V - 16 V", q.VOLTAGE, "a range is written with 'to': '9 V to 16 V'"),
        ("-40-40 deg", q.ANGLE, "a range is written with 'to': '-40 deg to 40 deg'"),
        ("9..16 V", q.VOLTAGE, "a range is written with 'to': '9 V to 16 V'"),
        ("60 rpm to 40 rpm", q.SPEED, "the lower value comes first: '40 rpm to 60 rpm'"),
        ("0 rpm +- 5 %", q.SPEED, "a percentage of 0 is nothing"),
        ("20 % +- 5 %", q.DUTY, "of full scale?"),
        ("25 degC +- 5 %", q.TEMPERATURE, "write '+- 1 degC'"),
        ("50 rpm +- -5 %", q.SPEED, "a tolerance has no sign of its own"),
    ],
)
def test_a_band_that_is_not_clear_is_refused(text: str, kind: Kind, message: str) -> None:
    with pytest.raises(QuantityError) as caught:
        q.parse_band(text, kind)
    assert message in str(caught.value)


def test_a_name_stands_for_a_quantity_and_may_be_negated() -> None:
    names = {"cruise": "40 %", "soak": "2 h"}
    assert q.parse("-cruise", q.DUTY, lookup=names.get).value == -40
    assert q.parse_band("at least cruise", q.DUTY, lookup=names.get).low == 40
    with pytest.raises(QuantityError, match="'cruise' is '40 %', which does not fit here"):
        q.parse("cruise", q.CURRENT, lookup=names.get)
    with pytest.raises(QuantityError, match="cannot be negative"):
        q.parse("-soak", q.DURATION, lookup=names.get)


def test_a_quantity_gives_protocol_units_only_where_exact() -> None:
    duty = q.parse("12.34 %", q.DUTY)
    assert duty.parts(Fraction(1, 100), "0.01 %") == 1234
    assert q.parse("1.25 A", q.CURRENT).whole("mA") == 1250
    with pytest.raises(QuantityError, match=r"a multiple of 0\.01 %"):
        q.parse("12.345 %", q.DUTY).parts(Fraction(1, 100), "0.01 %")
    with pytest.raises(QuantityError, match="whole number of mA"):
        q.parse("1.2345 A", q.CURRENT).whole("mA")
    with pytest.raises(QuantityError, match="has no unit 'V'"):
        duty.to("V")


@pytest.mark.parametrize(
    ("shown", "text"),
    [
        (q.format_current(1.25), "1.25 A"),
        (q.format_current(0.35), "350 mA"),
        (q.format_current(0.99999), "1 A"),
        (q.format_current(-0.0012), "-1.2 mA"),
        (q.format_current(0), "0 A"),
        (q.format_current(math.nan), "nan A"),
        (q.format_duration(0.35), "350 ms"),
        (q.format_duration(12.5), "12.5 s"),
        (q.format_duration(90), "1 min 30 s"),
        (q.format_duration(59.999), "1 min"),
        (q.format_duration(3599.99), "1 h"),
        (q.format_duration(30_000), "8 h 20 min"),
        (q.format_duty(-2000), "-20 %"),
        (q.format_duty(1234), "12.34 %"),
        (q.format_duty(10_000), "100 %"),
        (q.format_speed(45.234), "45.23 rpm"),
        (q.format_speed(12_345), "12345 rpm"),
        (q.format_voltage(12.1), "12.1 V"),
        (q.format_angle(-40), "-40 deg"),
        (q.format_pulse(1500), "1500 us"),
        (q.format_temperature(41.5), "41.5 degC"),
        (q.format_bytes(640), "640 bytes"),
        (q.format_bytes(12_400), "12.4 kB"),
        (q.format_bytes(3_100_000), "3.1 MB"),
        (q.format_bytes(999_999), "1 MB"),
        (q.show(Fraction(6, 10**6), q.INERTIA), "6e-6 kg m2"),
    ],
)
def test_quantities_print_as_an_engineer_reads_them(shown: str, text: str) -> None:
    assert shown == text


@given(
    st.fractions(min_value=-3000, max_value=3000).filter(lambda value: abs(value) > Fraction(1, 1000)),
    st.sampled_from([q.CURRENT, q.VOLTAGE, q.SPEED, q.ANGLE, q.DUTY]),
)
def test_what_is_printed_is_read_back_to_four_figures(value: Fraction, kind: Kind) -> None:
    assert float(q.parse(q.show(value, kind), kind).value) == pytest.approx(float(value), rel=6e-4)


@given(st.integers(min_value=1, max_value=59_994))
def test_short_durations_are_read_back(milliseconds: int) -> None:
    shown = q.format_duration(Fraction(milliseconds, 1000))
    assert float(q.parse(shown, q.DURATION).value) == pytest.approx(milliseconds / 1000, rel=6e-4)


def test_a_text_in_a_message_sends_nothing_to_the_terminal_but_letters() -> None:
    assert q.quoted("20\x1b[2J \x00\n\t\u00b5\u2028\ud800") == r"'20\x1b[2J \x00\n\t\xb5\u2028\ud800'"
