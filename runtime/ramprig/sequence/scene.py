"""How things stand at a moment of the plan: the compiler's picture of every motor and servo."""

from __future__ import annotations

from dataclasses import dataclass, field, replace

from .steps import AtZero


@dataclass(frozen=True, slots=True)
class MotorScene:
    """A motor's duty (1/10000), the sign it was driven with last (0: never), and what it does at zero."""

    duty: int = 0
    last_sign: int = 0
    rest: AtZero = AtZero.COAST


@dataclass(frozen=True, slots=True)
class ServoScene:
    """A servo's pulse in us; None while it has no pulses."""

    pulse_us: int | None = None


@dataclass(slots=True)
class Scene:
    """Motors and servos by name, the least time gone by in ticks, the marks that are set, the motors that have ramped.

    `elsewhere` are motors that another branch drives meanwhile: nothing can be said of them here.
    """

    motors: dict[str, MotorScene]
    servos: dict[str, ServoScene]
    elapsed: int = 0
    marks: frozenset[str] = frozenset()
    ramped: frozenset[str] = frozenset()
    elsewhere: frozenset[str] = field(default=frozenset())

    def copy(self) -> Scene:
        """An independent copy."""
        return replace(self, motors=dict(self.motors), servos=dict(self.servos))

    def same_outputs(self, other: Scene) -> bool:
        """Whether all motors and servos stand alike."""
        return self.motors == other.motors and self.servos == other.servos

    def key(self) -> tuple[object, ...]:
        """What the compilation of motions depends on, hashable."""
        return (*sorted(self.motors.items()), *sorted(self.servos.items(), key=lambda item: item[0]), self.elsewhere)

    def take_branches(self, branches: list[tuple[Scene, frozenset[str]]], begin: int) -> None:
        """Go on from where branches of the given names ended, the latest deciding on the time."""
        for scene, moved in branches:
            for name in moved & scene.motors.keys():
                self.motors[name] = scene.motors[name]
            for name in moved & scene.servos.keys():
                self.servos[name] = scene.servos[name]
            self.marks |= scene.marks
            self.ramped |= scene.ramped
        self.elapsed = max([begin, *(scene.elapsed for scene, _ in branches)])
