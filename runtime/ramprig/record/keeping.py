"""How the samples of a run are kept: cut into volumes, and, where that is wanted, at full rate only around events."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import StrEnum

from .events import Json
from .volumes import VolumeLimits


class Around(StrEnum):
    """Kinds of event around which a thinned log is kept at full rate; the begin and the end of a run always are."""

    TRIP = "trip"
    STOP = "stop"
    FAILURE = "failure"
    TROUBLE = "trouble"
    WATCH = "watch"
    MARK = "mark"
    CYCLE = "cycle"


AROUND_TEXTS = {
    Around.TRIP: "a trip, or a restart of the board",
    Around.STOP: "a stop that somebody or something asked for",
    Around.FAILURE: "an expectation that did not hold, a cycle that failed",
    Around.TROUBLE: "lost samples, a late host, an order that was not told as done",
    Around.WATCH: "a change that the wear limits or the detectors found",
    Around.MARK: "each 'mark' of the sequence",
    Around.CYCLE: "the begin and the end of each cycle and check",
}
AROUND_DEFAULT = frozenset({Around.TRIP, Around.STOP, Around.FAILURE, Around.TROUBLE, Around.WATCH})

_KINDS = {
    **dict.fromkeys(("tripped", "restarted", "device_exchanged"), Around.TRIP),
    **dict.fromkeys(("stop_asked", "stop_begun"), Around.STOP),
    **dict.fromkeys(("gap_found", "late_host", "host_slept", "order_overdue", "notices_missed"), Around.TROUBLE),
    **dict.fromkeys(("wear_found", "wear_unjudged"), Around.WATCH),
    "marked": Around.MARK,
    **dict.fromkeys(("cycle_begun", "check_begun", "cycle_done", "check_done"), Around.CYCLE),
}
ALWAYS = frozenset({"run_started", "run_resumed"})


@dataclass(frozen=True, slots=True, kw_only=True)
class Thinning:
    """Far from events every `every`-th row is kept (None: none), and ranges over each `ranges_s` (None: none).

    Full rate is kept from `before_s` before to `after_s` after each event of the kinds in `around`.
    """

    every: int | None
    ranges_s: float | None = None
    before_s: float = 10.0
    after_s: float = 30.0
    around: frozenset[Around] = AROUND_DEFAULT

    def claims(self, told: Mapping[str, Json]) -> str:
        """For which reason full rate is kept around this event, as `events.py` writes it down; empty for none."""
        kind = str(told["kind"])
        if kind in ALWAYS:
            return "begin"
        found = _KINDS.get(kind)
        judged_badly = kind == "judged" and told.get("held") is False
        if judged_badly or (kind == "cycle_done" and told.get("outcome") == "failed"):
            found = Around.FAILURE if Around.FAILURE in self.around else found
        return found.value if found is not None and found in self.around else ""


@dataclass(frozen=True, slots=True, kw_only=True)
class Keeping:
    """How a run's samples are kept. With `cycle_ranges`, the least, mean and greatest values of each cycle are too."""

    volumes: VolumeLimits = field(default_factory=VolumeLimits)
    thinning: Thinning | None = None
    cycle_ranges: bool = False
