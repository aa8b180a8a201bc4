"""What surrounds the motors of a bench: port, board, supply, link, log, who and where, and the mock's behaviour."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, cast

from ramprig_link.words import LIMITS, TOKEN_MAX, Form

from ..quantity import CURRENT, DURATION, VOLTAGE, Quantity
from ..yamlfile import (
    BandShape,
    Built,
    CountShape,
    Fields,
    Key,
    ListShape,
    Mark,
    QuantityShape,
    RatioShape,
    Record,
    ScalarOr,
    TextShape,
    WordShape,
)
from .limits import Setting, setting
from .model import SUPPLY_MODEL, SupplyModel

Dtr = Literal["leave", "assert", "clear"]


@dataclass(frozen=True, slots=True, kw_only=True)
class PortChoice:
    """Which port to open: `url` is what the port opener takes (`mock:`, `usb:SERIAL`, `usb-path:1-1.4`, a device)."""

    url: str = "mock:"
    baud: int = 115200
    dtr: Dtr = "leave"


@dataclass(frozen=True, slots=True, kw_only=True)
class BoardIdentity:
    """The board that must answer; `serial` None: any of that name."""

    name: str
    serial: str | None
    mark: Mark = field(compare=False, repr=False)

    def matches(self, name: str, serial: str) -> bool:
        """Whether this is the board that is meant."""
        return name == self.name and self.serial in (None, serial)


@dataclass(frozen=True, slots=True, kw_only=True)
class Supply:
    """The supply at the bridges: its nominal voltage, the limits it may move in, and its model."""

    voltage_v: float
    settings: Mapping[str, Setting] = field(repr=False)
    model: SupplyModel | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkTimes:
    """The lease that is asked for, and the device's limits of lease and stop."""

    lease_ms: int
    settings: Mapping[str, Setting] = field(repr=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class LogDefaults:
    """How a run is sampled where the sequence says nothing else."""

    period_s: float = 0.01
    form: Form = Form.PACKED


@dataclass(frozen=True, slots=True, kw_only=True)
class Safety:
    """Who answers for the bench, where it stands, and what else can stop it. Texts are the user's; "" if not said."""

    contact: str = ""
    place: str = ""
    fuse_a: float | None = None
    power_cut: str = ""
    guard: str = ""

    def missing(self) -> tuple[str, ...]:
        """The keys that a run without anyone beside it should have and the file does not say."""
        said = {
            "contact": self.contact,
            "place": self.place,
            "fuse": self.fuse_a,
            "power cut": self.power_cut,
            "guard": self.guard,
        }
        return tuple(name for name, value in said.items() if not value)


@dataclass(frozen=True, slots=True, kw_only=True)
class MockFault:
    """A fault that the mock has: its name, the motor it is in (None: where it applies), and from when to when.

    `strength` is in the fault's own unit, None its usual one.

    `mark` is where the file names it, for whoever knows which faults there are.
    """

    name: str
    motor: str | None = None
    from_s: float = 0.0
    until_s: float | None = None
    strength: float | None = None
    mark: Mark = field(compare=False, repr=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class MockSettings:
    """How the mock behaves when this bench is rehearsed."""

    seed: int = 1
    faults: tuple[MockFault, ...] = ()


_URL = Key("url", TextShape(), "such as mock:, /dev/ttyACM0, COM5 or socket://host:port")
_USB_SERIAL = Key("usb serial", TextShape(), "the USB adapter's serial number: the same board after every replug")
_PATH = Key("usb path", TextShape(), "where the adapter is plugged in, such as 1-1.4, for adapters without a number")
_BAUD = Key("baud", CountShape(300, 4_000_000), "of the line", default=115200)
_DTR = Key("dtr", WordShape(("leave", "assert", "clear")), "what opening does to DTR; many boards restart by it")


def _port(fields: Fields) -> PortChoice:
    named = {"": _URL, "usb:": _USB_SERIAL, "usb-path:": _PATH}
    said = [(scheme, key) for scheme, key in named.items() if fields.said(key)]
    if len(said) != 1:
        raise fields.mark.error(f"the port is named {len(said)} times", "give one of url, usb serial and usb path")
    scheme, key = said[0]
    dtr = cast("Dtr", fields.get(_DTR) or "leave")
    return PortChoice(url=scheme + fields[key], baud=fields[_BAUD], dtr=dtr)


PORT = Record((_URL, _USB_SERIAL, _PATH, _BAUD, _DTR), _port)

_TOKEN = TextShape(rf"[A-Za-z0-9._-]{{1,{TOKEN_MAX}}}", f"1 to {TOKEN_MAX} of A-Z, a-z, 0-9, '.', '_' and '-'")
_NAME = Key("name", _TOKEN, "what the board calls itself", required=True)
_SERIAL = Key("serial", _TOKEN, "the board's own number, or `any`", required=True)


def _board(fields: Fields) -> BoardIdentity:
    serial = fields[_SERIAL]
    return BoardIdentity(name=fields[_NAME], serial=None if serial == "any" else serial, mark=fields.mark)


BOARD = Record((_NAME, _SERIAL), _board)

_VOLTAGE = Key("voltage", QuantityShape(VOLTAGE, least="1 V", most="65 V"), "nominal, at the bridges", required=True)
_ALLOWED = Key("allowed", BandShape(VOLTAGE), "trips outside: '9 V to 16 V', or 'at most 16 V' for no lower limit")
_AFTER = Key("trip after", QuantityShape(DURATION), "so long in a row outside")
_SUPPLY_MODEL = Key("model", SUPPLY_MODEL, "figures for predictions and for the mock")


def _supply(fields: Fields) -> Supply:
    voltage, allowed, after = fields[_VOLTAGE], fields.get(_ALLOWED), fields.get(_AFTER)
    settings: dict[str, Setting] = {}
    if allowed is not None:
        if allowed.high is None:
            raise fields.error(_ALLOWED, f"found '{allowed}' without an upper limit", "as in '9 V to 16 V'")
        if not allowed.holds(voltage.value):
            raise fields.error(_ALLOWED, f"the voltage, {voltage}, lies outside '{allowed}'", "it must lie inside")
        ends = {"under_mv": allowed.low or 0, "over_mv": allowed.high}
        for item, end in ends.items():
            written = Quantity(VOLTAGE, voltage.value * 0 + end, str(allowed))
            settings[item] = setting(item, written, fields.at(_ALLOWED))
    elif not LIMITS["under_mv"].default <= voltage.value * 1000 <= LIMITS["over_mv"].default:
        raise fields.error(_VOLTAGE, f"found '{voltage}' and no 'allowed'", "add it, such as 'allowed: 20 V to 28 V'")
    if after is not None:
        settings["supply_ticks"] = setting("supply_ticks", after, fields.at(_AFTER))
    return Supply(voltage_v=voltage.to("V"), settings=settings, model=fields.get(_SUPPLY_MODEL))


SUPPLY = Record((_VOLTAGE, _ALLOWED, _AFTER, _SUPPLY_MODEL), _supply)

_LEASE = Key(
    "lease", QuantityShape(DURATION, least="50 ms", most="5 s"), "silence after which the board stops by itself"
)
_STOP = Key("stop within", QuantityShape(DURATION), "longest controlled stop; then the outputs are cut")


def _link(fields: Fields) -> LinkTimes:
    pairs = (("lease_ms", _LEASE), ("stop_ticks", _STOP))
    settings = {item: setting(item, fields[key], fields.at(key)) for item, key in pairs if fields.said(key)}
    lease = settings["lease_ms"].in_units(1000) if "lease_ms" in settings else LIMITS["lease_ms"].default
    return LinkTimes(lease_ms=lease, settings=settings)


LINK = Record((_LEASE, _STOP), _link)

_PERIOD = Key("period", QuantityShape(DURATION, least="1 ms", most="60 s"), "time between two samples")
_FORM = Key("form", WordShape(("packed", "plain")), "packed for runs, plain for reading the wire", default="packed")


def _log(fields: Fields) -> LogDefaults:
    period = fields.get(_PERIOD)
    return LogDefaults(period_s=0.01 if period is None else period.to("s"), form=Form[fields[_FORM].upper()])


LOG = Record((_PERIOD, _FORM), _log)

_CONTACT = Key("contact", TextShape(), "who answers for the bench, and how (`<...>` is not said yet)", default="")
_PLACE = Key("place", TextShape(), "where it stands", default="")
_FUSE = Key("fuse", QuantityShape(CURRENT, least="1 mA"), "in the supply to the bridges")
_POWER_CUT = Key("power cut", TextShape(), "what cuts the motor's power by hand, and where it is", default="")
_GUARD = Key("guard", TextShape(), "what keeps hands away", default="")


_UNFILLED = re.compile(r"\s*(<.*>)?\s*", re.DOTALL)


def _safety(fields: Fields) -> Safety:
    fuse = fields.get(_FUSE)
    return Safety(
        contact=_said(fields.get(_CONTACT)),
        place=_said(fields.get(_PLACE)),
        fuse_a=None if fuse is None else fuse.to("A"),
        power_cut=_said(fields.get(_POWER_CUT)),
        guard=_said(fields.get(_GUARD)),
    )


def _said(text: str | None) -> str:
    """The text; nothing where it is a form that nobody has filled in yet, such as `<name and telephone>`."""
    return "" if text is None or _UNFILLED.fullmatch(text) else text


SAFETY = Record((_CONTACT, _PLACE, _FUSE, _POWER_CUT, _GUARD), _safety)

_FAULT_NAME = TextShape(r"[a-z][a-z0-9_-]{0,39}", "the name of a fault of the mock, such as jammed_shaft")
_FAULT = Key("fault", _FAULT_NAME, "name of the fault", required=True)
_MOTOR = Key("motor", TextShape(), "the motor it is in")
_FROM = Key("from", QuantityShape(DURATION), "when it begins")
_UNTIL = Key("until", QuantityShape(DURATION), "when it ends")
_STRENGTH = Key("strength", RatioShape(), "how strong it is, in its own unit: see `ramprig mock --faults`")
_SEED = Key("seed", CountShape(), "the same seed gives the same bytes", default=1)


def _fault(fields: Fields) -> MockFault:
    begin, end = fields.get(_FROM), fields.get(_UNTIL)
    from_s = 0.0 if begin is None else begin.to("s")
    if end is not None and end.to("s") <= from_s:
        raise fields.error(_UNTIL, f"found '{end}'", "it must end after it begins")
    return MockFault(
        name=fields[_FAULT],
        motor=fields.get(_MOTOR),
        from_s=from_s,
        until_s=None if end is None else end.to("s"),
        strength=None if (strength := fields.get(_STRENGTH)) is None else float(strength),
        mark=fields.at(_FAULT),
    )


_FAULTS = Key(
    "faults",
    ListShape(
        ScalarOr(
            Built(_FAULT_NAME, lambda name, mark: MockFault(name=name, mark=mark)),
            Record((_FAULT, _MOTOR, _FROM, _UNTIL, _STRENGTH), _fault),
        ),
        most=32,
    ),
    "faults that the mock has, by name or with motor, times and strength",
    default=(),
)

MOCK = Record((_SEED, _FAULTS), lambda fields: MockSettings(seed=fields[_SEED], faults=fields.get(_FAULTS) or ()))
