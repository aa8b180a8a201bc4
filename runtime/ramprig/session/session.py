"""A session with one device: what a runner or a shell calls.

All calls but `panic` come from the thread that opened the session, and everything that waits is `pump`: whoever runs
something calls it at least every PUMP_GAP_S, because the lease is renewed nowhere else. The same code runs in real time
and, on a port with a virtual clock, in virtual time.
"""

from __future__ import annotations

import random
import statistics
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import TracebackType
from typing import TYPE_CHECKING, Self

import numpy as np

from ramprig.errors import LinkError, RamprigError, Refused, UsageError
from ramprig.port.base import Port
from ramprig.port.clock import Clock
from ramprig.session.blocks import Block, Layout, block_from
from ramprig.session.clockfit import ClockFit
from ramprig.session.core import Core, Latest, need_valid
from ramprig.session.events import Armed, Event, Tripped
from ramprig.session.gaps import Accounting, GapReason
from ramprig.session.limits import LimitKey, LimitTable
from ramprig.session.opening import Wanted, open_device, write_limits
from ramprig.session.readings import Counters, Identity, Reading, TripRecord, read_answer
from ramprig.session.stop import RUN_DOWN_S, StopReport, StopRun
from ramprig.session.ticks import wrapped
from ramprig_link.faults import SampleFault
from ramprig_link.host import RetryPolicy
from ramprig_link.samples import decode
from ramprig_link.words import Form, Rest, State

if TYPE_CHECKING:
    from ramprig.bench import Bench

TAIL_WAIT_S = 2.0
"""After a logging has ended, lost lines at its end are asked for during so long."""
LEAD_MARGIN_S = 0.02
"""An order starts at least this long after the slowest of the last round trips would have brought it."""
LEAD_S = 0.2
"""The usual lead of an order that is to start soon: the first repeat of a lost one still comes in time."""


@dataclass(frozen=True, slots=True)
class LinkHealth:
    """How the link fares: round trips in s of the last exchanges (0 before the first), and counts since the opening.

    `bytes_in` are all that came, those before the opening was over included.
    """

    round_trip_median_s: float
    round_trip_worst_s: float
    repeats: int
    dropped_lines: int
    unasked_lines: int
    worst_late_s: float
    bytes_in: int = 0


class Session:
    """One device. Make it with `Session.open`; as a context manager it ends with the outputs off and the port closed.

    Leaving it with an exception stops with category 1 first, confirmed. `last_stop` is the report of the last stop.
    """

    def __init__(self, core: Core) -> None:
        self._core = core
        self._wanted = Wanted()
        self.last_stop: StopReport | None = None

    @classmethod
    def open(
        cls,
        port: Port,
        *,
        wanted: Wanted | Bench | None = None,
        seed: int | None = None,
        retry: RetryPolicy | None = None,
        on_block: Callable[[Block], None] | None = None,
        on_event: Callable[[Event], None] | None = None,
    ) -> Session:
        """A session whose device is known, whose outputs are verified off and whose limits are the ones wanted.

        `wanted` may be a bench file as loaded; FileError where the board cannot keep what it says.
        `seed` makes the first tag, None draws it. The callbacks are called from inside the pump and must not call the
        session; what they raise leaves the pump. Raises LinkLost, WrongDevice, LinkError, Refused as `open_device`
        does; the port is then closed.
        """
        core = Core(port, chance=random.Random(seed), retry=retry, on_block=on_block, on_event=on_event)
        session = cls(core)
        if wanted is not None:
            session._wanted = wanted if isinstance(wanted, Wanted) else Wanted.of(wanted)
        try:
            open_device(core, session._wanted)
        except BaseException:
            port.close()
            raise
        return session

    def reopen(self) -> None:
        """Begin again on the same port after a restart or an unconfirmed stop; disarmed afterwards. As `open`."""
        self._core.invalidate()
        open_device(self._core, self._wanted)

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            if error is not None:
                self.stop(1)
            else:
                self.close()
        finally:
            self._core.pump.port.close()

    def close(self) -> None:
        """Outputs off, logging ended, port closed. A stop with category 1 where something still moves.

        After a stop that is not confirmed nothing more is sent.
        """
        core = self._core
        try:
            if core.pump.lost is not None:
                return
            if core.state is State.OFF:
                if self.logging and not core.pump.muted:
                    self.stop_log()
            else:
                self.stop(1)
        finally:
            core.pump.port.close()

    # ---- what is known -------------------------------------------------------------------------------------------

    @property
    def identity(self) -> Identity:
        """Who answers."""
        return self._core.identity

    @property
    def limits(self) -> LimitTable:
        """The limits in force, as read and written in this session."""
        if self._core.limits is None:
            raise LinkError("the limits have not been read")
        return self._core.limits

    @property
    def valid(self) -> bool:
        """Whether the device is still in the start it was opened in; if not, `reopen`."""
        return self._core.valid

    @property
    def armed(self) -> bool:
        """Whether the outputs are enabled, for all that is known."""
        return self._core.armed

    @property
    def trip(self) -> Tripped | None:
        """The last trip seen that was not cleared."""
        return self._core.trip

    @property
    def latest(self) -> Latest:
        """The newest reading and samples, for a status line."""
        return self._core.latest

    @property
    def health(self) -> LinkHealth:
        """How the link fares."""
        core = self._core
        returns_s = list(core.returns_s) or [0.0]
        return LinkHealth(
            round_trip_median_s=statistics.median(returns_s),
            round_trip_worst_s=max(returns_s),
            repeats=core.repeats,
            dropped_lines=core.dropped_lines,
            unasked_lines=core.sampling.unasked,
            worst_late_s=core.worst_late_s,
            bytes_in=core.pump.bytes_in,
        )

    @property
    def accounting(self) -> Accounting | None:
        """Where every sample of the present logging is, else of the last one; None before the first."""
        return self._core.sampling.accounting

    @property
    def logging(self) -> bool:
        """Whether a logging is under way, or lines of the last one are still awaited."""
        return not self._core.sampling.settled

    # ---- time ----------------------------------------------------------------------------------------------------

    @property
    def clock(self) -> Clock:
        """The port's clock, on which all host times of this session are."""
        return self._core.clock

    def clock_now(self) -> float:
        """The port's clock, in s."""
        return self._core.clock.now()

    @property
    def clock_fit(self) -> ClockFit | None:
        """The relation of device ticks and the port's clock."""
        fitter = self._core.fitter
        return fitter.fit if fitter is not None else None

    def _fit(self) -> ClockFit:
        fit = self.clock_fit
        if fit is None:
            self._core.request("beat")
            fit = self.clock_fit
        if fit is None:
            raise LinkError("the device's clock is not known: no answer came without a repeat yet")
        return fit

    def tick_now(self) -> int:
        """A tick the device has reached by now, never later than the truth; unwrapped."""
        fitter, now_s = self._core.fitter, self._core.clock.now()
        tick = fitter.tick_not_later(now_s) if fitter is not None else None
        return self._fit().tick_not_later(self._core.clock.now()) if tick is None else tick

    def start_in(self, lead_s: float = LEAD_S) -> int:
        """The tick at which an order sent now can start, `lead_s` from now or later where the link needs it.

        The least lead is twice the slowest of the last round trips (a beat may be under way) and LEAD_MARGIN_S.
        """
        fit = self._fit()
        needed_s = 2 * max(self._core.returns_s, default=0.0) + LEAD_MARGIN_S
        return fit.tick_not_earlier(self._core.clock.now()) + round(max(lead_s, needed_s) / fit.tick_s)

    def pump(self, until_s: float) -> None:
        """Work until this time of the port's clock, one turn at least: read, hand on, repeat, beat.

        Raises LinkLost, WrongDevice where another board answers, StoppedByUser after a panic, and what callbacks raise.
        """
        self._core.work(until_s)

    # ---- requests ------------------------------------------------------------------------------------------------

    def ask(self, word: str, *args: object) -> tuple[str, ...]:
        """The fields of the `ok` answer to a request of the protocol.

        Raises Refused for a `no`, UsageError for arguments that cannot be sent, otherwise as `pump`.
        """
        return self._core.request(word, *args).answer.fields

    def arm(self, lease_ms: int | None = None) -> None:
        """Enable the outputs under a lease, None: the longest the limits allow. Raises Refused, LinkError if not valid.

        From now on `pump` must be called at least every PUMP_GAP_S.
        """
        core = self._core
        need_valid(core)
        lease_ms = self.limits["lease_ms", 0] if lease_ms is None else lease_ms
        answered = core.request("arm", lease_ms, self.limits.digest)
        core.enabled(int(read_answer("arm", answered.answer.fields)[0]))
        tick = core.ticks.near(answered.answer.tick)
        core.tell(Armed(tick=tick, host_s=answered.received_s, lease_ms=lease_ms))

    def disarm(self) -> None:
        """The normal end: outputs off. Raises Refused (`moving`) while a bridge is not at zero."""
        self._core.request("disarm")
        self._core.enabled(None)

    def clear(self) -> None:
        """End the latch of a trip. Raises Refused while the cause persists."""
        self._core.request("clear")
        self._core.enabled(None)
        self._core.trip = None

    def why(self) -> TripRecord | None:
        """The last trip since the device's start; None where there was none."""
        return self._core.read_why()

    def state(self) -> Reading:
        """What the device does and measures now."""
        return self._core.read_state()

    def ramp(self, axis: int, duty: int, ticks: int, start_tick: int) -> int:
        """Order an axis's duty (1/10000) to move linearly over `ticks` from the unwrapped `start_tick` on.

        Returns the order's tag, which OrderDone names. Raises Refused.
        """
        return self._core.request("ramp", axis, duty, ticks, wrapped(start_tick)).request.tag

    def swing(self, servo: int, pulse_us: int, ticks: int, start_tick: int) -> int:
        """Order a servo's pulse (us, 0 = none) to move linearly over `ticks`. Returns the tag; raises Refused."""
        return self._core.request("swing", servo, pulse_us, ticks, wrapped(start_tick)).request.tag

    def rest(self, axis: int, mode: Rest, start_tick: int) -> int:
        """Order what an axis does at zero duty from `start_tick` on. Returns the tag; raises Refused."""
        return self._core.request("rest", axis, mode, wrapped(start_tick)).request.tag

    def read_limits(self) -> LimitTable:
        """Read all limits from the device anew."""
        self._core.limits = None
        write_limits(self._core, {})
        return self.limits

    def write_limits(self, wanted: Mapping[LimitKey, int]) -> None:
        """Set the limits that differ from `wanted`, each read back. Raises Refused, WrongDevice."""
        write_limits(self._core, wanted)

    def counters(self) -> Counters:
        """The device's counts since its start."""
        return Counters.read(self.ask("counters"))

    # ---- samples -------------------------------------------------------------------------------------------------

    def log(self, period_ticks: int, mask: int, form: Form = Form.PACKED) -> int:
        """Begin sampling the channels of `mask` every `period_ticks` (1 to 65535); the unwrapped tick of the first.

        A logging under way is ended first, as by `stop_log`: the device forgets its lines when a new one begins. Raises
        Refused, UsageError for a mask without a channel.
        """
        if self.logging:
            self.stop_log()
        try:
            layout = Layout.of(mask, period_ticks)
        except SampleFault as fault:
            raise UsageError(f"cannot log: {fault}") from fault
        first, _ = self._log(period_ticks, mask, form)
        first_tick = self._core.ticks.near(first)
        self._core.sampling.begin(first_tick, layout)
        return first_tick

    def stop_log(self) -> Accounting | None:
        """End sampling, get what was lost at the end as far as the device keeps it, and account for every sample."""
        core = self._core
        _, made = self._log(0, 0, Form.PACKED)
        core.sampling.ended_with(made)
        bound_s = core.clock.now() + TAIL_WAIT_S
        while self.logging and core.clock.now() < bound_s:
            core.turn(bound_s)
        core.sampling.abandon(GapReason.NOT_ARRIVED)
        return self.accounting

    def _log(self, period_ticks: int, mask: int, form: Form) -> tuple[int, int]:
        """First tick and samples made, as the device says; lines that come meanwhile are held back."""
        sampling = self._core.sampling
        sampling.hold()
        try:
            answered = self._core.request("log", period_ticks, mask, form)
        except RamprigError:
            sampling.resume()
            raise
        first, made = read_answer("log", answered.answer.fields)
        return int(first), int(made)

    def trail(self, axis: int) -> Block | None:
        """The fast record around the last trip, period 1, or None where there is none.

        Its channels are the axis's duty, counts and current, the supply and the state.
        Raises LinkError where a part of it cannot be read.
        """
        core = self._core
        parts: list[Block] = []
        have, total = 0, 1
        while have < total:
            try:
                answered = core.request("trail", axis, have)
            except Refused as refused:
                if refused.reason == "gone" and not parts:
                    return None
                raise
            count, payload = read_answer("trail", answered.answer.fields)
            try:
                sample = decode(str(payload))
            except SampleFault as fault:
                raise LinkError(f"record {have} of the trail cannot be read: {fault}") from fault
            parts.append(block_from(sample, core.ticks.near(sample.first_tick)))
            have, total = have + len(parts[-1]), int(count)
        return _joined(parts)

    # ---- stopping ------------------------------------------------------------------------------------------------

    def stop(self, category: int = 1, *, run_down_s: float = RUN_DOWN_S) -> StopReport:
        """Stop and wait until it is confirmed by the device and by measured current and speed, or is not.

        Never raises for what the device or the link does: read `report.confirmed`, and show `report.verdict`. A shaft
        may run down for `run_down_s`. Afterwards the session is disarmed; after a stop that is not confirmed it sends
        nothing more until `reopen`, so that the lease ends what still runs. What a callback raises meanwhile is raised
        when the stop is over; `last_stop` has the report then too.
        """
        core = self._core
        self.last_stop = StopRun(core, category, run_down_s=run_down_s).run()
        if core.deferred is not None:
            raise core.deferred
        return self.last_stop

    def panic(self, category: int = 1) -> bool:
        """Send a stop at once, past every queue; from any thread and from a signal handler.

        Beats cease with it, and the owner's next pump raises StoppedByUser; then `stop` confirms. Returns whether the
        system took the bytes.
        """
        return self._core.pump.urgent_stop(category)


def _joined(parts: list[Block]) -> Block:
    ticks = np.concatenate([part.ticks for part in parts])
    values = np.concatenate([part.values for part in parts])
    ticks.setflags(write=False)
    values.setflags(write=False)
    return Block(ticks, values, parts[0].layout)
