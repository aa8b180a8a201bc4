"""A hang-up means to the tests what it means at a terminal, also where they were begun with `nohup`.

That ignores hang-ups, which every process that a test starts would inherit; a handler that does nothing outlasts the
terminal just as well, and is not inherited.
"""

from __future__ import annotations

import signal
import sys

if sys.platform != "win32" and signal.getsignal(signal.SIGHUP) is signal.SIG_IGN:
    signal.signal(signal.SIGHUP, lambda number, frame: None)
