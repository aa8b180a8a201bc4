"""Least, mean and greatest of every column over spans of a run, written while it is recorded, in bounded memory.

Two files of the same form, a line a span, in order:

    cycle-ranges.csv      each cycle and check, and what lies between them (number: the last cycle before it in the
                          part, 0 before the first)
    interval-ranges.csv   each interval of a thinned log (number: from the run's begin, 0 is the first)

Every sample that was received lies in exactly one span of a file: a span has the samples from the tick of its begin on,
up to but without that of its end. `first_tick` to `last_s` are of its first and last sample, `.count` says how many
samples had a value in a column (a servo without pulses has none). Sums are of whole numbers, so the mean is exact to
the last digit that is printed. A span that was under way, or whose last rows had not come, when the program was killed
has no line.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from .columns import Columns, LabelField, TickField, TimeField
from .csvfile import record
from .events import Json
from .rows import Cells, Rows

LAG_S = 5.0
"""So long rows wait for the event that tells where a span ended: events come a little later than their samples."""
LAG_ROWS_MAX = 20_000
EDGES_MAX = 64
"""So many edges wait for the rows before them; the oldest of more takes effect with the rows that are there."""
MEAN_DECIMALS = 3
"""So many decimals more than its column has a mean."""
HEAD = ("what", "number", "part", "first_tick", "last_tick", "first_s", "last_s", "samples")
EACH = ("least", "mean", "greatest", "count")
BETWEEN = "between"
INTERVAL = "interval"


class _Sums:
    """One column over one span, as whole numbers of its last decimal."""

    __slots__ = ("count", "greatest", "least", "total")

    def __init__(self) -> None:
        self.count = self.total = self.least = self.greatest = 0

    def take(self, cells: Cells, *, skip_zero: bool) -> None:
        scaled = cells.scaled
        if cells.blank is not None:
            scaled = scaled[~cells.blank]
        if skip_zero:
            scaled = scaled[scaled != 0]
        if not len(scaled):
            return
        least, greatest = int(scaled.min()), int(scaled.max())
        self.least = min(self.least, least) if self.count else least
        self.greatest = max(self.greatest, greatest) if self.count else greatest
        self.total += int(scaled.sum())
        self.count += len(scaled)

    def texts(self, decimals: int) -> list[str]:
        if not self.count:
            return ["", "", "", "0"]
        mean = _rounded(self.total * 10**MEAN_DECIMALS, self.count)
        return [
            decimal(self.least, decimals),
            decimal(mean, decimals + MEAN_DECIMALS),
            decimal(self.greatest, decimals),
            str(self.count),
        ]


def _rounded(total: int, count: int) -> int:
    """The quotient to the nearest whole number, halves away from zero."""
    size = (2 * abs(total) + count) // (2 * count)
    return -size if total < 0 else size


def decimal(scaled: int, decimals: int) -> str:
    """scaled / 10^decimals with exactly that many decimals; zero has no sign."""
    if decimals == 0:
        return str(scaled)
    whole, part = divmod(abs(scaled), 10**decimals)
    return f"{'-' if scaled < 0 else ''}{whole}.{part:0{decimals}d}"


class Span:
    """One span under way: what it is, and the sums so far."""

    __slots__ = ("columns", "first_tick", "last_tick", "number", "samples", "what")

    def __init__(self, what: str, number: int, names: Iterable[str]) -> None:
        self.what = what
        self.number = number
        self.samples = 0
        self.first_tick = self.last_tick = 0
        self.columns = {name: _Sums() for name in names}

    def take(self, rows: Rows) -> None:
        """Rows that follow those before."""
        if not len(rows):
            return
        if not self.samples:
            self.first_tick = int(rows.ticks[0])
        self.last_tick = int(rows.ticks[-1])
        self.samples += len(rows)
        for name, sums in self.columns.items():
            cells = rows.cells.get(name)
            if cells is not None:
                sums.take(cells, skip_zero=name.endswith(".pulse_us"))


class SpanPrinter:
    """Prints spans as lines of a ranges file."""

    def __init__(self, columns: Columns, *, part: int, tick_us: int, tick_zero: int) -> None:
        time = next(field for field in columns.fields if isinstance(field, TimeField))
        self._decimals = {
            field.name: getattr(field, "decimals", 0)
            for field in columns.fields
            if not isinstance(field, TickField | TimeField | LabelField)
        }
        self._time_decimals = time.decimals
        self._part = part
        self._tick_us = tick_us
        self.tick_zero = tick_zero

    @property
    def names(self) -> tuple[str, ...]:
        """The columns that have ranges."""
        return tuple(self._decimals)

    def header(self) -> bytes:
        """The first line."""
        return record([*HEAD, *(f"{name}.{each}" for name in self._decimals for each in EACH)])

    def line(self, span: Span) -> bytes:
        """One span; one without samples has empty fields."""
        texts = [span.what, str(span.number), str(self._part), *["", "", "", "", "0"]]
        if span.samples:
            ends = (span.first_tick, span.last_tick)
            texts[3:] = [*map(str, ends), *(self._seconds(tick) for tick in ends), str(span.samples)]
        for name, decimals in self._decimals.items():
            texts += span.columns[name].texts(decimals)
        return record(texts)

    def _seconds(self, tick: int) -> str:
        micros = (tick - self.tick_zero) * self._tick_us
        decimals = self._time_decimals
        return decimal(micros // 1000 if decimals == 3 else micros, decimals)


@dataclass(frozen=True, slots=True)
class _Edge:
    """A span begins at this tick."""

    what: str
    number: int
    tick: int


class CycleRanges:
    """Cuts the rows of a part at the begins and ends of cycles and checks, and writes each span when it is over.

    Rows wait for LAG_S, so that an edge that is told so late still falls where it belongs; an edge that is told before
    its rows have come waits for them.
    """

    def __init__(self, printer: SpanPrinter, *, tick_us: int, write: Callable[[bytes], None]) -> None:
        self._printer = printer
        self._lag_ticks = round(LAG_S * 1e6 / tick_us)
        self._write = write
        self._held: deque[Rows] = deque()
        self._held_rows = 0
        self._edges: deque[_Edge] = deque()
        self._newest: int | None = None
        self._next_tick: int | None = None
        self._span = Span(BETWEEN, 0, printer.names)

    def take(self, rows: Rows) -> None:
        """Rows that follow those before; where ticks begin anew, those before are settled."""
        if self._newest is not None and rows.ticks[0] <= self._newest:
            self._settle_all()
        self._held.append(rows.numbers())
        self._held_rows += len(rows)
        self._newest = int(rows.ticks[-1])
        self._next_tick = self._newest + rows.period_ticks
        while self._edges and self._is_due(self._edges[0].tick):
            self._cut(self._edges.popleft())
        while self._held_rows > LAG_ROWS_MAX:
            self._settle(int(self._held[0].ticks[-1]) + 1)
        self._settle(self._newest - self._lag_ticks)

    def _settle(self, before_tick: int | None) -> None:
        """What comes before this tick, or all, belongs to the span under way."""
        while self._held:
            rows = self._held[0]
            count = len(rows) if before_tick is None else int(np.searchsorted(rows.ticks, before_tick, side="left"))
            self._span.take(rows[:count])
            self._held_rows -= count
            if count < len(rows):
                self._held[0] = rows[count:]
                return
            self._held.popleft()

    def _settle_all(self) -> None:
        """No more rows will come before the edges that wait."""
        while self._edges:
            self._cut(self._edges.popleft())
        self._settle(None)

    def edge(self, what: str, number: int, tick: int | None) -> None:
        """A span `what` begins at this tick (None: after all rows so far), and the one under way is over."""
        if self._edges:  # those that wait come first
            tick = self._edges[-1].tick if tick is None else max(tick, self._edges[-1].tick)
        if tick is None:
            self._settle(None)
            self._begin(what, number)
            return
        self._edges.append(_Edge(what, number, tick))
        while self._edges and (len(self._edges) > EDGES_MAX or self._is_due(self._edges[0].tick)):
            self._cut(self._edges.popleft())

    def is_ahead(self, tick: int) -> bool:
        """Whether an edge at this tick would wait for rows to come."""
        return not self._is_due(tick)

    def _is_due(self, tick: int) -> bool:
        """Whether all rows before this tick have come."""
        return self._next_tick is not None and tick <= self._next_tick

    def _cut(self, edge: _Edge) -> None:
        self._settle(edge.tick)
        self._begin(edge.what, edge.number)

    def _begin(self, what: str, number: int) -> None:
        self.finish()
        self._span = Span(what, number, self._printer.names)

    def finish(self) -> None:
        """Write the span under way, unless it lies between cycles and has no samples."""
        span = self._span
        if span.samples or span.what != BETWEEN:
            self._write(self._printer.line(span))

    def close(self) -> None:
        """The part is over: what is held belongs to the span under way, which ends with it."""
        self._settle_all()
        self._begin(BETWEEN, self._span.number)


class IntervalRanges:
    """Cuts the rows of a part into intervals of one length, counted from the run's time 0."""

    def __init__(self, printer: SpanPrinter, *, length_s: float, tick_us: int, write: Callable[[bytes], None]) -> None:
        self._printer = printer
        self._length_ticks = max(1, round(length_s * 1e6 / tick_us))
        self._write = write
        self._span: Span | None = None

    def take(self, rows: Rows) -> None:
        """Rows that follow those before."""
        rows = rows.numbers()
        numbers: NDArray[np.int64] = (rows.ticks - self._printer.tick_zero) // self._length_ticks
        begins = [0, *(np.flatnonzero(np.diff(numbers)) + 1).tolist(), len(rows)]
        for begin, end in pairwise(begins):
            number = int(numbers[begin])
            if self._span is None or self._span.number != number:
                self.close()
                self._span = Span(INTERVAL, number, self._printer.names)
            self._span.take(rows[begin:end])

    def close(self) -> None:
        """The interval under way is over."""
        if self._span is not None:
            self._write(self._printer.line(self._span))
        self._span = None


def edges_of(told: Mapping[str, Json]) -> list[tuple[str, int, int | None]]:
    """The edge that an event makes, as `events.py` writes it down: what begins, its number, its tick; mostly none."""
    what = _EDGES.get(str(told["kind"]))
    if what is None:
        return []
    tick, number = told.get("tick"), told.get("number") or told.get("after") or 0
    return [(what, number if isinstance(number, int) else 0, tick if isinstance(tick, int) else None)]


_EDGES = {
    "cycle_begun": "cycle",
    "check_begun": "check",
    **dict.fromkeys(("cycle_done", "check_done", "cycle_interrupted"), BETWEEN),
}
