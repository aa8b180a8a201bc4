"""Optional figures of the physics: what a rehearsal predicts with and what the mock is made of.

All motor figures are referred to the motor's own shaft. Nothing here is sent to a device.
"""

from __future__ import annotations

from dataclasses import dataclass

from ..quantity import (
    ANGLE,
    ANGLE_RATE,
    CAPACITANCE,
    CURRENT,
    DURATION,
    INDUCTANCE,
    INERTIA,
    MOTOR_CONSTANT,
    PULSE,
    RESISTANCE,
    TEMPERATURE,
    THERMAL_RESISTANCE,
    TORQUE,
    VISCOUS,
    VOLTAGE,
    Quantity,
)
from ..yamlfile import BandShape, Fields, FlagShape, Key, QuantityShape, Record


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorModel:
    """A brushed permanent-magnet motor with its bridge and current sensor, on the motor's own shaft.

    `constant_vs` is the voltage constant in V s/rad and the torque constant in N m/A at once. `play_deg` and
    `output_friction_nm` alone are those of the output shaft. None: not said.
    """

    resistance_ohm: float
    inductance_h: float
    constant_vs: float
    inertia_kgm2: float
    viscous_nms: float
    running_nm: float
    breakaway_nm: float
    play_deg: float = 0.0
    output_friction_nm: float = 0.0
    thermal_resistance_k_w: float | None
    thermal_s: float | None
    ambient_c: float | None
    bridge_ohm: float
    freewheel_v: float
    sensor_offset_ma: float
    sensor_noise_ma: float
    sensor_range_ma: int | None
    sensor_step_ma: int


@dataclass(frozen=True, slots=True, kw_only=True)
class ServoModel:
    """How a hobby servo moves and what it draws; None: not said."""

    slew_deg_s: float | None
    dead_band_us: float | None
    stop_low_deg: float | None
    stop_high_deg: float | None
    idle_ma: float
    moving_ma: float
    stalled_ma: float


@dataclass(frozen=True, slots=True, kw_only=True)
class SupplyModel:
    """The supply's inner resistance, the capacitor on the bus, and what it does beyond its limits; None: never."""

    resistance_ohm: float
    capacitance_f: float
    can_sink: bool
    shutdown_v: float | None
    current_limit_a: float | None
    standby_ma: float


RESISTANCE_KEY = Key(
    "resistance", QuantityShape(RESISTANCE, least="1 mohm"), "of the winding at 20 degC", required=True
)
INDUCTANCE_KEY = Key("inductance", QuantityShape(INDUCTANCE, least="0.1 uH"), "of the winding", required=True)
CONSTANT = Key(
    "constant", QuantityShape(MOTOR_CONSTANT), "voltage and torque constant; rpm/V is taken too", required=True
)
INERTIA_KEY = Key("inertia", QuantityShape(INERTIA), "rotor, gear and load, at the motor's shaft", required=True)
VISCOUS_KEY = Key("viscous friction", QuantityShape(VISCOUS), "friction that grows with the speed")
RUNNING = Key("running friction", QuantityShape(TORQUE), "friction that does not depend on the speed")
BREAKAWAY = Key("breakaway friction", QuantityShape(TORQUE), "torque at which the shaft starts to turn")
PLAY = Key("play", QuantityShape(ANGLE, least="0 deg"), "lost motion of the gear at the output shaft, end to end")
OUTPUT_FRICTION = Key(
    "output friction", QuantityShape(TORQUE, least="0 N m"), "at the output shaft, behind the play of the gear"
)
HEAT = Key("thermal resistance", QuantityShape(THERMAL_RESISTANCE), "winding to ambient")
HEAT_TIME = Key("thermal time", QuantityShape(DURATION, least="1 s"), "time constant of the winding's temperature")
AMBIENT = Key("ambient", QuantityShape(TEMPERATURE), "temperature around the motor")
BRIDGE = Key("bridge resistance", QuantityShape(RESISTANCE), "of the two switches that conduct, together")
FREEWHEEL = Key("freewheel drop", QuantityShape(VOLTAGE, least="0 V"), "of the two diodes that conduct when coasting")
SENSOR_OFFSET = Key("sensor offset", QuantityShape(CURRENT), "what the current sensor shows at 0 A")
SENSOR_NOISE = Key("sensor noise", QuantityShape(CURRENT, least="0 A"), "of the current sensor, one sigma")
SENSOR_RANGE = Key("sensor range", QuantityShape(CURRENT, least="1 mA"), "where the current sensor saturates")
SENSOR_STEP = Key("sensor step", QuantityShape(CURRENT, least="1 mA"), "resolution of the current sensor")


def _to(value: Quantity | None, unit: str) -> float | None:
    return None if value is None else value.to(unit)


def _whole_ma(fields: Fields, key: Key[Quantity]) -> int | None:
    value = fields.get(key)
    return None if value is None else max(1, round(value.to("mA")))


def _motor_model(fields: Fields) -> MotorModel:
    running = _to(fields.get(RUNNING), "N m") or 0.0
    breakaway = _to(fields.get(BREAKAWAY), "N m")
    if breakaway is not None and breakaway < running:
        raise fields.error(BREAKAWAY, "the breakaway friction is below the running friction", "it is at least as great")
    for key in (CONSTANT, INERTIA_KEY):
        if fields[key].value == 0:
            raise fields.error(key, f"found '{fields[key]}'", "it must be greater than 0")
    return MotorModel(
        resistance_ohm=fields[RESISTANCE_KEY].to("ohm"),
        inductance_h=fields[INDUCTANCE_KEY].to("H"),
        constant_vs=fields[CONSTANT].to("V s/rad"),
        inertia_kgm2=fields[INERTIA_KEY].to("kg m2"),
        viscous_nms=_to(fields.get(VISCOUS_KEY), "N m s/rad") or 0.0,
        running_nm=running,
        breakaway_nm=running if breakaway is None else breakaway,
        play_deg=_to(fields.get(PLAY), "deg") or 0.0,
        output_friction_nm=_to(fields.get(OUTPUT_FRICTION), "N m") or 0.0,
        thermal_resistance_k_w=_to(fields.get(HEAT), "K/W"),
        thermal_s=_to(fields.get(HEAT_TIME), "s"),
        ambient_c=_to(fields.get(AMBIENT), "degC"),
        bridge_ohm=_to(fields.get(BRIDGE), "ohm") or 0.0,
        freewheel_v=_to(fields.get(FREEWHEEL), "V") or 0.0,
        sensor_offset_ma=_to(fields.get(SENSOR_OFFSET), "mA") or 0.0,
        sensor_noise_ma=_to(fields.get(SENSOR_NOISE), "mA") or 0.0,
        sensor_range_ma=_whole_ma(fields, SENSOR_RANGE),
        sensor_step_ma=_whole_ma(fields, SENSOR_STEP) or 1,
    )


MOTOR_MODEL = Record(
    (
        *(RESISTANCE_KEY, INDUCTANCE_KEY, CONSTANT, INERTIA_KEY, VISCOUS_KEY, RUNNING, BREAKAWAY, PLAY),
        *(OUTPUT_FRICTION, HEAT, HEAT_TIME, AMBIENT, BRIDGE, FREEWHEEL),
        *(SENSOR_OFFSET, SENSOR_NOISE, SENSOR_RANGE, SENSOR_STEP),
    ),
    _motor_model,
)

SERVO_SLEW = Key("slew", QuantityShape(ANGLE_RATE, least="1 deg/s"), "the fastest the servo turns")
DEAD_BAND = Key("dead band", QuantityShape(PULSE), "a change of pulse that it does not follow")
END_STOPS = Key("end stops", BandShape(ANGLE, ranges_only=True), "where the servo itself cannot turn further")
IDLE = Key("idle", QuantityShape(CURRENT, least="0 A"), "current at rest")
MOVING = Key("moving", QuantityShape(CURRENT, least="0 A"), "current while it turns")
STALLED = Key("stalled", QuantityShape(CURRENT, least="0 A"), "current against an end stop")


def _servo_model(fields: Fields) -> ServoModel:
    stops = fields.get(END_STOPS)
    return ServoModel(
        slew_deg_s=_to(fields.get(SERVO_SLEW), "deg/s"),
        dead_band_us=_to(fields.get(DEAD_BAND), "us"),
        stop_low_deg=None if stops is None or stops.low is None else float(stops.low),
        stop_high_deg=None if stops is None or stops.high is None else float(stops.high),
        idle_ma=_to(fields.get(IDLE), "mA") or 0.0,
        moving_ma=_to(fields.get(MOVING), "mA") or 0.0,
        stalled_ma=_to(fields.get(STALLED), "mA") or 0.0,
    )


SERVO_MODEL = Record((SERVO_SLEW, DEAD_BAND, END_STOPS, IDLE, MOVING, STALLED), _servo_model)

SUPPLY_RESISTANCE = Key(
    "resistance", QuantityShape(RESISTANCE, least="0.1 mohm"), "of the supply and its leads", required=True
)
SUPPLY_CAPACITANCE = Key("capacitance", QuantityShape(CAPACITANCE, least="1 uF"), "on the bus", required=True)
CAN_SINK = Key("can sink", FlagShape(), "whether current may flow back into the supply", default=False)
SHUTDOWN = Key("shuts down above", QuantityShape(VOLTAGE, least="0 V"), "overvoltage protection of the supply")
SUPPLY_LIMIT = Key("current limit", QuantityShape(CURRENT, least="1 mA"), "the most current it gives")
STANDBY = Key("standby", QuantityShape(CURRENT, least="0 A"), "what the board itself draws")


def _supply_model(fields: Fields) -> SupplyModel:
    return SupplyModel(
        resistance_ohm=fields[SUPPLY_RESISTANCE].to("ohm"),
        capacitance_f=fields[SUPPLY_CAPACITANCE].to("F"),
        can_sink=fields[CAN_SINK],
        shutdown_v=_to(fields.get(SHUTDOWN), "V"),
        current_limit_a=_to(fields.get(SUPPLY_LIMIT), "A"),
        standby_ma=_to(fields.get(STANDBY), "mA") or 0.0,
    )


SUPPLY_MODEL = Record((SUPPLY_RESISTANCE, SUPPLY_CAPACITANCE, CAN_SINK, SHUTDOWN, SUPPLY_LIMIT, STANDBY), _supply_model)
