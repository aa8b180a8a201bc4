"""Says a trip in words: what, on which motor, how much, against which limit."""

from __future__ import annotations

from ramprig.quantity import format_current, format_duration, format_duty, format_voltage
from ramprig.session.events import Tripped
from ramprig_link.words import Trip

from .rig import Rig


def _ma(value: int) -> str:
    return format_current(value / 1000)


def explain_trip(trip: Tripped, rig: Rig) -> str:
    """Such as `overcurrent on vent: 2.62 A, more than 2.5 A for 5 ms`."""
    axis = next((axis for axis in rig.axes.values() if axis.index == trip.index), None)
    on = "" if axis is None else f" on {axis.name}"
    value, bound = trip.value, trip.bound
    match Trip.named(trip.trip):
        case Trip.OVERCURRENT:
            ticks = rig.limits.get(("trip_ticks", trip.index), 1)
            return f"overcurrent{on}: {_ma(value)}, more than {_ma(bound)} for {rig.show(ticks)}"
        case Trip.OVERLOAD:
            return f"overload{on}: heated as by {_ma(value)} for ever, rated {_ma(bound)}"
        case Trip.STALL:
            return f"stall{on}: {format_duty(value)} and no motion for {rig.show(bound)}"
        case Trip.WRONG_WAY:
            return f"wrong way{on}: {value} counts against the duty, {bound} are allowed"
        case Trip.OVERSPEED:
            return f"overspeed{on}: {value} counts in a window, {bound} are allowed"
        case Trip.OVERVOLTAGE | Trip.UNDERVOLTAGE:
            over = "above" if trip.trip == Trip.OVERVOLTAGE.word else "below"
            volts = format_voltage(bound / 1000)
            return f"{trip.trip}: the supply was at {format_voltage(value / 1000)}, {over} {volts}"
        case Trip.LINK_LOST:
            return f"link lost: the device heard nothing for {value} ms (lease {bound} ms)"
        case Trip.LATE_ORDER:
            return f"late order: an order came {format_duration(value * rig.tick_s)} after its start; the host was late"
        case Trip.LINE_BREAK:
            return "line break: a BREAK came on the line"
        case known:
            return f"{trip.trip}: {'unknown to this program' if known is None else known.text}"
