"""What happened in a session, as facts: each event is a frozen dataclass, ready to be written down as it is.

`tick` is the unwrapped device tick of what happened, None where no device told one; `host_s` is the port's clock when
the host learnt of it. Fields hold numbers, strings and tuples only.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum


@dataclass(frozen=True, slots=True, kw_only=True)
class Event:
    """Root of all events."""

    tick: int | None
    host_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Opened(Event):
    """The device is known and its outputs are verified off."""

    firmware: str
    board: str
    serial: str
    boot: int
    limits_digest: str


@dataclass(frozen=True, slots=True, kw_only=True)
class LimitWritten(Event):
    """A limit of the device was changed from `before` to `after` (protocol units)."""

    item: str
    index: int
    before: int
    after: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Armed(Event):
    """The outputs are enabled under this lease."""

    lease_ms: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Noticed(Event):
    """A notice that this version does not know; its fields as they came."""

    word: str
    fields: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class NoticesMissed(Event):
    """So many notices of the device were lost; `state` and `why` have been asked for."""

    count: int


class Learned(StrEnum):
    """How a trip came to be known."""

    NOTICE = "notice"
    ASKED = "asked"
    AT_OPEN = "at open"


@dataclass(frozen=True, slots=True, kw_only=True)
class Tripped(Event):
    """The device stopped itself: the trip's word, axis, value and bound as SPEC.md section 11 says."""

    trip: str
    index: int
    value: int
    bound: int
    learned: Learned


@dataclass(frozen=True, slots=True, kw_only=True)
class StopBegun(Event):
    """A stop of this category has begun; `source` is the device's word for who asked."""

    category: int
    source: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Stopped(Event):
    """All outputs are off; `state` is the state after it."""

    state: str


@dataclass(frozen=True, slots=True, kw_only=True)
class StopAsked(Event):
    """The host asked for a stop; `sent` tells whether the port took the bytes."""

    category: int
    sent: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class StopJudged(Event):
    """The verdict on a stop: confirmed by the device and by measurement, or what is missing."""

    category: int
    confirmed: bool
    missing: tuple[str, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class OrderDone(Event):
    """The order sent under this tag has been carried out."""

    tag: int


@dataclass(frozen=True, slots=True, kw_only=True)
class DwellHeld(Event):
    """The dwell lock of an axis let go after holding a demand back for so long."""

    axis: int
    held_ticks: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Restarted(Event):
    """The device restarted: all that was known of it is void, and it is not armed again by itself.

    `cause` is the device's word for it, empty where it did not tell; `seen_by` is what gave it away.
    """

    boot_before: int
    boot_after: int
    cause: str
    seen_by: str


@dataclass(frozen=True, slots=True, kw_only=True)
class DeviceExchanged(Event):
    """Another board answers on the port than the one that was opened."""

    before: str
    after: str


@dataclass(frozen=True, slots=True, kw_only=True)
class GapFound(Event):
    """Samples are lost for good: `count` of them from `tick` on, one `period_ticks` apart."""

    count: int
    period_ticks: int
    reason: str


@dataclass(frozen=True, slots=True, kw_only=True)
class GapFilled(Event):
    """Samples that had not arrived were sent again: `count` of them from `tick` on."""

    count: int


class Trouble(StrEnum):
    """What kind of trouble the link had."""

    GARBLED_HERE = "garbled line from the device"
    GARBLED_THERE = "garbled line at the device"
    REPEATED = "request repeated"
    STRANGE_LINE = "line that fits nothing asked for"
    STRANGE_TICK = "tick off the clock, but the same start of the device"


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkTrouble(Event):
    """The link did not carry something as it should; nothing was lost by this alone."""

    trouble: Trouble
    detail: str
    count: int


@dataclass(frozen=True, slots=True, kw_only=True)
class LateHost(Event):
    """The host did not call in for longer than it should while the outputs were enabled."""

    late_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class HostSlept(Event):
    """The device's ticks went on for longer than the host's clock did: the host was asleep for about so long."""

    slept_s: float


@dataclass(frozen=True, slots=True, kw_only=True)
class WallClockSet(Event):
    """The wall clock moved by so much against the monotonic clock; positive is forwards."""

    moved_s: float
