"""How a file says what is logged how often, when a new file of the log begins, and what of it is kept.

log:
  period: 10 ms
  new file: {after rows: 500000, after: 2 h}
  thin:
    keep every: 100          # of the rows far from events
    ranges every: 10 s       # least, mean and greatest of all samples
    before: 10 s             # full rate from so long before an event ...
    after: 30 s              # ... to so long after it
    around: [trip, stop, failure, trouble, watch]
"""

from __future__ import annotations

from dataclasses import dataclass, field
from fractions import Fraction

from ramprig.quantity import DURATION
from ramprig.record.keeping import AROUND_DEFAULT, AROUND_TEXTS, Around, Keeping, Thinning
from ramprig.record.volumes import ROWS_DEFAULT, VolumeLimits
from ramprig.yamlfile import CountShape, Fields, Key, ListShape, QuantityShape, Record, WordShape

VOLUME_ROWS_LEAST = 100
VOLUME_ROWS_MOST = 1_000_000_000
EVERY_MOST = 1_000_000

PERIOD = Key(
    "period", QuantityShape(DURATION, least="1 ms", most="10 s"), "time between two samples; the bench's if left out"
)
AFTER_ROWS = Key(
    "after rows",
    CountShape(VOLUME_ROWS_LEAST, VOLUME_ROWS_MOST),
    f"rows of a file before the next begins; {ROWS_DEFAULT} if left out, which a spreadsheet still opens",
    default=ROWS_DEFAULT,
)
AFTER = Key(
    "after", QuantityShape(DURATION, least="1 min", most="1000 h"), "the next file begins also so long after the last"
)
KEEP_EVERY = Key("keep every", CountShape(2, EVERY_MOST), "far from events every so many-th row is kept")
RANGES_EVERY = Key(
    "ranges every",
    QuantityShape(DURATION, least="1 s", most="1 h"),
    "least, mean and greatest of all samples over each time of this length, in interval-ranges.csv",
)
BEFORE = Key(
    "before", QuantityShape(DURATION, least="0 s", most="5 min"), "full rate from so long before an event; 10 s"
)
AFTER_EVENT = Key(
    "after", QuantityShape(DURATION, least="0 s", most="1 h"), "full rate to so long after an event; 30 s"
)
AROUND = Key(
    "around",
    ListShape(WordShape(tuple(Around)), least=1, most=len(Around)),
    "around which events full rate is kept: "
    + "; ".join(f"{word.value}: {text}" for word, text in AROUND_TEXTS.items())
    + f". If left out: {', '.join(word for word in Around if word in AROUND_DEFAULT)}",
)


@dataclass(frozen=True, slots=True, kw_only=True)
class LogWish:
    """What a sequence says of its log: the period in s, None for the bench's, and how it is kept."""

    period_s: Fraction | None = None
    keeping: Keeping = field(default_factory=Keeping)


def _volumes(f: Fields) -> VolumeLimits:
    if not f.said(AFTER_ROWS) and not f.said(AFTER):
        raise f.mark.error("this does not say when a new file begins", "give 'after rows', 'after', or both")
    span = f.get(AFTER)
    return VolumeLimits(rows=f[AFTER_ROWS], span_s=None if span is None else float(span.value))


def _thinning(f: Fields) -> Thinning:
    if not f.said(KEEP_EVERY) and not f.said(RANGES_EVERY):
        wanted = "give 'keep every', 'ranges every', or both"
        raise f.mark.error("this does not say what is kept far from events", wanted)
    words = f.get(AROUND) or ()
    twice = next((word for word in words if words.count(word) > 1), None)
    if twice is not None:
        raise f.error(AROUND, f"'{twice}' stands here twice", "each kind of event once")
    ranges, before, after = f.get(RANGES_EVERY), f.get(BEFORE), f.get(AFTER_EVENT)
    default = Thinning(every=None)
    return Thinning(
        every=f.get(KEEP_EVERY),
        ranges_s=None if ranges is None else float(ranges.value),
        before_s=default.before_s if before is None else float(before.value),
        after_s=default.after_s if after is None else float(after.value),
        around=frozenset(map(Around, words)) or AROUND_DEFAULT,
    )


NEW_FILE: Key[VolumeLimits] = Key(
    "new file", Record((AFTER_ROWS, AFTER), _volumes), "when the samples go on in a new file, such as samples.0002.csv"
)
THIN: Key[Thinning] = Key(
    "thin",
    Record((KEEP_EVERY, RANGES_EVERY, BEFORE, AFTER_EVENT, AROUND), _thinning),
    "keep full rate only around events; what is left out is counted, and everything is judged all the same",
)


def _log(f: Fields) -> LogWish:
    if not any(map(f.said, (PERIOD, NEW_FILE, THIN))):
        raise f.mark.error("this says nothing of the log", "give 'period', 'new file' or 'thin', or leave 'log' out")
    period = f.get(PERIOD)
    return LogWish(
        period_s=None if period is None else period.value,
        keeping=Keeping(volumes=f.get(NEW_FILE) or VolumeLimits(), thinning=f.get(THIN)),
    )


LOG: Record[LogWish] = Record((PERIOD, NEW_FILE, THIN), _log)
