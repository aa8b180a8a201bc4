"""`ramprig run FILE`: a sequence on the bench, for real."""

from __future__ import annotations

import argparse
import sys
from typing import TYPE_CHECKING

from ramprig.cli.running import SIMULATED, Way, add_run_arguments, carry_out_run, mock_url, on_terminal
from ramprig.cli.say import tell
from ramprig.errors import StoppedByUser

if TYPE_CHECKING:
    from ramprig.cli.files import Pair

EPILOG = """On a terminal it shows what will move and asks before it arms; --yes does not ask. SIGINT (Ctrl-C),
SIGTERM and SIGHUP stop the motors in order, a second one within a second cuts them off."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The sequence and the port."""
    add_run_arguments(parser)
    parser.add_argument("--port", metavar="URL", help="the port, instead of the bench's (see `ramprig ports`)")
    parser.add_argument("--yes", action="store_true", help="do not ask before anything moves")
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Run; returns the exit code of its verdict."""
    from ramprig.cli.files import read_pair, values_of

    pair = read_pair(args.file, bench=args.bench, values=values_of(args.settings))
    url = pair.bench.port.url if args.port is None else args.port
    is_simulated = url.startswith(SIMULATED)
    if is_simulated:
        url = mock_url(url, pair.bench_path)
    elif not args.yes and on_terminal():
        ask(pair, url)
    return carry_out_run(pair, Way(url=url, virtual=False, runs=args.runs, title=args.title))


def ask(pair: Pair, url: str) -> None:
    """Show the cautions and what will move, and wait for the word `yes`. Raises StoppedByUser for any other."""
    from ramprig.cautions import cautions_lines

    for line in [*cautions_lines(), "", *what_moves(pair, url)]:
        tell(line)
    tell("Type yes and ENTER to arm and run; anything else leaves everything off.")
    if sys.stdin.readline().strip().lower() != "yes":
        raise StoppedByUser("Not run: it was not confirmed. Nothing has moved.")


def what_moves(pair: Pair, url: str) -> list[str]:
    """What the run is, on which port and board, what moves and how far, and who answers for the bench."""
    from ramprig.sequence.compile import compile_plan
    from ramprig.sequence.report import summary_lines

    bench, safety = pair.bench, pair.bench.safety
    facts = [
        ("port", f"{url}, board {bench.board.name} {bench.board.serial or '(any serial)'}"),
        *((servo.name, f"may move, {servo.low_deg:g} deg to {servo.high_deg:g} deg") for servo in bench.servos),
        *(("contact", safety.contact), ("place", safety.place), ("power cut", safety.power_cut)),
    ]
    plan = compile_plan(pair.sequence, bench)
    return [*summary_lines(plan, bench), *(f"{name:<10}{text}" for name, text in facts if text)]
