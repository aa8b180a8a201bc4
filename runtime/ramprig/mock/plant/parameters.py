"""What a simulated bench is made of: frozen parameters with their units, checked when made.

A value that cannot be (a negative resistance, a break-away torque below the running friction) raises
`ramprig.errors.FileError`, without a place: whoever read the value from a file adds it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from ramprig.errors import FileError

COPPER_PER_K = 0.00393
"""Temperature coefficient of copper's resistance at 20 degC (IEC 60028, from memory; NBS Handbook 100 agrees)."""

DUTY_FULL = 10_000
"""Full-scale duty: the link carries duty in 1/10000."""


def _check(owner: object, name: str, *, above: float | None = None, least: float | None = None) -> None:
    value = getattr(owner, name)
    what = f"{type(owner).__name__}.{name} is {value}"
    if not math.isfinite(value):
        raise FileError(what, wanted="it must be a finite number")
    if above is not None and not value > above:
        raise FileError(what, wanted=f"it must be greater than {above:g}")
    if least is not None and not value >= least:
        raise FileError(what, wanted=f"it must be at least {least:g}")


def copper_factor(celsius: float) -> float:
    """Return the resistance of copper at `celsius` as a multiple of that at 20 degC; never below 0.01."""
    return max(0.01, 1.0 + COPPER_PER_K * (celsius - 20.0))


@dataclass(frozen=True, slots=True, kw_only=True)
class MotorParameters:
    """A brushed permanent-magnet motor, everything referred to the motor's own shaft.

    `constant_vs` is both the voltage constant in V*s/rad and the torque constant in N*m/A. `static_nm` is the
    break-away torque, at least `coulomb_nm`. `gear_ratio` is motor turns per output turn; the gear is stiff, its
    losses belong into the friction and its inertia into `inertia_kgm2`. `play_rad` is its lost motion at the output,
    end to end; `output_friction_nm` is friction at the output shaft, felt by the motor only while it moves the output.
    """

    resistance_20_ohm: float
    inductance_h: float
    constant_vs: float
    inertia_kgm2: float
    viscous_nms: float = 0.0
    coulomb_nm: float = 0.0
    static_nm: float = 0.0
    thermal_resistance_k_w: float = 10.0
    thermal_time_s: float = 60.0
    ambient_c: float = 20.0
    gear_ratio: float = 1.0
    play_rad: float = 0.0
    output_friction_nm: float = 0.0

    def __post_init__(self) -> None:
        for name in ("resistance_20_ohm", "inductance_h", "constant_vs", "inertia_kgm2"):
            _check(self, name, above=0.0)
        for name in ("thermal_time_s", "gear_ratio"):
            _check(self, name, above=0.0)
        for name in ("viscous_nms", "coulomb_nm", "thermal_resistance_k_w", "play_rad", "output_friction_nm"):
            _check(self, name, least=0.0)
        _check(self, "static_nm", least=self.coulomb_nm)
        _check(self, "ambient_c", least=-200.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class BridgeParameters:
    """The H-bridge: its own resistance in series with the winding, and the drop of the two diodes that freewheel."""

    resistance_ohm: float = 0.0
    freewheel_drop_v: float = 1.4

    def __post_init__(self) -> None:
        _check(self, "resistance_ohm", least=0.0)
        _check(self, "freewheel_drop_v", least=0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class EncoderParameters:
    """A quadrature encoder on the motor's shaft, or with `on_output` on the output; every line gives four counts."""

    lines: int
    on_output: bool = False

    def __post_init__(self) -> None:
        _check(self, "lines", least=1)

    @property
    def counts_per_turn(self) -> int:
        """Counts in one turn of the shaft that it sits on."""
        return 4 * self.lines


@dataclass(frozen=True, slots=True, kw_only=True)
class SensorParameters:
    """The current sensor: it reads the signed motor current with an offset, noise (1 sigma), a range and steps."""

    offset_ma: float = 0.0
    noise_ma: float = 0.0
    range_ma: int = 20_000
    step_ma: int = 1

    def __post_init__(self) -> None:
        _check(self, "offset_ma")
        _check(self, "noise_ma", least=0.0)
        _check(self, "range_ma", least=1)
        _check(self, "step_ma", least=1)


@dataclass(frozen=True, slots=True, kw_only=True)
class AxisParameters:
    """One motor axis: bridge, motor, encoder, current sensor."""

    name: str
    motor: MotorParameters
    encoder: EncoderParameters
    bridge: BridgeParameters = BridgeParameters()
    sensor: SensorParameters = SensorParameters()


@dataclass(frozen=True, slots=True, kw_only=True)
class ServoParameters:
    """A hobby servo: `neutral_us` is 0 deg, each degree takes `us_per_deg` (negative if mounted the other way round).

    A change of pulse below `dead_band_us` does not move it. Currents are drawn from the same supply as the motors.
    """

    name: str
    neutral_us: float = 1500.0
    us_per_deg: float = 400.0 / 45.0
    slew_deg_s: float = 300.0
    dead_band_us: float = 4.0
    stop_low_deg: float = -60.0
    stop_high_deg: float = 60.0
    idle_ma: float = 0.0
    moving_ma: float = 0.0
    stall_ma: float = 0.0

    def __post_init__(self) -> None:
        _check(self, "neutral_us", above=0.0)
        _check(self, "slew_deg_s", above=0.0)
        for name in ("dead_band_us", "idle_ma", "moving_ma", "stall_ma"):
            _check(self, name, least=0.0)
        _check(self, "us_per_deg")
        if self.us_per_deg == 0.0:
            raise FileError("ServoParameters.us_per_deg is 0", wanted="it must differ from 0")
        _check(self, "stop_low_deg")
        _check(self, "stop_high_deg", above=self.stop_low_deg)


@dataclass(frozen=True, slots=True, kw_only=True)
class SupplyParameters:
    """A supply: an ideal voltage behind a resistance, feeding the bus capacitor.

    Unless it `can_sink`, no current runs back into it, and regeneration raises the bus. Above `ovp_v` it shuts down
    for good; at `current_limit_a` it holds that current. `standby_ma` is what the board itself always draws.
    """

    volts: float
    resistance_ohm: float
    capacitance_f: float
    can_sink: bool = False
    ovp_v: float | None = None
    current_limit_a: float | None = None
    standby_ma: float = 0.0

    def __post_init__(self) -> None:
        _check(self, "volts", least=0.0)
        _check(self, "resistance_ohm", above=0.0)
        _check(self, "capacitance_f", above=0.0)
        _check(self, "standby_ma", least=0.0)
        if self.ovp_v is not None:
            _check(self, "ovp_v", above=self.volts)
        if self.current_limit_a is not None:
            _check(self, "current_limit_a", above=0.0)


@dataclass(frozen=True, slots=True, kw_only=True)
class PlantParameters:
    """A whole bench: one supply and bus, its motor axes and its servos, in the order the board numbers them."""

    supply: SupplyParameters
    axes: tuple[AxisParameters, ...]
    servos: tuple[ServoParameters, ...] = ()


VENT_BENCH = PlantParameters(
    supply=SupplyParameters(
        volts=12.0,
        resistance_ohm=0.15,
        capacitance_f=1000e-6,
        ovp_v=16.0,
        current_limit_a=10.0,
        standby_ma=35.0,
    ),
    axes=(
        AxisParameters(
            name="vent",
            motor=MotorParameters(
                resistance_20_ohm=2.4,
                inductance_h=1.2e-3,
                constant_vs=0.0195,
                inertia_kgm2=6.0e-6,
                viscous_nms=8.0e-7,
                coulomb_nm=1.5e-3,
                static_nm=2.2e-3,
                thermal_resistance_k_w=14.0,
                thermal_time_s=90.0,
                ambient_c=22.0,
                gear_ratio=90.0,
            ),
            encoder=EncoderParameters(lines=16),
            bridge=BridgeParameters(resistance_ohm=0.10, freewheel_drop_v=1.4),
            sensor=SensorParameters(offset_ma=4.0, noise_ma=6.0, range_ma=12_000, step_ma=2),
        ),
    ),
    servos=(
        ServoParameters(
            name="latch",
            slew_deg_s=300.0,
            dead_band_us=5.0,
            stop_low_deg=-55.0,
            stop_high_deg=55.0,
            idle_ma=8.0,
            moving_ma=160.0,
            stall_ma=700.0,
        ),
    ),
)
"""The bench of the examples: a greenhouse roof-vent drive `vent` and the servo `latch`. Every figure is INVENTED."""
