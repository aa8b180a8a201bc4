"""`ramprig rehearse FILE`: a sequence on the mock in virtual time, where hours pass in seconds and nothing moves."""

from __future__ import annotations

import argparse

from ramprig.cli.running import NOT_PROVED, Way, add_run_arguments, carry_out_run, mock_url


def declare(parser: argparse.ArgumentParser) -> None:
    """The sequence, and how the mock behaves."""
    add_run_arguments(parser)
    parser.add_argument("--no-record", action="store_true", help="write no run folder")
    parser.add_argument("--seed", type=int, metavar="N", help="the same seed gives the same run")
    parser.add_argument(
        "--fault", action="append", default=[], metavar="NAME[:AXIS][=VALUE]", help="see `ramprig mock --faults`"
    )
    parser.epilog = NOT_PROVED


def carry_out(args: argparse.Namespace) -> int:
    """Rehearse; returns the exit code that the run would have."""
    from ramprig.cli.files import read_pair, values_of

    pair = read_pair(args.file, bench=args.bench, values=values_of(args.settings))
    way = Way(
        url=mock_url("mock:", pair.bench_path, virtual=True, seed=args.seed, faults=args.fault),
        virtual=True,
        runs=None if args.no_record else args.runs,
        title=args.title or f"{pair.sequence.name} rehearsal",
        seed=pair.bench.mock.seed if args.seed is None else args.seed,
    )
    return carry_out_run(pair, way)
