"""`ramprig export RUN --to FORMAT`: the samples of a run for other programs; the log itself stays as it is."""

from __future__ import annotations

import argparse
from pathlib import Path

from ramprig.cli.say import say

EPILOG = """parquet needs the package pyarrow, mdf4 the package asammdf: pip install 'ramprig[export]'. excel-csv is
text in UTF-16 with tabs, or with --decimal comma with semicolons, split before the last row that a sheet can hold."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The run, the format, where to."""
    from ramprig.record.export import Mark, To

    parser.add_argument("run", type=Path, metavar="RUN", help="the run's folder")
    formats = [to.value for to in To]  # plain words, so that a wrong one is answered with the right ones
    parser.add_argument("--to", required=True, choices=formats, metavar="FORMAT", help=", ".join(formats))
    parser.add_argument("--out", type=Path, metavar="DIR", help="where the files go (default: the run's folder)")
    parser.add_argument(
        "--decimal",
        choices=[mark.value for mark in Mark],
        default=Mark.POINT.value,
        help="of excel-csv (default: point)",
    )
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Write the files and say which."""
    from ramprig.record.export import Mark, To, export_run

    for done in export_run(args.run, To(args.to), out=args.out, mark=Mark(args.decimal)):
        say(f"{done.path}  {done.rows} rows")
    return 0
