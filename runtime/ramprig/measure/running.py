"""A procedure on a port from begin to end: its own limits on the device, run folder, findings; limits put back."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from contextlib import AbstractContextManager, nullcontext
from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol

from ramprig.bench import Bench
from ramprig.errors import LinkError, PackageMissing, Refused, StoppedByUser
from ramprig.port.base import Port
from ramprig.record.events import jsonable
from ramprig.record.manifest import RunEnd
from ramprig.record.recorder import Recorder
from ramprig.record.writer import Trouble
from ramprig.sequence.listeners import Listeners
from ramprig.sequence.running import Recorded, anchor, recording, wanted_of
from ramprig.session.session import Session

from .findings import Findings
from .lab import Bystander, Lab
from .plots import png
from .refusal import NotMeasurable

PUT_BACK_MAX = 3
"""So often are the limits put back where a stop is asked for meanwhile."""


class Procedure(Protocol):
    """Something that is measured: the limits it runs under, and what it does."""

    @property
    def name(self) -> str:
        """The word of the command line."""
        ...

    @property
    def subject(self) -> str:
        """The motor or servo, or "link"."""
        ...

    def bench(self, bench: Bench) -> Bench:
        """The bench with the procedure's own limits. Raises NotMeasurable for what it is not fit for."""
        ...

    def moves(self, bench: Bench) -> str:
        """What will move, and within which limits, in a sentence; empty where nothing does."""
        ...

    def carry_out(self, lab: Lab) -> Findings:
        """Do it. Raises NotMeasurable where the data do not carry numbers."""
        ...


@dataclass(frozen=True, slots=True, kw_only=True)
class MeasureWish:
    """How a procedure is written down: `runs` is the folder for run folders, None for none."""

    runs: Path | None = None
    settings: Mapping[str, object] = field(default_factory=dict)
    seed: int | None = None
    virtual: bool = False
    short_id: str | None = None
    pictures: bool = True


@dataclass(frozen=True, slots=True, kw_only=True)
class Measurement:
    """What was found, by which board, when, and where it is written down."""

    findings: Findings
    board: str
    unix_s: float
    folder: Path | None


def measure(
    procedure: Procedure,
    bench: Bench,
    port: Port,
    wish: MeasureWish,
    *,
    bystander: Bystander | None = None,
    tell: Callable[[str], None] = lambda text: None,
    progress: Callable[[str], None] = lambda text: None,
    guard: Callable[[Session], AbstractContextManager[object]] | None = None,
) -> Measurement:
    """Carry a procedure out on a port, which is closed at the end, and put the bench's own limits back on the device.

    Raises NotMeasurable, what opening the device raises, LinkLost and StoppedByUser; outputs are off in each case.
    """
    tight = procedure.bench(bench)
    listeners = Listeners()
    session = Session.open(
        port,
        wanted=wanted_of(tight),
        seed=wish.seed,
        on_block=listeners.on_block,
        on_event=listeners.on_event,
    )
    with session, guard(session) if guard is not None else nullcontext():
        run = _Run(procedure, tight, port, session, listeners, wish, tell)
        try:
            if session.trip is not None:
                raise NotMeasurable(
                    f"the device is still tripped from before ({session.trip.trip})",
                    wanted="see to its cause, and clear it in `ramprig shell`",
                )
            return run.whole(bystander=bystander, progress=progress)
        finally:
            _put_back(session, bench, tell)


def _put_back(session: Session, bench: Bench, tell: Callable[[str], None]) -> None:
    """The bench file's limits into the device again; where that fails the tighter ones stay, which is told."""
    identity = session.identity
    limits = bench.limits(
        tick_us=identity.tick_us, axes=identity.axes, servos=identity.servos, max_duty=identity.max_duty
    )
    for _ in range(PUT_BACK_MAX):
        stopped = session.last_stop
        # After a stop that is not confirmed nothing is sent: the lease must be free to end what still runs.
        if not session.valid or session.armed or not (stopped is None or stopped.confirmed):
            break
        try:
            session.write_limits(limits)
            return
        except StoppedByUser:  # asked for before this, or meanwhile: it is confirmed first
            session.stop(1)
        except (LinkError, Refused):
            break
    tell("The device keeps the tighter limits of this measurement until it is opened again.")


class _Run:
    """One procedure on an open session."""

    def __init__(
        self,
        procedure: Procedure,
        bench: Bench,
        port: Port,
        session: Session,
        listeners: Listeners,
        wish: MeasureWish,
        tell: Callable[[str], None],
    ) -> None:
        self.procedure = procedure
        self.bench = bench
        self.port = port
        self.session = session
        self.listeners = listeners
        self.wish = wish
        self.tell = tell

    def whole(self, *, bystander: Bystander | None, progress: Callable[[str], None]) -> Measurement:
        def lab(recorder: Recorder | None) -> Lab:
            return Lab(
                self.session,
                self.bench,
                clock=self.port.clock,
                listeners=self.listeners,
                recorder=recorder,
                bystander=bystander,
                tell=self.tell,
                progress=progress,
            )

        if self.wish.runs is None:
            return self._measurement(self.procedure.carry_out(lab(None)), None)
        what = Recorded(
            bench=self.bench,
            runs=self.wish.runs,
            name=f"measure {self.procedure.name} {self.procedure.subject}",
            port_name=self.port.name,
            settings=self.wish.settings,
            virtual=self.wish.virtual,
            short_id=self.wish.short_id,
        )
        troubles: list[Trouble] = []
        with recording(
            what, self.session, clock=self.port.clock, listeners=self.listeners, troubles=troubles
        ) as recorder:
            return self._recorded(lab(recorder), recorder)

    def _recorded(self, lab: Lab, recorder: Recorder) -> Measurement:
        try:
            findings = self.procedure.carry_out(lab)
        except NotMeasurable as refusal:
            recorder.finish(self._end(lab, "not measured", str(refusal), None))
            raise
        self._write(recorder, findings)
        verdict = "passed" if findings.good else "failed"
        folder = recorder.finish(self._end(lab, verdict, findings.sentence, findings))
        return self._measurement(findings, folder)

    def _measurement(self, findings: Findings, folder: Path | None) -> Measurement:
        name = self.session.identity.name
        return Measurement(findings=findings, board=name, unix_s=self.port.clock.wall(), folder=folder)

    def _write(self, recorder: Recorder, findings: Findings) -> None:
        """Result and pictures into the run folder."""
        text = json.dumps(findings.to_json(), ensure_ascii=False, allow_nan=False, indent=2) + "\n"
        files = {"result.json": text.encode()}
        try:
            if self.wish.pictures:
                files |= {f"{picture.name}.png": png(picture) for picture in findings.pictures}
        except PackageMissing as missing:
            self.tell(f"no plot: {missing}")
        for name, data in files.items():
            file = recorder.folder.new_file(name)
            try:
                file.append(data)
            finally:
                file.close()

    def _end(self, lab: Lab, verdict: str, sentence: str, findings: Findings | None) -> RunEnd:
        session = self.session
        known = session.valid
        fit = session.clock_fit if known else None
        health = jsonable(session.health)
        return RunEnd(
            verdict=verdict,
            stop_reason=sentence,
            end=anchor(session, self.port.clock) if known else None,
            drift_ppm=None if fit is None else fit.drift_ppm,
            accounts=tuple(lab.accounts),
            link=health if isinstance(health, dict) else {},
            results={} if findings is None else {"measured": findings.to_json()},
        )
