"""A bench file read whole: one frozen `Bench`, or one error that points to what must be mended."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from pathlib import Path

from ramprig_link.words import LIMITS, Per

from ..errors import UsageError
from ..yamlfile import (
    Fields,
    Key,
    Mark,
    Node,
    Reader,
    Record,
    TableShape,
    TextShape,
    load,
    load_text,
    shorten,
    suggestion,
)
from .limits import LimitKey, Setting
from .measured import MEASURED, MeasuredPart, unknown_subject
from .motor import MOTOR, Motor
from .servo import SERVO, Servo
from .station import (
    BOARD,
    LINK,
    LOG,
    MOCK,
    PORT,
    SAFETY,
    SUPPLY,
    BoardIdentity,
    LinkTimes,
    LogDefaults,
    MockSettings,
    PortChoice,
    Safety,
    Supply,
)


@dataclass(frozen=True, slots=True, kw_only=True)
class Bench:
    """Everything a bench file says. `motors` and `servos` are in order of their number on the board."""

    name: str
    port: PortChoice
    board: BoardIdentity
    supply: Supply
    motors: tuple[Motor, ...]
    servos: tuple[Servo, ...]
    link: LinkTimes
    log: LogDefaults
    safety: Safety
    mock: MockSettings
    measured: MeasuredPart = field(default_factory=dict)
    mark: Mark = field(compare=False, repr=False)

    @property
    def file(self) -> str:
        """The file as the user named it."""
        return self.mark.source.file

    @property
    def file_bytes(self) -> bytes:
        """The file's bytes as they were read."""
        return self.mark.source.data

    @property
    def digest_of_file(self) -> str:
        """SHA-256 of the file's bytes, in hex."""
        return self.mark.source.digest

    def motor(self, name: str) -> Motor:
        """The motor of this name; raises `UsageError` with a suggestion."""
        found = {motor.name: motor for motor in self.motors}
        if name not in found:
            raise UsageError(f"no motor is called '{shorten(name)}'; {suggestion(name, found, 'motors')}")
        return found[name]

    def servo(self, name: str) -> Servo:
        """The servo of this name; raises `UsageError` with a suggestion."""
        found = {servo.name: servo for servo in self.servos}
        if name not in found:
            raise UsageError(f"no servo is called '{shorten(name)}'; {suggestion(name, found, 'servos')}")
        return found[name]

    @property
    def axes(self) -> int:
        """The fewest axes a board for this bench has."""
        return max((motor.axis + 1 for motor in self.motors), default=0)

    @property
    def channels(self) -> int:
        """The fewest servo outputs a board for this bench has."""
        return max((servo.channel + 1 for servo in self.servos), default=0)

    def limits(
        self, *, tick_us: int = 1000, axes: int | None = None, servos: int | None = None, max_duty: int = 10_000
    ) -> dict[LimitKey, int]:
        """Every limit of a board in protocol units, defaults included, in the order of the protocol's digest.

        `axes` and `servos` are what the board has (None: just enough), `max_duty` its own ceiling. An axis that the
        bench does not name gets the ceiling 0: it cannot be driven. Raises `FileError` at the value that the board
        cannot keep, or at the motor or servo that it does not have.
        """
        count_of = {
            Per.DEVICE: 1,
            Per.AXIS: self.axes if axes is None else axes,
            Per.SERVO: self.channels if servos is None else servos,
        }
        self._check_fitted(count_of[Per.AXIS], count_of[Per.SERVO])
        by_axis = {motor.axis: motor.limits(tick_us) for motor in self.motors}
        by_servo = {servo.channel: servo.limits(tick_us) for servo in self.servos}
        device = {name: said.in_units(tick_us) for name, said in self.device_settings().items()}
        numbers: dict[LimitKey, int] = {}
        for name, limit in sorted(LIMITS.items(), key=lambda pair: pair[1].number):
            for index in range(count_of[limit.per]):
                given = {Per.DEVICE: device, Per.AXIS: by_axis.get(index), Per.SERVO: by_servo.get(index)}[limit.per]
                unnamed = 0 if name == "ceiling_duty" else limit.default
                numbers[name, index] = unnamed if given is None else given.get(name, limit.default)
        for motor in self.motors:
            if numbers["ceiling_duty", motor.axis] > max_duty:
                said = motor.settings["ceiling_duty"]
                found = f"found '{said.text}', more than the board allows"
                raise said.mark.error(found, f"this board drives at most {max_duty / 100:g} %")
        return numbers

    def device_settings(self) -> Mapping[str, Setting]:
        """The limits of the whole board that the file says, by the protocol's names."""
        return {**self.link.settings, **self.supply.settings}

    def _check_fitted(self, axes: int, servos: int) -> None:
        for motor in self.motors:
            if motor.axis >= axes:
                raise motor.mark.error(f"'{motor.name}' is on axis {motor.axis}", f"this board has {axes} axes, from 0")
        for servo in self.servos:
            if servo.channel >= servos:
                found = f"'{servo.name}' is on servo {servo.channel}"
                raise servo.mark.error(found, f"this board has {servos} servo outputs, from 0")


_NAME = Key("bench", TextShape(), "what the bench is called", required=True)
_PORT = Key("port", PORT, "where the board is connected", required=True)
_BOARD = Key("board", BOARD, "the board that must answer", required=True)
_SUPPLY = Key("supply", SUPPLY, "the supply of the bridges", required=True)
_MOTORS = Key("motors", TableShape(MOTOR, what="motor"), "the motors by name")
_SERVOS = Key("servos", TableShape(SERVO, what="servo"), "the servos by name")
_LINK = Key("link", LINK, "what the board does when the laptop falls silent")
_LOG = Key("log", LOG, "how a run is sampled")
_SAFETY = Key("safety", SAFETY, "who, where, and what else can stop it")
_MOCK = Key("mock", MOCK, "how the mock behaves in a rehearsal")

_MEASURED = Key("measured", MEASURED, "what `ramprig measure --save` found; it writes this part itself")


def _bench(fields: Fields) -> Bench:
    motors = fields.get(_MOTORS) or {}
    servos = fields.get(_SERVOS) or {}
    if not motors and not servos:
        raise fields.mark.error("the bench has neither motors nor servos", "name at least one")
    for name, servo in servos.items():
        if name in motors:
            raise servo.mark.error(f"'{name}' is a motor and a servo", "columns of a log need one name each")
    _check_numbers([(motor.axis, name, motor.mark) for name, motor in motors.items()], "axis")
    _check_numbers([(servo.channel, name, servo.mark) for name, servo in servos.items()], "servo")
    bench = Bench(
        name=fields[_NAME],
        port=fields[_PORT],
        board=fields[_BOARD],
        supply=fields[_SUPPLY],
        motors=tuple(sorted((replace(m, name=name) for name, m in motors.items()), key=lambda motor: motor.axis)),
        servos=tuple(sorted((replace(s, name=name) for name, s in servos.items()), key=lambda servo: servo.channel)),
        link=fields.get(_LINK) or LinkTimes(lease_ms=LIMITS["lease_ms"].default, settings={}),
        log=fields.get(_LOG) or LogDefaults(),
        safety=fields.get(_SAFETY) or Safety(),
        mock=fields.get(_MOCK) or MockSettings(),
        measured=fields.get(_MEASURED) or {},
        mark=fields.mark,
    )
    for fault in bench.mock.faults:
        if fault.motor is not None and fault.motor not in motors:
            raise fault.mark.error(f"no motor is called '{fault.motor}'", suggestion(fault.motor, motors, "motors"))
    unknown = unknown_subject(bench.measured, {*motors, *servos})
    if unknown is not None:
        raise unknown
    bench.limits()  # whatever no board with a tick of 1 ms can keep is refused here, at its line
    return bench


def _check_numbers(users: list[tuple[int, str, Mark]], what: str) -> None:
    first: dict[int, tuple[str, Mark]] = {}
    for number, name, mark in users:
        if number in first:
            other, where = first[number]
            raise mark.error(
                f"'{name}' and '{other}' are both on {what} {number}", f"'{other}' is in line {where.line}"
            )
        first[number] = (name, mark)


BENCH = Record(
    (_NAME, _PORT, _BOARD, _SUPPLY, _MOTORS, _SERVOS, _LINK, _LOG, _SAFETY, _MOCK, _MEASURED),
    _bench,
)
"""The whole file."""


def load_bench(path: str | Path) -> Bench:
    """The bench that the file says. Raises `FileError`, with the place and what would be right, and nothing else."""
    return bench_of(load(path))


def bench_of_text(text: str, file: str = "bench.yaml") -> Bench:
    """The bench that a text says; `file` is the name that messages give."""
    return bench_of(load_text(text, file))


def bench_of(root: Node) -> Bench:
    """The bench that a tree says."""
    return BENCH.read(Reader(root))
