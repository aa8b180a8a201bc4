"""The mock that a bench file describes: the one place where a bench becomes a board and a plant.

Limits are not preset: whoever opens the device writes them, as on a real board. A motor without a `model` gets no
invented figures; it is refused at its line.
"""

from __future__ import annotations

import math

from ramprig.bench import Bench, MockFault, Motor, MotorModel, Servo, ServoModel, SupplyModel
from ramprig.errors import UsageError

from .board import Board
from .faults import known, strength
from .plant import (
    VENT_BENCH,
    AxisParameters,
    BridgeParameters,
    EncoderParameters,
    MotorParameters,
    PlantParameters,
    SensorParameters,
    ServoParameters,
    SupplyParameters,
)
from .setup import MockSetup, TimedFault

SERIAL = "MOCK-0001"
"""What a mock calls itself where the bench takes any serial."""
SPARE = VENT_BENCH.axes[0]
"""What hangs on an axis that the bench leaves free: it cannot be driven, its ceiling being 0."""
STIFF_SUPPLY_OHM = 0.05
BUS_F = 1000e-6
"""A supply of which the bench says its voltage alone."""


def setup_of_bench(bench: Bench, *, faults: tuple[str, ...] = ()) -> MockSetup:
    """A mock of this bench, with its faults that hold from the start, and `faults` besides.

    Raises `FileError` at what the mock cannot be made from.
    """
    swapped = tuple(f"phases_swapped:{motor.axis}" for motor in bench.motors if motor.sense < 0)
    lasting = tuple(_fault_text(bench, fault) for fault in bench.mock.faults if not _is_timed(fault))
    timed = tuple(
        TimedFault(text=_fault_text(bench, fault), from_s=fault.from_s, until_s=fault.until_s)
        for fault in bench.mock.faults
        if _is_timed(fault)
    )
    return MockSetup(
        board=Board(
            board=bench.board.name,
            serial=bench.board.serial or SERIAL,
            axes=bench.axes,
            servos=bench.channels,
        ),
        plant=plant_of_bench(bench),
        baud=bench.port.baud,
        faults=(*swapped, *lasting, *faults),
        timed_faults=timed,
    )


def plant_of_bench(bench: Bench) -> PlantParameters:
    """The physics that the bench's models describe."""
    motors = {motor.axis: motor for motor in bench.motors}
    servos = {servo.channel: servo for servo in bench.servos}
    return PlantParameters(
        supply=_supply(bench),
        axes=tuple(_axis(motors[i]) if i in motors else SPARE for i in range(bench.axes)),
        servos=tuple(
            _servo(servos[i]) if i in servos else ServoParameters(name=f"servo{i}") for i in range(bench.channels)
        ),
    )


def check_faults(bench: Bench) -> None:
    """Raises `FileError` at the first of the bench's faults that the mock does not know, or not in that strength."""
    for fault in bench.mock.faults:
        _fault_text(bench, fault)


def _is_timed(fault: MockFault) -> bool:
    return bool(fault.from_s) or fault.until_s is not None


def _fault_text(bench: Bench, fault: MockFault) -> str:
    """The fault as the mock spells it: with `_`, and the axis of its motor."""
    spelt = fault.name.replace("-", "_")
    try:
        kind = known(spelt)
        amount = "" if fault.strength is None else f"={strength(kind, fault.strength):g}"
    except UsageError as error:
        raise fault.mark.error(str(error)) from error
    return (spelt if fault.motor is None else f"{spelt}:{bench.motor(fault.motor).axis}") + amount


def _supply(bench: Bench) -> SupplyParameters:
    model: SupplyModel | None = bench.supply.model
    if model is None:
        return SupplyParameters(volts=bench.supply.voltage_v, resistance_ohm=STIFF_SUPPLY_OHM, capacitance_f=BUS_F)
    return SupplyParameters(
        volts=bench.supply.voltage_v,
        resistance_ohm=model.resistance_ohm,
        capacitance_f=model.capacitance_f,
        can_sink=model.can_sink,
        ovp_v=model.shutdown_v,
        current_limit_a=model.current_limit_a,
        standby_ma=model.standby_ma,
    )


def _axis(motor: Motor) -> AxisParameters:
    model = motor.model
    if model is None:
        found = f"'{motor.name}' has no 'model'"
        raise motor.mark.error(found, "a mock of it needs resistance, inductance, constant and inertia there")
    encoder = motor.encoder
    return AxisParameters(
        name=motor.name,
        motor=_motor(model, float(motor.gear_ratio)),
        encoder=EncoderParameters(
            lines=1 if encoder is None else encoder.lines,
            on_output=encoder is not None and not encoder.on_motor_shaft,
        ),
        bridge=BridgeParameters(resistance_ohm=model.bridge_ohm, freewheel_drop_v=model.freewheel_v),
        sensor=_sensor(model),
    )


def _motor(model: MotorModel, gear_ratio: float) -> MotorParameters:
    usual = SPARE.motor  # for what warms up and how, which a bench need not say
    return MotorParameters(
        resistance_20_ohm=model.resistance_ohm,
        inductance_h=model.inductance_h,
        constant_vs=model.constant_vs,
        inertia_kgm2=model.inertia_kgm2,
        viscous_nms=model.viscous_nms,
        coulomb_nm=model.running_nm,
        static_nm=model.breakaway_nm,
        gear_ratio=gear_ratio,
        play_rad=model.play_deg * (math.pi / 180.0),
        output_friction_nm=model.output_friction_nm,
        thermal_resistance_k_w=_or(model.thermal_resistance_k_w, usual.thermal_resistance_k_w),
        thermal_time_s=_or(model.thermal_s, usual.thermal_time_s),
        ambient_c=_or(model.ambient_c, usual.ambient_c),
    )


def _or(said: float | None, usual: float) -> float:
    return usual if said is None else said


def _sensor(model: MotorModel) -> SensorParameters:
    return SensorParameters(
        offset_ma=model.sensor_offset_ma,
        noise_ma=model.sensor_noise_ma,
        step_ma=model.sensor_step_ma,
        range_ma=SensorParameters().range_ma if model.sensor_range_ma is None else model.sensor_range_ma,
    )


def _servo(servo: Servo) -> ServoParameters:
    model = servo.model or ServoModel(
        slew_deg_s=None,
        dead_band_us=None,
        stop_low_deg=None,
        stop_high_deg=None,
        idle_ma=0.0,
        moving_ma=0.0,
        stalled_ma=0.0,
    )
    usual = ServoParameters(name=servo.name)
    return ServoParameters(
        name=servo.name,
        neutral_us=float(servo.neutral_us),
        us_per_deg=float(servo.us_per_deg),
        slew_deg_s=_or(model.slew_deg_s, usual.slew_deg_s),
        dead_band_us=_or(model.dead_band_us, usual.dead_band_us),
        stop_low_deg=_or(model.stop_low_deg, usual.stop_low_deg),
        stop_high_deg=_or(model.stop_high_deg, usual.stop_high_deg),
        idle_ma=model.idle_ma,
        moving_ma=model.moving_ma,
        stall_ma=model.stalled_ma,
    )
