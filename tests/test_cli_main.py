"""The command line's frame: help, exit codes of every kind of ending, bugs told in short, and what is loaded when."""

from __future__ import annotations

import argparse
import io
import re
import subprocess
import sys
import threading
import types
from pathlib import Path

import pytest

from ramprig import errors
from ramprig.cautions import CAUTIONS, HEADING, cautions_lines
from ramprig.cli import main
from ramprig.cli import main as main_function
from ramprig.cli.asking import cautions
from ramprig.cli.files import values_of
from ramprig.cli.main import COMMANDS, EXIT_BUG, MOVING, parser_for
from ramprig.cli.progress import LINE_EVERY_S, PIECES_MAX, REWRITE_EVERY_S, Progress
from ramprig.cli.say import tell, width_of

HEAVY = ("numpy", "yaml", "serial", "prompt_toolkit", "ramprig.session", "ramprig.mock", "ramprig.bench")


def failing_command(monkeypatch: pytest.MonkeyPatch, error: BaseException) -> None:
    """The command `ports` raises this."""

    def carry_out(args: argparse.Namespace) -> int:
        raise error

    command = types.SimpleNamespace(declare=lambda parser: None, carry_out=carry_out)
    monkeypatch.setattr(sys.modules["ramprig.cli.main"], "command_named", lambda name: command)


@pytest.mark.parametrize("name", sorted(COMMANDS))
def test_every_command_has_help(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as end:
        main([name, "--help"])
    assert end.value.code == 0
    assert f"usage: ramprig {name}" in capsys.readouterr().out


def test_help_names_every_command_and_exit_code(capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as end:
        main(["--help"])
    text = capsys.readouterr().out
    assert end.value.code == 0
    assert all(f"    {name} " in text for name in COMMANDS)
    codes = [line.split()[0] for line in text.splitlines() if re.match(r"  \d", line)]
    assert codes == ["0", "1", "2", "3", "4", "5", "70"]


def test_help_loads_nothing_heavy() -> None:
    code = (
        "import sys\nfrom ramprig.cli import main\n"
        "try:\n main(['--help'])\nexcept SystemExit:\n pass\n"
        f"print(sorted(set({HEAVY!r}) & set(sys.modules)), file=sys.stderr)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60)
    assert done.stderr.strip() == "[]"


@pytest.mark.parametrize("words", [[], ["nonsense"], ["check"], ["schema", "motor"], ["ports", "more"]])
def test_a_wrong_command_line_ends_with_2(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    with pytest.raises(SystemExit) as end:
        main(words)
    assert end.value.code == 2
    assert "usage: ramprig" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (errors.FileError("found x", wanted="y"), 2),
        (errors.UsageError("that is nothing"), 2),
        (errors.PortNotFound("no port"), 2),
        (errors.RecordError("disk full"), 2),
        (errors.Refused("arm", "digest", "limits differ"), 3),
        (errors.Tripped("overcurrent", 5, "tripped"), 3),
        (errors.LinkLost("gone"), 4),
        (errors.WrongDevice("another board"), 4),
        (errors.StoppedByUser("a stop was asked for"), 5),
        (KeyboardInterrupt(), 5),
    ],
)
def test_each_error_ends_with_its_exit_code_and_its_message_alone(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], error: BaseException, code: int
) -> None:
    failing_command(monkeypatch, error)
    assert main(["ports"]) == code
    assert capsys.readouterr().err.strip() == (str(error) or "Stopped by the user.")


@pytest.mark.parametrize("error", [KeyError("x"), errors.Bug("a promise"), RecursionError("deep")])
def test_a_bug_is_told_in_short_and_written_down_in_full(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str], error: Exception
) -> None:
    failing_command(monkeypatch, error)
    assert main(["ports"]) == EXIT_BUG
    text = capsys.readouterr().err
    assert text.startswith(f"This is a bug in ramprig: {type(error).__name__}")
    assert "Traceback" not in text
    written = re.search(r"The traceback is in (\S+);", text)
    assert written is not None
    path = Path(written[1])
    assert "Traceback" in path.read_text("utf-8")
    path.unlink()


def test_the_module_and_the_script_are_the_same_command() -> None:
    done = subprocess.run(
        [sys.executable, "-m", "ramprig", "--version"], capture_output=True, text=True, check=True, timeout=60
    )
    assert done.stdout.startswith("ramprig ")
    assert callable(main_function)


@pytest.mark.skipif(sys.platform == "win32", reason="SIGPIPE's twin is POSIX only")
def test_a_reader_that_leaves_is_no_error() -> None:
    command = f"{sys.executable} -m ramprig schema bench | {sys.executable} -c 'pass'"
    done = subprocess.run(command, shell=True, capture_output=True, text=True, check=True, timeout=60)
    assert done.stderr == ""


@pytest.mark.parametrize("name", COMMANDS)
def test_no_line_of_help_is_too_long_for_a_page(
    name: str, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("COLUMNS", "80")
    with pytest.raises(SystemExit):
        parser_for(name).parse_args([name, "--help"])
    assert [line for line in capsys.readouterr().out.splitlines() if len(line) > 120] == []


def test_only_the_command_that_is_given_is_declared() -> None:
    assert parser_for(None).parse_args(["ports"]).command == "ports"


# ---- values and progress -------------------------------------------------------------------------------------------


def test_named_values_are_taken_with_blanks_and_equals_signs_inside() -> None:
    assert values_of(["drive=40 %", " passes = 3", "note=a=b"]) == {"drive": "40 %", "passes": "3", "note": "a=b"}


@pytest.mark.parametrize("texts", [["drive"], ["=3"], ["drive="], ["drive=1", "drive=2"]])
def test_a_malformed_named_value_is_refused(texts: list[str]) -> None:
    with pytest.raises(errors.UsageError, match="--set"):
        values_of(texts)


PATIENCE_S = 60.0
"""So that a busy machine does not put the pieces out of step with the test."""


class Hand:
    """A clock that is set by hand."""

    def __init__(self) -> None:
        self.now_s = 0.0

    def __call__(self) -> float:
        return self.now_s


def test_a_terminal_has_one_line_that_is_rewritten_and_taken_away() -> None:
    clock, stream = Hand(), io.StringIO()
    progress = Progress(stream, is_terminal=True, width=20, now=clock, patience_s=PATIENCE_S)
    progress.show(lambda: "10 %, opening the whole vent")
    progress.show(lambda: "never made: too soon")
    clock.now_s = REWRITE_EVERY_S
    progress.show(lambda: "20 %")
    progress.close()
    assert stream.getvalue() == "\r10 %, opening the w\r20 %               \r    \r"


def test_elsewhere_a_line_comes_now_and_then() -> None:
    clock, stream = Hand(), io.StringIO()
    progress = Progress(stream, is_terminal=False, now=clock, patience_s=PATIENCE_S)
    for second in range(12):
        clock.now_s = float(second)
        progress.show(lambda: f"{second} s")  # noqa: B023  (called at once)
    progress.close()
    assert LINE_EVERY_S == 5.0
    assert stream.getvalue() == "5 s\n10 s\n"


def test_a_terminal_that_is_gone_ends_the_telling_and_nothing_else() -> None:
    class Gone(io.StringIO):
        def write(self, text: str) -> int:
            raise OSError(5, "Input/output error")

    clock = Hand()
    progress = Progress(Gone(), is_terminal=True, now=clock, patience_s=PATIENCE_S)
    progress.show(lambda: "10 %")
    clock.now_s = 1.0
    progress.show(lambda: pytest.fail("it is told to nobody"))
    progress.line("more")
    progress.close()
    assert clock.now_s == 1.0


def test_a_terminal_that_takes_no_more_holds_up_nothing_and_gets_the_lines_when_it_takes_them_again() -> None:
    takes, stuck = threading.Event(), threading.Event()

    class Held(io.StringIO):
        def write(self, text: str) -> int:
            stuck.set()
            assert takes.wait(60.0)
            return super().write(text)

    clock, stream = Hand(), Held()
    progress = Progress(stream, is_terminal=True, width=40, now=clock, patience_s=0.0)
    progress.show(lambda: "10 %")
    assert stuck.wait(60.0)
    for second in range(1, PIECES_MAX + 4):
        clock.now_s = float(second)
        progress.show(lambda: pytest.fail("it cannot be shown"))
        progress.line(f"line {second}")
    assert stream.getvalue() == ""
    takes.set()
    progress.close()
    told = stream.getvalue().replace("\r    \r", "\r").split("\n")
    assert told[0] == "\r10 %\rline 1"
    assert told[1:-1] == [
        *(f"line {n}" for n in range(2, PIECES_MAX + 1)),
        "(3 lines were left out: the terminal took no more)",
    ]


@pytest.mark.parametrize("columns", [80, 100, 120])
@pytest.mark.parametrize("name", ["", *MOVING])
def test_the_help_of_what_moves_ends_with_the_cautions_and_fits_the_terminal(
    capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch, name: str, columns: int
) -> None:
    monkeypatch.setenv("COLUMNS", str(columns))
    with pytest.raises(SystemExit):
        main([*([name] if name else []), "--help"])
    said = capsys.readouterr().out
    assert [line for line in said.splitlines() if len(line) > columns] == []
    _, _, cautions = said.partition(f"\n{HEADING}:\n")
    assert " ".join(cautions.split()) == "- " + " - ".join(CAUTIONS)


def test_a_line_that_stays_is_broken_between_words_on_a_terminal_and_nowhere_else() -> None:
    shown = []
    for is_terminal in (True, False):
        out = io.StringIO()
        progress = Progress(out, is_terminal=is_terminal, width=30)
        progress.line("interrupted: the board restarted, and it did not tell why")
        progress.close()
        shown.append(out.getvalue())
    assert shown == [
        "interrupted: the board\n  restarted, and it did not\n  tell why\n",
        "interrupted: the board restarted, and it did not tell why\n",
    ]


@pytest.mark.parametrize(("is_terminal", "most", "width"), [(True, 100, 80), (True, 60, 60), (False, 100, 100)])
def test_a_filled_text_is_as_wide_as_the_terminal_at_most(is_terminal: bool, most: int, width: int) -> None:
    class Stream(io.StringIO):
        def isatty(self) -> bool:
            return is_terminal

    assert width_of(Stream(), most=most) == width  # a terminal that does not tell its size is taken for 80 columns


def test_cautions_are_filled_for_the_terminal_and_not_broken_twice(monkeypatch: pytest.MonkeyPatch) -> None:
    class Stream(io.StringIO):
        def isatty(self) -> bool:
            return True

    out = Stream()
    monkeypatch.setattr("sys.stderr", out)
    for line in cautions():
        tell(line)
    assert out.getvalue().splitlines() == cautions_lines(80)
