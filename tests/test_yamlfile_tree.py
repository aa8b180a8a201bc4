"""YAML files become text with places; what is damaged or unclear is refused with a place, a caret and a hint."""

from __future__ import annotations

import random
from pathlib import Path

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from ramprig.errors import FileError, Place
from ramprig.yamlfile import (
    DEPTH_MAX,
    FILE_MAX_BYTES,
    NODES_MAX,
    Listing,
    Mapping,
    Node,
    Scalar,
    compose,
    load,
    load_text,
    source_of,
)


def value_of(written: str) -> str:
    """The text that the value `written` after a key is read as."""
    root = load_text(f"key: {written}\n", "f.yaml")
    assert isinstance(root, Mapping)
    value = root.entries[0].value
    assert isinstance(value, Scalar)
    return value.text


TRAPS = (
    *("1:30", "1:30:00", "01:30", "0:30", "1:75", "1:30.5", "on", "off", "yes", "no", "NO", "y", "n", "1e3", "1.0e3"),
    *("1E+3", "1.0e+3", "1.e+3", "010", "0100", "08", "00123", "1_000", "0x1F", "0b101", "1,5", "1,000", "50%", "5V"),
    *("3.10", ".inf", ".nan", "nan", "inf", "2024-01-02", "a:1", "5#x", "2024-13-45", "2024-02-30 10:00:00", "0x_"),
    *("null", "~", "true", "-.inf", "9" * 5000),
)


@pytest.mark.parametrize("written", TRAPS, ids=lambda text: text[:20])
def test_a_value_stays_the_text_that_was_written(written: str) -> None:
    assert value_of(written) == written


@pytest.mark.parametrize("key", ["on", "no", "1", "2024-01-02", "null"])
def test_a_key_stays_the_text_that_was_written(key: str) -> None:
    root = load_text(f"{key}: x", "f.yaml")
    assert isinstance(root, Mapping)
    assert root.entries[0].key.text == key


def test_quotes_and_blocks_are_known_from_plain_text() -> None:
    root = load_text("a: 1\nb: '1'\nc: \"1\"\nd: |\n  1\n", "f.yaml")
    assert isinstance(root, Mapping)
    assert [entry.value.plain for entry in root if isinstance(entry.value, Scalar)] == [True, False, False, False]


def test_places_count_from_one_and_point_to_the_value() -> None:
    root = load_text("motor:\n  limits: {duty: 40 %}\n  list:\n    - one\n", "bench.yaml")
    assert isinstance(root, Mapping)
    motor = root.entries[0].value
    assert isinstance(motor, Mapping)
    limits, listing = motor.entries[0].value, motor.entries[1].value
    assert isinstance(limits, Mapping)
    assert isinstance(listing, Listing)
    assert limits.entries[0].value.mark.place == Place("bench.yaml", 2, 18)
    assert listing.items[0].mark.place == Place("bench.yaml", 4, 7)


GOLDEN = {
    "a: 1\nduty: 2\nduty: 3\n": (
        "f.yaml:3:1: the key 'duty' stands twice in one mapping; the first is in line 2, column 1\n    duty: 3\n    ^"
    ),
    "hold:\n\t- 2 s\n": (
        "f.yaml:2:1: found a tab where a value or a key begins; use blanks, not tabs\n     - 2 s\n    ^"
    ),
    "port: x\nduty:20 %\n": (
        "f.yaml:2:1: this is not read as a key and its value; a blank belongs after the colon: 'duty: 20 %'\n"
        "    duty:20 %\n    ^"
    ),
    'path: "C:\\tmp\\x"': (
        "f.yaml:1:7: in double quotes a backslash begins an escape; use single quotes, as in 'C:\\folder'\n"
        '    path: "C:\\tmp\\x"\n          ^'
    ),
    "a: !!int abc": (
        "f.yaml:1:4: found the tag 'tag:yaml.org,2002:int'; values have no tags here; put text in quotes where needed\n"
        "    a: !!int abc\n       ^"
    ),
    "a: &x [1, *x]": (
        "f.yaml:1:11: '*x' stands inside what it stands for; a value cannot contain itself\n"
        "    a: &x [1, *x]\n              ^"
    ),
}


@pytest.mark.parametrize("text", GOLDEN, ids=lambda text: repr(text)[:24])
def test_a_message_shows_the_place_the_line_and_a_caret(text: str) -> None:
    with pytest.raises(FileError) as caught:
        load_text(text, "f.yaml")
    assert str(caught.value) == GOLDEN[text]


@pytest.mark.parametrize(
    ("text", "line", "message"),
    [
        ("", 1, "the file is empty"),
        ("# only a comment\n", 1, "the file is empty"),
        ("b:1\na: 5\n", 1, "a blank belongs after the colon: 'b: 1'"),
        ("a: *x\n", 1, "'*x' stands for nothing"),
        ("a: &x 1\nb: &x 2\n", 2, "the anchor '&x' is set twice; the first is in line 1"),
        ("a: !own x\n", 1, "found the tag '!own'"),
        ("a: !!python/object/apply:os.system [x]\n", 1, "found the tag"),
        ("base: &b {x: 1}\nc:\n  <<: *b\n", 3, "found the merge key"),
        ("a: 'abc\n", 1, "the quote that begins here is not closed"),
        ("a: [1, 2\nb: 3", 1, "the bracket that opens here is not closed"),
        ("a: 1\n b: 2\n", 2, "deeper indented than the line above"),
        ("a:\n  b: 1\n c: 2\n", 3, "another column than its neighbours"),
        ("a: 1\n---\nb: 1\n", 2, "a second document begins here"),
        ("? [a]\n: 1\n", 1, "a list or mapping cannot be a key"),
        ("'': 1\n", 1, "found an empty key"),
        ("&a a: 1\n*a : 2\n", 2, "an alias cannot be a key"),
        ("a: %x\n", 1, "put the text in quotes"),
        ("key: - a\n", 1, "begin it in a line of its own"),
        ("first\nsecond: 2\n", 1, "this line has no ':' after its key"),
        ('a: "\\ud800"\n', 1, "this text contains the character U+D800"),
        ('a: "\\0"\n', 1, "this text contains the character U+0000"),
        ('a: "\\UFFFFFFFF"\n', 1, "cannot be read as YAML from here on"),
        ("%YAML 1." + "9" * 5000 + "\n---\na: 1\n", 1, "cannot be read as YAML from here on"),
        ("a: 1\nb: \x07\n", 2, "found the character U+0007"),
        ("a: 1\nb: x\x85y\n", 2, "found the character U+0085"),
        ("a: 1\nb: \u2028\n", 2, "found the character U+2028"),
        ("a: 1\nb: 20 % # \u202e% 08 :b\n", 2, "found the character U+202E"),
        ("a: 1\nb\u200b: 2\n", 2, "found the character U+200B"),
        ('a: "\\u2066"\n', 1, "this text contains the character U+2066"),
    ],
)
def test_what_is_refused_is_placed_and_explained(text: str, line: int, message: str) -> None:
    with pytest.raises(FileError) as caught:
        load_text(text, "f.yaml")
    assert caught.value.place is not None
    assert caught.value.place.line == line
    assert message in str(caught.value)


@pytest.mark.parametrize(
    ("data", "line", "message"),
    [
        (b"\xff\xfea\x00", 1, "save it as UTF-8"),
        (b"\xef\xbb\xbfa: 1", 1, "save it as UTF-8 without BOM"),
        (b"a: 1\nb: caf\xe9\n", 2, "the byte 0xe9 is not UTF-8"),
        (b"a: 1\r\rb: \xfc", 3, "the byte 0xfc is not UTF-8"),
        (b"#" * (FILE_MAX_BYTES + 1), 1, "a file has at most"),
    ],
)
def test_bytes_that_are_no_plain_text_are_refused(data: bytes, line: int, message: str) -> None:
    with pytest.raises(FileError) as caught:
        source_of(data, "f.yaml")
    assert caught.value.place is not None
    assert caught.value.place.line == line
    assert message in str(caught.value)


def nested(depth: int) -> str:
    return "[" * depth + "]" * depth


def test_nesting_is_bounded() -> None:
    assert isinstance(load_text(nested(DEPTH_MAX), "f.yaml"), Listing)
    for depth in (DEPTH_MAX + 1, 500, 5000):
        with pytest.raises(FileError, match=f"nested more than {DEPTH_MAX} deep"):
            load_text(nested(depth), "f.yaml")


def test_nesting_by_aliases_is_bounded() -> None:
    lines = ["a0: &a0 [x]"] + [f"a{i}: &a{i} [*a{i - 1}]" for i in range(1, DEPTH_MAX)]
    with pytest.raises(FileError, match="nested more than"):
        load_text("\n".join(lines), "f.yaml")


def test_a_small_file_cannot_stand_for_a_huge_tree() -> None:
    lines = ["a: &a [x, x, x, x, x, x, x, x, x]"]
    lines += [
        f"{name}: &{name} [{', '.join(['*' + below] * 9)}]" for below, name in zip("abcdef", "bcdefg", strict=True)
    ]
    with pytest.raises(FileError, match=f"more than {NODES_MAX} values"):
        load_text("\n".join(lines), "f.yaml")


def test_an_alias_stands_for_its_value_and_points_to_it() -> None:
    root = load_text("first: &limits {duty: 40 %}\nsecond: *limits\n", "f.yaml")
    assert isinstance(root, Mapping)
    assert root.entries[1].value is root.entries[0].value


def test_a_long_line_is_shown_in_part() -> None:
    with pytest.raises(FileError) as caught:
        load_text("a: [" + "1, " * 5000 + "!x y]", "f.yaml")
    shown = str(caught.value).split("\n")
    assert max(len(line) for line in shown) < 200
    assert shown[1][shown[2].index("^")] == "!"


def test_a_file_that_is_not_there_is_our_error_at_the_line_that_named_it(tmp_path: Path) -> None:
    with pytest.raises(FileError, match="cannot read"):
        load(tmp_path / "none.yaml")
    with pytest.raises(FileError, match="cannot read"):
        load("a\0b")
    mark = source_of(b"include: none.yaml", "main.yaml").mark(1, 10)
    with pytest.raises(FileError, match=r"main\.yaml:1:10: cannot read"):
        load(tmp_path, named_at=mark)


def test_the_tree_knows_the_bytes_and_their_digest(tmp_path: Path) -> None:
    path = tmp_path / "f.yaml"
    path.write_bytes(b"a: 1\r\n")
    source = load(path).mark.source
    # SHA-256 of these six bytes, by coreutils' sha256sum.
    assert source.digest == "db9bda4272ee21cda5ff1d213fa8366a2cca3143c5a795bdcd5f75a85106033d"
    assert source.data == b"a: 1\r\n"


def check_only_our_error(data: bytes) -> None:
    """Reading `data` gives a tree or a `FileError` with a place inside the file."""
    outcome: Node | FileError
    try:
        outcome = compose(source_of(data, "f.yaml"))
    except FileError as error:
        outcome = error
    if isinstance(outcome, FileError):
        assert outcome.place is not None, data
        assert outcome.place.line >= 1, data
        assert outcome.place.column >= 1, data
        assert str(outcome), data
    else:
        assert outcome.mark.line >= 1, data


@given(st.binary(max_size=200))
@example(b"- - ? ")
@example(b"%TAG ! !")
@example(b'"\\x')
def test_random_bytes_give_a_tree_or_our_error(data: bytes) -> None:
    check_only_our_error(data)


@given(st.text(alphabet="ab1 \n\t:-?[]{}&*!|>'\"%@`#,<\\xU~.\r", max_size=60))
def test_random_yaml_signs_give_a_tree_or_our_error(text: str) -> None:
    check_only_our_error(text.encode("utf-8"))


def test_damaged_bench_files_give_a_tree_or_our_error() -> None:
    good = (
        b"motors:\n  vent: {axis: 0, limits: &l {duty: 80 %, slew: 100 %/s}}\n  other: *l\nlist:\n  - 'x'\n  - \"y\"\n"
    )
    for seed in range(300):
        draw = random.Random(seed)
        data = bytearray(good)
        for _ in range(draw.randint(1, 4)):
            data[draw.randrange(len(data))] = draw.choice(b":-&*!{}[]'\"\t\n \x00\xff#%|>")
        check_only_our_error(bytes(data))
