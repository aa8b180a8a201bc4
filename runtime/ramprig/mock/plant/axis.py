"""One motor axis: bridge, winding, shaft and friction, stepped a tick at a time.

A tick is one of four motions: at rest, coasting open-circuit, stuck with the winding connected, or turning with it
connected. Each is one row product. A tick in which the motion changes (the shaft stops or breaks away, the current
runs out in the diodes) is handed to `_by_events`, which finds the instants by halving the tick.
"""

from __future__ import annotations

import math

from .flow import HALVINGS, UNITS, Rows, transitions
from .gear import Gear
from .parameters import DUTY_FULL, AxisParameters, copper_factor
from .wear import Wear

MOST_EVENTS = 16
"""Changes of motion followed within one tick; past them the shaft and current are stopped until the next."""

_DRIFT = 1e-3
_SPENT_A = 1e-9


class Axis:
    """The state of one axis, and the attributes by which a controller drives it and a test breaks it.

    Drive: `duty` in 1/10000, -10000 to 10000, and `brake`: at zero duty True shorts the winding, False leaves it open.
    State: `current_a`, `speed_rad_s`, `angle_rad` (motor shaft, unbounded), `winding_c`, and `mean_a`, the current's
    mean over the last tick.
    Settable while running: friction, resistance and load (`viscous_nms`, `coulomb_nm`, `static_nm`, `load_nm`,
    `resistance_20_ohm`), `leads_swapped` and `jammed`. `load_nm` is a constant torque at the output shaft, such as a
    weight's, against positive motion. `play_rad`, `clamped` and `stops_rad` are those of the `Gear` behind it, where
    `output_rad` is told. `wear` is what each turn of the output adds to friction, resistance and play.
    """

    __slots__ = (
        "_constant_vs",
        "_coulomb_nm",
        "_drop_now_v",
        "_drop_v",
        "_heat_a2",
        "_jammed",
        "_ladders",
        "_laden_nm",
        "_load_nm",
        "_open",
        "_per_duty",
        "_ratio",
        "_resistance_20_ohm",
        "_resistance_ohm",
        "_running_nm",
        "_static_nm",
        "_stick_nm",
        "_stuck",
        "_tick_s",
        "_turning",
        "_viscous_nms",
        "_wear",
        "_worn_at_rad",
        "angle_rad",
        "brake",
        "current_a",
        "duty",
        "free_a",
        "gear",
        "linked",
        "mean_a",
        "parameters",
        "restless",
        "siemens",
        "speed_rad_s",
        "surplus_a",
        "winding_c",
        "worn",
    )

    def __init__(self, parameters: AxisParameters, *, tick_us: int = 1000) -> None:
        motor = parameters.motor
        self.parameters = parameters
        self._tick_s = tick_us * 1e-6
        self.duty = 0
        self.brake = False
        self.current_a = 0.0
        self.mean_a = 0.0
        self.speed_rad_s = 0.0
        self.angle_rad = 0.0
        self._drop_now_v = 0.0
        self.winding_c = motor.ambient_c
        self.free_a = 0.0
        self.siemens = 0.0
        self.surplus_a = 0.0
        self._heat_a2 = 0.0
        self._ratio = 0.0
        self._constant_vs = motor.constant_vs
        self._drop_v = parameters.bridge.freewheel_drop_v
        self._resistance_20_ohm = motor.resistance_20_ohm
        self._viscous_nms = motor.viscous_nms
        self._coulomb_nm = motor.coulomb_nm
        self._static_nm = motor.static_nm
        self._laden_nm = 0.0
        self._jammed = False
        self.gear = Gear(motor.gear_ratio, play_rad=motor.play_rad, is_watched=parameters.encoder.on_output)
        self._wear: Wear | None = None
        self.worn = Wear()
        self._worn_at_rad = 0.0
        self._per_duty = 1.0 / DUTY_FULL
        self._rebuild()

    # ---- what may be changed while running -------------------------------------------------------------------------

    @property
    def resistance_20_ohm(self) -> float:
        """The winding's resistance at 20 degC, brushes included."""
        return self._resistance_20_ohm

    @resistance_20_ohm.setter
    def resistance_20_ohm(self, value: float) -> None:
        self._resistance_20_ohm = value
        self._rebuild()

    @property
    def viscous_nms(self) -> float:
        """Friction torque per speed."""
        return self._viscous_nms

    @viscous_nms.setter
    def viscous_nms(self, value: float) -> None:
        self._viscous_nms = value
        self._rebuild()

    @property
    def coulomb_nm(self) -> float:
        """Friction torque of the turning shaft, the same at every speed."""
        return self._coulomb_nm

    @coulomb_nm.setter
    def coulomb_nm(self, value: float) -> None:
        self._coulomb_nm = value
        self._static_nm = max(self._static_nm, value)
        self._hold()

    @property
    def static_nm(self) -> float:
        """Break-away torque; never below the Coulomb torque."""
        return self._static_nm

    @static_nm.setter
    def static_nm(self, value: float) -> None:
        self._static_nm = max(value, self._coulomb_nm)
        self._hold()

    @property
    def load_nm(self) -> float:
        """Constant torque at the output shaft against positive motion; it also turns a slack motor backwards."""
        return self._laden_nm * self.parameters.motor.gear_ratio

    @load_nm.setter
    def load_nm(self, value: float) -> None:
        self._laden_nm = value / self.parameters.motor.gear_ratio
        self._hold()

    @property
    def jammed(self) -> bool:
        """Whether the shaft is held fast; setting it stops the shaft at once."""
        return self._jammed

    @jammed.setter
    def jammed(self, value: bool) -> None:
        self._jammed = value
        if value:
            self.speed_rad_s = 0.0
        self._hold()

    @property
    def output_rad(self) -> float:
        """The output shaft's angle."""
        return self.gear.output_rad(self.angle_rad)

    @property
    def play_rad(self) -> float:
        """The gear's lost motion at the output, end to end."""
        return self.gear.settings[0]

    @play_rad.setter
    def play_rad(self, value: float) -> None:
        self.gear.set(value, *self.gear.settings[1:], self.angle_rad)
        self._hold()

    @property
    def clamped(self) -> bool:
        """Whether the output shaft is held fast where it stands."""
        return self.gear.settings[1]

    @clamped.setter
    def clamped(self, value: bool) -> None:
        self.gear.set(self.play_rad, value, self.stops_rad, self.angle_rad)
        self._hold()

    @property
    def stops_rad(self) -> tuple[float, float] | None:
        """Angles of the motor's shaft that it cannot pass, None for none."""
        return self.gear.settings[2]

    @stops_rad.setter
    def stops_rad(self, value: tuple[float, float] | None) -> None:
        self.gear.set(self.play_rad, self.clamped, value, self.angle_rad)
        self._hold()

    @property
    def wear(self) -> Wear:
        """What each turn of the output adds from now on; what it has added so far is in `worn`, and stays."""
        return self._wear or Wear()

    @wear.setter
    def wear(self, value: Wear) -> None:
        self._wear = None if value == Wear() else value
        self._worn_at_rad = self.angle_rad

    def turn_by_hand(self, radians: float) -> None:
        """Turn the motor's shaft from outside by this much; one that is jammed does not turn."""
        if not self._jammed:
            self.angle_rad += radians
            if self.gear.linked:
                self.follow()

    def follow(self) -> None:
        """Hold a shaft that has run into a stop, take the output along, and see what acts on the motor from now on.

        To be called after each tick of an axis whose gear is `linked`. A shaft does not bounce off its stop.
        """
        gear = self.gear
        was = gear.through, gear.pressed
        held_rad = gear.hold(self.angle_rad, self._constant_vs * self.current_a - self._load_nm)
        if held_rad != self.angle_rad:
            self.angle_rad = held_rad
            self.speed_rad_s = 0.0
        elif gear.pressed:
            self.speed_rad_s = 0.0
        laden_nm = self._laden_nm
        held = abs(laden_nm) * gear.ratio <= self.parameters.motor.output_friction_nm
        gear.carry(held_rad, self.speed_rad_s, self.current_a, 0.0 if held else math.copysign(1.0, laden_nm))
        if (gear.through, gear.pressed) != was:
            self._hold()

    @property
    def leads_swapped(self) -> bool:
        """Whether the motor is connected the wrong way round."""
        return self._per_duty < 0.0

    @leads_swapped.setter
    def leads_swapped(self, value: bool) -> None:
        self._per_duty = math.copysign(self._per_duty, -1.0 if value else 1.0)

    @property
    def bridge_current_a(self) -> float:
        """The current as the bridge's sensor sees it: positive flows the way a positive duty drives it."""
        return self.current_a if self._per_duty > 0.0 else -self.current_a

    def _hold(self) -> None:
        gear, motor = self.gear, self.parameters.motor
        self.linked = gear.linked  # looked at in every tick
        dragged_nm = motor.output_friction_nm / motor.gear_ratio if gear.through else 0.0
        self._load_nm = self._laden_nm if gear.through else 0.0
        self._running_nm = self._coulomb_nm + dragged_nm
        self._stick_nm = math.inf if self._jammed or gear.pressed else self._static_nm + dragged_nm
        self.restless = abs(self._load_nm) > self._stick_nm

    def _rebuild(self) -> None:
        """Make the rows anew for the resistance as it now is."""
        motor = self.parameters.motor
        ohm = self._resistance_20_ohm * copper_factor(self.winding_c) + self.parameters.bridge.resistance_ohm
        per_h = 1.0 / motor.inductance_h
        per_j = 1.0 / motor.inertia_kgm2
        constant = self._constant_vs
        self._resistance_ohm = ohm
        turning = transitions(
            (-ohm * per_h, -constant * per_h, constant * per_j, -self._viscous_nms * per_j), per_h, -per_j, self._tick_s
        )
        stuck = transitions((-ohm * per_h, 0.0, 0.0, 0.0), per_h, 0.0, self._tick_s)
        slack = transitions((0.0, 0.0, 0.0, -self._viscous_nms * per_j), 0.0, -per_j, self._tick_s)
        self._ladders = (turning, stuck, slack)
        self._turning = turning[0]
        self._stuck = stuck[0]
        self._open = slack[0]
        self._hold()

    # ---- one tick --------------------------------------------------------------------------------------------------

    def prepare(self, bus_v: float) -> float:
        """Return the ratio of motor to bus voltage for the coming tick, 0 when the bus does not drive the motor.

        With a ratio, the motor current's mean over the tick will be `free_a + siemens * ratio * bus`, and the bus
        carries ratio times that.
        """
        speed = self.speed_rad_s
        current = self.current_a
        if self.duty:
            self._drop_now_v = 0.0
            self._ratio = ratio = self.duty * self._per_duty
        else:
            self._ratio = ratio = 0.0 if self.brake else self._diodes(current, speed, bus_v)
            if not ratio:
                return 0.0
        if speed:
            rows = self._turning
            torque = self._load_nm + (self._running_nm if speed > 0.0 else -self._running_nm)
            self.free_a = rows[8] * current + rows[9] * speed + rows[11] * torque + rows[10] * self._drop_now_v
        else:
            rows = self._stuck
            self.free_a = rows[8] * current + rows[10] * self._drop_now_v
        self.siemens = rows[10]
        return ratio

    def _diodes(self, current: float, speed: float, bus_v: float) -> float:
        """Return the ratio with which a bridge that is off conducts through the whole tick, 0 if it does not."""
        facing_v = bus_v + self._drop_v
        if current:
            side = -1.0 if current > 0.0 else 1.0
            rows = self._turning if speed else self._stuck
            if (rows[0] * current + rows[1] * speed + rows[2] * side * facing_v) * side >= 0.0:
                return 0.0
        elif abs(speed) * self._constant_vs > facing_v:
            side = 1.0 if speed > 0.0 else -1.0
        else:
            return 0.0
        self._drop_now_v = side * self._drop_v
        return side

    def advance(self, bus_v: float) -> None:
        """Advance one tick at this bus voltage, after `prepare`.

        `surplus_a` is left at the mean bus current beyond what `prepare` foretold, for the next tick's balance.
        """
        ratio = self._ratio
        current = self.current_a
        speed = self.speed_rad_s
        off = not (self.duty or self.brake)
        if off and not ratio:
            if current or self.restless:
                self._by_events(bus_v)
                return
            self.mean_a = 0.0
            if speed:
                self._coast(speed, bus_v)
            return
        volts = ratio * bus_v + self._drop_now_v if ratio else 0.0
        if speed:
            torque = self._load_nm + (self._running_nm if speed > 0.0 else -self._running_nm)
            ii, iw, iv, it, wi, ww, wv, wt, mi, mw, mv, mt, ai, aw, av, at = self._turning
            then = ii * current + iw * speed + iv * volts + it * torque
            speed_then = wi * current + ww * speed + wv * volts + wt * torque
            if speed_then * speed <= 0.0 or (off and then * volts >= 0.0):
                self._by_events(bus_v)
                return
            self.angle_rad += ai * current + aw * speed + av * volts + at * torque
            self.speed_rad_s = speed_then
            mean = mi * current + mw * speed + mv * volts + mt * torque
        else:
            rows = self._stuck
            then = rows[0] * current + rows[2] * volts
            if abs(self._constant_vs * then - self._load_nm) > self._stick_nm or (off and then * volts >= 0.0):
                self._by_events(bus_v)
                return
            if not volts and -_SPENT_A < then < _SPENT_A:
                then = 0.0
            mean = rows[8] * current + rows[10] * volts
        self.current_a = then
        self.mean_a = mean
        self._heat_a2 += mean * mean

    def _coast(self, speed: float, bus_v: float) -> None:
        """Advance one tick with the circuit open and the shaft turning."""
        rows = self._open
        torque = self._load_nm + (self._running_nm if speed > 0.0 else -self._running_nm)
        then = rows[5] * speed + rows[7] * torque
        if then * speed <= 0.0:
            self._by_events(bus_v)
            return
        self.angle_rad += rows[13] * speed + rows[15] * torque
        self.speed_rad_s = then

    def _by_events(self, bus_v: float) -> None:
        """Advance one tick in which the motion changes, from one change to the next."""
        left = UNITS
        charge = 0.0
        drawn = 0.0
        off = not (self.duty or self.brake)
        for _ in range(MOST_EVENTS):
            ratio, volts = self._ratio, self._ratio * bus_v
            if off:
                ratio, volts = self._freewheel(bus_v)
            left_then, passed_a = self._glide(left, volts, off=off)
            charge += passed_a
            drawn += ratio * passed_a
            left = left_then
            if not left:
                break
        else:
            self.speed_rad_s = 0.0
            self.current_a = 0.0
        foretold_a = self.free_a + self.siemens * self._ratio * bus_v if self._ratio else 0.0
        self.mean_a = mean = charge / UNITS
        self.surplus_a += drawn / UNITS - self._ratio * foretold_a
        self._heat_a2 += mean * mean

    def _freewheel(self, bus_v: float) -> tuple[float, float]:
        """Return how a bridge that is off ties the motor to the bus now: the ratio and the motor's voltage."""
        facing_v = bus_v + self._drop_v
        if self.current_a:
            side = -1.0 if self.current_a > 0.0 else 1.0
        elif abs(self.speed_rad_s) * self._constant_vs > facing_v:
            side = 1.0 if self.speed_rad_s > 0.0 else -1.0
        else:
            return 0.0, 0.0
        return side, side * facing_v

    def _glide(self, left: int, volts: float, *, off: bool) -> tuple[int, float]:
        """Follow one motion until it changes or `left` units are over; return the units still left and the charge.

        The charge is in A times units. The longest step that holds no change is taken first, then ever shorter ones;
        a change that is then within one unit is made at that unit's end.
        """
        current = self.current_a
        speed = self.speed_rad_s
        push_nm = self._constant_vs * current - self._load_nm
        if speed:
            side = 1.0 if speed > 0.0 else -1.0
        elif abs(push_nm) > self._stick_nm:
            side = 1.0 if push_nm > 0.0 else -1.0
        else:
            side = 0.0
        open_circuit = off and not volts
        if open_circuit and not side:
            return 0, 0.0
        turning, stuck, slack = self._ladders
        ladder = slack if open_circuit else turning if side else stuck
        torque = self._load_nm + side * self._running_nm
        charge = 0.0
        for level in range(HALVINGS + 2):
            # One pass over the levels spells out `left` in binary, the last unit at its end being the change itself.
            last = level > HALVINGS
            size = 1 if last else UNITS >> level
            if size > left:
                continue
            rows = ladder[HALVINGS if last else level]
            then, speed_then, mean, turned = _apply(rows, current, speed, volts, torque)
            spent = off and not open_circuit and then * volts >= 0.0
            if side:
                halted = speed_then * side <= 0.0
                loose = False
            else:
                halted = False
                loose = abs(self._constant_vs * then - self._load_nm) > self._stick_nm
            if not last and (spent or halted or loose):
                continue
            current = 0.0 if spent else then
            speed = 0.0 if halted or not side else speed_then
            charge += mean * size
            self.angle_rad += turned
            left -= size
        self.current_a = current
        self.speed_rad_s = speed
        return left, charge

    def warm(self, ticks: int) -> None:
        """Let the winding take up the heat of the last `ticks` ticks, and give off what it gives off in them."""
        motor = self.parameters.motor
        if self._wear is not None:
            self._wear_on(self._wear)
        ohm = self._resistance_20_ohm * copper_factor(self.winding_c)
        final_c = motor.ambient_c + motor.thermal_resistance_k_w * ohm * self._heat_a2 / ticks
        self._heat_a2 = 0.0
        self.winding_c = final_c + (self.winding_c - final_c) * math.exp(-ticks * self._tick_s / motor.thermal_time_s)
        ohm = self._resistance_20_ohm * copper_factor(self.winding_c) + self.parameters.bridge.resistance_ohm
        if abs(ohm - self._resistance_ohm) > _DRIFT * self._resistance_ohm:
            self._rebuild()

    def _wear_on(self, wear: Wear) -> None:
        """Add the wear of the way turned since the last time; ways to and fro in between do not count."""
        turns = abs(self.angle_rad - self._worn_at_rad) / (math.tau * self.gear.ratio)
        self._worn_at_rad = self.angle_rad
        if not turns:
            return
        motor, worn = self.parameters.motor, self.worn
        self.worn = Wear(
            friction=worn.friction + wear.friction * turns,
            resistance=worn.resistance + wear.resistance * turns,
            play_rad=worn.play_rad + wear.play_rad * turns,
        )
        self._coulomb_nm += motor.coulomb_nm * wear.friction * turns
        self._static_nm += motor.static_nm * wear.friction * turns
        self._resistance_20_ohm += motor.resistance_20_ohm * wear.resistance * turns
        if wear.play_rad and not self.gear.linked:
            self.play_rad = wear.play_rad * turns
        elif wear.play_rad:
            self.gear.widen(wear.play_rad * turns)
        self._hold()


def _apply(rows: Rows, current: float, speed: float, volts: float, torque: float) -> tuple[float, float, float, float]:
    """Return current, speed, mean current and angle turned after a step."""
    ii, iw, iv, it, wi, ww, wv, wt, mi, mw, mv, mt, ai, aw, av, at = rows
    return (
        ii * current + iw * speed + iv * volts + it * torque,
        wi * current + ww * speed + wv * volts + wt * torque,
        mi * current + mw * speed + mv * volts + mt * torque,
        ai * current + aw * speed + av * volts + at * torque,
    )
