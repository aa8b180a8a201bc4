"""Runs the command line with `python -m ramprig`."""

import sys

from ramprig.cli import main

if __name__ == "__main__":
    sys.exit(main())
