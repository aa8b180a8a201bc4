"""A whole device in software: controller, plant, the UART between them and the host, resets and faults.

Ticks only pass by `tick` and `advance`. The same setup, seed, and bytes at the same ticks give the same bytes.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

from ramprig_link.words import Cap, Cause

from .board import Board
from .controller import Controller
from .drive import Drive
from .faults import FaultSwitches, parse_fault
from .limits import LimitStore
from .plant import Ageing, Plant, PlantFault, set_fault, set_play, set_wear
from .setup import MockSetup
from .transmit import BITS_PER_BYTE, Transmitter

_HALF = 1 << 31
PATIENT_BYTES = 6144
"""A patient host is not kept waiting where so many bytes have gathered."""
_PLANT_FAULTS = {
    "phases_swapped": PlantFault.PHASES_SWAPPED,
    "leads_swapped": PlantFault.LEADS_SWAPPED,
    "encoder_dead": PlantFault.ENCODER_DEAD,
    "one_channel": PlantFault.ONE_CHANNEL,
    "jammed_shaft": PlantFault.JAMMED,
    "noisy_counts": PlantFault.NOISY_COUNTS,
    "lead_open": PlantFault.LEAD_OPEN,
    "encoders_exchanged": PlantFault.ENCODERS_EXCHANGED,
    "output_clamped": PlantFault.OUTPUT_CLAMPED,
}


Trace = Callable[[int, Controller | None], None]


def schedule(setup: MockSetup) -> list[tuple[int, str, int, float]]:
    """The switchings of the timed faults, earliest first: tick, name, axis, strength."""
    switchings = []
    for timed in setup.timed_faults:
        name, axis, amount = parse_fault(timed.text)
        for time_s, value in ((timed.from_s, amount), (timed.until_s, 0.0)):
            if time_s is not None:
                switchings.append((round(time_s * 1e6 / setup.board.tick_us), name, axis, value))
    return sorted(switchings)


class PlantInputs:
    """What the board's pins read from the plant. The counters begin at 0 with each start of the board."""

    __slots__ = ("_axes", "_encoders", "_plant", "_sensors", "_wired", "_zero", "read_supply_mv")

    def __init__(self, plant: Plant) -> None:
        self._plant = plant
        self._axes = plant.axes
        self._sensors = plant.sensors
        self._encoders = plant.encoders
        self._wired = plant.wired_to
        self._zero = [plant.read_counts(i) for i in range(len(plant.axes))]
        self.read_supply_mv = plant.read_supply_mv

    def read_counts(self, axis: int) -> int:
        """Counts since the board's start."""
        wired = self._wired[axis]
        encoder, turned = self._encoders[wired], self._axes[wired]
        counts = encoder.read(turned.output_rad if encoder.on_output else turned.angle_rad) - self._zero[wired]
        return counts if -_HALF <= counts < _HALF else (counts + _HALF) % (2 * _HALF) - _HALF

    def read_current_ma(self, axis: int) -> int:
        """The current sensor."""
        return self._sensors[axis].read(self._axes[axis].bridge_current_a)

    def read_temperature_dc(self) -> int:
        """The winding of the first motor, 20 degC without one."""
        return self._plant.read_temperature_dc(0) if self._axes else 200

    def read_illegal_edges(self) -> int:
        """None: the model's encoder is read, not sampled."""
        return 0


class Receiver:
    """The receive line: bytes arrive no faster than the wire carries them; while any are under way it is `waiting`."""

    __slots__ = ("_byte_time", "_bytes", "_start", "_tick_time", "waiting")

    def __init__(self, *, baud: int, tick_us: int) -> None:
        self._byte_time = BITS_PER_BYTE * 1_000_000
        self._tick_time = tick_us * baud
        self._bytes = bytearray()
        self._start = 0
        self.waiting = False

    def put(self, data: bytes, ticks: int) -> None:
        """Put bytes on the wire, `ticks` ticks after the start of time."""
        if not self._bytes:
            self._start = max(self._start, ticks * self._tick_time)
        self._bytes += data
        self.waiting = bool(self._bytes)

    def purge(self) -> None:
        """Take back what has not arrived."""
        self._bytes.clear()
        self.waiting = False

    def take(self, ticks: int) -> bytes:
        """What has arrived by then."""
        if not self._tick_time:
            data = bytes(self._bytes)
            self._bytes.clear()
        else:
            count = min(len(self._bytes), (ticks * self._tick_time - self._start) // self._byte_time)
            data = bytes(self._bytes[:count])
            del self._bytes[:count]
            self._start += count * self._byte_time
        self.waiting = bool(self._bytes)
        return data


def samples_alone(output: bytes) -> bool:
    """Whether these lines are data lines, and few enough to wait for the next other one."""
    return output[:1] == b"D" and len(output) < PATIENT_BYTES and all(line[:1] == b"D" for line in output.splitlines())


class MockDevice:
    """A board with motors and servos on it. `ticks` counts from the making; the board's own tick starts at each boot.

    While the board boots, `controller` is None: the outputs are off and what is received is lost. `trace`, where set,
    is called at each tick's end with `ticks` and the controller, and while it boots with None at least once.
    """

    def __init__(self, setup: MockSetup | None = None, *, seed: int = 0) -> None:
        self.setup = setup = setup or MockSetup()
        self.ticks = 0
        self.plant = Plant(setup.plant, tick_us=setup.board.tick_us, seed=seed)
        self.faults = FaultSwitches(self._act, axes=setup.board.axes)
        self._receiver = Receiver(baud=setup.baud, tick_us=setup.board.tick_us)
        self._stores = {setup.board.serial: LimitStore(setup.board, values=setup.limits, path=setup.limits_path)}
        self._boots: dict[str, int] = {}
        self._board = setup.board
        self._boot_left = 0
        self._cause = Cause.POWER
        self._output = b""
        self._moving = False
        self._brownout_in: int | None = None
        self.trace: Trace | None = None
        self.controller: Controller | None = None
        self._boot()
        self.faults.set_all(setup.faults)
        self._timed = schedule(setup)

    @property
    def board(self) -> Board:
        """The board that answers now."""
        return self._board

    # ---- the line --------------------------------------------------------------------------------------------------

    def receive(self, data: bytes) -> None:
        """Put bytes from the host on the receive line."""
        if not self.faults.get("deaf"):
            self._receiver.put(data, self.ticks)

    def urgent(self, data: bytes) -> None:
        """Take back what of the host's bytes is still unsent, and put these on the line."""
        self._receiver.purge()
        self.receive(data)

    def send_break(self) -> None:
        """Hold the receive line in the BREAK condition."""
        if self.controller is not None and Cap.BREAK in self._board.caps and not self.faults.get("deaf"):
            self.controller.line_break()

    def transmit(self) -> bytes:
        """What the board has sent since the last call, up to the tick that has ended."""
        output, self._output = self._output, b""
        return output

    # ---- time ------------------------------------------------------------------------------------------------------

    def tick(self) -> None:
        """Let one tick pass."""
        self._output += self._run(1)[1]

    def advance(self, ticks: int, *, patient: bool = False) -> int:
        """As `Device.advance`."""
        done = 0
        while done < ticks and not self._output:
            passed, self._output = self._run(ticks - done, patient=patient)
            done += passed
        return done

    def _switch_timed(self, ticks: int) -> int:
        """Switch the timed faults that are due; returns the ticks, at most `ticks`, until the next one is."""
        while self._timed and self._timed[0][0] <= self.ticks:
            _, name, axis, amount = self._timed.pop(0)
            self.faults.set(name, amount, axis=axis)
        return min(ticks, self._timed[0][0] - self.ticks) if self._timed else ticks

    def _run(self, ticks: int, *, patient: bool = False) -> tuple[int, bytes]:
        """Run until output comes, the board or a fault changes, or `ticks` are over; returns ticks and output."""
        if self._timed:
            ticks = self._switch_timed(ticks)
        controller = self.controller
        if controller is None:
            return self._run_booting(ticks), b""
        transmitter, receiver, plant = controller.transmitter, self._receiver, self.plant
        drives = tuple(zip(controller.drives, plant.axes, strict=True))
        servos = [(pulse, servo, -1) for pulse, servo in zip(controller.pulses, plant.servos, strict=True)]
        tick, step, supply, brownout_mv = controller.tick, plant.step, controller.supply, self.setup.brownout_mv
        watching = bool(self.faults.get("brownout_on_start"))
        elapsed = self.ticks
        trace = self.trace
        end = elapsed + ticks
        output = b""
        heard = False
        while elapsed < end:
            if receiver.waiting:
                controller.receive(receiver.take(elapsed))
            tick()
            for drive, axis in drives:
                axis.duty = drive.duty
                axis.brake = drive.brake
            for at, (pulse, servo, told_ns) in enumerate(servos):
                pulse_ns = pulse.pulse_ns
                if pulse_ns != told_ns:
                    servo.pulse_us = pulse_ns / 1000.0 if pulse_ns else None
                    servos[at] = pulse, servo, pulse_ns
            step()
            elapsed += 1
            if trace is not None:
                trace(elapsed, controller)
            if transmitter.waiting:
                sent = transmitter.take(elapsed)
                if sent:
                    output += sent
                    heard = not (patient and samples_alone(output))
            if supply.supply_mv < brownout_mv or (watching and self._sags(drives)):
                self.ticks = elapsed
                self.restart(Cause.BROWNOUT)
                break
            if heard:
                break
        passed = elapsed - (end - ticks)
        self.ticks = elapsed
        return passed, output

    def _sags(self, drives: tuple[tuple[Drive, object], ...]) -> bool:
        """Whether a motor's start has pulled the supply of the board down by now (fault `brownout_on_start`)."""
        moving = any(drive.duty for drive, _ in drives)
        if moving and not self._moving:
            self._brownout_in = round(self.faults.get("brownout_on_start"))
        self._moving = moving
        if self._brownout_in is None:
            return False
        self._brownout_in -= 1
        return self._brownout_in < 0

    def _run_booting(self, ticks: int) -> int:
        passed = min(ticks, self._boot_left)
        for _ in range(passed):
            self.plant.step()
        if self.trace is not None:
            self.trace(self.ticks + passed, None)
        self.ticks += passed
        self._boot_left -= passed
        self._receiver.purge()
        if self._boot_left == 0:
            self._boot()
        return passed

    # ---- starts and ends -------------------------------------------------------------------------------------------

    def restart(self, cause: Cause) -> None:
        """Reset the board: outputs off at once, what it was sending is lost, and after `boot_ticks` it starts anew."""
        self.controller = None
        self._cause = cause
        self._boot_left = self.setup.boot_ticks
        for axis in self.plant.axes:
            axis.duty = 0
            axis.brake = False
        for servo in self.plant.servos:
            servo.pulse_us = None
        if not self._boot_left:
            self._boot()

    def _boot(self) -> None:
        board = self._board
        self._moving = False
        self._brownout_in = None
        boot = self._boots[board.serial] = self._boots.get(board.serial, 0) + 1
        self.controller = Controller(
            board,
            PlantInputs(self.plant),
            self._stores[board.serial],
            boot=boot,
            cause=self._cause,
            transmitter=Transmitter(data_bytes_max=board.transmit_bytes, baud=self.setup.baud, tick_us=board.tick_us),
        )

    def _swap(self, second: bool) -> None:
        """Put another board, or the first one again, in the place of the one there is."""
        first = self.setup.board
        self._board = replace(first, serial=f"{first.serial[:17]}-second") if second else first
        self._stores.setdefault(self._board.serial, LimitStore(self._board))
        self.restart(Cause.POWER)

    def opened(self) -> None:
        """A host has opened the port."""
        if self.faults.get("reset_on_open"):
            self.restart(Cause.EXTERNAL)

    def _act(self, name: str, axis: int, amount: float) -> None:
        """Do what a fault's switching does to board and plant; the cable's faults are looked up when bytes pass."""
        plant = self.plant
        if name in _PLANT_FAULTS:
            set_fault(plant, _PLANT_FAULTS[name], axis=axis, on=bool(amount))
        elif name == "current_offset":
            plant.sensors[axis].offset_ma = plant.parameters.axes[axis].sensor.offset_ma + amount
        elif name == "weak_supply":
            plant.supply.resistance_ohm = plant.parameters.supply.resistance_ohm * (amount or 1.0)
        elif name == "gear_play":
            set_play(plant, amount, axis=axis)
        elif name in tuple(Ageing):
            set_wear(plant, Ageing(name), amount, axis=axis)
        elif name == "second_board":
            self._swap(bool(amount))
