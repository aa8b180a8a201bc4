"""What a report takes from a thinned log: the ranges that were recorded over all samples, and how to say it."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from ramprig.errors import RecordError
from ramprig.record.appendfile import whole_lines
from ramprig.record.folder import CYCLE_RANGES_FILE, INTERVAL_RANGES_FILE
from ramprig.record.keeping import Around, Thinning
from ramprig.sequence.log_forecast import said_of

from .facts import Facts


@dataclass(frozen=True, slots=True)
class RangeLine:
    """One span of a ranges file: the times of its first and last sample, and of each column least, mean, greatest and
    how many samples had a value; columns without any are not among them."""

    what: str
    number: int
    first_s: float
    last_s: float
    samples: int
    columns: Mapping[str, tuple[float, float, float, int]]


def thinning_of(facts: Facts) -> Thinning | None:
    """The rule by which the log was thinned, by the first part that was; None where every row was to be kept."""
    for part in [facts.manifest, *facts.parts]:
        rule = (part.get("keeping") or {}).get("thinning")
        if rule is not None:
            return Thinning(
                every=rule.get("every"),
                ranges_s=rule.get("ranges_s"),
                before_s=float(rule["before_s"]),
                after_s=float(rule["after_s"]),
                around=frozenset(Around(word) for word in rule["around"]),
            )
    return None


def ranges_path(facts: Facts, *, with_cycles: bool) -> Path | None:
    """The ranges over all samples of the run: of its cycles if it has any and they are wanted, else of its intervals;
    None where there are neither."""
    names = [CYCLE_RANGES_FILE, INTERVAL_RANGES_FILE] if with_cycles else [INTERVAL_RANGES_FILE, CYCLE_RANGES_FILE]
    return next((facts.folder / name for name in names if (facts.folder / name).is_file()), None)


def has_cycle_ranges(facts: Facts) -> bool:
    """Whether ranges of cycles were recorded."""
    return (facts.folder / CYCLE_RANGES_FILE).is_file()


def read_ranges(path: Path, columns: tuple[str, ...]) -> Iterator[RangeLine]:
    """The spans with samples, one after another, to the end of what is whole. Raises RecordError.

    A torn end is left out, and so is what follows a place that a loss of power left empty; the audit says so.
    """
    names: list[str] = []
    try:
        for data, _ in whole_lines(path):
            for texts in csv.reader(io.StringIO(data.decode("utf-8"), newline="")):
                if not names:
                    names = texts
                    continue
                fields = dict(zip(names, texts, strict=True))
                if int(fields["samples"]):
                    yield _line(fields, columns)
    except (OSError, ValueError, KeyError, csv.Error) as error:
        raise RecordError(f"{path} cannot be read as a ranges file: {error!r}") from error


def _line(fields: Mapping[str, str], columns: tuple[str, ...]) -> RangeLine:
    found = {}
    for name in columns:
        count = int(fields.get(f"{name}.count") or 0)
        if count:
            least, mean, greatest = (float(fields[f"{name}.{each}"]) for each in ("least", "mean", "greatest"))
            found[name] = least, mean, greatest, count
    return RangeLine(
        fields["what"],
        int(fields["number"]),
        float(fields["first_s"]),
        float(fields["last_s"]),
        int(fields["samples"]),
        found,
    )


def said_of_thinning(facts: Facts) -> str:
    """How the log was thinned and what the report makes of it; empty where it was not."""
    rule = thinning_of(facts)
    if rule is None:
        return ""
    spans = facts.counts["full_rate_begun"]
    text = (
        f"The log was thinned on purpose: {said_of(rule)}. Full rate was kept {spans} times, the begin and the end of "
        "the run among them. Every sample was received and judged while the run was under way; those left out are "
        "counted as thinned, not as lost."
    )
    path, finest = (ranges_path(facts, with_cycles=wanted) for wanted in (True, False))
    if path is None or finest is None:
        return f"{text} Plots and ranges show the rows that were kept: what lay between two of them is not known."
    return f"{text} Ranges are of all samples, from {path.name}, and the bands of the plots too, from {finest.name}."


def whole_of(found: Mapping[str, Any]) -> str:  # Any: JSON as it comes
    """What holds by the account of a run where the audit has found nothing."""
    where = (
        "is in the file, thinned on purpose or told as lost"
        if found.get("thinned")
        else "is in the file or told as lost"
    )
    without = found.get("parts_without_account") or []
    if not without:
        return f"Every sample {where}"
    which = f"part{'s' if len(without) > 1 else ''} {', '.join(map(str, without))}"
    return f"Every sample of the parts with an account {where}; what came after the last row of {which} is not known"
