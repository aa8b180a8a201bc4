"""Stopping, confirmed: sent past every queue, acknowledged by the device, and seen in measured current and speed.

Until the device has acknowledged, nothing else is sent: any other request would renew the lease, and the lease is the
second way to a standstill.
"""

from __future__ import annotations

from dataclasses import dataclass

from ramprig.errors import LinkError, LinkLost, Refused
from ramprig.session.core import Core, StopMarks
from ramprig.session.events import StopJudged
from ramprig.session.readings import Reading
from ramprig_link.host import Answered
from ramprig_link.words import Cap, State

ACKNOWLEDGE_S = 1.0
"""A stop that is not acknowledged for so long is not confirmed."""
REPEAT_S = 0.1
"""A stop that is not acknowledged is sent again this often."""
STATE_S = 1.0
"""A state that is asked for and not told for so long is not known; a lost request is repeated twice in that time."""
POLL_S = 0.05
"""How often the state is asked for until all is off."""
OFF_MARGIN_S = 0.3
"""Outputs are off within the device's own stop time and this."""
RUN_DOWN_S = 5.0
"""A shaft may turn for so long after its outputs are off."""
QUIET_MA = 100
"""Within this of what was read at rest, a motor current has fallen; current sensors of small drives are so good."""
STILL_APART_S = 0.1
"""Two readings at least so far apart show whether the shaft turns."""
STILL_COUNTS = 2
"""Counts may differ by this much at rest; the device's own `still_counts` where it is larger."""

NOT_CONFIRMED = "NOT CONFIRMED: cut the power"


@dataclass(frozen=True, slots=True, kw_only=True)
class StopReport:
    """What is known of a stop: times in s after the first sending, None for what did not happen.

    `confirmed` needs the acknowledgement, outputs off by the device's word, and, on boards that measure them, current
    and speed fallen. `missing` says what is not there, `unmeasured` what the board cannot tell. `escalated`: a
    category 1 stop was not over in time, or category 0 was asked for meanwhile, and category 0 was sent.
    """

    category: int
    confirmed: bool
    missing: tuple[str, ...]
    unmeasured: tuple[str, ...]
    sendings: int
    escalated: bool
    acknowledged_s: float | None
    off_s: float | None
    quiet_s: float | None
    still_s: float | None

    @property
    def verdict(self) -> str:
        """`confirmed`, or NOT_CONFIRMED with what is missing."""
        return "confirmed" if self.confirmed else f"{NOT_CONFIRMED} ({'; '.join(self.missing)})"


class StopRun:
    """One stop from its sending to its verdict, on a core that is known or not, whose link works or not.

    Its category is the hardest that was asked for: each sending takes the place of one that is still on its way, so a
    softer one would undo a cut.
    """

    def __init__(self, core: Core, category: int, *, run_down_s: float) -> None:
        self._core = core
        self._category = category
        self._run_down_s = run_down_s
        self._begin_s = core.clock.now()
        self._sendings = 0
        self._escalated = False
        self._quiet_s: float | None = None
        self._still_s: float | None = None
        self._failure: str | None = None
        self._reading: Reading | None = None

    def run(self) -> StopReport:
        """Stop and judge; never raises for what the link or the device does, nor for what listeners raise meanwhile."""
        core = self._core
        core.stopping, core.deferred = True, None
        try:
            return self._run()
        finally:
            core.stopping = core.pump.panic_taken = False

    def _run(self) -> StopReport:
        core = self._core
        core.pump.panic_taken = True
        self._category = self._hardest(self._category)
        core.marks = StopMarks()
        core.pump.hush()
        core.forget_checks()
        try:
            self._acknowledge(self._category)
            if core.marks.acknowledged_s is not None:
                self._confirm()
        except (LinkLost, LinkError, Refused) as error:
            self._failure = str(error)
        report = self._report()
        core.pump.panic_taken = False
        core.pump.panic_category = None
        core.lease_ms = None
        core.pump.muted = not report.confirmed
        now_s = core.clock.now()
        core.tell(
            StopJudged(
                tick=core.ticks.latest,
                host_s=now_s,
                category=self._category,
                confirmed=report.confirmed,
                missing=report.missing,
            )
        )
        return report

    def _hardest(self, category: int) -> int:
        """This category, or a harder one that was asked for from elsewhere."""
        asked = self._core.pump.panic_category
        return category if asked is None else min(category, asked)

    def _acknowledge(self, category: int) -> None:
        """Send until the device has answered or told of the stop, for ACKNOWLEDGE_S at most."""
        core = self._core
        bound_s = core.clock.now() + ACKNOWLEDGE_S
        while core.marks.acknowledged_s is None and core.clock.now() < bound_s:
            category = self._hardest(category)
            self._escalated |= category < self._category
            core.pump.urgent_stop(category)
            self._sendings += 1
            until_s = min(core.clock.now() + REPEAT_S, bound_s)
            while core.marks.acknowledged_s is None and core.clock.now() < until_s:
                core.turn(until_s)

    def _confirm(self) -> None:
        """Ask for the state until outputs are off and current and speed have fallen, or the time for it is over."""
        core = self._core
        if core.known is None:
            self._failure = "the device is not known"
            return
        core.pump.muted = False
        off_bound_s = core.clock.now() + self._stop_time_s()
        still_bound_s = off_bound_s + self._run_down_s
        while True:
            reading = self._ask_state()
            if reading is None:
                return
            now_s = core.clock.now()
            if reading.outputs_off:
                if core.marks.off_s is None:
                    core.marks.off_s = now_s
                self._measure(reading, now_s)
                if self._quiet_s is not None and self._still_s is not None:
                    return
            elif now_s >= off_bound_s or reading.state is State.ARMED:
                if self._escalated:
                    return
                self._escalate()
                off_bound_s = core.clock.now() + OFF_MARGIN_S
            elif not self._escalated and self._hardest(self._category) < self._category:
                self._escalate()  # the cut that was asked for may not have been taken, or not have arrived
            if now_s >= still_bound_s:
                return
            core.work(now_s + POLL_S)

    def _ask_state(self) -> Reading | None:
        """The state, or None where no answer comes in STATE_S: a verdict must not wait for every repeat."""
        core = self._core
        box: list[Answered] = []
        core.pump.post("state", then=box.append)
        bound_s = core.clock.now() + STATE_S
        while not box and core.clock.now() < bound_s:
            core.turn(bound_s)
        if not box:
            core.pump.hush()
            self._failure = "the device does not answer"
            return None
        return core.take_state(box[0])

    def _escalate(self) -> None:
        core = self._core
        self._escalated = True
        core.marks = StopMarks(acknowledged_s=None, off_s=None)
        core.pump.hush()
        self._acknowledge(0)
        core.pump.muted = False

    def _stop_time_s(self) -> float:
        """How long the device may take until its outputs are off."""
        core = self._core
        if self._category == 0 or core.limits is None:
            return OFF_MARGIN_S
        return core.limits["stop_ticks", 0] * core.identity.tick_s + OFF_MARGIN_S

    def _measure(self, reading: Reading, now_s: float) -> None:
        core = self._core
        caps = core.identity.caps
        idle = core.idle_ma or (0,) * len(reading.axes)
        if Cap.CURRENT not in caps or all(
            abs(axis.current_ma - rest_ma) <= QUIET_MA for axis, rest_ma in zip(reading.axes, idle, strict=True)
        ):
            self._quiet_s = self._quiet_s or now_s
        else:
            self._quiet_s = None
        before = self._reading
        if Cap.ENCODER not in caps:
            self._still_s = self._still_s or now_s
        elif before is None:
            self._reading = reading
        elif (reading.tick - before.tick) * core.identity.tick_s >= STILL_APART_S:
            moved = self._moved(before, reading)
            self._still_s = None if any(moved) else now_s
            self._reading = reading

    def _moved(self, before: Reading, reading: Reading) -> list[bool]:
        limits = self._core.limits
        return [
            abs(_wrapped(axis.counts - earlier.counts)) > max(STILL_COUNTS, limits["still_counts", i] if limits else 0)
            for i, (earlier, axis) in enumerate(zip(before.axes, reading.axes, strict=True))
        ]

    def _report(self) -> StopReport:
        core, marks = self._core, self._core.marks
        caps = core.known.caps if core.known is not None else Cap(0)
        unmeasured = tuple(what for what, cap in (("current", Cap.CURRENT), ("speed", Cap.ENCODER)) if cap not in caps)
        missing: list[str] = []
        if marks.acknowledged_s is None:
            missing.append("the device did not acknowledge the stop")
        elif marks.off_s is None:
            missing.append("the device did not say that its outputs are off")
        else:
            if self._quiet_s is None:
                missing.append("the motor current has not fallen")
            if self._still_s is None:
                missing.append("the shaft has not come to rest")
        if self._failure is not None:
            missing.append(self._failure)
        return StopReport(
            category=self._category,
            confirmed=not missing,
            missing=tuple(missing),
            unmeasured=unmeasured,
            sendings=self._sendings,
            escalated=self._escalated,
            acknowledged_s=self._after(marks.acknowledged_s),
            off_s=self._after(marks.off_s),
            quiet_s=self._after(self._quiet_s),
            still_s=self._after(self._still_s),
        )

    def _after(self, at_s: float | None) -> float | None:
        return None if at_s is None else max(0.0, at_s - self._begin_s)


def _wrapped(difference: int) -> int:
    return (difference + 2**31) % 2**32 - 2**31
