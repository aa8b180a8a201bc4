"""How a file says what is measured and what it must be: `speed of: vent, is: 38 rpm +- 10 %, over: 500 ms`."""

from __future__ import annotations

from fractions import Fraction

from ramprig.quantity import ALL_KINDS, DURATION, SPEED, Kind
from ramprig.yamlfile import BandShape, Fields, Key, Mark, QuantityShape, Reader, Schema, Shape, WordShape

from .names import MARK_NAME, MOTOR_NAME
from .steps import By, Measure, What

OVER_DEFAULT_S = Fraction(1, 5)
"""The window of a speed or a current where the file gives none."""
OVER = Key("over", QuantityShape(DURATION, least="1 ms", most="1 h"), "the window that ends at this step")
BY = Key("by", WordShape(tuple(By)), "whether the mean of the window must hold, or every sample", default=By.MEAN.value)
SINCE = Key("since", MARK_NAME, "the mark from which counts and position are counted; the run's start where left out")
SETTLE = Key("to", BandShape(SPEED), "the band of the speed that it settles in")
OPTIONS: tuple[Key[object], ...] = (OVER, BY, SINCE, SETTLE)

_BELONG = {
    OVER.name: (What.SPEED, What.CURRENT),
    BY.name: (What.SPEED, What.CURRENT),
    SINCE.name: (What.COUNTS, What.POSITION),
    SETTLE.name: (What.SETTLING,),
}
"""Which optional keys go with what."""


class MeasureShape(Shape[Measure]):
    """A measurement of a motor with the band that it must lie in; `extra` keys may stand beside it.

    `whats` are the measurements that may stand here, all where left out.
    """

    def __init__(
        self, *, extra: tuple[Key[object], ...] = (), settling: bool = True, whats: tuple[What, ...] = tuple(What)
    ) -> None:
        self.extra = extra
        self.whats = tuple(what for what in whats if settling or what is not What.SETTLING)

    def read(self, reader: Reader) -> Measure:  # noqa: D102  (the base class says it, here and below)
        return self.read_with(reader)[0]

    def read_with(self, reader: Reader) -> tuple[Measure, Fields]:
        """The measurement, and the values of the extra keys."""
        names = [what.value for what in self.whats]
        required = [key.name for key in self.extra if key.required]
        found = reader.mapping(
            required=required,
            optional=[*names, "is", *(key.name for key in (*OPTIONS, *self.extra) if key.name not in required)],
        )
        what = self._what(reader, found)
        if "is" not in found:
            raise reader.fail(f"'is' is missing beside '{what}'", f"as in 'is: {_example(what.kind)}'")
        values = {key.name: key.shape.read(found[key.name]) for key in (*OPTIONS, *self.extra) if key.name in found}
        marks: dict[str, Mark] = {name: below.mark for name, below in found.items()}
        fields = Fields(reader.mark, values, marks)
        self._check(fields, what, found)
        over = fields.get(OVER)
        measure = Measure(
            mark=reader.mark,
            marks=marks,
            what=what,
            motor=MOTOR_NAME.read(found[what.value]),
            band=found["is"].band(what.kind),
            over_s=OVER_DEFAULT_S if over is None else over.value,
            by=By(fields[BY]),
            since=fields.get(SINCE) or "",
            settle=fields.get(SETTLE),
        )
        return measure, fields

    def _what(self, reader: Reader, found: dict[str, Reader]) -> What:
        whats = [what for what in self.whats if what.value in found]
        names = ", ".join(f"'{what}'" for what in self.whats)
        if not whats:
            raise reader.fail("this does not say what is measured", f"give one of {names}")
        if len(whats) > 1:
            raise found[whats[1].value].fail(f"'{whats[1]}' stands beside '{whats[0]}'", "one is judged at a time")
        return whats[0]

    def _check(self, fields: Fields, what: What, found: dict[str, Reader]) -> None:
        for name, belong in _BELONG.items():
            if name in found and what not in belong:
                with_what = " and ".join(f"'{other}'" for other in belong)
                raise found[name].fail(f"'{name}' does not go with '{what}'", f"it goes with {with_what}")
        if what is What.SETTLING and not fields.said(SETTLE):
            raise fields.mark.error("'to' is missing beside 'settling of'", "as in 'to: 38 rpm +- 5 %'")

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        kinds: list[Kind] = [kind for kind in ALL_KINDS if kind in {what.kind for what in self.whats}]
        properties: Schema = {
            what.value: {"description": "the motor's name"} | MOTOR_NAME.schema(names=names) for what in self.whats
        }
        bands = [BandShape(kind).schema(names=names) for kind in kinds]
        properties["is"] = {"description": "the value with its tolerance, a range, or one bound", "anyOf": bands}
        for key in (*OPTIONS, *self.extra):
            properties[key.name] = {"description": key.text} | key.shape.schema(names=names)
        required = ["is", *(key.name for key in self.extra if key.required)]
        return {
            "type": "object",
            "properties": properties,
            "additionalProperties": False,
            "required": required,
            "oneOf": [{"required": [what.value]} for what in self.whats],
        }


def _example(kind: Kind) -> str:
    return f"at least {kind.example}"
