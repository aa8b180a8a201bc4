"""The device's limits as one table: which there are on a board, their digest, and what a bench file asks to change."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

from ramprig.errors import WrongDevice
from ramprig.session.readings import Identity
from ramprig_link.check import digest
from ramprig_link.words import LIMITS, Per

LimitKey = tuple[str, int]
"""The item's word and the index: axis or servo, 0 for a limit of the device."""


def limit_keys(identity: Identity) -> Iterator[LimitKey]:
    """Every limit that this board has, in the order of the digest (SPEC.md LIMIT-5)."""
    fitted = {Per.DEVICE: 1, Per.AXIS: identity.axes, Per.SERVO: identity.servos}
    for item, limit in sorted(LIMITS.items(), key=lambda entry: entry[1].number):
        for index in range(fitted[limit.per]):
            yield item, index


@dataclass(frozen=True, slots=True)
class LimitTable:
    """All limits of a board as they are in force, in protocol units."""

    values: Mapping[LimitKey, int]

    def __getitem__(self, key: LimitKey) -> int:
        return self.values[key]

    @property
    def digest(self) -> str:
        """Eight hex digits; equal to the device's where the values and their order are."""
        return digest(self.values.values())

    def with_value(self, key: LimitKey, value: int) -> LimitTable:
        """The table with one value changed; raises KeyError for a limit the board does not have."""
        if key not in self.values:
            raise KeyError(key)
        return LimitTable({**self.values, key: value})

    def changes_to(self, wanted: Mapping[LimitKey, int]) -> dict[LimitKey, int]:
        """What must be written so that the table has all of `wanted`; raises WrongDevice for a limit it lacks."""
        for item, index in wanted:
            if (item, index) not in self.values:
                raise WrongDevice(f"the bench file sets the limit {item} {index}, which this board does not have")
        return {key: value for key, value in wanted.items() if self.values[key] != value}
