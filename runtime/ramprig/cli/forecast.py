"""`ramprig forecast FILE`: what a run will do to motor, supply and disk, and the odds that it trips."""

from __future__ import annotations

import argparse
import json
from pathlib import Path

from ramprig.cli.progress import Progress
from ramprig.cli.running import NOT_PROVED
from ramprig.cli.say import say_surely, tell

RISK = 0.05
"""A run that trips or fails in more than so many draws is not ready for a night; ours."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The sequence, and how it is forecast."""
    from ramprig.cli.check import add_reading_arguments

    parser.add_argument("file", type=Path, metavar="FILE", help="the sequence")
    add_reading_arguments(parser)
    parser.add_argument("--draws", type=int, default=200, metavar="N", help="random benches (default: 200)")
    parser.add_argument("--seed", type=int, default=1, metavar="N", help="the same seed gives the same forecast")
    parser.add_argument("--workers", type=int, metavar="N", help="processes (default: one for each core)")
    parser.add_argument(
        "--within", type=float, default=600.0, metavar="S", help="fewer draws where more take longer (default: 600)"
    )
    parser.add_argument("--full", action="store_true", help="simulate a periodic run in full, not reduced")
    parser.add_argument("--on", choices=("core", "mock"), help="the firmware core in C, or the mock in Python")
    parser.add_argument("--json", action="store_true", help="print the forecast as JSON")
    parser.epilog = (
        "Figures come from the bench file's `measured:` part (`ramprig measure constants --save`), else from its model "
        "with assumed uncertainties, which is said. Nothing is opened and nothing moves. Exits with 1 where a limit is "
        "too tight, or more than one draw in twenty trips or fails. " + NOT_PROVED
    )


def carry_out(args: argparse.Namespace) -> int:
    """Forecast; 1 where a limit is too tight, or more than `RISK` of the draws trip or fail an expectation; else 0."""
    from ramprig.cli.files import read_pair, values_of
    from ramprig.measure.forecast.forecast import ForecastWish, forecast

    pair = read_pair(args.file, bench=args.bench, values=values_of(args.settings))
    wish = ForecastWish(
        draws=args.draws,
        seed=args.seed,
        workers=args.workers,
        most_s=args.within,
        reduce=not args.full,
        on_core=None if args.on is None else args.on == "core",
    )
    progress = Progress()

    def shown(done: int, of: int) -> None:
        progress.show(lambda: f"{done} of {of} draws")

    try:
        found = forecast(pair.sequence, pair.bench, wish, progress=shown)
    finally:
        progress.close()
    if args.json:
        say_surely(json.dumps(found.to_json(), ensure_ascii=False, allow_nan=False, indent=2), as_is=True)
    else:
        for line in found.text():
            say_surely(line)
    tell(NOT_PROVED)
    fits = all(margin.verdict != "tight" for margin in found.margins)
    risky = any(odds.times > RISK * odds.of for odds in (found.trip, found.failure))
    return 0 if fits and not risky else 1
