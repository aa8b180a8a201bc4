"""`ramprig schema bench|sequence`: the JSON Schema of a kind of file, for editors."""

from __future__ import annotations

import argparse

from ramprig.cli.say import say


def declare(parser: argparse.ArgumentParser) -> None:
    """Which kind of file."""
    parser.add_argument("kind", choices=("bench", "sequence"), help="the kind of file")
    parser.epilog = (
        "Many editors take it from a first line such as\n    # yaml-language-server: $schema=bench.schema.json"
    )


def carry_out(args: argparse.Namespace) -> int:
    """Print the schema."""
    import json

    say(json.dumps(schema_of(args.kind), indent=2, ensure_ascii=False), as_is=True)
    return 0


def schema_of(kind: str) -> object:
    """The schema of `bench` or `sequence` files."""
    if kind == "bench":
        from ramprig.bench import bench_schema

        return bench_schema()
    from ramprig.sequence.schema import sequence_schema

    return sequence_schema()
