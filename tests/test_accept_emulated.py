"""The emulated ATmega328P board is accepted, motor and all."""

from __future__ import annotations

import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest
from dev.build_firmware import build_emulator, build_program
from toolchain import BOARD, EMULATOR, why_not

from accept_boards import accepted
from ramprig.port.base import Port
from ramprig.port.open import open_port

pytestmark = [
    pytest.mark.skipif(bool(why_not(BOARD, EMULATOR)), reason=why_not(BOARD, EMULATOR)),
    pytest.mark.process,
]


def emulated(folder: Path, *defines: str) -> Iterator[Port]:
    """A port to the emulated board with a firmware built in `folder`."""
    program = build_program(folder, serial="EMU-1", defines=defines)
    emulator = build_emulator(folder)
    process = subprocess.Popen(
        [str(emulator), str(program), "--lockstep-pty"], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    try:
        assert process.stdout is not None
        with open_port(f"lockstep:{process.stdout.readline().strip()}") as port:
            yield port
    finally:
        process.kill()
        process.communicate()


@pytest.fixture
def board(tmp_path: Path) -> Iterator[Port]:
    yield from emulated(tmp_path)


def test_the_emulated_board_is_accepted(board: Port) -> None:
    verdict = accepted(board)
    assert verdict.failed == {}
    untested = [result.check.name for result in verdict.results if result.word == "not tested"]
    assert untested == ["restart", "line-break"]
    assert verdict.unrestored == []


def test_a_seeded_bug_that_a_larger_processor_hides_is_found_here(tmp_path: Path) -> None:
    for port in emulated(tmp_path, "-DRR_SEEDED_BUG=17", "-Wno-error"):  # the compiler sees it coming
        verdict = accepted(port, only="overload")
        assert "TRIP-8" in verdict.failed, verdict.failed
        assert verdict.exit_code == 1
