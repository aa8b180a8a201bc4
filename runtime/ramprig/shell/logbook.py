"""The shell's log: a run folder from `log start` to `log stop`, with samples, events, marks, notes and a trail."""

from __future__ import annotations

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from ramprig.bench import Bench
from ramprig.errors import UsageError
from ramprig.port.clock import Clock, VirtualClock
from ramprig.record.folder import InputFile, RunDescription, RunFolder
from ramprig.record.manifest import Anchor, RunEnd
from ramprig.record.recorder import Recorder
from ramprig.record.writer import Trouble, TroubleKind
from ramprig.sequence.columns import bench_columns
from ramprig.sequence.happened import Marked
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.rig import Rig
from ramprig.session import Block, Session
from ramprig.session.gaps import Accounting

DISK_PATIENCE_S = 2.0
"""A disk without progress for so long ends the outputs: what is not written down is not driven."""
PERIOD_TICKS_MAX = 65_535
LOGGED = "logged"
"""The verdict of a log that its user ended."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Noted:
    """The user wrote a remark."""

    text: str


class Logbook:
    """One log at a time. `demand_stop` is called, from any thread, when the disk is in such trouble that motion must
    end; it must not block.
    """

    def __init__(
        self, bench: Bench, runs: Path, listeners: Listeners, clock: Clock, *, demand_stop: Callable[[str], None]
    ) -> None:
        self._bench = bench
        self._runs = runs
        self._listeners = listeners
        self._clock = clock
        self._demand_stop = demand_stop
        self._recorder: Recorder | None = None
        self._rows = 0
        self._before: Accounting | None = None

    @property
    def open(self) -> bool:
        """Whether a log is being written."""
        return self._recorder is not None

    @property
    def short(self) -> str:
        """For the status line: rows so far, empty where no log is written."""
        return "" if self._recorder is None else f"{self._rows} rows"

    @property
    def stuck(self) -> bool:
        """Whether the disk has made no progress for too long."""
        return self._recorder is not None and self._recorder.liveness_s() > DISK_PATIENCE_S

    def tell_stuck(self) -> None:
        """Demand a stop because the disk makes no progress, each time anew, and have the log say so."""
        text = "the disk makes no progress"
        self._demand_stop(text)
        self._need().tell(Trouble(TroubleKind.DISK_STALLED, text))

    def start(self, session: Session, rig: Rig, name: str, port_name: str) -> Path:
        """Make the run folder and begin sampling; raises UsageError where a log is open, RecordError, Refused."""
        if self._recorder is not None:
            raise UsageError("a log is being written already; 'log stop' ends it")
        columns = bench_columns(self._bench, tick_us=rig.tick_us)
        description = RunDescription(
            name=name,
            port=port_name,
            identity=dataclasses.asdict(session.identity),
            inputs=[InputFile("bench", self._bench.file, self._bench.file_bytes)],
        )
        folder = RunFolder.create(self._runs, description, started_unix_s=self._clock.wall())
        period_ticks = round(self._bench.log.period_s * 1e6 / rig.tick_us)
        first_tick = session.log(max(1, min(PERIOD_TICKS_MAX, period_ticks)), rig.mask, self._bench.log.form)
        self._rows = 0
        self._recorder = Recorder(
            folder,
            columns,
            start=Anchor(first_tick, self._clock.now(), self._clock.wall()),
            tick_us=rig.tick_us,
            clock=self._clock,
            on_trouble=self._on_trouble,
            threaded=not isinstance(self._clock, VirtualClock),
        )
        self._listeners.add(on_block=self._on_block, on_event=self._recorder.on_event)
        return folder.path

    def stop(self, session: Session, *, reason: str, sampling: bool = True, verdict: str = LOGGED) -> str:
        """End sampling and the folder; the account in a sentence. `sampling` false: the device cannot be asked."""
        recorder = self._need()
        account = session.accounting
        try:
            if sampling:
                account = session.stop_log()
        finally:
            self._listeners.remove(on_block=self._on_block, on_event=recorder.on_event)
            self._recorder = None
            health = session.health
            path = recorder.finish(
                RunEnd(
                    verdict=verdict,
                    stop_reason=reason,
                    end=Anchor(session.tick_now(), self._clock.now(), self._clock.wall()) if sampling else None,
                    drift_ppm=None,
                    accounts=() if account is None else (account,),
                    link={"repeats": health.repeats, "dropped_lines": health.dropped_lines},
                )
            )
        if account is None:
            return f"the log is in {path}"
        return f"{account.received} of {account.expected} samples received, {account.lost} lost; the log is in {path}"

    def mark(self, tick: int, text: str) -> None:
        """Write a marked tick; raises UsageError where no log is open."""
        self._need().on_event(Marked(tick=tick, name=text))

    def note(self, text: str) -> None:
        """Write a remark; raises UsageError where no log is open."""
        self._need().on_event(Noted(text=text))

    def trail(self, block: Block) -> None:
        """Write the fast record around a trip, where a log is open."""
        if self._recorder is not None:
            self._recorder.on_trail([block])

    def _need(self) -> Recorder:
        if self._recorder is None:
            raise UsageError("no log is being written; 'log start' begins one")
        return self._recorder

    def _on_block(self, block: Block) -> None:
        self._rows += len(block)
        if self._recorder is not None:
            self._recorder.on_block(block)

    def _on_trouble(self, trouble: Trouble) -> None:
        if trouble.kind.demands_stop and trouble.kind is not TroubleKind.DISK_STALLED:  # for that one it was already
            self._demand_stop(trouble.text)
