"""Readers and shapes: typed values from a tree, errors that point to the value, a JSON Schema from the same words."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

import pytest
from jsonschema import Draft202012Validator

from ramprig.errors import FileError
from ramprig.quantity import ALL_KINDS, CURRENT, DURATION, DUTY, SPEED, Kind
from ramprig.yamlfile import (
    BandShape,
    CountShape,
    Fields,
    FlagShape,
    Key,
    ListShape,
    Names,
    OrWord,
    QuantityShape,
    RatioShape,
    Reader,
    Record,
    Shape,
    TableShape,
    TextShape,
    WordShape,
    load_text,
)


def reader(text: str, names: Names | None = None) -> Reader:
    return Reader(load_text(text, "f.yaml"), names=names)


def value(text: str, names: Names | None = None) -> Reader:
    """The reader of what stands after `key:`."""
    return reader(f"key: {text}\n", names).mapping(optional=["key"])["key"]


def test_a_reader_gives_typed_values() -> None:
    assert value("350 ms").quantity(DURATION).value == Fraction(7, 20)
    assert value("40 rpm to 60 rpm").band(SPEED).high == 60
    assert value("12").count(most=12) == 12
    assert value("3249/196").ratio() == Fraction(3249, 196)
    assert value("motor   shaft").word(("motor shaft", "output shaft")) == "motor shaft"
    assert [value(word).flag() for word in ("yes", "no")] == [True, False]
    assert value("'5'").text() == "5"
    assert [item.count() for item in value("[1, 2]").items()] == [1, 2]


REFUSED: dict[str, tuple[Callable[[Reader], object], str]] = {
    "20": (lambda r: r.quantity(DUTY), "f.yaml:1:6: found '20' without a unit; a duty has its unit, %: write '20 %'"),
    "140 %": (lambda r: r.quantity(DUTY, most="100 %"), "found '140 %' for 'key'; it must be at most 100 %"),
    "0 s": (lambda r: r.quantity(DURATION, least="1 ms", most="1 h"), "it must lie in 1 ms to 1 h"),
    "": (lambda r: r.quantity(DURATION), "found nothing after 'key:'; a duration, such as 350 ms is wanted"),
    "{a: 1}": (lambda r: r.quantity(DURATION), "found a mapping; a duration, such as 350 ms is wanted for 'key'"),
    "[1]": (lambda r: r.count(), "found a list; a whole number is wanted for 'key'"),
    "010": (lambda r: r.count(), "found '010', with a leading zero; write '10'"),
    "7": (lambda r: r.count(least=8, most=9), "found 7 for 'key'; it must lie in 8 to 9"),
    "a:1": (lambda r: r.mapping(optional=["a"]), "found 'a:1'; a blank belongs after the colon: 'a: 1'"),
    "x": (lambda r: r.items(), "found 'x'; a list is wanted for 'key'"),
    "[a, b]": (lambda r: r.items(most=1), "found 2 items in 'key'; 0 to 1 are allowed"),
    "True": (lambda r: r.flag(), "found 'True' for 'key'; one of: yes, no"),
    "cost": (lambda r: r.word(("coast", "brake")), "found 'cost' for 'key'; did you mean 'coast'?"),
    "a b": (lambda r: r.text(pattern="[a-z]+", wanted="lower-case letters"), "'a b' for 'key'; lower-case letters"),
    "{A b: 1}": (lambda r: r.table(what="motor"), "'A b' cannot be a motor; 1 to 24 of a-z, 0-9 and _"),
    "{}": (lambda r: r.table(what="motor"), "no motor here in 'key'"),
    "z" * 500: (lambda r: r.text(), "found a text of 500 characters for 'key'; at most 400 are allowed"),
}


@pytest.mark.parametrize("text", REFUSED, ids=lambda text: text[:12] or "nothing")
def test_a_wrong_value_is_refused_at_its_place(text: str) -> None:
    read, message = REFUSED[text]
    with pytest.raises(FileError) as caught:
        read(value(text))
    assert message in str(caught.value)
    assert caught.value.place is not None
    assert caught.value.place.line == 1


def test_unknown_and_missing_keys_are_refused() -> None:
    with pytest.raises(FileError, match=r"f\.yaml:2:1: unknown key 'dutty'; did you mean 'duty'\?"):
        reader("slew: 1\ndutty: 2\n").mapping(required=["duty"], optional=["slew"])
    with pytest.raises(FileError, match=r"f\.yaml:1:1: 'duty' is missing; required: duty, slew"):
        reader("slew: 1\n").mapping(required=["duty", "slew"])


def test_named_values_stand_for_quantities_and_counts() -> None:
    names = Names({"cruise": "40 %", "passes": "3"})
    assert value("-cruise", names).quantity(DUTY).value == -40
    assert value("at most cruise", names).band(DUTY).high == 40
    assert value("passes", names).count() == 3
    with pytest.raises(FileError, match=r"f\.yaml:1:6: no value is named 'cruse'; did you mean 'cruise'\?"):
        value("cruse", names).quantity(DUTY)
    with pytest.raises(FileError, match="no value is named 'x'; there are no named values here"):
        value("x", Names({})).quantity(DUTY)
    with pytest.raises(FileError, match="found 'cruise'; a duty is wanted"):
        value("cruise").quantity(DUTY)


@dataclass(frozen=True)
class Stall:
    duty_pct: float
    within_s: float
    tries: int


STALL_DUTY = Key("duty", QuantityShape(DUTY, least="0 %", most="100 %"), "from here on", required=True)
STALL_WITHIN = Key("within", QuantityShape(DURATION), "for so long")
STALL_TRIES = Key("tries", CountShape(1, 5), "times", default=2)


def build_stall(fields: Fields) -> Stall:
    within = fields.get(STALL_WITHIN)
    if within is not None and within.value > 10:
        raise fields.error(STALL_WITHIN, f"found '{within}'", "too long")
    return Stall(fields[STALL_DUTY].to("%"), within.to("s") if within else 0.0, fields[STALL_TRIES])


STALL = Record((STALL_DUTY, STALL_WITHIN, STALL_TRIES), build_stall)


def test_a_record_is_built_from_its_keys() -> None:
    assert STALL.read(reader("{duty: 15 %, within: 400 ms}")) == Stall(15, 0.4, 2)
    assert STALL.read(reader("{duty: 15 %, tries: 5}")) == Stall(15, 0.0, 5)
    with pytest.raises(FileError, match=r"f\.yaml:1:22: found '11 s'; too long"):
        STALL.read(reader("{duty: 15 %, within: 11 s}"))


SHAPES: dict[str, Shape[object]] = {
    "stall": OrWord("off", STALL),
    "table": TableShape(ListShape(CountShape(0, 3), most=2), what="motor"),
    "word": WordShape(("coast", "brake")),
    "flag": FlagShape(),
    "ratio": RatioShape(),
    "band": BandShape(SPEED),
    "range": BandShape(SPEED, ranges_only=True),
    "text": TextShape("[a-z]+", "letters"),
}


def as_editors_see(text: str) -> object:
    """The file as an editor's YAML 1.2 gives it to a schema: whole numbers and decimals are numbers, the rest text."""
    from ramprig.yamlfile import Listing, Mapping, Node, Scalar

    def plain(node: Node) -> object:
        if isinstance(node, Mapping):
            return {entry.key.text: plain(entry.value) for entry in node}
        if isinstance(node, Listing):
            return [plain(item) for item in node.items]
        assert isinstance(node, Scalar)
        for number in (int, float) if node.plain and node.text[:1] in "-0123456789" else ():
            try:
                return number(node.text)
            except ValueError:
                continue
        return node.text

    return plain(load_text(text, "f.yaml"))


@pytest.mark.parametrize(
    ("name", "text"),
    [
        ("stall", "off"),
        ("stall", "{duty: 15 %}"),
        ("stall", "{within: 1 s}"),
        ("stall", "{duty: 15 %, more: 1}"),
        ("stall", "{duty: 15 V}"),
        ("stall", "{duty: 15}"),
        ("stall", "on"),
        ("table", "{vent: [1, 2]}"),
        ("table", "{vent: [1, 2, 3]}"),
        ("table", "{vent: [4]}"),
        ("table", "{Vent: [1]}"),
        ("table", "{}"),
        ("word", "brake"),
        ("word", "break"),
        ("flag", "yes"),
        ("flag", "maybe"),
        ("ratio", "34.014"),
        ("ratio", "3249/196"),
        ("ratio", "0"),
        ("ratio", "x"),
        ("band", "50 rpm +- 5 %"),
        ("band", "at least 40 rpm"),
        ("band", "at least 40"),
        ("band", "50 rpm"),
        ("range", "40 rpm to 60 rpm"),
        ("range", "at least 40 rpm"),
        ("text", "abc"),
        ("text", "a b"),
    ],
)
def test_a_shape_and_its_schema_agree(name: str, text: str) -> None:
    shape = SHAPES[name]
    schema = shape.schema()
    Draft202012Validator.check_schema(schema)
    try:
        shape.read(reader(text))
        good = True
    except FileError:
        good = False
    assert Draft202012Validator(schema).is_valid(as_editors_see(text)) is good


@pytest.mark.parametrize("kind", ALL_KINDS, ids=lambda kind: kind.name)
def test_the_schema_of_a_quantity_takes_every_unit_and_no_bare_number(kind: Kind) -> None:
    schema = Draft202012Validator(QuantityShape(kind).schema())
    assert all(schema.is_valid(f"3 {spelling}") for unit in kind.units for spelling in (unit.symbol, *unit.aliases))
    assert not schema.is_valid("3")
    assert not schema.is_valid(3)
    assert not schema.is_valid("3 parsec")
    assert Draft202012Validator(QuantityShape(kind).schema(names=True)).is_valid("-cruise")


def test_the_schema_takes_a_duration_in_parts() -> None:
    assert Draft202012Validator(QuantityShape(DURATION).schema()).is_valid("1 h 30 min")
    assert not Draft202012Validator(QuantityShape(CURRENT).schema()).is_valid("1 A 30 mA")
