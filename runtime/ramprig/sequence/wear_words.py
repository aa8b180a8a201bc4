"""The features of a cycle that wear may show in, by the words that files, records and reports use for them.

A feature's full name is `duration`, `vent: energy` or `vent forward: steady current`: of the cycle, of a motor or servo
in it, or of one direction of a motor. What each of them is and how it is measured is said where it is computed.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from enum import StrEnum

from ramprig.quantity import ANGLE, CURRENT, DURATION, DUTY, ENERGY, RESISTANCE, SPEED, VOLTAGE, Kind, digits, show


class Whose(StrEnum):
    """What a feature belongs to."""

    CYCLE = "cycle"
    MOTOR = "motor"
    WAY = "direction of a motor"
    SERVO = "servo"


class Way(StrEnum):
    """The directions of a motor: `forward` is that of positive duty."""

    FORWARD = "forward"
    BACKWARD = "backward"


@dataclass(frozen=True, slots=True, kw_only=True)
class FeatureWord:
    """One kind of feature: its values are in `unit` of `kind`; None is a ratio without a unit.

    One that lies `about_zero` has no share of itself: it can be limited in its unit only, and has no trend. One that is
    `on_request` is judged only where a file limits it. Features that `needs_encoder` are missing where the motor has
    none.
    """

    whose: Whose
    kind: Kind | None = None
    unit: str = ""
    about_zero: bool = False
    on_request: bool = False
    needs_encoder: bool = False


FEATURE_WORDS = {
    "duration": FeatureWord(whose=Whose.CYCLE, kind=DURATION, unit="s"),
    "lowest supply": FeatureWord(whose=Whose.CYCLE, kind=VOLTAGE, unit="V"),
    "peak current": FeatureWord(whose=Whose.MOTOR, kind=CURRENT, unit="A"),
    "energy": FeatureWord(whose=Whose.MOTOR, kind=ENERGY, unit="J"),
    "position error": FeatureWord(
        whose=Whose.MOTOR, kind=ANGLE, unit="rev", about_zero=True, on_request=True, needs_encoder=True
    ),
    "lost motion": FeatureWord(whose=Whose.MOTOR, kind=ANGLE, unit="deg", needs_encoder=True),
    "travel ratio": FeatureWord(whose=Whose.MOTOR, needs_encoder=True),
    "resistance": FeatureWord(whose=Whose.MOTOR, kind=RESISTANCE, unit="ohm", needs_encoder=True),
    "steady current": FeatureWord(whose=Whose.WAY, kind=CURRENT, unit="A"),
    "steady speed": FeatureWord(whose=Whose.WAY, kind=SPEED, unit="rpm", needs_encoder=True),
    "time to speed": FeatureWord(whose=Whose.WAY, kind=DURATION, unit="s", needs_encoder=True),
    "coast-down time": FeatureWord(whose=Whose.WAY, kind=DURATION, unit="s", needs_encoder=True),
    "break-away duty": FeatureWord(whose=Whose.WAY, kind=DUTY, unit="%", needs_encoder=True),
    "break-away current": FeatureWord(whose=Whose.WAY, kind=CURRENT, unit="A", needs_encoder=True),
    "start delay": FeatureWord(whose=Whose.WAY, kind=DURATION, unit="s", needs_encoder=True),
    "move time": FeatureWord(whose=Whose.SERVO, kind=DURATION, unit="s"),
    "supply sag": FeatureWord(whose=Whose.SERVO, kind=VOLTAGE, unit="V", on_request=True),
    "commanded move time": FeatureWord(whose=Whose.SERVO, kind=DURATION, unit="s", on_request=True),
}
"""Every feature by its word."""


def full_names(word: str, drive: str, way: Way | None) -> Iterator[str]:
    """The full names of the features that a word means for this motor or servo; both directions where none is said."""
    match FEATURE_WORDS[word].whose:
        case Whose.CYCLE:
            yield word
        case Whose.MOTOR | Whose.SERVO:
            yield f"{drive}: {word}"
        case Whose.WAY:
            yield from (f"{drive} {each}: {word}" for each in ([way] if way is not None else Way))


def word_of(full_name: str) -> str:
    """The word of a feature's full name."""
    return full_name.rpartition(": ")[2]


def drive_of(full_name: str) -> str:
    """The motor or servo of a feature by its full name; empty for one of the whole cycle."""
    return full_name.rpartition(": ")[0].partition(" ")[0]


def show_feature(full_name: str, value: float) -> str:
    """A feature's value as an engineer reads it; a plain number where its word is not known or it has no unit."""
    word = FEATURE_WORDS.get(word_of(full_name))
    unit = None if word is None or word.kind is None else word.kind.unit(word.unit)
    if word is None or word.kind is None or unit is None:
        return digits(value)
    return show(value * float(unit.factor), word.kind)
