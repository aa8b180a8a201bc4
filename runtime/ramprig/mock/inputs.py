"""What a controller reads and drives: the pins of the board, whoever is behind them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Protocol

from ramprig_link.words import Cap


class Inputs(Protocol):
    """The measurements of one board when asked: once a tick, in the order counts, current, supply."""

    def read_counts(self, axis: int) -> int:
        """Quadrature counts (x4) since the board's start, 32 bits signed, wrapping."""
        ...

    def read_current_ma(self, axis: int) -> int:
        """Motor current in mA, offset included."""
        ...

    def read_supply_mv(self) -> int:
        """Supply voltage at the bridge in mV."""
        ...

    def read_temperature_dc(self) -> int:
        """Temperature in 1/10 degC; asked only where it is sent."""
        ...

    def read_illegal_edges(self) -> int:
        """Illegal encoder transitions since the board's start."""
        ...


class ScriptedInputs:
    """Inputs that stay as they were last set: for tests and for the exchanges among the protocol's vectors."""

    def __init__(self, *, axes: int = 1, supply_mv: int = 12000, temperature_dc: int = 250) -> None:
        self.counts = [0] * axes
        self.current_ma = [0] * axes
        self.supply_mv = supply_mv
        self.temperature_dc = temperature_dc
        self.illegal_edges = 0

    def set(
        self,
        *,
        counts: Sequence[int] | None = None,
        current_ma: Sequence[int] | None = None,
        supply_mv: int | None = None,
        temperature_dc: int | None = None,
    ) -> None:
        """Change what is given and leave the rest."""
        if counts is not None:
            self.counts[:] = counts
        if current_ma is not None:
            self.current_ma[:] = current_ma
        if supply_mv is not None:
            self.supply_mv = supply_mv
        if temperature_dc is not None:
            self.temperature_dc = temperature_dc

    def read_counts(self, axis: int) -> int:
        """Counts as set."""
        return self.counts[axis]

    def read_current_ma(self, axis: int) -> int:
        """Current as set."""
        return self.current_ma[axis]

    def read_supply_mv(self) -> int:
        """Supply as set."""
        return self.supply_mv

    def read_temperature_dc(self) -> int:
        """Temperature as set."""
        return self.temperature_dc

    def read_illegal_edges(self) -> int:
        """Illegal edges as set."""
        return self.illegal_edges


class PartlyFitted:
    """The inputs of a board that lacks some sensors: what it cannot measure reads 0."""

    def __init__(self, inputs: Inputs, caps: Cap) -> None:
        self._inputs = inputs
        self._caps = caps

    def read_counts(self, axis: int) -> int:
        """Counts, or 0 without an encoder."""
        return self._inputs.read_counts(axis) if self._caps & Cap.ENCODER else 0

    def read_current_ma(self, axis: int) -> int:
        """Current, or 0 without a sensor."""
        return self._inputs.read_current_ma(axis) if self._caps & Cap.CURRENT else 0

    def read_supply_mv(self) -> int:
        """Supply, or 0 without a divider."""
        return self._inputs.read_supply_mv() if self._caps & Cap.SUPPLY else 0

    def read_temperature_dc(self) -> int:
        """Temperature, or 0 without a sensor."""
        return self._inputs.read_temperature_dc() if self._caps & Cap.TEMPERATURE else 0

    def read_illegal_edges(self) -> int:
        """Illegal edges, or 0 without an encoder."""
        return self._inputs.read_illegal_edges() if self._caps & Cap.ENCODER else 0


def fitted(inputs: Inputs, caps: Cap) -> Inputs:
    """The inputs as a board of these capabilities reads them."""
    measured = Cap.ENCODER | Cap.CURRENT | Cap.SUPPLY | Cap.TEMPERATURE
    return inputs if caps & measured == measured else PartlyFitted(inputs, caps)
