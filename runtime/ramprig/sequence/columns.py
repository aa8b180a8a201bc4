"""The columns of a bench's samples file: the one place where a bench becomes what the recorder writes."""

from __future__ import annotations

from ramprig.bench import Bench
from ramprig.record.columns import Columns, MotorColumns, ServoColumns, columns_of

COUNTS_PER_REV_WITHOUT_ENCODER = 1.0
"""In the place of a figure that is not used."""


def bench_columns(bench: Bench, *, tick_us: int) -> Columns:
    """The columns for every motor and servo, in the board's order."""
    motors = [
        MotorColumns(
            motor.name,
            motor.axis,
            float(motor.counts_per_turn) or COUNTS_PER_REV_WITHOUT_ENCODER,
            count_sign=-1 if motor.sense < 0 else 1,
            on_output=motor.encoder is not None and not motor.encoder.on_motor_shaft,
            has_encoder=motor.encoder is not None,
        )
        for motor in bench.motors
    ]
    servos = [
        ServoColumns(servo.name, servo.channel, float(servo.neutral_us), float(servo.us_per_deg))
        for servo in bench.servos
    ]
    return columns_of(motors, servos, tick_us=tick_us)
