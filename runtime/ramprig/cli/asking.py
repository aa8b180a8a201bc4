"""Asks the person at the terminal, while time goes on: a question must hold up neither a signal nor a device."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable

from ramprig.cautions import cautions_lines
from ramprig.cli.say import tell, width_of
from ramprig.errors import UsageError

LOOK_S = 0.1
"""Time goes on by so much between two looks for an answer."""
CAUTIONS_WIDTH = 100
"""Columns beyond which the cautions are hard to read."""


def need_somebody(*, moves: str) -> None:
    """Raises UsageError where nobody is at a terminal to be asked; `moves` says what would."""
    if not on_terminal():
        raise UsageError(f"nobody is at a terminal to be asked, and {moves}: say --yes where somebody watches over it")


def on_terminal() -> bool:
    """Whether somebody can be asked."""
    return sys.stdin is not None and sys.stdin.isatty() and sys.stderr.isatty()


def cautions() -> list[str]:
    """The cautions, filled for the terminal."""
    return cautions_lines(width_of(sys.stderr, most=CAUTIONS_WIDTH))


def confirmed(question: str) -> bool:
    """Whether the word `yes` is typed; nothing is open yet, so that Ctrl-C ends the program as ever."""
    tell(question)
    return sys.stdin.readline().strip().lower() == "yes"


def answered(question: str, pump: Callable[[float], None]) -> str:
    """What is typed, in small letters; time goes on by `pump`, which may raise, while it is waited for."""
    tell(question)
    lines: list[str] = []
    reader = threading.Thread(target=lambda: lines.append(sys.stdin.readline()), daemon=True)
    reader.start()
    reader.join(LOOK_S / 10)  # what is piped in is there at once
    while reader.is_alive():
        pump(LOOK_S)
    return lines[0].strip().lower() if lines else ""
