"""`ramprig shell`: the bench by hand, on a terminal or by piped lines."""

from __future__ import annotations

import argparse
from dataclasses import replace
from pathlib import Path

from ramprig.cli.running import RUNS, SIMULATED, Way, mock_url, open_port_for
from ramprig.errors import UsageError

USUAL_BENCH = Path("bench.yaml")


def declare(parser: argparse.ArgumentParser) -> None:
    """The bench and the port."""
    parser.add_argument("--bench", type=Path, metavar="FILE", help="the bench file (default: bench.yaml here)")
    parser.add_argument("--port", metavar="URL", help="the port, instead of the bench's (see `ramprig ports`)")
    parser.add_argument("--runs", type=Path, default=RUNS, metavar="DIR", help="where run folders go (default: runs)")
    parser.epilog = "Nothing is armed at the start. Without a terminal it reads plain lines from standard input."


def carry_out(args: argparse.Namespace) -> int:
    """Open the bench and hand over; returns the shell's exit code."""
    from ramprig.bench import load_bench
    from ramprig.shell import run_shell

    path = args.bench or USUAL_BENCH
    if args.bench is None and not USUAL_BENCH.exists():
        raise UsageError("which bench? Give --bench FILE, or begin where there is a bench.yaml")
    bench = load_bench(path)
    url = bench.port.url if args.port is None else args.port
    if url.startswith(SIMULATED):
        url = mock_url(url, path)
    way = Way(url=url, virtual=False, runs=args.runs)
    bench = replace(bench, port=replace(bench.port, url=url))
    return run_shell(bench, open_port_for(way, bench), runs=args.runs, open_again=lambda: open_port_for(way, bench))
