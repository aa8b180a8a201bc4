"""What can be asked of the shell, typed: one frozen dataclass a command, its values already in the protocol's units."""

from __future__ import annotations

from dataclasses import dataclass

from ramprig.bench import Motor, Servo

from .hold import Hold


@dataclass(frozen=True, slots=True)
class Help:
    """Tell of all words, or of one."""

    word: str = ""


@dataclass(frozen=True, slots=True)
class Who:
    """Tell which device answers."""


@dataclass(frozen=True, slots=True)
class Arm:
    """Enable the outputs."""


@dataclass(frozen=True, slots=True)
class Disarm:
    """End in order: outputs off, refused while a bridge is not at zero."""


@dataclass(frozen=True, slots=True)
class JogHold:
    """Turn a motor while a key is held; `hold` is made by whoever reads the keys."""

    motor: Motor
    hold: Hold | None = None


@dataclass(frozen=True, slots=True)
class JogFor:
    """Turn a motor at `duty` (1/10000, signed) for a time, then fall to zero."""

    motor: Motor
    duty: int
    for_s: float


@dataclass(frozen=True, slots=True)
class RampTo:
    """Lead a motor's duty (1/10000, signed) to a value and leave it there; None: as fast as its slew allows."""

    motor: Motor
    duty: int
    in_s: float | None = None


@dataclass(frozen=True, slots=True)
class Release:
    """Let a motor fall to zero and rest there, coasting or braked."""

    motor: Motor
    brake: bool


@dataclass(frozen=True, slots=True)
class Move:
    """Lead a servo to an angle; None: as fast as its slew allows."""

    servo: Servo
    angle_deg: float
    in_s: float | None = None


@dataclass(frozen=True, slots=True)
class MoveOff:
    """Take a servo's pulses away."""

    servo: Servo


@dataclass(frozen=True, slots=True)
class Wait:
    """Let time pass before the next command."""

    for_s: float


@dataclass(frozen=True, slots=True)
class StopAll:
    """Stop everything with this category."""

    category: int


@dataclass(frozen=True, slots=True)
class Clear:
    """End the latch of a trip."""


@dataclass(frozen=True, slots=True)
class Why:
    """Tell of the last trip."""


@dataclass(frozen=True, slots=True)
class State:
    """Tell what the device does and measures."""


@dataclass(frozen=True, slots=True)
class Limits:
    """Tell the limits in force, of one motor or servo or of all."""

    name: str = ""


@dataclass(frozen=True, slots=True)
class LogStart:
    """Begin a run folder and write samples and events into it."""

    name: str = "shell"


@dataclass(frozen=True, slots=True)
class LogStop:
    """End the log and account for every sample."""


@dataclass(frozen=True, slots=True)
class Mark:
    """Write a marked tick into the log."""

    text: str


@dataclass(frozen=True, slots=True)
class Note:
    """Write a remark into the log."""

    text: str


@dataclass(frozen=True, slots=True)
class RunFile:
    """Run a sequence file."""

    file: str


@dataclass(frozen=True, slots=True)
class CheckFile:
    """Print a sequence file's plan; nothing moves."""

    file: str


@dataclass(frozen=True, slots=True)
class Trail:
    """Tell of the fast record around the last trip."""

    motor: Motor


@dataclass(frozen=True, slots=True)
class Counts:
    """Tell the device's and the host's counters of the link."""


@dataclass(frozen=True, slots=True)
class Reopen:
    """Open the device anew after a restart, a lost link or a stop that was not confirmed."""


@dataclass(frozen=True, slots=True)
class Leave:
    """End the shell with the outputs off."""


Command = (
    Help
    | Who
    | Arm
    | Disarm
    | JogHold
    | JogFor
    | RampTo
    | Release
    | Move
    | MoveOff
    | Wait
    | StopAll
    | Clear
    | Why
    | State
    | Limits
    | LogStart
    | LogStop
    | Mark
    | Note
    | RunFile
    | CheckFile
    | Trail
    | Counts
    | Reopen
    | Leave
)
"""Everything that can be typed."""

AT_ANY_TIME = (Mark, Note)
"""Carried out also while another command is under way."""
