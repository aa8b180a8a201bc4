"""What becomes of the samples of one part of a run on the disk: rows in volumes, all or some, and ranges beside them.

    blocks -> rows (printed) -> ranges of cycles and intervals        (every sample)
                             -> held rows, then the thinner, where it is wanted -> volumes (what is kept)

All of it runs where the disk is written, in the order in which blocks and events were handed over.
"""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Mapping, Sequence

from ..session.blocks import Block
from .appendfile import AppendFile, sync_folder
from .events import Json
from .folder import CYCLE_RANGES_FILE, INTERVAL_RANGES_FILE, RunFolder
from .held import HeldRows
from .keeping import Keeping
from .ranges import CycleRanges, IntervalRanges, SpanPrinter, edges_of
from .rows import RowPrinter, Rows
from .thinning import Thinner
from .volumewriter import VolumeWriter


class RangesFile:
    """A ranges file of the run: begun with its first line, or gone on with where an earlier part wrote it."""

    def __init__(self, folder: RunFolder, name: str, header: bytes) -> None:
        self._folder = folder
        self._name = name
        self._header = header
        self._file: AppendFile | None = folder.go_on(name)

    def append(self, line: bytes) -> None:
        """Write a line. Raises OSError."""
        if self._file is None:
            self._file = self._folder.new_file(self._name)
            sync_folder(self._folder.path)
        self._file.append(line if self._file.lines else self._header + line)

    def sync(self) -> None:
        """Have the disk hold all lines. Raises OSError."""
        if self._file is not None:
            self._file.sync()

    def let_go(self) -> None:
        """Have it take no more, from any thread."""
        if self._file is not None:
            self._file.let_go()

    def close(self) -> None:
        """Close the file without syncing."""
        if self._file is not None:
            self._file.close()


class SampleLog:
    """Writes the samples of one part. Not for use by two threads at once.

    `durable` has the rows that a thinned log has not decided yet on the disk too.
    `tell` takes events that come of it (full rate begun and ended), `on_volume` is that of VolumeWriter; both write to
    the disk at once and may raise OSError. Raises OSError.
    """

    def __init__(
        self,
        folder: RunFolder,
        printer: RowPrinter,
        keeping: Keeping,
        *,
        spans: SpanPrinter,
        tick_us: int,
        durable: bool,
        tell: Callable[[object], None],
        on_volume: Callable[[int, int], None],
    ) -> None:
        self._printer = printer
        self._keeping = keeping
        self._volumes = VolumeWriter(
            folder, printer.header(), limits=keeping.volumes, tick_us=tick_us, on_begun=on_volume
        )
        self._files: list[RangesFile] = []
        self._cycles: CycleRanges | None = None
        self._intervals: IntervalRanges | None = None
        self._thinner: Thinner | None = None
        self._held: HeldRows | None = None
        thinning = keeping.thinning
        if keeping.cycle_ranges:
            file = RangesFile(folder, CYCLE_RANGES_FILE, spans.header())
            self._cycles = CycleRanges(spans, tick_us=tick_us, write=file.append)
            self._files.append(file)
        if thinning is not None:
            self._thinner = Thinner(thinning, tick_us=tick_us, write=self._volumes.append, tell=tell)
            if durable:
                self._held = HeldRows(
                    folder.path, printer.header(), wait_s=thinning.before_s, tick_us=tick_us, settle=self._volumes.sync
                )
            if thinning.ranges_s is not None:
                file = RangesFile(folder, INTERVAL_RANGES_FILE, spans.header())
                self._intervals = IntervalRanges(spans, length_s=thinning.ranges_s, tick_us=tick_us, write=file.append)
                self._files.append(file)

    @property
    def names(self) -> list[str]:
        """The volumes so far."""
        return self._volumes.names

    @property
    def written_rows(self) -> int:
        """Rows that were appended whole."""
        return self._volumes.written_rows

    @property
    def synced_rows(self) -> int:
        """Rows that the disk itself is known to hold."""
        return self._volumes.synced_rows

    @property
    def thinned_rows(self) -> int:
        """Rows that were left out as the thinning wants it."""
        return 0 if self._thinner is None else self._thinner.thinned_rows

    def write(self, blocks: Sequence[Block]) -> None:
        """Blocks that follow those before."""
        for rows in self._printer.tables(blocks):
            if self._thinner is None:
                self._volumes.append(rows)
            else:
                self._thin(self._thinner, rows)
            self._range(rows)

    def _thin(self, thinner: Thinner, rows: Rows) -> None:
        """Hold these rows, then have them decide, and only then let an older held file go."""
        held = self._held
        if held is None:
            thinner.take(rows)
        elif held.follows(rows):
            held.append(rows)
            thinner.take(rows)
            held.turn()
        else:  # ticks begin anew: all rows before are decided
            thinner.take(rows)
            held.turn(now=True)
            held.append(rows)

    def _range(self, rows: Rows) -> None:
        if self._cycles is not None:
            self._cycles.take(rows)
        if self._intervals is not None:
            self._intervals.take(rows)

    def concerns(self, told: Mapping[str, Json]) -> bool:
        """Whether `happened` would do something with this event, as `events.py` writes it down."""
        thinning = self._keeping.thinning
        return bool((self._cycles is not None and edges_of(told)) or (thinning is not None and thinning.claims(told)))

    def waits_for_rows(self, told: Mapping[str, Json]) -> bool:
        """Whether what `happened` does with this event waits for the rows up to its tick by itself."""
        tick = told.get("tick")
        return (
            self._cycles is not None and self._thinner is None and isinstance(tick, int) and self._cycles.is_ahead(tick)
        )

    def happened(self, told: Mapping[str, Json]) -> None:
        """An event that came after all rows so far."""
        if self._cycles is not None:
            for what, number, at in edges_of(told):
                self._cycles.edge(what, number, at)
        thinning = self._keeping.thinning
        if self._thinner is not None and thinning is not None:
            because = thinning.claims(told)
            tick = told.get("tick")
            if because:
                self._thinner.claim(tick if isinstance(tick, int) else None, because)

    def end(self) -> None:
        """No more rows will come: write what is waiting."""
        if self._thinner is not None:
            self._thinner.flush()
        if self._held is not None:
            self._held.remove()
        for ranges in (self._cycles, self._intervals):
            if ranges is not None:
                ranges.close()

    def _all(self) -> list[VolumeWriter | HeldRows | RangesFile]:
        return [self._volumes, *([] if self._held is None else [self._held]), *self._files]

    def sync(self) -> None:
        """Have the disk hold all that was written; raises OSError after all files were tried."""
        failed: OSError | None = None
        for file in self._all():
            try:
                file.sync()
            except OSError as error:
                failed = failed or error
        if failed is not None:
            raise failed

    def let_go(self) -> None:
        """Have no file take more, from any thread; `close` follows."""
        for file in self._all():
            file.let_go()

    def close(self) -> None:
        """Close all files without syncing; never raises."""
        for file in self._all():
            with contextlib.suppress(OSError):
                file.close()
