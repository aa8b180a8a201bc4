"""The whole bench, stepped together: one supply, its motor axes and its servos."""

from __future__ import annotations

import random

from .axis import Axis
from .parameters import VENT_BENCH, PlantParameters
from .sensors import CurrentSensor, Encoder
from .servo import Servo
from .supply import Supply

WARM_EVERY_US = 50_000
"""How often winding temperatures are brought up to date: far shorter than any winding's time constant."""


class Plant:
    """Everything the board's pins lead to.

    Set `axes[n].duty`, `axes[n].brake` and `servos[n].pulse_us`, call `step()` once a tick, and read the sensors. The
    same `seed`, drive and order of readings give the same readings, byte for byte. `wired_to[n]` is the axis whose
    encoder is plugged in where that of axis n belongs.
    """

    __slots__ = (
        *("_to_warm", "_warm_ticks", "axes", "encoders", "parameters", "sensors", "servos", "supply", "tick_us"),
        "wired_to",
    )

    def __init__(self, parameters: PlantParameters = VENT_BENCH, *, tick_us: int = 1000, seed: int = 0) -> None:
        self.parameters = parameters
        self.tick_us = tick_us
        self.supply = Supply(parameters.supply, tick_us=tick_us)
        self.axes = tuple(Axis(axis, tick_us=tick_us) for axis in parameters.axes)
        self.servos = tuple(Servo(servo, tick_us=tick_us) for servo in parameters.servos)
        # A source of its own for each sensor: reading one axis more often leaves the others' noise as it was.
        source = random.Random(seed)
        self.encoders = tuple(
            Encoder(axis.encoder, randomness=random.Random(source.getrandbits(64))) for axis in parameters.axes
        )
        self.sensors = tuple(
            CurrentSensor(axis.sensor, randomness=random.Random(source.getrandbits(64))) for axis in parameters.axes
        )
        self.wired_to = list(range(len(self.axes)))
        self._warm_ticks = max(1, WARM_EVERY_US // tick_us)
        self._to_warm = self._warm_ticks

    def _warm(self) -> None:
        self._to_warm = self._warm_ticks
        for axis in self.axes:
            axis.warm(self._warm_ticks)

    def step(self) -> None:
        """Advance everything one tick."""
        axes = self.axes
        supply = self.supply
        self._to_warm -= 1
        if not self._to_warm:
            self._warm()
        for axis in axes:
            if axis.duty or axis.speed_rad_s or axis.current_a or axis.restless or axis.surplus_a:
                break
        else:
            # All at rest: nothing to do until a servo has a way to go or the bus has not yet settled.
            for servo in self.servos:
                if servo.busy:
                    break
            else:
                if supply.settled:
                    return
        load_a = supply.standby_a
        siemens = 0.0
        for servo in self.servos:
            if servo.busy:
                servo.step()
            load_a += servo.current_a
        bus_v = supply.bus_v
        for axis in axes:
            if axis.surplus_a:
                load_a += axis.surplus_a
                axis.surplus_a = 0.0
            ratio = axis.prepare(bus_v)
            if ratio:
                load_a += ratio * axis.free_a
                siemens += ratio * ratio * axis.siemens
        bus_v = supply.step(load_a, siemens)
        for axis in axes:
            axis.advance(bus_v)
            if axis.linked:
                axis.follow()

    def read_counts(self, axis: int) -> int:
        """Return the encoder counter: counts (x4) of the shaft that it sits on, 32 bits signed, wrapping."""
        encoder, turned = self.encoders[axis], self.axes[axis]
        return encoder.read(turned.output_rad if encoder.on_output else turned.angle_rad)

    def read_current_ma(self, axis: int) -> int:
        """Return the signed motor current as sensed at the bridge: positive the way a positive duty drives it."""
        return self.sensors[axis].read(self.axes[axis].bridge_current_a)

    def read_supply_mv(self) -> int:
        """Return the bus voltage."""
        return int(self.supply.bus_v * 1000.0 + 0.5)

    def read_temperature_dc(self, axis: int) -> int:
        """Return the winding temperature in tenths of a degree Celsius."""
        return round(self.axes[axis].winding_c * 10.0)
