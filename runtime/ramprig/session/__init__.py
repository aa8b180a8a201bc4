"""One device: typed operations, lease, limits, stop, clock fit and sample blocks.

`Session` is the way in; `Block` is what samples come as, and `events` has everything that can happen.
"""

from ramprig.session.blocks import Block, Layout
from ramprig.session.gaps import Accounting, Gap, GapReason
from ramprig.session.opening import Wanted
from ramprig.session.session import LinkHealth, Session
from ramprig.session.signals import StopOnSignals
from ramprig.session.stop import NOT_CONFIRMED, StopReport

__all__ = [
    "NOT_CONFIRMED",
    "Accounting",
    "Block",
    "Gap",
    "GapReason",
    "Layout",
    "LinkHealth",
    "Session",
    "StopOnSignals",
    "StopReport",
    "Wanted",
]
