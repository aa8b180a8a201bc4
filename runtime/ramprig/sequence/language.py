"""What each step of a sequence file may say: its keys, their shapes, and how they become a step.

The same declarations read files and make the JSON Schema, so that an editor and the program agree.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from fractions import Fraction

from ramprig.errors import FileError
from ramprig.quantity import ANGLE, DURATION, DUTY, Quantity, QuantityError
from ramprig.yamlfile import (
    Built,
    CountShape,
    Fields,
    Key,
    ListShape,
    Mapping,
    Mark,
    QuantityShape,
    Reader,
    Record,
    Scalar,
    ScalarOr,
    Schema,
    Shape,
    WordShape,
    shorten,
    suggestion,
)

from .cycle_shape import ConfirmShape, cycle_shape
from .measures import MeasureShape
from .names import MARK_NAME, MOTOR_NAME, SERVO_NAME
from .steps import (
    AtZero,
    Ease,
    Expect,
    Hold,
    Move,
    Note,
    Ramp,
    Release,
    Repeat,
    Reverse,
    Step,
    Sweep,
    Together,
    Wait,
)
from .steps import Shape as SweepShape

LENGTH = QuantityShape(DURATION, least="0 s", most="250 h")
LENGTH_NOT_0 = QuantityShape(DURATION, least="1 us", most="250 h")
TIMES_MAX = 10_000_000
STEPS_MAX = 5_000
BRANCHES_MAX = 8
DUTY_STEP = Fraction(1, 100)
"""The link carries duty in 1/10000 of full drive, which is 0.01 %."""

MOTOR = Key("motor", MOTOR_NAME, "the motor's name in the bench file", required=True)
ANY_MOTOR = Key("motor", MOTOR_NAME, "the motor's name in the bench file, instead of a servo")
SERVO = Key("servo", SERVO_NAME, "the servo's name in the bench file", required=True)
ANY_SERVO = Key("servo", SERVO_NAME, "the servo's name in the bench file, instead of a motor")
TO_DUTY = Key("to", QuantityShape(DUTY, least="-100 %", most="100 %"), "the duty at the end, signed", required=True)
TO_ANGLE = Key("to", QuantityShape(ANGLE), "the angle at the end", required=True)
IN = Key("in", LENGTH, "how long it takes", required=True)
MAYBE_IN = Key("in", LENGTH, "how long it takes; as fast as the slew limit allows where left out")
DOWN_IN = Key("down in", LENGTH, "how long the ramp down to zero takes; as long as 'in' where left out")
DWELL = Key("dwell", LENGTH, "least time at zero duty; the bench's dwell where left out")
STILL_WITHIN = Key("still within", LENGTH_NOT_0, "the shaft must stand still this soon after the ramp down")
SHAPE = Key("shape", WordShape(tuple(SweepShape)), "how it goes from one end to the other and back", required=True)
PASSES = Key("passes", CountShape(1, TIMES_MAX), "how often it goes there and back", default=1)
PERIOD = Key("period", LENGTH_NOT_0, "time of one pass, there and back (triangle, sine)")
STEPS_EACH_WAY = Key("steps", CountShape(1, 1000), "changes in each direction (steps)")
PAUSE = Key("pause", LENGTH, "rest after each change (steps)")
WITHIN = Key("within", LENGTH_NOT_0, "the run ends when it does not hold by then", required=True)
ELSE = Key("else", WordShape(("go on", "stop")), "what a failed expectation does", default="go on")
TIMES = Key("times", CountShape(1, TIMES_MAX), "how often")
FOR = Key("for", LENGTH_NOT_0, "begin another pass as long as less than this has gone by")
UNTIL = Key("until", MeasureShape(), "the measurement that ends it, looked at after each pass")
AT_MOST = Key("at most", CountShape(1, TIMES_MAX), "how often at most, with 'until'")


def duty_at(fields: Fields, key: Key[Quantity]) -> int:
    """The duty in 1/10000; raises `FileError` where it is finer than that."""
    try:
        return fields[key].parts(DUTY_STEP, "0.01 %")
    except QuantityError as error:
        raise fields.error(key, error.found, error.wanted) from error


def seconds(fields: Fields, key: Key[Quantity]) -> Fraction | None:
    """The duration at `key` in s, None where the file does not say it."""
    quantity = fields.get(key)
    return None if quantity is None else quantity.value


def _must(fields: Fields, key: Key[Quantity]) -> Fraction:
    return fields[key].value


def _marks(fields: Fields, *said: Key[object]) -> dict[str, Mark]:
    return {key.name: fields.at(key) for key in said if fields.said(key)}


RAMP_KEYS = (MOTOR, TO_DUTY, IN)
REVERSE_KEYS = (MOTOR, TO_DUTY, IN, DOWN_IN, DWELL, STILL_WITHIN)
EASE_KEYS = (MOTOR, MAYBE_IN)
MOVE_KEYS = (SERVO, TO_ANGLE, IN)
REPEAT_KEYS_FIRST = (TIMES, FOR, UNTIL, AT_MOST)


def _ramp(f: Fields) -> Step:
    return Ramp(
        mark=f.mark, marks=_marks(f, *RAMP_KEYS), motor=f[MOTOR], duty=duty_at(f, TO_DUTY), length_s=_must(f, IN)
    )


def _reverse(f: Fields) -> Step:
    duty = duty_at(f, TO_DUTY)
    if duty == 0:
        raise f.error(TO_DUTY, "found 0 % for a reverse", "a reverse ends at a duty; to stop use 'coast' or 'brake'")
    return Reverse(
        mark=f.mark,
        marks=_marks(f, *REVERSE_KEYS),
        motor=f[MOTOR],
        duty=duty,
        length_s=_must(f, IN),
        down_s=seconds(f, DOWN_IN),
        dwell_s=seconds(f, DWELL),
        still_within_s=seconds(f, STILL_WITHIN),
    )


def _ease(rest: AtZero) -> Callable[[Fields], Step]:
    def build(f: Fields) -> Step:
        return Ease(mark=f.mark, marks=_marks(f, *EASE_KEYS), motor=f[MOTOR], rest=rest, length_s=seconds(f, MAYBE_IN))

    return build


def _move(f: Fields) -> Step:
    return Move(
        mark=f.mark,
        marks=_marks(f, *MOVE_KEYS),
        servo=f[SERVO],
        angle_deg=f[TO_ANGLE].value,
        length_s=_must(f, IN),
    )


def _hold(length: Quantity, mark: Mark) -> Step:
    return Hold(mark=mark, marks={}, length_s=length.value)


class SweepStep(Shape[Step]):
    """A sweep of a servo or a motor: the ends are angles or duties."""

    low_high = ("from", "to")

    def read(self, reader: Reader) -> Step:  # noqa: D102
        return self._record(self._is_motor(reader)).read(reader)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return {"anyOf": [self._record(motor).schema(names=names) for motor in (False, True)]}

    def _is_motor(self, reader: Reader) -> bool:
        if not isinstance(reader.node, Mapping):
            return False
        found = {entry.key.text: entry.key for entry in reader.node}
        if "motor" in found and "servo" in found:
            raise found["servo"].error("a sweep moves one thing", "give a motor or a servo")
        return "motor" in found

    def _record(self, motor: bool) -> Record[Step]:
        who: Key[str] = (
            Key("motor", MOTOR_NAME, "the motor's name", required=True)
            if motor
            else Key("servo", SERVO_NAME, "the servo's name", required=True)
        )
        shape = QuantityShape(DUTY, least="-100 %", most="100 %") if motor else QuantityShape(ANGLE)
        low, high = (
            Key(name, shape, f"the {end} end", required=True)
            for name, end in zip(self.low_high, ("first", "other"), strict=True)
        )
        rest = (SHAPE, low, high, PERIOD, STEPS_EACH_WAY, PAUSE, PASSES)

        def build(f: Fields) -> Step:
            ends = [Fraction(duty_at(f, key)) if motor else f[key].value for key in (low, high)]
            if ends[0] == ends[1]:
                raise f.error(high, "both ends of the sweep are the same", "a sweep goes from one to another")
            self._check(f)
            return Sweep(
                mark=f.mark,
                marks=_marks(f, who, *rest),
                motor=f[who] if motor else None,
                servo=None if motor else f[who],
                shape=SweepShape(f[SHAPE]),
                low=ends[0],
                high=ends[1],
                passes=f[PASSES],
                period_s=seconds(f, PERIOD),
                steps=f.get(STEPS_EACH_WAY),
                pause_s=seconds(f, PAUSE),
            )

        return Record((who, *rest), build)

    def _check(self, f: Fields) -> None:
        """Steps have `steps` and `pause`; the others have `period`."""
        by_steps = f[SHAPE] == SweepShape.STEPS
        wanted = "give 'steps' and 'pause'" if by_steps else "give 'period'"
        for key, belongs in ((PERIOD, not by_steps), (STEPS_EACH_WAY, by_steps), (PAUSE, by_steps)):
            if f.said(key) and not belongs:
                raise f.error(key, f"'{key.name}' does not go with the shape {f[SHAPE]}", wanted)
            if belongs and not f.said(key):
                raise f.mark.error(f"'{key.name}' is missing in a sweep of the shape {f[SHAPE]}", wanted)


class ExpectShape(Shape[Step]):
    """A measurement and `else`."""

    measure = MeasureShape(extra=(ELSE,))

    def read(self, reader: Reader) -> Step:  # noqa: D102
        measure, fields = self.measure.read_with(reader)
        return Expect(mark=reader.mark, marks=measure.marks, measure=measure, stop_on_failure=fields[ELSE] == "stop")

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return self.measure.schema(names=names)


class WaitShape(Shape[Step]):
    """A measurement and `within`."""

    measure = MeasureShape(extra=(WITHIN,), settling=False)

    def read(self, reader: Reader) -> Step:  # noqa: D102
        measure, fields = self.measure.read_with(reader)
        return Wait(mark=reader.mark, marks=measure.marks, measure=measure, within_s=_must(fields, WITHIN))

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return self.measure.schema(names=names)


@dataclass(frozen=True, slots=True)
class StepWord:
    """One kind of step: what may follow its word, and what it does (for editors and help)."""

    shape: Shape[Step]
    text: str


class Language:
    """All kinds of step. `include` reads the value of an `include` step; the schema does without it."""

    def __init__(self, include: Shape[Step]) -> None:
        self.step = StepShape(self)
        self.steps: ListShape[Step] = ListShape(self.step, least=1, most=STEPS_MAX)
        ease = {rest: Record(EASE_KEYS, _ease(rest)) for rest in AtZero}
        self.words = {
            "ramp": StepWord(Record(RAMP_KEYS, _ramp), "moves a motor's duty linearly"),
            "hold": StepWord(Built(LENGTH, _hold), "changes nothing for a time"),
            "reverse": StepWord(
                Record(REVERSE_KEYS, _reverse), "down to zero, dwell, standstill, and up the other way"
            ),
            "coast": StepWord(_short_ease(AtZero.COAST, ease[AtZero.COAST]), "a motor's duty to zero, then coasts"),
            "brake": StepWord(_short_ease(AtZero.BRAKE, ease[AtZero.BRAKE]), "a motor's duty to zero, then brakes"),
            "move": StepWord(Record(MOVE_KEYS, _move), "moves a servo linearly to an angle"),
            "release": StepWord(Built(SERVO_NAME, _release), "takes a servo's pulses away"),
            "sweep": StepWord(SweepStep(), "a servo or a motor from one end to another and back"),
            "together": StepWord(self._together(), "branches of steps side by side"),
            "repeat": StepWord(self._repeat(), "steps again and again"),
            "cycle": StepWord(cycle_shape(self.steps), "steps that are one cycle of a test, counted and confirmed"),
            "confirm": StepWord(ConfirmShape(), "judges a travel by the encoder: the cycle is confirmed or failed"),
            "wait": StepWord(WaitShape(), "goes on once a measurement holds"),
            "expect": StepWord(ExpectShape(), "judges a measurement"),
            "mark": StepWord(Built(MARK_NAME, _note), "names this moment"),
            "include": StepWord(include, "the steps of another file"),
        }

    def _together(self) -> Shape[Step]:
        branches: ListShape[tuple[Step, ...]] = ListShape(self.steps, least=1, most=BRANCHES_MAX)
        return Built(branches, lambda value, mark: Together(mark=mark, marks={}, branches=value))

    def _repeat(self) -> Shape[Step]:
        inner: Key[tuple[Step, ...]] = Key("steps", self.steps, "what is repeated", required=True)

        def build(f: Fields) -> Step:
            _check_repeat(f)
            times = f.get(TIMES) or f.get(AT_MOST)
            marks = _marks(f, *REPEAT_KEYS_FIRST)
            return Repeat(
                mark=f.mark, marks=marks, steps=f[inner], times=times, for_s=seconds(f, FOR), until=f.get(UNTIL)
            )

        return Record((*REPEAT_KEYS_FIRST, inner), build)


def _short_ease(rest: AtZero, record: Record[Step]) -> Shape[Step]:
    def short(name: str, mark: Mark) -> Step:
        return Ease(mark=mark, marks={"motor": mark}, motor=name, rest=rest, length_s=None)

    return ScalarOr(Built(MOTOR_NAME, short), record)


def _release(name: str, mark: Mark) -> Step:
    return Release(mark=mark, marks={"servo": mark}, servo=name)


def _note(name: str, mark: Mark) -> Step:
    return Note(mark=mark, marks={}, name=name)


def _check_repeat(f: Fields) -> None:
    said = [key for key in REPEAT_KEYS_FIRST[:3] if f.said(key)]
    wanted = "a repeat has one of 'times', 'for', or 'until' with 'at most'"
    if not said:
        raise f.mark.error("this repeat does not say how often", wanted)
    if len(said) > 1:
        raise f.error(said[1], f"'{said[1].name}' stands beside '{said[0].name}'", wanted)
    if f.said(UNTIL) != f.said(AT_MOST):
        where = AT_MOST.name if f.said(UNTIL) else UNTIL.name
        raise f.mark.error(f"'{where}' is missing in this repeat", wanted)


class StepShape(Shape[Step]):
    """One step: a mapping with the step's word as its only key."""

    def __init__(self, language: Language) -> None:
        self.language = language

    def read(self, reader: Reader) -> Step:  # noqa: D102
        node, words = reader.node, self.language.words
        if isinstance(node, Scalar):
            raise self._lone_word(node)
        if not isinstance(node, Mapping) or not node.entries:
            raise reader.fail("found no step here", "a step is a word and what it does, such as 'hold: 2 s'")
        first = node.entries[0]
        if first.key.text not in words:
            raise first.key.error(
                f"unknown step '{shorten(first.key.text)}'", suggestion(first.key.text, words, "steps")
            )
        if len(node.entries) > 1:
            second = node.entries[1].key
            wanted = f"indent it deeper than '{first.key.text}' if it belongs to it, or begin a new step with '- '"
            raise second.error(f"'{shorten(second.text)}' stands beside the step '{first.key.text}'", wanted)
        return words[first.key.text].shape.read(Reader(first.value, key=first.key.text, names=reader.names))

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return {"$ref": "#/$defs/step"}

    def whole_schema(self) -> Schema:
        """The definition of a step, for `$defs`."""
        properties = {
            word: {"description": step.text} | step.shape.schema(names=True)
            for word, step in self.language.words.items()
        }
        return {
            "type": "object",
            "minProperties": 1,
            "maxProperties": 1,
            "additionalProperties": False,
            "properties": properties,
        }

    def _lone_word(self, node: Scalar) -> FileError:
        word = node.text.split(":")[0].strip()
        if word in self.language.words:
            return node.error(
                f"found '{shorten(node.text)}'", f"write '{word}: ' and what it does, such as 'hold: 2 s'"
            )
        return node.error(f"found '{shorten(node.text)}'", suggestion(word, self.language.words, "steps"))
