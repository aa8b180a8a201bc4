"""The status lines under the input, and the prompt: pure text from a snapshot, cut to the terminal's width."""

from __future__ import annotations

from ramprig.quantity import digits, format_current, format_duration, format_voltage

from .live import MotorLive, ServoLive, Snapshot

LINES_MAX = 3
"""Most status lines; what does not fit is left out, with dots."""
GAP = "  |  "

PROMPTS = {"off": "off> ", "armed": "armed> ", "stopping": "stopping> ", "tripped": "TRIPPED> ", "opening": "opening> "}
"""What stands before the input in each state; any other state has its own name there."""


def prompt_of(snapshot: Snapshot) -> str:
    """The prompt: it tells the state by its text, never by colour alone."""
    return PROMPTS.get(snapshot.state, f"{snapshot.state}> ")


def motor_text(motor: MotorLive) -> str:
    """Such as `vent +20.0 %  12.3 rpm  350 mA  1.25 turns`."""
    parts = [f"{motor.name} {motor.duty / 100:+.1f} %"]
    if motor.rpm is not None:
        parts.append(f"{motor.rpm:.1f} rpm")
    if motor.current_ma is not None:
        parts.append(format_current(motor.current_ma / 1000))
    if motor.turns is not None:
        parts.append(f"{motor.turns:.2f} turns")
    return "  ".join(parts)


def servo_text(servo: ServoLive) -> str:
    """Such as `latch 20 deg commanded`, or `latch no pulses`."""
    if servo.degrees is None:
        return f"{servo.name} no pulses"
    return f"{servo.name} {digits(round(servo.degrees, 1))} deg commanded"


def segments(snapshot: Snapshot) -> list[str]:
    """What the lines are made of, the most important first."""
    found = [snapshot.state.upper() if snapshot.state in ("tripped", "no link") else snapshot.state]
    found += [motor_text(motor) for motor in snapshot.motors]
    found += [servo_text(servo) for servo in snapshot.servos]
    if snapshot.supply_mv is not None:
        found.append(f"supply {format_voltage(round(snapshot.supply_mv / 1000, 2))}")
    if snapshot.known:
        found.append(f"link {format_duration(round(snapshot.round_trip_s, 4))}, {snapshot.lost_lines} lines lost")
    if snapshot.log:
        found.append(f"log {snapshot.log}")
    found.append(f"last trip: {snapshot.last_trip or 'none'}")
    if snapshot.doing:
        found.append(f"doing: {snapshot.doing}")
    return found


def status_lines(snapshot: Snapshot, width: int) -> list[str]:
    """At most LINES_MAX lines of at most `width` characters, segments kept whole where they fit in a line."""
    lines: list[str] = []
    for segment in segments(snapshot):
        if lines and len(lines[-1]) + len(GAP) + len(segment) <= width:
            lines[-1] += GAP + segment
        else:
            lines.append(segment)
    cut = [_cut(line, width) for line in lines[:LINES_MAX]]
    if len(lines) > LINES_MAX:
        cut[-1] = _cut(cut[-1] + " ...", width)
    return cut


def _cut(line: str, width: int) -> str:
    if len(line) <= width:
        return line
    return line[: max(0, width - 3)] + "..."[: max(0, width)]
