"""The bench file: port, board, motors, servos, limits and safety as one frozen, checked `Bench`."""

from __future__ import annotations

from .bench import Bench, bench_of_text, load_bench
from .echo import echo_lines
from .limits import LimitKey, Setting
from .measured import MeasuredEntry, MeasuredValue
from .model import MotorModel, ServoModel, SupplyModel
from .motor import Encoder, Motor, duty_parts
from .schema import bench_schema
from .servo import Servo
from .station import (
    BoardIdentity,
    LinkTimes,
    LogDefaults,
    MockFault,
    MockSettings,
    PortChoice,
    Safety,
    Supply,
)

__all__ = [
    "Bench",
    "BoardIdentity",
    "Encoder",
    "LimitKey",
    "LinkTimes",
    "LogDefaults",
    "MeasuredEntry",
    "MeasuredValue",
    "MockFault",
    "MockSettings",
    "Motor",
    "MotorModel",
    "PortChoice",
    "Safety",
    "Servo",
    "ServoModel",
    "Setting",
    "Supply",
    "SupplyModel",
    "bench_of_text",
    "bench_schema",
    "duty_parts",
    "echo_lines",
    "load_bench",
]
