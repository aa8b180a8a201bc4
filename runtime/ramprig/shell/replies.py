"""What the shell answers when it is asked: who, state, limits, why, counters and trail as lines for people."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from ramprig.bench import Bench
from ramprig.quantity import digits, format_current, format_duration, format_duty
from ramprig.session import Block, LinkHealth
from ramprig.session.limits import LimitTable
from ramprig.session.readings import Counters, Identity
from ramprig_link.words import LIMITS

from .live import Snapshot
from .statusline import segments
from .wording import limit_owner, limit_shown


def who_lines(identity: Identity) -> list[str]:
    """Which board answers."""
    caps = ", ".join(str(cap.name).lower() for cap in identity.caps) or "none"
    return [
        f"board {identity.board}, serial {identity.serial}, firmware {identity.firmware}, start number {identity.boot}",
        f"{identity.axes} axes, {identity.servos} servos, tick {identity.tick_us} us, "
        f"board's own ceiling {format_duty(identity.max_duty)}; can: {caps}",
    ]


def state_lines(snapshot: Snapshot) -> list[str]:
    """What the status line shows, one thing a line."""
    return segments(replace(snapshot, doing=""))


def limit_lines(bench: Bench, limits: LimitTable, tick_s: float, name: str) -> list[str]:
    """The limits in force on the board; of one motor or servo, or of all."""
    lines = []
    for (item, index), value in limits.values.items():
        limit = LIMITS[item]
        owner = limit_owner(bench, limit.per, index)
        if name in ("", owner):
            shown = limit_shown(value, limit.unit, tick_s)
            lines.append(f"{owner:10} {item:15} {shown:20} {limit.text}")
    return lines


def counter_lines(counters: Counters, health: LinkHealth) -> list[str]:
    """The counters of the link, on both ends."""
    return [
        f"board: {counters.lines} lines taken, {counters.garbled} garbled, {counters.overlong} overlong, "
        f"{counters.overrun} overruns, {counters.repeats} requests repeated",
        f"board: {counters.made} samples made, {counters.dropped} dropped, {counters.illegal_edges} illegal encoder "
        f"edges, worst tick {counters.worst_us} us",
        f"here: {health.dropped_lines} lines unreadable, {health.repeats} requests repeated, round trip "
        f"{format_duration(round(health.round_trip_median_s, 4))} (worst "
        f"{format_duration(round(health.round_trip_worst_s, 4))})",
    ]


def trail_lines(block: Block, axis: int, name: str, tick_s: float) -> list[str]:
    """What the fast record shows: how long it is, the greatest current and duty, and when."""
    current_ma = block.column("current_ma", axis)
    duty = block.column("duty", axis)
    at = int(np.argmax(np.abs(current_ma)))
    span_s = len(block) * block.layout.period_ticks * tick_s
    supply = block.column("supply_mv")
    return [
        f"{name}: {len(block)} records over {format_duration(round(span_s, 6))}, tick {int(block.ticks[0])} to "
        f"{int(block.ticks[-1])}",
        f"  greatest current {format_current(int(current_ma[at]) / 1000)} at tick {int(block.ticks[at])}, at a duty of "
        f"{format_duty(int(duty[at]))}",
        f"  duty from {format_duty(int(duty[0]))} to {format_duty(int(duty[-1]))}, supply "
        f"{digits(int(supply.min()) / 1000)} V to {digits(int(supply.max()) / 1000)} V",
    ]
