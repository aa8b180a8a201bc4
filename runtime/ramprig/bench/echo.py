"""What a bench file means, in lines that the user can check against the bench."""

from __future__ import annotations

from collections.abc import Iterable

from ramprig_link.words import LIMITS, Per

from ..quantity import digits, format_current, format_duration, format_duty, format_voltage
from .bench import Bench
from .limits import Setting
from .motor import EDGES_PER_LINE, Motor
from .servo import Servo


def echo_lines(bench: Bench, *, tick_us: int = 1000) -> list[str]:
    """One line a fact: conversions, limits as the board will hold them, defaults that the file left in force."""
    lines = [f"{bench.name}: {bench.port.url}, board {bench.board.name} {bench.board.serial or '(any serial)'}"]
    lines.append(f"supply: {format_voltage(bench.supply.voltage_v)}; {_supply(bench, tick_us)}")
    for motor in bench.motors:
        lines += _motor_lines(motor, tick_us)
    for servo in bench.servos:
        lines += _servo_lines(servo, tick_us)
    lines.append(_link(bench, tick_us))
    lines += _notes(bench, tick_us)
    lines += [
        f"{subject}: measured: {procedure}, {entry.date}, on {entry.board}, run {entry.run}"
        for subject, entries in bench.measured.items()
        for procedure, entry in entries.items()
    ]
    missing = bench.safety.missing()
    if missing:
        lines.append(f"safety: not said: {', '.join(missing)}")
    return lines


def _notes(bench: Bench, tick_us: int) -> list[str]:
    """What is allowed and yet worth a second look."""
    lines = []
    limits = bench.limits(tick_us=tick_us)
    stop_ticks, tick_s = limits["stop_ticks", 0], tick_us / 1e6
    for motor in bench.motors:
        fall_ticks = -(-limits["ceiling_duty", motor.axis] // limits["slew_down_duty", motor.axis])
        if fall_ticks > stop_ticks:
            lines.append(
                f"note: {motor.name} falls from its ceiling to zero in {format_duration(fall_ticks * tick_s)}, "
                f"but a stop is cut after {format_duration(stop_ticks * tick_s)}"
            )
    trips = {motor.name: motor.limits(tick_us)["trip_ma"] / 1000 for motor in bench.motors}
    fuse_a = bench.safety.fuse_a
    lines += [
        f"note: {name} trips at {format_current(trip_a)}, above the fuse of {format_current(fuse_a)}"
        for name, trip_a in trips.items()
        if fuse_a is not None and trip_a > fuse_a
    ]
    return lines + [line for servo in bench.servos for line in _beyond_ends(servo)]


def _beyond_ends(servo: Servo) -> list[str]:
    """A limit beyond an end stop of the model leads the horn against it, where the servo stalls."""
    model = servo.model
    if model is None:
        return []
    ends = ((servo.low_deg, model.stop_low_deg, -1), (servo.high_deg, model.stop_high_deg, 1))
    return [
        f"note: {servo.name} may be led to {digits(limit)} deg, past its end stop at {digits(stop)} deg"
        for limit, stop, way in ends
        if stop is not None and way * (limit - stop) > 0
    ]


def _supply(bench: Bench, tick_us: int) -> str:
    limits = bench.limits(tick_us=tick_us)
    under, over = limits["under_mv", 0], limits["over_mv", 0]
    for_s = limits["supply_ticks", 0] * tick_us / 1e6
    low = f"below {format_voltage(under / 1000)} or " if under else ""
    return f"trips {low}above {format_voltage(over / 1000)} for {format_duration(for_s)}"


def _link(bench: Bench, tick_us: int) -> str:
    stop_s = bench.limits(tick_us=tick_us)["stop_ticks", 0] * tick_us / 1e6
    lease = format_duration(bench.link.lease_ms / 1000)
    return (
        f"link: the board stops by itself after {lease} of silence, and is off {format_duration(stop_s)} later at most"
    )


def _motor_lines(motor: Motor, tick_us: int) -> list[str]:
    limits = motor.limits(tick_us)
    tick_s = tick_us / 1e6
    lines = [f"{motor.name}: {_encoder_line(motor)}"]
    lines.append(
        f"{motor.name}: duty up to {format_duty(limits['ceiling_duty'])}, "
        f"trips above {format_current(limits['trip_ma'] / 1000)} for {format_duration(limits['trip_ticks'] * tick_s)}, "
        f"{format_current(limits['rated_ma'] / 1000)} for ever"
    )
    lines += _rounded(motor.name, motor.settings.values(), tick_us)
    default = [
        name for name, limit in LIMITS.items() if limit.per is Per.AXIS and name not in (*motor.settings, "sense")
    ]
    if default:
        held = ", ".join(f"{name} {limits[name]}" for name in default)
        lines.append(f"{motor.name}: not said, so the default holds: {held}")
    return lines


def _encoder_line(motor: Motor) -> str:
    if motor.encoder is None:
        return "no encoder: no position, no speed, and reversals wait for the dwell alone"
    gear = f" x gear {digits(motor.gear_ratio, 6)}" if motor.encoder.on_motor_shaft else ""
    counts = digits(motor.counts_per_turn, 6)
    counting = "rising" if motor.encoder.sense > 0 else "falling"
    return (
        f"{motor.encoder.lines} lines x{EDGES_PER_LINE}{gear} = {counts} counts per output turn, "
        f"{counting} with positive duty"
    )


def _servo_lines(servo: Servo, tick_us: int) -> list[str]:
    limits = servo.limits(tick_us)
    line = (
        f"{servo.name}: {limits['pulse_min_us']} us to {limits['pulse_max_us']} us = "
        f"{digits(servo.low_deg)} deg to {digits(servo.high_deg)} deg, home {limits['pulse_home_us']} us = "
        f"{digits(servo.home_deg)} deg (angles are commanded, not measured)"
    )
    return [line, *_rounded(servo.name, servo.settings.values(), tick_us)]


def _rounded(name: str, settings: Iterable[Setting], tick_us: int) -> list[str]:
    """A line for each limit that the board holds in coarser steps than the file says."""
    held = ((setting, setting.carried_out(tick_us)) for setting in settings)
    return [f"{name}: {setting.item}: '{setting.text}' is held as {shown}" for setting, shown in held if shown]
