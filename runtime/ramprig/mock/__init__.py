"""A device in software: the controller a bench board must have, and the plant of motors and servos behind it.

`MockDevice` is the device, `MockPort` a port to one in the same process, `serve` (in `ramprig mock`) one to other
processes. Importing this room makes `open_port` know `mock:` texts.
"""

from .board import Board
from .controller import Controller
from .device import MockDevice
from .faults import FAULTS
from .inputs import Inputs, ScriptedInputs
from .limits import LimitStore
from .port import MockPort
from .schemes import register
from .setup import MockSetup
from .url import open_mock

register()

__all__ = [
    "FAULTS",
    "Board",
    "Controller",
    "Inputs",
    "LimitStore",
    "MockDevice",
    "MockPort",
    "MockSetup",
    "ScriptedInputs",
    "open_mock",
]
