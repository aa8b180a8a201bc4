"""The posix port's program `ramprig-core` in a process of its own, for the tests."""

from __future__ import annotations

import subprocess
from functools import cache
from pathlib import Path
from types import TracebackType
from typing import Self

from ramprig.mock.board import Board
from ramprig.mock.core.build import build, firmware, simulated_sources
from ramprig.mock.core.library import defines

WARNINGS = ("-Wall", "-Wextra", "-Wpedantic", "-Wconversion", "-Wshadow", "-Werror")
PATIENCE_S = 20.0


@cache
def program(board: Board) -> Path:
    """The program for a board of these sizes."""
    root = firmware()
    assert root is not None
    sources = [*simulated_sources(root), *sorted((root / "ports" / "posix").glob("*.c"))]
    return build("ramprig-core", sources, (*WARNINGS, *defines(board)), shared=False)


class PosixBoard:
    """One run of the program; `port` is what a host opens."""

    def __init__(self, *options: str, board: Board | None = None) -> None:
        self.process = subprocess.Popen(
            [str(program(board or Board())), *options], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
        )
        assert self.process.stdout is not None
        self.port = self.process.stdout.readline().strip()

    def end(self) -> tuple[int, str]:
        """End it as a user does; the exit code, and what it said on standard error."""
        self.process.terminate()
        _, said = self.process.communicate(timeout=PATIENCE_S)
        return self.process.returncode, said

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self.process.poll() is None:
            self.process.kill()
        self.process.communicate(timeout=PATIENCE_S)
