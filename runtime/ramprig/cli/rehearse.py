"""`ramprig rehearse FILE`: a sequence on a simulated board in virtual time: hours pass in seconds, nothing moves."""

from __future__ import annotations

import argparse
import gc
from collections.abc import Iterator
from contextlib import contextmanager

from ramprig.cli.running import NOT_PROVED, Way, add_run_arguments, carry_out_run, mock_url
from ramprig.cli.say import tell

COLLECT_AFTER = 50_000
"""Objects made and not freed before the interpreter looks for rings among them: a rehearsal makes millions, and hardly
a ring."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The sequence, and how the mock behaves."""
    add_run_arguments(parser)
    parser.add_argument("--no-record", action="store_true", help="write no run folder")
    parser.add_argument("--seed", type=int, metavar="N", help="the same seed gives the same run")
    parser.add_argument(
        "--fault", action="append", default=[], metavar="NAME[:AXIS][=VALUE]", help="see `ramprig mock --faults`"
    )
    parser.add_argument(
        "--on", choices=("core", "mock"), help="the firmware core in C, or the mock in Python (default: core if it can)"
    )
    parser.epilog = NOT_PROVED


def carry_out(args: argparse.Namespace) -> int:
    """Rehearse; returns the exit code that the run would have."""
    from ramprig.cli.files import read_pair, values_of
    from ramprig.mock.core import rehearsal_on

    pair = read_pair(args.file, bench=args.bench, values=values_of(args.settings))
    device = rehearsal_on(pair.bench, wanted=args.on)
    tell(f"rehearsing on {device.on}")
    way = Way(
        url=mock_url(device.scheme, pair.bench_path, virtual=True, seed=args.seed, faults=args.fault),
        virtual=True,
        runs=None if args.no_record else args.runs,
        title=args.title or f"{pair.sequence.name} rehearsal",
        seed=pair.bench.mock.seed if args.seed is None else args.seed,
    )
    with _seldom_collecting():
        return carry_out_run(pair, way)


@contextmanager
def _seldom_collecting() -> Iterator[None]:
    before = gc.get_threshold()
    gc.set_threshold(COLLECT_AFTER, *before[1:])
    try:
        yield
    finally:
        gc.set_threshold(*before)
