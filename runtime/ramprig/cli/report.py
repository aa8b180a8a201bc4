"""`ramprig report RUN...`: the report of a run as one HTML file, and junit.xml; of several, what differs first."""

from __future__ import annotations

import argparse
from pathlib import Path

from ramprig.cli.say import say, tell
from ramprig.errors import UsageError

EPILOG = """The files go into the run's folder; for several runs into the folder they lie in, or --out. An entry puts
what only people know into the report, such as --entry item='vent, no. 42' --entry environment='22 degC, 40 %'."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The run folders, where to, and what to enter."""
    from ramprig.report.html import ENTRIES

    parser.add_argument("runs", type=Path, nargs="+", metavar="RUN", help="a run's folder")
    parser.add_argument("--out", type=Path, metavar="DIR", help="where report.html and junit.xml go")
    parser.add_argument(
        "--entry", action="append", default=[], metavar="NAME=TEXT", help=f"enter something: {', '.join(ENTRIES)}"
    )
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Write the files; 0 also where the run failed, which is in the report."""
    import time

    from ramprig.record.events import rfc3339
    from ramprig.report.making import make_report

    runs: list[Path] = args.runs
    out = args.out or (runs[0] if len(runs) == 1 else runs[0].resolve().parent)
    made = make_report(runs, out=out, issued=rfc3339(time.time(), decimals=0), entries=entries_of(args.entry))
    for path in (made.report, made.junit, *made.intervals, *made.features):
        say(str(path))
    tell("Open the report in a browser; print it on A4 for paper.")
    return 0


def entries_of(texts: list[str]) -> dict[str, str]:
    """What NAME=TEXT spells; raises UsageError for a name that there is not."""
    from ramprig.report.html import ENTRIES

    entries = {}
    for text in texts:
        name, equals, value = text.partition("=")
        if not equals or name not in ENTRIES:
            known = ", ".join(ENTRIES)
            raise UsageError(f"--entry '{text}' is no entry of a report; write NAME=TEXT, with NAME one of {known}")
        entries[name] = value
    return entries
