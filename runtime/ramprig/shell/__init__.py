"""The shell: one line at a time to a bench, with live status, jog by keys, and a stop that works at any moment.

`run_shell` is the way in. The files in the order to read them: `words` (with `forms`, `commands`, `completing`) is what
can be typed; `hold` is jog by keys; `keeper` keeps the session, `desk` (with `motions`, `logbook`, `running` and
`replies`) carries commands out on it, and `worker` is the one thread that does both; `live`, `statusline`, `wording`
and `outbox` are what comes back; `stopkeys`, `taps` and `screen` are the terminal, `plain` is the way without one.
"""

from __future__ import annotations

from .terminal import run_shell

__all__ = ["run_shell"]
