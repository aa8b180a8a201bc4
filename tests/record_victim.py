"""Writes a run until it is killed or its disk is full, and says on standard output how far it is: for
test_record_crash.py.

    python record_victim.py ROOT BLOCKS [FILE_SIZE_LIMIT [VOLUME_ROWS]]        (0: no limit)

Lines: `folder PATH`, then for each block `rows HANDED WRITTEN SYNCED`; `stop KIND` when the motor is to be stopped;
`raised`; `end`.
"""

from __future__ import annotations

import os
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np

from ramprig.errors import RecordError
from ramprig.port.clock import SystemClock
from ramprig.record.folder import RunDescription, RunFolder
from ramprig.record.keeping import Keeping
from ramprig.record.manifest import Anchor, RunEnd
from ramprig.record.recorder import Recorder
from ramprig.record.volumes import VolumeLimits
from ramprig.record.writer import Trouble
from ramprig.session.events import GapFilled
from record_samples import TICK_US, blocks_of, vent_columns

SYNC_EVERY_S = 0.02  # more often than in earnest, so that a short test meets many syncs


def say(*words: object) -> None:
    os.write(1, (" ".join(map(str, words)) + "\n").encode())  # one call: two threads speak


def main() -> None:
    root, count = Path(sys.argv[1]), int(sys.argv[2])
    clock = SystemClock()
    folder = RunFolder.create(root, RunDescription(name="victim"), started_unix_s=clock.wall())
    start = Anchor(0, clock.now(), clock.wall())
    if len(sys.argv) > 3 and int(sys.argv[3]):
        import resource

        resource.setrlimit(resource.RLIMIT_FSIZE, (int(sys.argv[3]), resource.RLIM_INFINITY))

    def on_trouble(trouble: Trouble) -> None:
        say("stop", trouble.kind.value)

    recorder = Recorder(
        folder,
        vent_columns(),
        start=start,
        tick_us=TICK_US,
        clock=clock,
        on_trouble=on_trouble,
        sync_every_s=SYNC_EVERY_S,
        keeping=Keeping(volumes=VolumeLimits(rows=int(sys.argv[4]))) if len(sys.argv) > 4 else None,
    )
    say("folder", folder.path)
    pattern = blocks_of(50)[0]
    handed = 0
    try:
        for number in range(count):
            block = replace(pattern, ticks=np.asarray(pattern.ticks + 100 * number))
            recorder.on_block(block)
            handed += len(block)
            if number % 10 == 0:
                recorder.on_event(GapFilled(tick=int(block.ticks[0]), host_s=clock.now(), count=0))
            say("rows", handed, recorder._samples.written_rows, recorder._samples.synced_rows)
            if number % 64 == 63:
                recorder._writer._queue.join()  # stays below the bound of the queue, and lets the two race in between
    except RecordError:
        say("raised")
    recorder.finish(RunEnd(verdict="failed" if handed < 50 * count else "passed", stop_reason="the test's end"))
    say("end")


if __name__ == "__main__":
    main()
