"""What a procedure ends in: numbers with their uncertainty, a plain sentence, pictures; as text and as JSON."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from ramprig.measure.numbers.uncertainty import Measured
from ramprig.record.events import Json, jsonable

if TYPE_CHECKING:
    from matplotlib.figure import Figure


@dataclass(frozen=True, slots=True, kw_only=True)
class Picture:
    """A plot: `draw` draws into an empty figure of this size. `name` becomes the file's."""

    name: str
    draw: Callable[[Figure], None]
    width_in: float = 8.0
    height_in: float = 5.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Findings:
    """What was found on `subject`, a motor's or servo's name, or "link".

    `good` is False where the bench is not as it should be. `values` are the results by name: lower-case words joined
    by `_`, 24 characters at most, as a bench file takes them. `facts` are what else a program may want (JSON), `lines`
    what a person should read besides, in order.
    """

    procedure: str
    subject: str
    sentence: str
    good: bool = True
    values: Mapping[str, Measured] = field(default_factory=dict)
    facts: Mapping[str, object] = field(default_factory=dict)
    lines: tuple[str, ...] = ()
    pictures: tuple[Picture, ...] = ()

    def text(self) -> list[str]:
        """For the terminal: values first, then lines, the sentence last."""
        width = max((len(name) for name in self.values), default=0)
        numbers = [f"{name.replace('_', ' '):<{width}}  {value}" for name, value in self.values.items()]
        return [*numbers, *self.lines, self.sentence]

    def to_json(self) -> dict[str, Json]:
        """For programs."""
        return {
            "procedure": self.procedure,
            "subject": self.subject,
            "good": self.good,
            "sentence": self.sentence,
            "values": {name: jsonable(value.to_json()) for name, value in self.values.items()},
            "facts": jsonable(dict(self.facts)),
            "lines": list(self.lines),
        }
