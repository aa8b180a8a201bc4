"""The emulated board (`firmware_ref/emu`) as a process of its own, driven in its own time: for budgets and tests.

Time stands still between calls. The frames are those of `ramprig.port.lockstep`, and commands beside them.
"""

from __future__ import annotations

import struct
import subprocess
from collections.abc import Mapping
from pathlib import Path
from types import TracebackType

from ramprig.port.lockstep import REPLY, encode_grant
from ramprig_link.check import crc16, digest, seal, unseal
from ramprig_link.words import LIMITS, Per

COMMAND = struct.Struct("<BH")
FITTED = {Per.DEVICE: 1, Per.AXIS: 1, Per.SERVO: 2}
"""How many of each the ATmega328P port has."""

EEPROM_BYTES = 1024
ANSWER_US = 60_000
"""Longest that a request waits for its answer: a kept line of 190 characters at 115200 baud, and some ticks."""


class EmulatedBoard:
    """One board from its start.

    `run_us` lets time pass; what the board says meanwhile is kept in `lines` (bodies, checks verified, in order).
    """

    def __init__(
        self,
        emulator: Path,
        program: Path,
        *,
        cause: str = "power",
        eeprom: Path | None = None,
        limits: Mapping[tuple[str, int], int] | None = None,
        servos: int = 2,
    ) -> None:
        command = [str(emulator), str(program), "--lockstep", "--cause", cause]
        command += ["--eeprom", str(eeprom)] if eeprom is not None else []
        self._process = subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE, bufsize=0)
        assert self._process.stdin is not None
        assert self._process.stdout is not None
        self._in = self._process.stdin
        self._out = self._process.stdout
        self._rest = b""
        self._tag = 0
        self.now_us = 0
        self.garbled = 0
        """Lines of the board whose check was wrong: a test expects none."""
        self.lines: list[str] = []
        self.limits = {
            (name, index): row.default
            for name, row in sorted(LIMITS.items(), key=lambda item: item[1].number)
            for index in range(servos if row.per is Per.SERVO else FITTED[row.per])
        }
        """What the board's limits are now, by name and index, in the order of the digest."""
        self.limits.update(limits or {})

    def __enter__(self) -> EmulatedBoard:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, value: BaseException | None, trace: TracebackType | None
    ) -> None:
        self.close()

    def close(self) -> None:
        """End the process."""
        self._in.close()
        self._out.close()
        self._process.wait(10.0)

    def _read(self, count: int) -> bytes:
        data = b""
        while len(data) < count:
            piece = self._out.read(count - len(data))
            if not piece:
                raise EOFError(f"the emulated board ended with status {self._process.wait(10.0)}")
            data += piece
        return data

    def run_us(self, advance_us: int, data: bytes = b"") -> None:
        """Let so much of the board's time pass, with `data` put on its receive line now."""
        end_us = self.now_us + advance_us
        while True:
            self._in.write(encode_grant(end_us - self.now_us, data))
            data = b""
            _, self.now_us, length = REPLY.unpack(self._read(REPLY.size))
            self._hear(self._read(length))
            if self.now_us >= end_us:
                return

    def _hear(self, data: bytes) -> None:
        *whole, self._rest = (self._rest + data).split(b"\n")
        for line in whole:
            body = unseal(line)
            if body is None:
                self.garbled += 1
            else:
                self.lines.append(body.decode("ascii"))

    def command(self, text: str) -> str:
        """Carry out a command of the emulator (`firmware_ref/emu/board.h`); ValueError where it has none such."""
        data = text.encode("ascii")
        self._in.write(COMMAND.pack(ord("C"), len(data)) + data)
        _, length = COMMAND.unpack(self._read(COMMAND.size))
        answer = self._read(length).decode("ascii")
        if answer.startswith("?"):
            raise ValueError(answer)
        return answer

    def probe(self) -> dict[str, int]:
        """What the pins do, and what has been measured; `worst_us` is the worst tick since the last probe."""
        return {name: int(value) for name, value in (field.split("=") for field in self.command("probe").split(" "))}

    def take_lines(self) -> list[str]:
        """The lines said since the last call."""
        lines, self.lines = self.lines, []
        return lines

    def ask(self, body: str) -> list[str]:
        """The fields of the answer to a request, `ok` or `no` first; raises TimeoutError where none came."""
        self._tag = (self._tag + 1) % 0xF0
        tag = f"{self._tag:02x}"
        seen = len(self.lines)
        end_us = self.now_us + ANSWER_US
        self.run_us(0, seal(f"{tag} {body}".encode("ascii")))
        while self.now_us < end_us:
            self.run_us(1000)
            for line in self.lines[seen:]:
                if line.startswith(f"{tag} "):
                    return line.split(" ")[1:]
        raise TimeoutError(f"no answer to {tag} {body} in {ANSWER_US} us")

    def tick(self) -> int:
        """The board's tick now, or a few before."""
        return int(self.ask("beat")[1])

    def set_limit(self, name: str, value: int, index: int = 0) -> None:
        """Set a limit; raises ValueError where it is refused."""
        answer = self.ask(f"limit {name} {index} {value}")
        if answer[0] != "ok":
            raise ValueError(f"limit {name} {index} {value}: {answer}")
        self.limits[name, index] = value

    def arm(self, lease_ms: int = 500) -> list[str]:
        """Arm under the limits as they are."""
        return self.ask(f"arm {lease_ms} {digest(self.limits.values())}")


def eeprom_image(boot: int, limits: Mapping[int, int]) -> bytes:
    """The EEPROM of a board that has this boot number and these limits (by place in the digest's order) kept.

    The records are those of `firmware_ref/core/store.h`: value 4, check 2, generation 1; two to a slot.
    """
    image = bytearray(b"\xff" * EEPROM_BYTES)
    for slot, value in {0: boot, **{1 + place: value for place, value in limits.items()}}.items():
        record = (value & 0xFFFFFFFF).to_bytes(4, "big")
        check = crc16(bytes([slot]) + record + b"\x00")
        image[slot * 14 : slot * 14 + 7] = record + check.to_bytes(2, "big") + b"\x00"
    return bytes(image)
