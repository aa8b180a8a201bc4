"""`ramprig run FILE`: a sequence on the bench, for real."""

from __future__ import annotations

import argparse
import time
from dataclasses import replace
from typing import TYPE_CHECKING

from ramprig.cli.asking import cautions, confirmed, need_somebody
from ramprig.cli.night import carry_out_unattended, seconds_of
from ramprig.cli.running import SIMULATED, Way, add_run_arguments, carry_out_run, mock_url
from ramprig.cli.say import tell
from ramprig.errors import StoppedByUser

if TYPE_CHECKING:
    from ramprig.cli.files import Pair

EPILOG = """It shows what will move and asks before it arms; without a terminal it wants --yes. SIGINT (Ctrl-C), SIGQUIT
(Ctrl-\\), SIGTERM and SIGHUP stop the motors in order, a second one within a second cuts them off. Begun with nohup,
SIGHUP is ignored, and the run outlasts its terminal. Suspended (Ctrl-Z) or killed, it is the board that stops, by its
lease.

--unattended starts only where the rules for a run that nobody stands beside hold, and names each one that does not;
it shows a sheet for the door, puts it into the run folder as a page to print, and keeps the computer awake.

A run with cycles that was interrupted goes on by itself where the sequence says so ('on interruption'), else by
`ramprig resume`."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The sequence and the port."""
    add_run_arguments(parser)
    parser.add_argument("--port", metavar="URL", help="the port, instead of the bench's (see `ramprig ports`)")
    parser.add_argument("--yes", action="store_true", help="do not ask before anything moves")
    parser.add_argument("--unattended", action="store_true", help="start only where the rules for the night hold")
    parser.add_argument("--at-most", metavar="TIME", help="end in order after this time, such as '9 h'")
    parser.add_argument("--accept-sleep", action="store_true", help="go on though the computer may fall asleep")
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Run; returns the exit code of its verdict."""
    from ramprig.cli.files import read_pair, values_of

    pair = read_pair(args.file, bench=args.bench, values=values_of(args.settings))
    url = pair.bench.port.url if args.port is None else args.port
    is_simulated = url.startswith(SIMULATED)
    if is_simulated:
        url = mock_url(url, pair.bench_path)
    asks = not is_simulated and not args.yes
    way = Way(url=url, virtual=False, runs=args.runs, title=args.title, is_plan_told=asks)

    def ask_first() -> None:
        if asks:
            ask(pair, url)

    if args.unattended:
        return carry_out_unattended(
            pair.sequence,
            pair.bench,
            way,
            so_far={},
            at_most=args.at_most,
            accept_sleep=args.accept_sleep,
            ask=ask_first,
            run=lambda way: carry_out_run(pair, way),
        )
    ask_first()
    at_most_s = seconds_of(args.at_most)
    if at_most_s is not None:
        way = replace(way, latest_end_unix_s=time.time() + at_most_s, settings={"at_most": args.at_most})
    return carry_out_run(pair, way)


def ask(pair: Pair, url: str) -> None:
    """Show the cautions and what will move, and wait for the word `yes`. Raises StoppedByUser for any other, UsageError
    where nobody is at a terminal to be asked."""
    need_somebody(moves="a run moves what is connected")
    for line in [*cautions(), "", *what_moves(pair, url)]:
        tell(line)
    if not confirmed("Type yes and ENTER to arm and run; anything else leaves everything off."):
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
