"""The faults a mock can have, by name: what each does, how strong it is by default, and which are on."""

from __future__ import annotations

import difflib
import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass

from ramprig.errors import UsageError


@dataclass(frozen=True, slots=True, kw_only=True)
class FaultKind:
    """One fault. A strength is `default` where only "on" is said, and lies in `least` to `most`; 0 is off.

    Where `unit` is empty the fault has no strength but on. `per_axis` faults are of one axis.
    """

    name: str
    text: str
    default: float = 1.0
    unit: str = ""
    least: float = 1.0
    most: float = 1.0
    per_axis: bool = False


FAULTS = {
    kind.name: kind
    for kind in (
        FaultKind(name="phases_swapped", per_axis=True, text="the encoder's phases are exchanged: it counts backwards"),
        FaultKind(name="leads_swapped", per_axis=True, text="the motor's leads are exchanged: it turns backwards"),
        FaultKind(name="encoder_dead", per_axis=True, text="the encoder gives no edges: the counts stand still"),
        FaultKind(name="one_channel", per_axis=True, text="one encoder phase is missing: the counts toggle by one"),
        FaultKind(name="lead_open", per_axis=True, text="a lead of the motor is off: no current, no motion"),
        FaultKind(name="encoders_exchanged", text="each encoder is plugged in where that of another axis belongs"),
        FaultKind(name="jammed_shaft", per_axis=True, text="the shaft is held fast"),
        FaultKind(
            name="gear_play", per_axis=True, default=1.0, unit="deg", least=1e-3, most=45.0,
            text="the gear has this much play at its output",
        ),
        FaultKind(name="output_clamped", per_axis=True, text="the output shaft is clamped fast behind the gear's play"),
        FaultKind(
            name="friction_wear", per_axis=True, default=10.0, unit="% in 1000 turns", least=1e-3, most=1e5,
            text="the friction grows by this share of its first value with every 1000 turns of the output",
        ),
        FaultKind(
            name="resistance_wear", per_axis=True, default=10.0, unit="% in 1000 turns", least=1e-3, most=1e5,
            text="the winding's and brushes' resistance grows by this share with every 1000 turns of the output",
        ),
        FaultKind(
            name="play_wear", per_axis=True, default=1.0, unit="deg in 1000 turns", least=1e-3, most=1e4,
            text="the gear's play grows by this with every 1000 turns of the output",
        ),
        FaultKind(
            name="current_offset", per_axis=True, default=350.0, unit="mA", least=-100_000.0, most=100_000.0,
            text="the current sensor reads too much by this",
        ),
        FaultKind(name="noisy_counts", per_axis=True, text="each reading of the counts is off by -1, 0 or +1"),
        FaultKind(
            name="weak_supply", default=20.0, unit="times", least=1.0, most=10_000.0,
            text="the supply's inner resistance is this many times what it should be",
        ),
        FaultKind(
            name="brownout_on_start", default=3.0, unit="ticks", least=1.0, most=10_000.0,
            text="the supply sags when a motor starts, and this long after the start the board resets",
        ),
        FaultKind(
            name="bit_errors", default=1e-4, unit="of the bytes", least=1e-9, most=1.0,
            text="one bit of a byte is flipped on the wire, either way",
        ),
        FaultKind(
            name="dropped_bytes", default=1e-4, unit="of the bytes", least=1e-9, most=1.0,
            text="a byte is lost on the wire, either way",
        ),
        FaultKind(
            name="delivery_grid", default=16.0, unit="ms", least=0.1, most=1000.0,
            text="what the board sends reaches the host on a grid of this, as with a USB adapter's timer",
        ),
        FaultKind(name="unplug", text="the cable is pulled out"),
        FaultKind(
            name="garbage_after_open", default=60.0, unit="bytes", least=1.0, most=4096.0,
            text="this much that means nothing arrives when the port is opened",
        ),
        FaultKind(name="reset_on_open", text="opening the port resets the board, as DTR does on many"),
        FaultKind(name="deaf", text="the board runs on but hears nothing that the host sends"),
        FaultKind(name="second_board", text="another board answers under the same port name"),
        FaultKind(
            name="clock_drift", default=200.0, unit="ppm", least=-100_000.0, most=100_000.0,
            text="the board's tick is longer than it says by this",
        ),
    )
}  # fmt: skip
"""All faults by name; help and documentation are made from this."""

_SPELLING = re.compile(r"(?P<name>[A-Za-z_]+)(?::(?P<axis>[0-9]))?(?:=(?P<value>\S+))?", re.ASCII)
_ON_OFF = {"on": True, "off": False, "true": True, "false": False, "yes": True, "no": False}


def known(name: str) -> FaultKind:
    """The fault of that name; raises UsageError with the nearest name for an unknown one."""
    kind = FAULTS.get(name)
    if kind is None:
        near = difflib.get_close_matches(name, FAULTS, n=1)
        hint = f"did you mean '{near[0]}'?" if near else "there are " + ", ".join(FAULTS)
        raise UsageError(f"there is no fault '{name}'; {hint}")
    return kind


def strength(kind: FaultKind, value: float | bool) -> float:
    """The strength that `value` means, 0 for off; raises UsageError for one out of range."""
    if value is False or value == 0:
        return 0.0
    if value is True:
        return kind.default
    if not kind.least <= value <= kind.most:
        ends = f"{kind.least:g} to {kind.most:g} {kind.unit}" if kind.unit else "on or off"
        raise UsageError(f"fault {kind.name} cannot be {value:g}; it may be {ends}")
    return float(value)


def parse_value(kind: FaultKind, text: str) -> float:
    """`on`, `off`, or a number in the fault's unit; raises UsageError."""
    if text in _ON_OFF:
        return strength(kind, _ON_OFF[text])
    try:
        return strength(kind, float(text))
    except ValueError as error:
        raise UsageError(f"fault {kind.name} is '{text}'; it may be on, off or a number") from error


def parse_fault(text: str) -> tuple[str, int, float]:
    """Name, axis and strength of `NAME[:AXIS][=VALUE]`, on where no value is given; raises UsageError."""
    match = _SPELLING.fullmatch(text.strip())
    if match is None:
        raise UsageError(f"'{text}' is no fault; write NAME, NAME=VALUE or NAME:AXIS=VALUE")
    kind = known(match["name"])
    if match["axis"] and not kind.per_axis:
        raise UsageError(f"fault {kind.name} is not of an axis; write it without ':{match['axis']}'")
    return kind.name, int(match["axis"] or 0), parse_value(kind, match["value"] or "on")


class FaultSwitches:
    """Which faults are on, and how strong; `act` is told of each change: name, axis, strength.

    `changes` counts the changes.
    """

    def __init__(self, act: Callable[[str, int, float], None], *, axes: int) -> None:
        self._act = act
        self._axes = axes
        self._on: dict[tuple[str, int], float] = {}
        self.changes = 0

    def set(self, name: str, value: float | bool = True, *, axis: int = 0) -> None:
        """Switch a fault on, off, or to a strength; raises UsageError for what there is not."""
        kind = known(name)
        if kind.per_axis and not 0 <= axis < self._axes:
            raise UsageError(f"fault {name}: there is no axis {axis}; the board has {self._axes}")
        amount = strength(kind, value)
        key = name, axis if kind.per_axis else 0
        if amount == self._on.get(key, 0.0):
            return
        if amount:
            self._on[key] = amount
        else:
            del self._on[key]
        self.changes += 1
        self._act(name, key[1], amount)

    def set_all(self, texts: Iterable[str]) -> None:
        """Switch on what `NAME[:AXIS][=VALUE]` texts say."""
        for text in texts:
            name, axis, amount = parse_fault(text)
            self.set(name, amount, axis=axis)

    def get(self, name: str, *, axis: int = 0) -> float:
        """The strength of a fault, 0 where it is off."""
        if name not in FAULTS:
            known(name)  # raises
        return self._on.get((name, axis), 0.0)

    def on(self) -> dict[tuple[str, int], float]:
        """The faults that are on: strength by name and axis."""
        return dict(self._on)
