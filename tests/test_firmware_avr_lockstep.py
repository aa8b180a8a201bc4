"""The emulated board behind ramprig's own lockstep port, on a pseudo-terminal, as `ramprig run` opens it."""

from __future__ import annotations

import subprocess

import pytest

from avr_builds import WHY_NOT, emulator, program
from ramprig.port.open import open_port
from ramprig_link.check import seal

pytestmark = [pytest.mark.skipif(bool(WHY_NOT), reason=WHY_NOT), pytest.mark.process]


def test_the_lockstep_port_talks_to_the_board_in_its_own_time() -> None:
    command = [str(emulator()), str(program()), "--lockstep-pty"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as board:
        assert board.stdout is not None
        try:
            with open_port(f"lockstep:{board.stdout.readline().strip()}") as port:
                heard = b""
                while b"boot" not in heard:
                    heard += port.read(1.0)
                start_s = port.clock.now()
                port.write(seal(b"01 who"))
                heard = b""
                while not heard.endswith(b"\n"):
                    heard += port.read(0.1)
                assert heard.startswith(b"01 ok ")
                assert b" ref-1.0.0 atmega328p T1 " in heard
                assert 0.002 < port.clock.now() - start_s < 0.03  # its bytes' time on the wire, and a few ticks
        finally:
            board.terminate()
