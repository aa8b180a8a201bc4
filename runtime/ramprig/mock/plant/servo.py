"""A hobby servo: turns towards its pulse at its slew rate, inside its end stops."""

from __future__ import annotations

from .parameters import ServoParameters


class Servo:
    """Follows `pulse_us`; with None, no pulse, it goes limp and stays where it is.

    `angle_deg` is where the horn is, `current_a` what it draws now: its idle, moving or stall current, the last when
    the pulse asks for more than an end stop lets it turn. A new pulse counts only when it asks for a move of at least
    the dead band. Without a pulse it draws nothing.
    """

    __slots__ = ("_degrees_per_tick", "_goal_deg", "_pulse_us", "angle_deg", "busy", "current_a", "parameters")

    def __init__(self, parameters: ServoParameters, *, tick_us: int = 1000, angle_deg: float = 0.0) -> None:
        self.parameters = parameters
        self._degrees_per_tick = parameters.slew_deg_s * tick_us * 1e-6
        self._pulse_us: float | None = None
        self._goal_deg = angle_deg
        self.angle_deg = min(max(angle_deg, parameters.stop_low_deg), parameters.stop_high_deg)
        self.busy = False
        self.current_a = 0.0

    @property
    def pulse_us(self) -> float | None:
        """The pulse it gets in each frame, None for none."""
        return self._pulse_us

    @pulse_us.setter
    def pulse_us(self, value: float | None) -> None:
        if value == self._pulse_us:
            return
        self._pulse_us = value
        self.busy = True
        if value is None:
            self._goal_deg = self.angle_deg
            return
        parameters = self.parameters
        goal_deg = (value - parameters.neutral_us) / parameters.us_per_deg
        # The dead band is about the angle it holds; once it moves, it goes all the way.
        if abs(goal_deg - self._goal_deg) * abs(parameters.us_per_deg) >= parameters.dead_band_us:
            self._goal_deg = goal_deg

    def step(self) -> None:
        """Advance one tick; does nothing once `busy` is False."""
        if not self.busy:
            return
        parameters = self.parameters
        away_deg = self._goal_deg - self.angle_deg
        move_deg = self._degrees_per_tick
        if abs(away_deg) <= move_deg:
            angle_deg = self._goal_deg
            self.current_a = 0.0 if self._pulse_us is None else parameters.idle_ma / 1000.0
            self.busy = False
        else:
            angle_deg = self.angle_deg + (move_deg if away_deg > 0.0 else -move_deg)
            self.current_a = parameters.moving_ma / 1000.0
        stopped_deg = min(max(angle_deg, parameters.stop_low_deg), parameters.stop_high_deg)
        if stopped_deg != angle_deg:
            self.current_a = parameters.stall_ma / 1000.0
            self.busy = False
        self.angle_deg = stopped_deg
