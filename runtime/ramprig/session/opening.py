"""Opening a session: the state of the device is unknown, so its outputs are off before anything else is believed.

In order: wait for quiet (a boot banner, garbage, lines of an earlier host); `who` until two answers agree (the first
may come from the device's memory of an earlier host); `stop 0`; `log 0`; `state` until nothing is switched on; the
identity and the limits against the bench file; the trip that may be latched. Nothing is armed here, no latch cleared.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING

from ramprig.errors import LinkError, LinkLost, Refused, WrongDevice
from ramprig.port.base import at_port
from ramprig.session.core import IDLE_BEAT_S, Core
from ramprig.session.events import LimitWritten, Opened
from ramprig.session.limits import LimitKey, LimitTable, limit_keys
from ramprig.session.readings import Identity, Reading, read_answer
from ramprig.session.sampling import Sampling
from ramprig_link.faults import LinkSilent
from ramprig_link.words import VERSION, Reason, Trip

if TYPE_CHECKING:
    from ramprig.bench import Bench

QUIET_S = 0.12
"""The line is quiet when nothing came for so long."""
QUIET_BOUND_S = 1.0
"""A device that logs is never quiet: after so long it is asked all the same."""
WHO_TRIES = 6
"""So many `who` are asked until two in a row agree."""
SILENCES_MAX = 2
"""So many times may every repeat of `who` go unanswered: a board that boots is deaf for seconds."""
OFF_BOUND_S = 2.0
"""Outputs are off within this time of `stop 0`, or the device is not opened."""
STILL_APART_S = 0.1
"""Two readings so far apart with the same counts are a shaft at rest."""
STILL_BOUND_S = 1.0
"""A shaft that still turns after so long is told of, and the currents are read all the same."""
STILL_COUNTS = 2
"""Counts may differ by this much at rest."""


def _nothing(identity: Identity) -> Mapping[LimitKey, int]:
    return {}


@dataclass(frozen=True, slots=True, kw_only=True)
class Wanted:
    """What is expected of the device: None and 0 ask for nothing.

    `axes` and `servos` are how many it must have at least. `limits` gives, for the board that answered, the values that
    are to be in force; those that differ are written.
    """

    board: str | None = None
    serial: str | None = None
    axes: int = 0
    servos: int = 0
    limits: Callable[[Identity], Mapping[LimitKey, int]] = _nothing

    @classmethod
    def of(cls, bench: Bench) -> Wanted:
        """What a bench file says: its board, and every limit of the board that answers."""

        def limits(identity: Identity) -> Mapping[LimitKey, int]:
            return bench.limits(
                tick_us=identity.tick_us, axes=identity.axes, servos=identity.servos, max_duty=identity.max_duty
            )

        board = bench.board
        return cls(board=board.name, serial=board.serial, axes=bench.axes, servos=bench.channels, limits=limits)


def open_device(core: Core, wanted: Wanted) -> None:
    """Bring the core from knowing nothing to a known device with its outputs verified off and the limits wanted.

    Raises LinkLost where nothing answers, WrongDevice where another device does, LinkError where the outputs could not
    be verified off.
    """
    core.pump.beat_s = None
    core.pump.speak()
    _wait_for_quiet(core)
    identity = _who(core)
    core.known = identity
    core.sampling = Sampling(identity.keep, core.deliver)
    core.new_clocks(identity.tick_s)
    reading = _outputs_off(core)
    _compare(identity, wanted)
    _at_rest(core, reading)
    core.limits = _read_limits(core, identity)
    write_limits(core, wanted.limits(identity))
    core.valid = True
    core.pump.beat_s = IDLE_BEAT_S
    core.tell(
        Opened(
            tick=core.ticks.latest,
            host_s=core.clock.now(),
            firmware=identity.firmware,
            board=identity.board,
            serial=identity.serial,
            boot=identity.boot,
            limits_digest=core.limits.digest,
        )
    )
    core.meet_trip(latched=reading.trip is not Trip.NONE)


def _wait_for_quiet(core: Core) -> None:
    """What comes meanwhile is counted as dropped or passed over: the device is not known yet."""
    bound_s = core.clock.now() + QUIET_BOUND_S
    while core.clock.now() < bound_s:
        before = core.pump.bytes_in
        core.work(min(core.clock.now() + QUIET_S, bound_s))
        if core.pump.bytes_in == before:
            return


def _who(core: Core) -> Identity:
    """The identity that two answers in a row agree on, so that neither a kept answer nor a restart between fools us."""
    before: Identity | None = None
    silences = 0
    for _ in range(WHO_TRIES):
        try:
            answered = core.request("who")
        except Refused as refused:
            if refused.reason != Reason.TAG:  # an earlier host's last tag: the next one is free
                raise
            continue
        except LinkLost as error:
            silences += 1
            if not isinstance(error.__cause__, LinkSilent) or silences >= SILENCES_MAX:
                raise _silent(core, error) from error
            core.pump.lost = None
            continue
        found = Identity.read(answered.answer.fields)
        if found == before:
            core.ticks.restart()
            core.ticks.see(answered.answer.tick)
            return found
        before = found
    raise LinkError(f"{at_port(core.pump.port.name)}the device's answers to `who` keep changing, last: {before}")


def _silent(core: Core, error: LinkLost) -> LinkLost:
    """The reason with what was heard instead of an answer: another speed and another program both look like this."""
    if not isinstance(error.__cause__, LinkSilent):
        return error
    at, count = at_port(core.pump.port.name), core.pump.bytes_in
    if not count:
        return LinkLost(f"{at}no device answers; not one byte came. Is it powered, and on this port?")
    return LinkLost(
        f"{at}no device answers; {count} bytes came, {core.dropped_lines} unreadable lines. Is the speed right, "
        "and does nothing else use the port?"
    )


def _outputs_off(core: Core) -> Reading:
    core.request("stop", 0)
    core.request("log", 0, 0, "packed")
    bound_s = core.clock.now() + OFF_BOUND_S
    while True:
        reading = core.read_state()
        if reading.outputs_off:
            return reading
        if core.clock.now() >= bound_s:
            duties = ", ".join(f"axis {i} duty {axis.duty}" for i, axis in enumerate(reading.axes))
            raise LinkError(
                f"the outputs of {core.identity.name} could not be verified off {OFF_BOUND_S} s after `stop 0`: state "
                f"{reading.state.word}, {duties}. Cut the power."
            )
        core.work(core.clock.now() + QUIET_S)


def _compare(identity: Identity, wanted: Wanted) -> None:
    """WrongDevice with both sides where the device is not the one of the bench file."""
    differences = [
        f"{what} {found!r}, wanted {asked!r}"
        for what, found, asked in (("board", identity.board, wanted.board), ("serial", identity.serial, wanted.serial))
        if asked is not None and found != asked
    ]
    if identity.version != VERSION:
        differences.append(f"protocol version {identity.version}, wanted {VERSION}")
    for what, fitted, least in (("axes", identity.axes, wanted.axes), ("servos", identity.servos, wanted.servos)):
        if fitted < least:
            differences.append(f"{fitted} {what}, wanted {least} or more")
    if differences:
        raise WrongDevice("another device than the bench file names answered: " + "; ".join(differences))


def _at_rest(core: Core, reading: Reading) -> None:
    """Keep the currents that are read with the outputs off and the shaft at rest: a later stop is judged by them."""
    bound_s = core.clock.now() + STILL_BOUND_S
    while True:
        core.work(core.clock.now() + STILL_APART_S)
        later = core.read_state()
        moved = [abs(b.counts - a.counts) for a, b in zip(reading.axes, later.axes, strict=True)]
        core.idle_ma = tuple(axis.current_ma for axis in later.axes)
        if max(moved, default=0) <= STILL_COUNTS or core.clock.now() >= bound_s:
            return
        reading = later


def _read_limits(core: Core, identity: Identity) -> LimitTable:
    values: dict[LimitKey, int] = {}
    for item, index in limit_keys(identity):
        values[item, index] = int(read_answer("limit", core.request("limit", item, index).answer.fields)[0])
    return LimitTable(values)


def write_limits(core: Core, wanted: Mapping[LimitKey, int]) -> None:
    """Write those of the limits that differ, each read back.

    `pulse_min_us` may never pass `pulse_max_us`, so a refused range is tried again after the others. Raises Refused for
    the first limit that cannot be set, WrongDevice for one that the board lacks; those before it are in force.
    """
    table = core.limits or _read_limits(core, core.identity)
    core.limits = table
    waiting = list(table.changes_to(wanted).items())
    while waiting:
        refused: list[tuple[tuple[LimitKey, int], Refused]] = []
        for key, value in waiting:
            try:
                write_limit(core, key, value)
            except Refused as error:
                if error.reason != Reason.RANGE:
                    raise
                refused.append(((key, value), error))
        if len(refused) == len(waiting):
            raise refused[0][1]
        waiting = [change for change, _ in refused]


def write_limit(core: Core, key: LimitKey, value: int) -> None:
    """Set a limit and check the value that the device says is in force; WrongDevice where it is another.

    Refused where the device refuses it. The event LimitWritten tells of a change.
    """
    item, index = key
    table = core.limits
    if table is None:
        table = _read_limits(core, core.identity)
    before = table[key]
    answered = core.request("limit", item, index, value)
    in_force = int(read_answer("limit", answered.answer.fields)[0])
    core.limits = table.with_value(key, in_force)
    if in_force != before:
        at_s = answered.received_s
        core.tell(
            LimitWritten(tick=core.ticks.latest, host_s=at_s, item=item, index=index, before=before, after=in_force)
        )
    if in_force != value:
        raise WrongDevice(f"the limit {item} {index} was set to {value}, and the device holds {in_force}")
