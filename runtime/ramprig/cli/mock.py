"""`ramprig mock`: a board in software for other programs, at a pseudo-terminal or a TCP port."""

from __future__ import annotations

import argparse

EPILOG = """The first line printed is what a host opens. Faults are switched while it runs by lines on standard input,
such as `fault jammed_shaft on`, `fault bit_errors 1e-3`, `faults`, `reset`, `break`. It ends by SIGTERM or Ctrl-C."""


def declare(parser: argparse.ArgumentParser) -> None:
    """What is served, where, and with which faults."""
    from ramprig.mock.__main__ import add_arguments

    add_arguments(parser)
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Serve until it is ended."""
    from ramprig.mock.__main__ import serve

    return serve(args)
