"""The command line: arguments and exit codes. Everything that takes time to load is loaded by the one command."""

from ramprig.cli.main import main

__all__ = ["main"]
