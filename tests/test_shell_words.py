"""What can be typed: every form and example is read, everything else is refused in words that help."""

from __future__ import annotations

import contextlib

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.errors import UsageError
from ramprig.shell import commands as c
from ramprig.shell.completing import choices, wants_file
from ramprig.shell.words import LINE_MAX, WORDS, filled_example, help_lines, read_line
from shell_bench import BENCH

EXAMPLES = [(word.name, example) for word in WORDS.values() for example in word.examples]


@pytest.mark.parametrize(("word", "example"), EXAMPLES)
def test_every_example_of_the_help_is_a_command(word: str, example: str) -> None:
    line = filled_example(example, BENCH)
    assert line.split()[0] == word
    assert read_line(line, BENCH) is not None


@pytest.mark.parametrize("word", WORDS)
def test_the_help_of_a_word_shows_its_forms_and_examples(word: str) -> None:
    text = "\n".join(help_lines(word, BENCH))
    for form, _ in WORDS[word].forms:
        assert form.text in text
    for example in WORDS[word].examples:
        assert filled_example(example, BENCH) in text


def test_every_form_of_a_word_has_an_example() -> None:
    bare = []
    for word in WORDS.values():
        meant = {type(read_line(filled_example(example, BENCH), BENCH)) for example in word.examples}
        shown = [form for form, _ in word.forms if any(form.match(filled_example(e, BENCH)) for e in word.examples)]
        bare += [form.text for form, _ in word.forms if form not in shown]
        assert meant
    assert bare == []


def test_the_help_names_every_word() -> None:
    text = "\n".join(help_lines("", BENCH))
    assert [word for word in WORDS if f"  {word} " not in text] == []


def test_units_are_read_into_the_protocols_own() -> None:
    command = read_line("jog vent -12.5 % for 1500 ms", BENCH)
    assert command == c.JogFor(BENCH.motor("vent"), -1250, 1.5)
    assert read_line("move latch -0.5 rad in 1 s", BENCH) != read_line("move latch -0.5 deg in 1 s", BENCH)
    assert read_line("note  brush   noise ", BENCH) == c.Note("brush   noise")
    assert read_line("run 'my file.yaml'", BENCH) == c.RunFile("my file.yaml")


@pytest.mark.parametrize(
    ("line", "wanted"),
    [
        ("jgo vent", "did you mean 'jog'?"),
        ("jog vnet", "did you mean 'vent'?"),
        ("jog latch", "move latch"),
        ("move vent 3 deg", "jog vent"),
        ("jog vent 20 for 2 s", "write '20 %'"),
        ("jog vent 20 %", "jog MOTOR DUTY for TIME"),
        ("ramp vent 300 mA", "a duty is wanted"),
        ("wait 2 m", "write '2 min'"),
        ("ramp vent 0.001 %", "a multiple of 0.01 %"),
        ("log begin", "log start"),
        ("arm now", "write 'arm'"),
        ("limits vnet", "did you mean 'vent'?"),
        ("help jgo", "did you mean 'jog'?"),
    ],
)
def test_a_refusal_says_what_would_be_right(line: str, wanted: str) -> None:
    def read() -> None:
        command = read_line(line, BENCH)
        if isinstance(command, c.Help):
            help_lines(command.word, BENCH)

    with pytest.raises(UsageError) as refused:
        read()
    assert wanted in str(refused.value)


def test_empty_lines_and_comments_mean_nothing() -> None:
    assert [read_line(line, BENCH) for line in ("", "  \t", "# a comment", "  # too")] == [None] * 4


def test_a_line_that_is_too_long_or_unprintable_is_refused() -> None:
    for line in ("note " + "x" * LINE_MAX, "arm\x07", "note a\x1b[2Jb"):
        with pytest.raises(UsageError):
            read_line(line, BENCH)


@given(
    st.one_of(
        st.text(max_size=80),
        st.lists(st.sampled_from([*WORDS, "vent", "latch", "20", "%", "for", "1 s", "in", "off", "x"])).map(" ".join),
    )
)
def test_any_text_is_a_command_or_a_usage_error(line: str) -> None:
    command: c.Command | None = None
    with contextlib.suppress(UsageError):
        command = read_line(line, BENCH)
    assert command is None or type(command).__module__ == c.__name__
    for choice in choices(line, BENCH):
        assert choice.text


@pytest.mark.parametrize(
    ("line", "found"),
    [
        ("j", ["jog"]),
        ("jog ", ["vent"]),
        ("jog v", ["vent"]),
        ("jog vent 20 ", ["%"]),
        ("jog vent 20 % ", ["for"]),
        ("jog vent 20 % for ", []),
        ("jog vent 20 % for 2 ", ["s", "ms", "us", "min", "h"]),
        ("move latch ", ["off"]),
        ("move ", ["latch"]),
        ("limits ", ["vent", "latch"]),
        ("log s", ["start", "stop"]),
        ("help ar", ["arm"]),
        ("xyzzy ", []),
        ("arm ", []),
    ],
)
def test_completion_offers_what_may_come_next(line: str, found: list[str]) -> None:
    assert [choice.text for choice in choices(line, BENCH)] == found


def test_files_are_wanted_after_run_and_check_only() -> None:
    assert wants_file("run ven") == "ven"
    assert wants_file("check ") == ""
    assert wants_file("mark ven") is None
