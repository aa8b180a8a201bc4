"""How an axis ages: friction, winding and brush resistance, and play that grow with the way its output has turned.

Wear in proportion to the way slid is Archard's law (J. Appl. Phys. 24 (1953) 981-988, cited from memory) at a constant
load. That friction and resistance follow it in proportion is this model's choice; a real motor's rates are INVENTED
here, and are to be found by its endurance test.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class Wear:
    """What a turn of the output shaft adds, or what it has added so far.

    `friction` and `resistance` are shares of the new motor's Coulomb and break-away torque and resistance at 20 degC;
    `play_rad` is lost motion at the output.
    """

    friction: float = 0.0
    resistance: float = 0.0
    play_rad: float = 0.0
