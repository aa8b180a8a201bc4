"""What lies between the motor's shaft and the output: the gear's play, and stops that the shafts cannot pass.

The dead-zone model of backlash: with theta_m and theta_o the angles of motor and output, N the gear ratio and a half
the play, the gear hands on the torque

    T = k D(theta_m / N - theta_o)      D(x) = x - a for x > a, x + a for x < -a, 0 between

(the common form, as in Nordin and Gutman's survey, Automatica 38 (2002) 1633-1649; cited from memory). Here in its
limit for a stiff gear and an output whose inertia is nothing beside its friction, the play operator:

    in the play:        T = 0, the output stands, held by its own friction
    at the flank s:     theta_o = theta_m / N - s a; the output's friction and load act on the motor

A load beyond the output's friction, such as a weight's, keeps the output at the flank that it presses. Which flank the
motor presses is decided at each tick's end for the tick that follows; the gear does not wind up, nor rebound.
"""

from __future__ import annotations

import math


class Gear:
    """Play and stops of one axis, and where its output stands.

    `play_rad` is the lost motion at the output, end to end. `stops_rad`, None for none, are angles of the motor's shaft
    that it cannot pass; `clamped` holds the output fast, so that the play is all that the motor can turn. `linked` says
    that any of them, or an encoder on the output, asks for `follow` after each tick; else the output is simply geared.
    """

    __slots__ = ("_output_rad", "flank", "is_watched", "linked", "pressed", "ratio", "settings", "through")

    def __init__(self, ratio: float, *, play_rad: float, is_watched: bool) -> None:
        """`is_watched`: there is an encoder on the output."""
        self.ratio = ratio
        self.is_watched = is_watched
        self.settings: tuple[float, bool, tuple[float, float] | None] = (play_rad, False, None)
        self.linked = bool(play_rad) or is_watched
        self.flank = 0.0
        self.through = not play_rad
        self.pressed = False
        self._output_rad = 0.0

    def set(self, play_rad: float, clamped: bool, stops_rad: tuple[float, float] | None, angle_rad: float) -> None:
        """Take over new settings, with the motor's shaft at this angle."""
        if not self.linked:
            self._output_rad = angle_rad / self.ratio
        self.settings = (play_rad, clamped, stops_rad)
        self.linked = bool(play_rad) or clamped or self.is_watched or stops_rad is not None
        self.through = not (play_rad or clamped)
        self.flank = 0.0
        self.pressed = False

    def widen(self, more_rad: float) -> None:
        """Let the play grow by this much; an output at its flank falls back by as much as is missing there."""
        play_rad, clamped, stops_rad = self.settings
        self.settings = (play_rad + more_rad, clamped, stops_rad)
        self._output_rad -= self.flank * more_rad / 2.0

    def output_rad(self, angle_rad: float) -> float:
        """The output's angle, with the motor's shaft at this one."""
        return self._output_rad if self.linked else angle_rad / self.ratio

    def hold(self, angle_rad: float, push_nm: float) -> float:
        """Return the angle to which stops hold a motor's shaft that wants to be at `angle_rad`, and note `pressed`.

        Where stops and a clamped output leave no room, the shaft is held fast at the upper one.
        """
        play_rad, clamped, stops_rad = self.settings
        low, high = (-math.inf, math.inf) if stops_rad is None else stops_rad
        if clamped:
            low = max(low, self.ratio * (self._output_rad - play_rad / 2.0))
            high = min(high, self.ratio * (self._output_rad + play_rad / 2.0))
        held_rad = min(max(angle_rad, low), high)
        self.pressed = (held_rad >= high and push_nm > 0.0) or (held_rad <= low and push_nm < 0.0)
        return held_rad

    def carry(self, angle_rad: float, speed_rad_s: float, current_a: float, weight: float) -> None:
        """Take the output along, and note whether its torques act `through` the gear.

        `weight` is the sign of a load that the output's friction cannot hold, else 0.
        """
        play_rad, clamped, _ = self.settings
        if clamped:
            self.through = False
            return
        geared_rad = angle_rad / self.ratio
        if not play_rad:
            self._output_rad = geared_rad
            self.through = True
            return
        half_rad = play_rad / 2.0
        ahead_rad = geared_rad - self._output_rad
        if weight:
            self.flank = weight
        elif ahead_rad >= half_rad:
            self.flank = 1.0
        elif ahead_rad <= -half_rad:
            self.flank = -1.0
        elif speed_rad_s:
            self.flank = 0.0
        if weight or not -half_rad < ahead_rad < half_rad:
            self._output_rad = geared_rad - self.flank * half_rad
        self.through = bool(weight) or self.flank * (speed_rad_s or current_a) > 0.0
