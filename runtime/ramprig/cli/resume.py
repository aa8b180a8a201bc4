"""`ramprig resume RUN`: go on with a run that was interrupted, at its next cycle."""

from __future__ import annotations

import argparse
import time
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from ramprig.cli.asking import cautions, confirmed, need_somebody
from ramprig.cli.night import carry_out_unattended, seconds_of
from ramprig.cli.running import SIMULATED, Way, carry_out_wish, mock_url
from ramprig.cli.say import tell
from ramprig.errors import StoppedByUser

if TYPE_CHECKING:
    from ramprig.endure.resume import Broken

EPILOG = """What is gone on with is the run as it was begun: its sequence, values and bench file. The board must be the
same one with the same program and limits; its port may have another name by now (--port). The cycle that the
interruption fell into counts as not done, and is told apart. New samples go into a file of their own beside the old
ones; run.json tells of each interruption.

What was begun unattended goes on unattended: the rules are judged again, there is a new sheet for the door, and the
computer is kept awake. --attended leaves that out, for a run that somebody stands beside from now on.

It asks before it arms; without a terminal it wants --yes."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The run and its port."""
    parser.add_argument("run", type=Path, metavar="RUN", help="the run's folder")
    parser.add_argument("--port", metavar="URL", help="the port, where it has another name now")
    parser.add_argument("--yes", action="store_true", help="do not ask before anything moves")
    parser.add_argument("--after-trip", action="store_true", help="go on though the run ended by a trip of the board")
    beside = parser.add_mutually_exclusive_group()
    beside.add_argument("--unattended", action="store_true", help="go on only where the rules for the night hold")
    beside.add_argument("--attended", action="store_true", help="somebody stands beside it from now on")
    parser.add_argument("--at-most", metavar="TIME", help="end in order after this time, such as '9 h'")
    parser.add_argument("--accept-sleep", action="store_true", help="go on though the computer may fall asleep")
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Go on; returns the exit code of the whole run's verdict."""
    from ramprig.endure.interruption import was_unattended
    from ramprig.endure.resume import WatchedOver, read_broken, wish_to_carry_on
    from ramprig.sequence.running import RunWish

    now_s = time.time()
    broken = read_broken(args.run, now_unix_s=now_s)
    url = args.port or broken.port_url
    simulated = url.startswith(SIMULATED)
    if simulated:
        url = mock_url(url, Path(broken.bench.file))
    for line in what_is_known(broken):
        tell(line)
    way = Way(url=url, virtual=False, runs=args.run.parent)

    def ask_first() -> None:
        if not simulated and not args.yes:
            ask()

    unattended = args.unattended or (was_unattended(broken.manifest)[0] and not args.attended)

    def go_on(way: Way) -> int:
        awake_by = way.settings.get("kept_awake_by")
        wish = wish_to_carry_on(
            broken,
            RunWish(sequence=broken.sequence, bench=broken.bench),
            by="command",
            now_unix_s=time.time(),  # the question may have stood for hours
            after_trip=args.after_trip,
            latest_end_unix_s=way.latest_end_unix_s,
            at_most=args.at_most,
            port_url=args.port,
            watched_over=WatchedOver(unattended, None if awake_by is None else str(awake_by)),
        )
        return carry_out_wish(wish, way)

    if unattended:
        return carry_out_unattended(
            broken.sequence,
            broken.bench,
            way,
            so_far=broken.so_far.blocks,
            at_most=args.at_most,
            accept_sleep=args.accept_sleep,
            ask=ask_first,
            run=go_on,
            latest_end_unix_s=said_end_unix_s(broken),
        )
    at_most_s = seconds_of(args.at_most)
    if at_most_s is not None:
        way = replace(way, latest_end_unix_s=now_s + at_most_s)
    ask_first()
    return go_on(way)


def said_end_unix_s(broken: Broken) -> float | None:
    """When the run is to be over because its user said so by --at-most; None where its plan alone bounds it."""
    from ramprig.record.events import from_rfc3339

    settings = broken.manifest.get("settings") or {}
    if settings.get("at_most") is None or settings.get("latest_end") is None:
        return None
    return from_rfc3339(str(settings["latest_end"])).timestamp()


def what_is_known(broken: Broken) -> Iterator[str]:
    """What broke the run off, what is done of it, and what is not known."""
    from ramprig.quantity import format_duration

    counted = broken.so_far.counted
    yield f"run       {broken.folder}"
    yield f"broken    {broken.cause}, {format_duration(round(time.time() - broken.last_unix_s))} ago"
    yield f"cycles    {counted}"
    if broken.open_number is not None:
        yield f"unknown   cycle {broken.open_number} was commanded, and its end is not known: it counts as not done"
    for name in broken.changed:
        how = "is not as it was when the run began" if Path(name).exists() else "is not to be found from here"
        yield f"changed   {name} {how}: the copy in the run folder is used"


def ask() -> None:
    """Wait for the word `yes`. Raises StoppedByUser for any other, UsageError where nobody is at a terminal."""
    need_somebody(moves="the run moves what is connected")
    for line in cautions():
        tell(line)
    if not confirmed("Type yes and ENTER to arm and go on; anything else leaves everything off."):
        raise StoppedByUser("Not gone on with: it was not confirmed. Nothing has moved.")
