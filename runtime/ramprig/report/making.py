"""Reads runs and writes their report and JUnit XML: what `ramprig report` does."""

from __future__ import annotations

import csv
import io
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from ramprig.errors import RecordError
from ramprig.record.appendfile import replace_file
from ramprig.record.reading import audit

from .digest import Digest, digest_samples
from .explain import explain
from .facts import gather
from .html import Read, Wish, render
from .junit import junit_xml

REPORT_FILE = "report.html"
JUNIT_FILE = "junit.xml"
INTERVALS_FILE = "intervals.csv"


@dataclass(frozen=True, slots=True, kw_only=True)
class Made:
    """The files that were written."""

    report: Path
    junit: Path
    intervals: tuple[Path, ...]


def read_run(folder: Path) -> Read:
    """Everything a report says of a run; raises RecordError where the folder is none."""
    facts = gather(folder)
    return Read(facts=facts, digest=digest_samples(facts), audit=audit(folder), explanation=explain(facts))


def make_report(folders: Sequence[Path], *, out: Path, issued: str, entries: Mapping[str, str] | None = None) -> Made:
    """Write the report of these runs into the folder `out`, and beside each run the table of its intervals.

    Each file is replaced in one step; nothing of a run itself is touched. Raises RecordError.
    """
    reads = [read_run(folder) for folder in folders]
    text = render(reads, Wish(issued=issued, entries=entries or {}))
    made = Made(
        report=out / REPORT_FILE,
        junit=out / JUNIT_FILE,
        intervals=tuple(read.facts.folder / INTERVALS_FILE for read in reads),
    )
    try:
        out.mkdir(parents=True, exist_ok=True)
        replace_file(made.report, text.encode("utf-8"))
        replace_file(made.junit, junit_xml([read.facts for read in reads]).encode("utf-8"))
        for path, read in zip(made.intervals, reads, strict=True):
            replace_file(path, intervals_csv(read.digest))
    except OSError as error:
        raise RecordError(f"the report cannot be written in {out}: {error.strerror or error}") from error
    return made


def intervals_csv(digest: Digest) -> bytes:
    """Least, mean and greatest of each column over each cycle, or minute where there are no cycles."""
    out = io.StringIO(newline="")
    writer = csv.writer(out)
    names = [f"{column}.{what}" for column in digest.columns for what in ("least", "mean", "greatest")]
    writer.writerow(["number", "begin_s", "end_s", "samples", *names])
    for row in digest.intervals:
        values = [row.columns.get(column, ("", "", "")) for column in digest.columns]
        cells = [f"{value:.6g}" if isinstance(value, float) else value for triple in values for value in triple]
        writer.writerow([row.number, f"{row.begin_s:.3f}", f"{row.end_s:.3f}", row.samples, *cells])
    return out.getvalue().encode("utf-8")
