"""Why a trip or a lost link came, told in the shell at once, whether a log is being written or not.

The readings and events of the last while are kept. After a trip they are put, with the board's own trail, into a
passing run folder, from which the cause is told as for any run. Readings come some five times a second: between them
straight lines stand in for samples, which is good enough to see what turned and how fast, and never goes into a log.
"""

from __future__ import annotations

import dataclasses
import tempfile
from collections import deque
from collections.abc import Sequence
from pathlib import Path

from ramprig.bench import Bench
from ramprig.port.clock import Clock
from ramprig.sequence.rig import Rig
from ramprig.session import Block, Session
from ramprig.session import events as e
from ramprig.session.readings import Reading
from ramprig_link.words import STATE_BITS

READINGS_MAX = 300
"""About a minute at five readings a second."""
EVENTS_MAX = 400
STEP_TICKS = 10
"""Between two stand-ins for samples."""
_WRAP = 1 << 32


class Aftermath:
    """Keeps what was lately seen of one bench."""

    def __init__(self, bench: Bench, clock: Clock) -> None:
        self._bench = bench
        self._clock = clock
        self._readings: deque[Reading] = deque(maxlen=READINGS_MAX)
        self._events: deque[e.Event] = deque(maxlen=EVENTS_MAX)

    def forget(self) -> None:
        """The device is another, has been opened anew, or its trip was cleared."""
        self._readings.clear()
        self._events.clear()

    def take_reading(self, reading: Reading) -> None:
        """A reading; one that is not later than the last is left out."""
        if not self._readings or reading.tick > self._readings[-1].tick:
            self._readings.append(reading)

    def take_event(self, event: e.Event) -> None:
        """An event of the session."""
        self._events.append(event)

    def lines(self, session: Session, rig: Rig, *, verdict: str, reason: str, trail: Block | None) -> list[str]:
        """The likely cause, what speaks for it and the next step. Never raises.

        What has happened has been said before; whatever goes wrong in explaining it must not hide that.
        """
        try:
            with tempfile.TemporaryDirectory(prefix="ramprig-") as folder:
                return self._lines(Path(folder), session, rig, verdict=verdict, reason=reason, trail=trail)
        except Exception as error:  # also a bug of ours: the shell and its session go on
            return [f"the cause could not be looked for: {type(error).__name__}: {error}"]

    def _lines(
        self, folder: Path, session: Session, rig: Rig, *, verdict: str, reason: str, trail: Block | None
    ) -> list[str]:
        from ramprig.record.folder import InputFile, RunDescription, RunFolder
        from ramprig.record.manifest import Anchor, RunEnd
        from ramprig.record.recorder import Recorder
        from ramprig.report.explain import likely_lines
        from ramprig.sequence.columns import bench_columns

        until = self._end_tick(trail)
        block = self._block([one for one in self._readings if until is None or one.tick < until], rig, trail)
        first_tick = int(block.ticks[0]) if block is not None else 0
        description = RunDescription(
            name="aftermath",
            port="",
            identity=dataclasses.asdict(session.identity),
            inputs=[InputFile("bench", self._bench.file, self._bench.file_bytes)],
        )
        recorder = Recorder(
            RunFolder.create(folder, description, started_unix_s=self._clock.wall()),
            bench_columns(self._bench, tick_us=rig.tick_us),
            start=Anchor(first_tick, self._clock.now(), self._clock.wall()),
            tick_us=rig.tick_us,
            clock=self._clock,
            on_trouble=lambda trouble: None,
            threaded=False,
        )
        if block is not None:
            recorder.on_block(block)
        for event in self._events:
            recorder.on_event(event)
        if trail is not None:
            recorder.on_trail([trail])
        health = session.health
        end = RunEnd(
            verdict=verdict,
            stop_reason=reason,
            end=None,
            drift_ppm=None,
            accounts=(),
            link={"repeats": health.repeats, "dropped_lines": health.dropped_lines},
        )
        return likely_lines(recorder.finish(end))

    def _end_tick(self, trail: Block | None) -> int | None:
        """The tick of the trip; readings from then on show the bench at rest."""
        if any(isinstance(event, e.Restarted) for event in self._events):
            return None  # the ticks begin anew with it; the session reads no more before it is opened anew
        ticks = [event.tick for event in self._events if isinstance(event, e.Tripped) and event.tick is not None]
        if ticks:
            return ticks[-1]
        return None if trail is None else int(trail.ticks[-1])

    def _block(self, readings: Sequence[Reading], rig: Rig, trail: Block | None) -> Block | None:
        """The readings as samples STEP_TICKS apart up to the last of them, or up to where the trail begins."""
        import numpy as np

        from ramprig.session.blocks import Layout

        if len(readings) < 2:
            return None
        layout = Layout.of(rig.mask, STEP_TICKS)
        known = np.array([one.tick for one in readings], dtype=np.int64)
        ticks = np.arange(known[0], known[-1] + 1, STEP_TICKS, dtype=np.int64)
        values = np.zeros((len(ticks), len(layout.channels)), dtype=np.int32)
        for place, channel in enumerate(layout.channels):
            points = np.array([_value(one, channel.kind, channel.index) for one in readings], dtype=np.float64)
            if channel.kind == "counts":
                points = np.unwrap(points, period=_WRAP)
            line = np.round(np.interp(ticks, known, points)).astype(np.int64)
            values[:, place] = ((line + _WRAP // 2) % _WRAP - _WRAP // 2).astype(np.int32)
        ticks.setflags(write=False)
        values.setflags(write=False)
        return Block(ticks, values, layout)


def _value(reading: Reading, kind: str, index: int) -> int:
    """One channel of a reading, in the protocol's units."""
    match kind:
        case "duty":
            return reading.axes[index].duty
        case "counts":
            return reading.axes[index].counts
        case "current_ma":
            return reading.axes[index].current_ma
        case "pulse_us":
            return reading.pulses_us[index]
        case "supply_mv":
            return reading.supply_mv
        case "temperature_dc":
            return reading.temperature_dc
        case "state":
            return int(reading.state) << STATE_BITS["state"].low
        case _:
            return 0
