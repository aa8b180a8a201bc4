"""The steps of a sequence as frozen values, each with the mark of where it stands in its file.

Numbers are exact and in the units of people (seconds, degrees) or of the protocol where both agree (duty in 1/10000);
the compiler turns them into ticks and pulses. Names of motors and servos are still text: only the compiler knows the
bench.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum
from fractions import Fraction

from ramprig.errors import FileError
from ramprig.quantity import ANGLE, COUNTS, CURRENT, DURATION, SPEED, Band, Kind, format_duration
from ramprig.yamlfile import Mark

from .wear_limits import WearWish


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """Root of all steps; `mark` is where the step begins, `marks` where its values stand, by key."""

    mark: Mark = field(repr=False, compare=False)
    marks: Mapping[str, Mark] = field(repr=False, compare=False)

    def error(self, key: str, found: str, wanted: str = "") -> FileError:
        """An error, to be raised, that points to the value of `key`, or to the step where the file does not say it."""
        return self.marks.get(key, self.mark).error(found, wanted)


@dataclass(frozen=True, slots=True, kw_only=True)
class Ramp(Step):
    """Moves a motor's duty linearly to `duty` (signed, 1/10000) in `length_s`."""

    motor: str
    duty: int
    length_s: Fraction


@dataclass(frozen=True, slots=True, kw_only=True)
class Hold(Step):
    """Changes nothing for `length_s`."""

    length_s: Fraction


@dataclass(frozen=True, slots=True, kw_only=True)
class Reverse(Step):
    """Ramps down to zero, rests there, waits for standstill and ramps up to `duty`, of the other sign.

    None means: `down_s` as `length_s`; `dwell_s` the bench's dwell; `still_within_s` the default.
    """

    motor: str
    duty: int
    length_s: Fraction
    down_s: Fraction | None
    dwell_s: Fraction | None
    still_within_s: Fraction | None


class AtZero(StrEnum):
    """What the bridge does at zero duty."""

    COAST = "coast"
    BRAKE = "brake"


@dataclass(frozen=True, slots=True, kw_only=True)
class Ease(Step):
    """Brings a motor's duty to zero, in `length_s` or as fast as its slew allows, and rests coasting or braked."""

    motor: str
    rest: AtZero
    length_s: Fraction | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Move(Step):
    """Moves a servo linearly to `angle_deg` in `length_s`."""

    servo: str
    angle_deg: Fraction
    length_s: Fraction


@dataclass(frozen=True, slots=True, kw_only=True)
class Release(Step):
    """Takes a servo's pulses away: it holds no torque and keeps no angle."""

    servo: str


class Shape(StrEnum):
    """How a sweep goes from one end to the other and back."""

    TRIANGLE = "triangle"
    STEPS = "steps"
    SINE = "sine"


@dataclass(frozen=True, slots=True, kw_only=True)
class Sweep(Step):
    """Goes from `low` to `high` and back `passes` times, after going to `low`.

    `motor` or `servo` is given; ends are in duty (1/10000) for a motor, in degrees for a servo. `period_s` is one
    pass of a triangle or sine; a pass of steps has `steps` changes each way, each followed by `pause_s`.
    """

    motor: str | None
    servo: str | None
    shape: Shape
    low: Fraction
    high: Fraction
    passes: int
    period_s: Fraction | None
    steps: int | None
    pause_s: Fraction | None


class What(StrEnum):
    """What is measured, as the key in a file says it."""

    SPEED = "speed of"
    CURRENT = "current of"
    COUNTS = "counts of"
    POSITION = "position of"
    SETTLING = "settling of"

    @property
    def kind(self) -> Kind:
        """The kind of quantity that `is` gives."""
        return _KINDS[self]

    @property
    def noun(self) -> str:
        """`speed`, `current` and so on."""
        return self.value.removesuffix(" of")


_KINDS = {
    What.SPEED: SPEED,
    What.CURRENT: CURRENT,
    What.COUNTS: COUNTS,
    What.POSITION: ANGLE,
    What.SETTLING: DURATION,
}


class By(StrEnum):
    """How the samples of a window become a verdict."""

    MEAN = "mean"
    EVERY_SAMPLE = "every sample"


@dataclass(frozen=True, slots=True, kw_only=True)
class Measure:
    """A measured quantity of a motor and the band it must lie in.

    `over_s` is the window that ends at the step, for speed and current. `since` names the mark from which counts and
    position are counted, empty for the run's start. `settle` is the band of the speed whose settling time is meant.
    """

    mark: Mark = field(repr=False, compare=False)
    marks: Mapping[str, Mark] = field(repr=False, compare=False)
    what: What
    motor: str
    band: Band
    over_s: Fraction
    by: By
    since: str
    settle: Band | None

    def __str__(self) -> str:
        to = f" to {self.settle}" if self.settle is not None else ""
        since = f" since {self.since}" if self.since else ""
        over = ""
        if self.what in (What.SPEED, What.CURRENT):
            each = "" if self.by is By.MEAN else ", every sample"
            over = f" over {format_duration(self.over_s)}{each}"
        return f"{self.what.noun} of {self.motor}{to}{since} is {self.band}{over}"


@dataclass(frozen=True, slots=True, kw_only=True)
class Expect(Step):
    """Judges a measurement; `stop_on_failure` ends the run where it does not hold."""

    measure: Measure
    stop_on_failure: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Wait(Step):
    """Goes on once a measurement holds, and ends the run when it does not hold `within_s`."""

    measure: Measure
    within_s: Fraction


@dataclass(frozen=True, slots=True, kw_only=True)
class Note(Step):
    """Marks this moment by a name, in the log and for `since`."""

    name: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Together(Step):
    """Carries out branches side by side and goes on when the last one is done."""

    branches: tuple[tuple[Step, ...], ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Repeat(Step):
    """Repeats steps: `times` times, or for `for_s` (whole passes), or until `until` holds, at most `times` times."""

    steps: tuple[Step, ...]
    times: int | None
    for_s: Fraction | None
    until: Measure | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Include(Step):
    """The steps of another file, in place."""

    file: str
    steps: tuple[Step, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Confirm(Step):
    """Judges a travel by the encoder and so decides whether the cycle it stands in is confirmed or failed."""

    measure: Measure


@dataclass(frozen=True, slots=True, kw_only=True)
class Cycle(Step):
    """The unit of a test: `steps` carried out until `times` cycles are done, or for `for_s` of running (whole cycles).

    `before` is done once, and once more whenever the run is resumed; `check` is a reference done before the first
    cycle, after every `check_every` cycles and after a resumption. `rest_s` follows each of them. `starts_per_hour`
    bounds the starts of each motor in any 60 minutes. More than `failed_most` failed cycles end the run. `wear` is what
    is judged from cycle to cycle, None where nothing is.
    """

    name: str
    steps: tuple[Step, ...]
    before: tuple[Step, ...]
    check: tuple[Step, ...]
    check_every: int | None
    times: int | None
    for_s: Fraction | None
    rest_s: Fraction
    starts_per_hour: int | None
    failed_most: int | None
    wear: WearWish | None = field(default_factory=WearWish)


@dataclass(frozen=True, slots=True, kw_only=True)
class Interruptions:
    """What a run does when link or board fail it: stop (`resumes` 0), or go on by itself at most so many times.

    The board must be back `within_s` of the interruption. `after_trip`: also after a trip other than that of a lost
    link.
    """

    resumes: int = 0
    within_s: Fraction = Fraction(120)
    after_trip: bool = False
    said: bool = False
