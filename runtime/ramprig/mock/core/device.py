"""A board of core and plant in C with the face of `MockDevice`, so that both have the same cable, faults and port."""

from __future__ import annotations

import ctypes
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from ramprig.errors import FileError, UsageError
from ramprig.mock.board import Board
from ramprig.mock.device import schedule
from ramprig.mock.faults import FaultSwitches
from ramprig.mock.limits import keep
from ramprig.mock.setup import MockSetup
from ramprig_link.words import LIMITS, Cause

from .library import Handle
from .parameters import plant_values

FIRMWARE = "core-1"
"""What the core calls itself in this process."""

NOT_C = frozenset(
    {
        *("bit_errors", "dropped_bytes", "delivery_grid", "unplug", "garbage_after_open", "reset_on_open"),
        *("second_board", "clock_drift"),
    }
)
"""Faults of the cable and of the port, which are looked up when bytes pass; the others are the C parts'."""

SEED_MASK = (1 << 64) - 1
U32 = 0xFFFFFFFF
SENT_BYTES = 8192
"""The C side's SIMULATED_SENT_BYTES."""


class SimulatedDevice:
    """A board with motors and servos on it. `ticks` counts from the making; the board's own tick starts at each boot.

    `setup.board.firmware` is replaced by the core's own name. `setup.limits_path` keeps the board's store, byte for
    byte; it is written as a whole and renamed into place.
    """

    def __init__(self, setup: MockSetup | None = None, *, seed: int = 0) -> None:
        """Raises UsageError where the core cannot be built, or cannot be this board; FileError for a spoilt store."""
        given = setup or MockSetup()
        self.setup = setup = replace(given, board=replace(given.board, firmware=FIRMWARE))
        self._board = setup.board
        self._core = Handle(setup.board)
        self._run: Callable[[int, int, bool], int] = self._core.library.library_run
        self._receive: Callable[[int, bytes, int], None] = self._core.library.library_receive
        self._sent = memoryview((ctypes.c_char * SENT_BYTES).from_address(self._core.call("sent")))
        self._output = b""
        self._stores: dict[str, bytes] = {}
        self.faults = FaultSwitches(self._act, axes=setup.board.axes)
        self._name()
        self._preset()
        for name, value in plant_values(setup.plant).items():
            if not self._core.call("parameter", name.encode(), value):
                raise FileError(f"the plant's {name} is {value:g}", wanted="the C plant cannot be made of this")
        wanted = (seed & SEED_MASK, setup.baud, setup.boot_ticks, setup.brownout_mv)
        if not self._core.call("start", *wanted):
            raise FileError("a motor changes too fast for a tick", wanted="see its resistance and inductance")
        self.faults.set_all(setup.faults)
        self._timed = schedule(setup)
        self._keep_store()

    def _name(self) -> None:
        board = self._board
        self._core.call("identity", board.firmware.encode(), board.board.encode(), board.serial.encode())

    def _preset(self) -> None:
        fresh = self._core.store
        self._stores[self._board.serial] = fresh
        path = self.setup.limits_path
        if path is not None and path.exists():
            try:
                content = path.read_bytes()
            except OSError as error:
                raise FileError(f"cannot read the board's store {path}: {error.strerror}") from error
            if len(content) != len(fresh):
                raise FileError(f"{path} is no store of this board", wanted="delete it to begin with the defaults")
            self._core.store = content
        else:
            for (name, index), value in self.setup.limits.items():
                self._core.call("preset", LIMITS[name].number, index, value)

    @property
    def board(self) -> Board:
        """The board that answers now."""
        return self._board

    @property
    def ticks(self) -> int:
        """Ticks passed since the making."""
        return self._core.call("ticks")

    # ---- the line --------------------------------------------------------------------------------------------------

    def receive(self, data: bytes) -> None:
        """Put bytes from the host on the receive line."""
        self._receive(self._core.board, data, len(data))

    def urgent(self, data: bytes) -> None:
        """Take back what of the host's bytes is still unsent, and put these on the line."""
        self._core.call("purge")
        self.receive(data)

    def send_break(self) -> None:
        """Hold the receive line in the BREAK condition."""
        self._core.call("break")

    def transmit(self) -> bytes:
        """What the board has sent since the last call, up to the tick that has ended."""
        output, self._output = self._output, b""
        return output

    def opened(self) -> None:
        """A host has opened the port."""
        if self.faults.get("reset_on_open"):
            self.restart(Cause.EXTERNAL)

    # ---- time ------------------------------------------------------------------------------------------------------

    def tick(self) -> None:
        """Let one tick pass."""
        if self._timed:
            self._switch_timed(1)
        self._output += self._pass(1)[1]

    def advance(self, ticks: int, *, patient: bool = False) -> int:
        """As `Device.advance`."""
        done = 0
        while done < ticks and not self._output:
            left = self._switch_timed(ticks - done) if self._timed else ticks - done
            passed, self._output = self._pass(left, patient)
            done += passed
        return done

    def _pass(self, ticks: int, patient: bool = False) -> tuple[int, bytes]:
        result = self._run(self._core.board, ticks if ticks < U32 else U32, patient)
        if self.setup.limits_path is not None:
            self._keep_store()
        return result & U32, self._sent[: result >> 32].tobytes()

    def _switch_timed(self, ticks: int) -> int:
        """Switch the timed faults that are due; returns the ticks, at most `ticks`, until the next one is."""
        now = self.ticks
        while self._timed and self._timed[0][0] <= now:
            _, name, axis, amount = self._timed.pop(0)
            self.faults.set(name, amount, axis=axis)
        return min(ticks, self._timed[0][0] - now) if self._timed else ticks

    # ---- starts, faults, and what outlives the process -------------------------------------------------------------

    def restart(self, cause: Cause) -> None:
        """Reset the board: outputs off at once, what it was sending is lost, and after `boot_ticks` it starts anew."""
        self._core.call("reset", int(cause))

    def _swap(self, second: bool) -> None:
        """Put another board, or the first one again, in the place of the one there is."""
        first = self.setup.board
        fresh = bytes([0xFF]) * len(self._core.store)
        self._stores[self._board.serial] = self._core.store
        self._board = replace(first, serial=f"{first.serial[:17]}-second") if second else first
        self._name()
        self._core.store = self._stores.get(self._board.serial, fresh)
        self.restart(Cause.POWER)

    def _act(self, name: str, axis: int, amount: float) -> None:
        if name == "second_board":
            self._swap(bool(amount))
        elif name not in NOT_C and not self._core.call("fault", name.encode(), axis, amount):
            raise UsageError(f"the C plant knows no fault {name}")

    def _keep_store(self) -> None:
        path: Path | None = self.setup.limits_path
        if path is None or self._board is not self.setup.board or not self._core.call("took_stored"):
            return
        keep(path, self._core.store)
