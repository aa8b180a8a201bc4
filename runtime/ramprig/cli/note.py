"""`ramprig note RUN TEXT`: keep what somebody measured or noticed by hand with a run, while it is on or after it."""

from __future__ import annotations

import argparse
import time
from pathlib import Path

from ramprig.cli.say import say

EPILOG = """As in:
  ramprig note runs/20260301T203000Z-vent-endurance-3fa9c2 "brush length 4.2 mm" --photo brush.jpg

The note is kept with the time of day among the run's events, a photo as a copy with its hash."""


def declare(parser: argparse.ArgumentParser) -> None:
    """The run, the text and photos."""
    parser.add_argument("run", type=Path, metavar="RUN", help="the run's folder")
    parser.add_argument("text", help="what was measured or noticed")
    parser.add_argument("--photo", type=Path, action="append", default=[], metavar="FILE", help="a photo; repeatable")
    parser.add_argument("--by", default="", metavar="NAME", help="who noted it")
    parser.epilog = EPILOG


def carry_out(args: argparse.Namespace) -> int:
    """Keep the note; 0."""
    from ramprig.endure.notes import add_note

    note = add_note(args.run, args.text, unix_s=time.time(), by=args.by, photos=args.photo)
    photos = f" with {', '.join(note.photos)}" if note.photos else ""
    say(f"note {note.number} kept at {note.utc}{photos}")
    return 0
