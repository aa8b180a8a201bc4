"""The command `ramprig`: finds the command's module, runs it, and turns every ending into a sentence and an exit code.

Only the module of the command that was given is loaded, so that `ramprig --help` starts at once.
"""

from __future__ import annotations

import argparse
import importlib
import os
import sys
from collections.abc import Sequence
from typing import Protocol, cast

from ramprig import __version__
from ramprig.cautions import cautions_lines
from ramprig.cli.helptext import WIDTH_MAX, HelpText
from ramprig.cli.say import tell
from ramprig.errors import Bug, RamprigError

COMMANDS = {
    "check": "print what a sequence or bench file means, before anything moves",
    "rehearse": "run a sequence on a simulated board in virtual time",
    "run": "run a sequence on the bench",
    "resume": "go on with a run that was interrupted, at its next cycle",
    "note": "keep a remark or a photo with a run, with the time",
    "shell": "drive the bench by hand",
    "mock": "serve a board in software on a pseudo-terminal or a TCP port",
    "ports": "list the serial ports, and how to name each in a bench file",
    "read": "tell how a run ended, and check its account of every sample",
    "report": "write the report of a run, or of several beside each other",
    "export": "give the samples of a run to other programs",
    "doctor": "find out why a bench cannot be reached, or how well it is",
    "measure": "check a motor's wiring; measure a motor, a servo or the link",
    "accept": "check a board of your own against the protocol, clause by clause",
    "forecast": "tell what a run will do, within which bounds, and the odds that it trips",
    "life": "estimate how long samples live, or plan the test that shows it",
    "schema": "print the JSON Schema of bench or sequence files, for editors",
}
"""Every command is a module of this room by the same name."""

MOVING = ("run", "resume", "shell", "measure", "accept")
"""Commands that move motors: their help ends with the cautions."""

EXIT_CODES = """exit codes:
  0   passed
  1   an expectation or a clause failed, or a measurement found a fault or gave no result
  2   the command line or a file must be mended
  3   the device tripped or refused
  4   the link was lost, or another device answered
  5   stopped by the user
  70  a bug in ramprig
"""
EXIT_USER = 5
EXIT_BUG = 70
"""EX_SOFTWARE of BSD's sysexits.h."""


class Command(Protocol):
    """What the module of a command has."""

    def declare(self, parser: argparse.ArgumentParser) -> None:
        """Add the command's arguments."""
        ...

    def carry_out(self, args: argparse.Namespace) -> int:
        """Do it; returns the exit code."""
        ...


def command_named(name: str) -> Command:
    """The module of a command, loaded now."""
    return cast("Command", importlib.import_module(f"ramprig.cli.{name}"))


def parser_for(wanted: str | None) -> argparse.ArgumentParser:
    """The parser; only the command `wanted` has its arguments declared."""
    parser = argparse.ArgumentParser(
        prog="ramprig",
        description="Serial console and scripting runtime for motor benches. `ramprig COMMAND --help` tells more.",
        epilog=f"{EXIT_CODES}\n{_cautions()}",
        formatter_class=HelpText,
    )
    parser.add_argument("--version", action="version", version=f"ramprig {__version__}")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", required=True)
    for name, summary in COMMANDS.items():
        command = commands.add_parser(name, help=summary, description=f"{summary[0].upper()}{summary[1:]}.")
        command.formatter_class = HelpText
        if name == wanted:
            command_named(name).declare(command)
            if name in MOVING:
                command.epilog = f"{command.epilog or ''}\n\n{_cautions()}"
    return parser


def _cautions() -> str:
    """The cautions, as wide as the terminal."""
    import shutil

    return "\n".join(cautions_lines(min(WIDTH_MAX, shutil.get_terminal_size().columns - 2)))


def main(arguments: Sequence[str] | None = None) -> int:
    """Carry out a command line and return its exit code; only argparse's own `SystemExit` leaves it."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    wanted = next((word for word in words if not word.startswith("-")), None)
    parser = parser_for(wanted)
    if words and words[0] not in COMMANDS and not words[0].startswith("-"):
        parser.error(_no_such(words[0]))
    args = parser.parse_args(words)
    try:
        code = command_named(args.command).carry_out(args)
    except Bug as error:
        return _bug(error)
    except RamprigError as error:
        tell("\n".join([str(error), *notes_of(error)]))
        return error.exit_code
    except KeyboardInterrupt as error:
        tell("\n".join(["Stopped by the user.", *notes_of(error)]))
        return EXIT_USER
    except BrokenPipeError:
        code = 0  # as by `| head`: who has read enough has no complaint
    except Exception as error:  # whatever else comes is ours to explain, not the user's to read
        return _bug(error)
    _flush()
    return code


def notes_of(error: BaseException) -> list[str]:
    """What went wrong besides, such as an end of the run that could not be written."""
    return getattr(error, "__notes__", [])


def _no_such(name: str) -> str:
    import difflib

    near = difflib.get_close_matches(name, COMMANDS, n=1)
    hint = f"did you mean '{near[0]}'?" if near else f"there are {', '.join(COMMANDS)}"
    return f"there is no command {name!r}; {hint}"


def _flush() -> None:
    """Write out what is left, so that an output that is gone cannot change the exit code at the interpreter's end."""
    try:
        sys.stdout.flush()
    except OSError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _bug(error: Exception) -> int:
    """Tell of a bug in short, and write the whole of it to a file."""
    import tempfile
    import traceback

    text = "".join(traceback.format_exception(error))
    first = f"This is a bug in ramprig: {type(error).__name__}: {error}"
    try:
        number, path = tempfile.mkstemp(prefix="ramprig-bug-", suffix=".txt", text=True)
        with open(number, "w", encoding="utf-8") as file:
            file.write(f"ramprig {__version__}, Python {sys.version}\n{text}")
    except OSError:
        tell(f"{first}\n{text}")
        return EXIT_BUG
    tell(f"{first}\nThe traceback is in {path}; please report it with that file. Look at the bench before going on.")
    return EXIT_BUG
