"""`ramprig check FILE...`: what a sequence or a bench file means, before anything moves."""

from __future__ import annotations

import argparse
from pathlib import Path

from ramprig.cli.say import say, tell
from ramprig.errors import RamprigError


def declare(parser: argparse.ArgumentParser) -> None:
    """The files, and what sequences are checked with."""
    parser.add_argument("files", nargs="+", type=Path, metavar="FILE", help="sequence or bench files")
    add_reading_arguments(parser)
    parser.epilog = "Nothing is opened and nothing moves. Exits with 2 where a file is refused, after checking all."


def add_reading_arguments(parser: argparse.ArgumentParser) -> None:
    """How a sequence is read: shared with the commands that run one."""
    parser.add_argument("--bench", type=Path, metavar="FILE", help="the bench, instead of the one the sequence names")
    parser.add_argument(
        "--set", action="append", default=[], dest="settings", metavar="NAME=VALUE", help="set a named value"
    )


def carry_out(args: argparse.Namespace) -> int:
    """Print what each file means; the worst exit code of all."""
    from ramprig.cli.files import values_of

    values = values_of(args.settings)
    worst = 0
    for number, path in enumerate(args.files):
        if number:
            say()
        try:
            for line in meaning(path, bench=args.bench, values=values):
                say(line)
        except RamprigError as error:
            tell(str(error))
            worst = max(worst, error.exit_code)
    return worst


def meaning(path: Path, *, bench: Path | None, values: dict[str, str]) -> list[str]:
    """The lines that tell what the file at `path` means. Raises FileError, UsageError."""
    from ramprig.cli.files import is_bench, read_pair

    if is_bench(path):
        from ramprig.bench import echo_lines, load_bench
        from ramprig.mock.from_bench import check_faults

        found = load_bench(path)
        check_faults(found)
        return echo_lines(found)
    from ramprig.sequence.compile import compile_plan
    from ramprig.sequence.report import report_lines

    pair = read_pair(path, bench=bench, values=values)
    return report_lines(compile_plan(pair.sequence, pair.bench), pair.bench)
