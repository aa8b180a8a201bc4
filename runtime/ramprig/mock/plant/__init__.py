"""The plant behind the mock: supply, H-bridges, brushed motors, encoders, current sensors and hobby servos.

`parameters` holds what a bench is made of, `Plant` steps it one tick at a time, `set_fault` breaks it on purpose.

Equations of one axis, SI units, the motor shaft's own speed `w` and current `i`:

    L di/dt = v - R i - K w                  R = R20 * (1 + 0.00393 * (T - 20)) + R_bridge
    J dw/dt = K i - b w - Tc*sign(w) - T_load
    at w = 0 the shaft sticks while |K i - T_load| <= Ts, the break-away torque, Ts >= Tc
    tau dT/dt = T_ambient - T + Rth * R * i^2

The bridge is averaged over a PWM period (sign-magnitude drive, continuous conduction): v = duty * bus, and the bus
carries duty * i. Ripple is not simulated; `ripple` has its formulas. At zero duty a braking bridge shorts the winding
(v = 0). A coasting one is off: the current runs down through the diodes against the bus, v = -sign(i) * (bus + drop),
then the circuit is open until the back EMF exceeds bus and drop together.

Between the motor's shaft and the output lies a gear, with play where a bench has it (`gear`). What wears with the way
turned is in `wear`.

Over a tick the equations are linear, so each tick is one multiplication by a matrix exponential made beforehand
(`flow`): exact however stiff the winding is. Where a tick is not linear from end to end (the shaft stops, breaks
away, or the current runs out), the instant is found by halving, to a 4096th of a tick (`axis`). The bus voltage is
constant over a tick and is solved for together with the currents it drives, so it settles however weak the supply.
"""

from .axis import Axis
from .faults import Ageing, PlantFault, set_fault, set_play, set_wear
from .gear import Gear
from .parameters import (
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
from .plant import Plant
from .sensors import CurrentSensor, Encoder, QuadratureDecoder
from .servo import Servo
from .supply import Supply
from .wear import Wear

__all__ = [
    "VENT_BENCH",
    "Ageing",
    "Axis",
    "AxisParameters",
    "BridgeParameters",
    "CurrentSensor",
    "Encoder",
    "EncoderParameters",
    "Gear",
    "MotorParameters",
    "Plant",
    "PlantFault",
    "PlantParameters",
    "QuadratureDecoder",
    "SensorParameters",
    "Servo",
    "ServoParameters",
    "Supply",
    "SupplyParameters",
    "Wear",
    "set_fault",
    "set_play",
    "set_wear",
]
