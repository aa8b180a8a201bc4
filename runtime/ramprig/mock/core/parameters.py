"""The plant's parameters under the names by which the C plant takes them, such as `axis.0.motor.inductance_h`."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterator

from ramprig.mock.plant import PlantParameters


def plant_values(parameters: PlantParameters) -> dict[str, float]:
    """Every parameter by its C name; what a supply does not have is infinite, True is 1."""
    values = dict(_numbers("supply", parameters.supply))
    for index, axis in enumerate(parameters.axes):
        for part in ("motor", "encoder", "bridge", "sensor"):
            values.update(_numbers(f"axis.{index}.{part}", getattr(axis, part)))
    for index, servo in enumerate(parameters.servos):
        values.update(_numbers(f"servo.{index}", servo))
    values["axes"] = float(len(parameters.axes))
    values["servos"] = float(len(parameters.servos))
    return values


def _numbers(prefix: str, part: object) -> Iterator[tuple[str, float]]:
    assert dataclasses.is_dataclass(part)
    for field in dataclasses.fields(part):
        value = getattr(part, field.name)
        if value is None:
            yield f"{prefix}.{field.name}", math.inf
        elif not isinstance(value, str):
            yield f"{prefix}.{field.name}", float(value)


def plant_text(parameters: PlantParameters) -> str:
    """The parameters as the file that the posix program takes with `--plant`: a name and a value in each line."""
    return "".join(f"{name} {value!r}\n" for name, value in plant_values(parameters).items())
