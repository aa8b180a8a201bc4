"""Gives the samples of a finished run to other programs: Parquet, text that spreadsheets read, and MDF 4.

Each is written after the run, from the text log, in pieces of bounded size; the log stays what counts. A file is made
under another name and put in place whole, so that a broken-off export leaves none. Parquet needs the package pyarrow
(row groups are written piece by piece), MDF 4 the package asammdf (ASAM MDF 4.10; one part of a run is held in
memory).
"""

from __future__ import annotations

import contextlib
import math
import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..errors import RecordError, UsageError
from ..extras import need
from .parts import parts_of
from .reading import read_manifest
from .scan import WORD_COLUMNS, Piece
from .volumes import HELD_NAMES, Stream, volume_files, volume_names

if TYPE_CHECKING:
    from types import ModuleType

SHEET_ROWS = 1_048_576
"""Rows of a sheet in Microsoft Excel (its published limit), the header included; a longer log is split before it."""
PIECE_BYTES = 4 * 1024 * 1024
UNITS = {"duty_pct": "%", "speed_rpm": "rpm", "current_a": "A", "pulse_us": "us", "angle_deg": "deg",
         "position_rev": "rev", "time_s": "s", "supply_v": "V", "temperature_degc": "degC"}  # fmt: skip


class To(StrEnum):
    """What a run can be exported to."""

    PARQUET = "parquet"
    EXCEL_CSV = "excel-csv"
    MDF4 = "mdf4"


class Mark(StrEnum):
    """How the text for spreadsheets marks decimals: `point` with tabs between fields, or `comma` with semicolons."""

    POINT = "point"
    COMMA = "comma"


@dataclass(frozen=True, slots=True)
class Exported:
    """A file that was written, with its rows."""

    path: Path
    rows: int


def export_run(
    folder: Path, to: To, *, out: Path | None = None, mark: Mark = Mark.POINT, sheet_rows: int = SHEET_ROWS
) -> list[Exported]:
    """Write the samples of a run to `out`, its own folder where None; one file for each part of the run, or more.

    The volumes of a part come together in one. A part that broke off before it had a samples file gives none.

    Raises RecordError where the run cannot be read or the file not be written, PackageMissing without its package.
    """
    manifest = read_manifest(folder)
    target = out or folder
    done: list[Exported] = []
    try:
        target.mkdir(parents=True, exist_ok=True)
        for paths in _begun(folder, manifest):
            stem = paths[0].stem
            if to is To.PARQUET:
                done.append(_parquet(Stream(paths, piece_bytes=PIECE_BYTES), target / f"{stem}.parquet", manifest))
            elif to is To.MDF4:
                done.append(_mdf4(Stream(paths, piece_bytes=PIECE_BYTES), target / f"{stem}.mf4", manifest))
            else:
                done += _sheets(paths, target, mark, sheet_rows)
    except OSError as error:
        why = f"the export cannot be written in {target}: {error.strerror or error}"
        raise RecordError(f"{why}; --out DIR puts it elsewhere") from error
    return done


def _begun(folder: Path, manifest: Mapping[str, Any]) -> list[list[Path]]:
    """The files of each part that has some. Raises RecordError where one is missing, or all are."""
    parts = parts_of(dict(manifest))
    found = [files for part in parts if (files := _files_of(folder, part))]
    if not found:
        raise RecordError(f"{folder / volume_names(folder, parts[0])[0]} is missing: no part of the run has samples")
    return found


def _files_of(folder: Path, part: Mapping[str, Any]) -> list[Path]:
    """All that a part wrote; of one that broke off what was begun, perhaps nothing. Raises RecordError where one is
    missing that others follow."""
    named = [folder / name for name in volume_names(folder, part)]
    found = named if part.get("status") == "finished" else volume_files(folder, part)
    written = named[: max((named.index(path) + 1 for path in found if path in named), default=0)]
    missing = next((path for path in written if not path.is_file()), None)
    if missing is not None:
        raise RecordError(f"{missing} is missing")
    return found


@contextlib.contextmanager
def _in_place(path: Path) -> Iterator[Path]:
    """A name to write to, which becomes `path` when all went well and is removed when not."""
    part = path.with_name(f"part-{path.name}")
    try:
        yield part
        os.replace(part, path)
    finally:
        with contextlib.suppress(OSError):
            part.unlink(missing_ok=True)


def unit_of(column: str) -> str:
    """The unit of a column, empty for counts, ticks and words."""
    return UNITS.get(column.rpartition(".")[2], "")


# ---- Parquet --------------------------------------------------------------------------------------------------------


def _parquet(scan: Stream, path: Path, manifest: dict[str, Any]) -> Exported:  # Any: JSON as it comes
    arrow: Any = need("pyarrow", purpose="the export to Parquet")  # Any, here and below: the package has no types
    parquet: Any = need("pyarrow.parquet", purpose="the export to Parquet")
    schema = _schema(arrow, scan.names, manifest)
    rows = 0
    with _in_place(path) as part, parquet.ParquetWriter(part, schema, compression="zstd") as writer:
        for piece in scan:
            arrays = [arrow.array(_column(piece, name), type=schema.field(name).type, from_pandas=True)
                      for name in scan.names]  # fmt: skip
            writer.write_table(arrow.Table.from_arrays(arrays, schema=schema))
            rows += len(piece)
    return Exported(path, rows)


def _schema(arrow: Any, names: Sequence[str], manifest: dict[str, Any]) -> Any:
    fields = []
    for name in names:
        kind = arrow.float64()
        if name == "tick" or name.endswith(".counts"):
            kind = arrow.int64()
        elif name in WORD_COLUMNS:
            kind = arrow.string()
        fields.append(arrow.field(name, kind, metadata={"unit": unit_of(name)}))
    about = {"run": str(manifest.get("run")), "started": str(manifest.get("started")), "format": "ramprig samples"}
    return arrow.schema(fields, metadata=about)


def _column(piece: Piece, name: str) -> Any:
    if name == "tick":
        return piece.ticks
    return piece.words[name].tolist() if name in piece.words else piece.numbers[name]


# ---- text for spreadsheets -----------------------------------------------------------------------------------------


def _sheets(paths: Sequence[Path], target: Path, mark: Mark, sheet_rows: int) -> list[Exported]:
    """UTF-16 with its byte-order mark, little-endian: the text that spreadsheets take in any locale.

    `point` has tabs between the fields, `comma` semicolons. Each file has a header and stays within `sheet_rows`.
    """
    if sheet_rows < 2:
        raise UsageError(f"a sheet of {sheet_rows} rows cannot hold a header and a row")
    done: list[Exported] = []
    rows = _sheet_rows(paths, mark)
    header = next(rows)
    row = next(rows, None)
    while row is not None or not done:
        number = f"-{len(done) + 1}" if done else ""
        file_path = target / f"{paths[0].stem}-excel{number}.csv"
        count = 0
        with _in_place(file_path) as part, open(part, "w", encoding="utf-16-le", newline="") as file:
            file.write("\ufeff" + header)
            while row is not None and count < sheet_rows - 1:
                file.write(row)
                count += 1
                row = next(rows, None)
        done.append(Exported(file_path, count))
    return done


def _sheet_rows(paths: Sequence[Path], mark: Mark) -> Iterator[str]:
    """The header once and each row, as text with its end."""
    last = ""
    for path in paths:
        after = _tick(last) if path.name in HELD_NAMES else None
        with open(path, encoding="utf-8", newline="") as file:
            header = file.readline()
            if path is paths[0]:
                yield header.replace(",", ";" if mark is Mark.COMMA else "\t")
            for line in file:
                if not line.endswith("\n") or "\0" in line:
                    break  # a torn last row, or what a loss of power left
                if after is not None and _tick(line) <= after:
                    continue  # a held row that a volume has
                yield line.replace(",", ";").replace(".", ",") if mark is Mark.COMMA else line.replace(",", "\t")
                last = line


def _tick(line: str) -> float:
    """The tick of a row; before all of them for no row."""
    return int(line.partition(",")[0]) if line else -math.inf


# ---- MDF 4 ----------------------------------------------------------------------------------------------------------


def _mdf4(scan: Stream, path: Path, manifest: dict[str, Any]) -> Exported:  # Any: JSON as it comes
    module: ModuleType = need("asammdf", purpose="the export to MDF 4")
    asammdf: Any = module
    pieces = list(scan)
    rows = sum(map(len, pieces))
    times = np.concatenate([np.empty(0), *(piece.numbers["time_s"] for piece in pieces)])
    signals = []
    for name in scan.names:
        if name == "time_s":
            continue
        if name in WORD_COLUMNS:
            samples: Any = np.char.encode(
                np.concatenate([np.empty(0, np.str_), *(piece.words[name] for piece in pieces)]), "utf-8"
            )
        elif name == "tick":
            samples = np.concatenate([np.empty(0, np.int64), *(piece.ticks for piece in pieces)])
        else:
            samples = np.concatenate([np.empty(0), *(piece.numbers[name] for piece in pieces)])
        more = {"encoding": "utf-8"} if name in WORD_COLUMNS else {}
        signals.append(asammdf.Signal(samples=samples, timestamps=times, name=name, unit=unit_of(name), **more))
    with _in_place(path) as part, asammdf.MDF(version="4.10") as file:
        file.append(signals, comment=f"ramprig run {manifest.get('run')}", common_timebase=True)
        written = Path(str(file.save(part.with_suffix(".mf4"), overwrite=True)))
        if written != part:
            os.replace(written, part)
    return Exported(path, rows)
