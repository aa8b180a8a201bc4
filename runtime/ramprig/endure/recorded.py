"""The features of cycles as a run wrote them down while it was under way, read back from its count of cycles."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol

from ramprig.errors import RecordError

from .features import Span, spans_of

Line = Mapping[str, Any]  # JSON as it comes: what is in it is checked where it is used


class TurnFeatures(Protocol):
    """The features of one cycle or check, whether computed from its samples or recorded."""

    @property
    def span(self) -> Span:
        """Where it lies."""
        ...

    @property
    def samples(self) -> int:
        """How many samples they are from."""
        ...

    @property
    def left_out(self) -> int:
        """How many samples were beyond the bound of one cycle."""
        ...

    def values(self) -> dict[str, float]:
        """Every feature by its full name; one that is missing is NaN or left out."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class RecordedFeatures:
    """The features of a cycle or check as they were recorded, those that were missing left out."""

    span: Span
    samples: int
    left_out: int
    known: Mapping[str, float]

    def values(self) -> dict[str, float]:
        """By full name."""
        return dict(self.known)


def recorded_features(lines: Iterable[Line]) -> list[RecordedFeatures] | None:
    """Those of every cycle and check that was done, in order; None where the run recorded none. Raises RecordError."""
    done = [line for line in lines if line.get("kind") in ("cycle_done", "check_done")]
    if not any(line.get("features") for line in done):
        return None
    try:
        return [
            RecordedFeatures(
                span=span,
                samples=int(line.get("samples") or 0),
                left_out=int(line.get("left_out") or 0),
                known={str(name): float(value) for name, value in (line.get("features") or {}).items()},
            )
            for span, line in zip(spans_of(done), done, strict=True)
        ]
    except (AttributeError, TypeError, ValueError) as error:
        raise RecordError(f"the features in the count of cycles cannot be read: {error!r}") from error


def names_of(found: Iterable[TurnFeatures]) -> list[str]:
    """The full names of all features that any of them has a value of, in the order in which they come."""
    names: dict[str, None] = {}
    for each in found:
        names.update((name, None) for name, value in each.values().items() if not math.isnan(value))
    return list(names)
