"""The supply and the bus capacitor it feeds: sags under load, rises when a motor gives energy back."""

from __future__ import annotations

import math

from .parameters import SupplyParameters


class Supply:
    """The bus voltage, one implicit step a tick: charge is conserved, and it settles whatever the load.

    `volts` and `resistance_ohm` may be set while running (a dip, a weak supply). `bus_v` is the bus now, `current_a`
    what the supply itself gave during the last tick. `shut_down` is set by over-voltage and stays until `restore`.
    """

    __slots__ = (
        "_farad_per_tick",
        "_feed_a",
        "_limit_a",
        "_ovp_v",
        "_resistance_ohm",
        "_siemens",
        "_sinks",
        "_volts",
        "bus_v",
        "current_a",
        "parameters",
        "settled",
        "shut_down",
        "standby_a",
    )

    def __init__(self, parameters: SupplyParameters, *, tick_us: int = 1000) -> None:
        self.parameters = parameters
        self._farad_per_tick = parameters.capacitance_f / (tick_us * 1e-6)
        self._limit_a = math.inf if parameters.current_limit_a is None else parameters.current_limit_a
        self._ovp_v = math.inf if parameters.ovp_v is None else parameters.ovp_v
        self._sinks = parameters.can_sink
        self._volts = parameters.volts
        self._resistance_ohm = parameters.resistance_ohm
        self.standby_a = parameters.standby_ma / 1000.0
        self.bus_v = max(0.0, parameters.volts - parameters.resistance_ohm * self.standby_a)
        self.current_a = self.standby_a
        self.shut_down = False
        self._rebuild()

    def _rebuild(self) -> None:
        self._siemens = 1.0 / self._resistance_ohm
        self._feed_a = self._volts * self._siemens
        self.settled = False

    @property
    def volts(self) -> float:
        """The voltage set at the supply."""
        return self._volts

    @volts.setter
    def volts(self, value: float) -> None:
        self._volts = value
        self._rebuild()

    @property
    def resistance_ohm(self) -> float:
        """The supply's internal resistance with its leads."""
        return self._resistance_ohm

    @resistance_ohm.setter
    def resistance_ohm(self, value: float) -> None:
        self._resistance_ohm = value
        self._rebuild()

    def restore(self) -> None:
        """Switch the supply on again after an over-voltage shut-down."""
        self.shut_down = False
        self.settled = False

    def step(self, load_a: float, siemens: float) -> float:
        """Advance one tick and return the new bus voltage, which also is the one that drove the loads.

        The loads draw `load_a + siemens * bus_v`, `siemens` not negative. The supply gives (volts - bus) / resistance,
        at most its limit, and takes nothing back unless it can sink; the rest charges the capacitor. Backward Euler,
        which for these piecewise straight lines has one solution, found by trying the pieces. The bus never goes
        below 0: the bridges' diodes hold it there.
        """
        before_v = self.bus_v
        free_a = self._farad_per_tick * before_v - load_a
        slope = self._farad_per_tick + siemens
        if self.shut_down:
            given_a = 0.0
            bus_v = free_a / slope
        else:
            bus_v = (free_a + self._feed_a) / (slope + self._siemens)
            given_a = self._feed_a - self._siemens * bus_v
            if given_a < 0.0 and not self._sinks:
                given_a = 0.0
                bus_v = free_a / slope
            elif given_a > self._limit_a:
                given_a = self._limit_a
                bus_v = (free_a + given_a) / slope
            if bus_v > self._ovp_v:
                self.shut_down = True
        if bus_v < 0.0:
            bus_v = 0.0
        self.settled = abs(bus_v - before_v) < 1e-9
        self.bus_v = bus_v
        self.current_a = given_a
        return bus_v
