"""Reads runs and writes their report and JUnit XML: what `ramprig report` does."""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from ramprig.endure.features import unit_of
from ramprig.endure.recorded import TurnFeatures, names_of
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
FEATURES_FILE = "features.csv"


@dataclass(frozen=True, slots=True, kw_only=True)
class Made:
    """The files that were written."""

    report: Path
    junit: Path
    intervals: tuple[Path, ...]
    features: tuple[Path, ...] = ()


def read_run(folder: Path) -> Read:
    """Everything a report says of a run; raises RecordError where the folder is none."""
    facts = gather(folder)
    return Read(facts=facts, digest=digest_samples(facts), audit=audit(folder), explanation=explain(facts))


def make_report(folders: Sequence[Path], *, out: Path, issued: str, entries: Mapping[str, str] | None = None) -> Made:
    """Write the report of these runs into the folder `out`, and beside each run tables of its intervals and features.

    Each file is replaced in one step; nothing of a run itself is touched. Raises RecordError.
    """
    reads = [read_run(folder) for folder in folders]
    text = render(reads, Wish(issued=issued, entries=entries or {}))
    with_cycles = [read for read in reads if read.digest.features]
    made = Made(
        report=out / REPORT_FILE,
        junit=out / JUNIT_FILE,
        intervals=tuple(read.facts.folder / INTERVALS_FILE for read in reads),
        features=tuple(read.facts.folder / FEATURES_FILE for read in with_cycles),
    )
    try:
        out.mkdir(parents=True, exist_ok=True)
        replace_file(made.report, text.encode("utf-8"))
        replace_file(
            made.junit, junit_xml([read.facts for read in reads], [read.audit for read in reads]).encode("utf-8")
        )
        for path, read in zip(made.intervals, reads, strict=True):
            replace_file(path, intervals_csv(read.digest))
        for path, read in zip(made.features, with_cycles, strict=True):
            replace_file(path, features_csv(read.digest.features))
    except OSError as error:
        why = f"the report cannot be written in {out}: {error.strerror or error}"
        raise RecordError(f"{why}; --out DIR puts it elsewhere") from error
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
        writer.writerow([digest.number_of(row), f"{row.begin_s:.3f}", f"{row.end_s:.3f}", row.samples, *cells])
    return out.getvalue().encode("utf-8")


def features_csv(features: Sequence[TurnFeatures]) -> bytes:
    """The features of each cycle, and of each check as number 0, a line each; those that are missing are empty.

    A feature that is missing in all of them has no column.
    """
    out = io.StringIO(newline="")
    writer = csv.writer(out)
    names = names_of(features)
    heads = [f"{name} ({unit_of(name)})" if unit_of(name) else name for name in names]
    writer.writerow(["number", "part", "begin_tick", "end_tick", "outcome", "samples", "left_out", *heads])
    for each in features:
        span, values = each.span, each.values()
        cells = ["" if math.isnan(values.get(name, math.nan)) else f"{values[name]:.6g}" for name in names]
        place = [span.number, span.part, span.begin_tick, span.end_tick, span.outcome or "check"]
        writer.writerow([*place, each.samples, each.left_out, *cells])
    return out.getvalue().encode("utf-8")
