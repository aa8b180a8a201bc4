"""The firmware core and the plant in C, in this process: what a rehearsal runs where the machine has a C compiler.

`open_core` opens a port to a board that runs `firmware_ref/core` (text `core:`), with the settings and faults of the
mock. The C parts are built when they are first asked for, and kept in the user's cache; `rehearsal_on` says whether
they can be.
"""

from .build import why_not
from .device import SimulatedDevice
from .url import CorePort, Rehearsal, open_core, rehearsal_on

__all__ = ["CorePort", "Rehearsal", "SimulatedDevice", "open_core", "rehearsal_on", "why_not"]
