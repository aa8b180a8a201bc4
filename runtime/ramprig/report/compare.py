"""Sets runs beside each other: which conditions differ comes first, since those runs may not be comparable."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from ramprig.sequence.log_forecast import said_of
from ramprig_link.words import LIMITS

from . import page
from .kept import thinning_of
from .plots import label_of

if TYPE_CHECKING:
    from .facts import Facts
    from .html import Read

OTHERWISE = "-"


def conditions(facts: Facts) -> dict[str, str]:
    """What must be alike for two runs to be compared, by name."""
    manifest = facts.manifest
    device = manifest.get("device") or {}
    settings = manifest.get("settings") or {}
    inputs = {str(entry.get("role")): str(entry.get("sha256"))[:12] for entry in manifest.get("inputs") or []}
    loggings = (manifest.get("samples") or {}).get("loggings") or []
    found = {
        "simulated": f"yes, {manifest.get('port')}" if facts.is_simulated else "no",
        "board": f"{device.get('board')} {device.get('serial')}",
        "firmware": str(device.get("firmware")),
        "bench file": inputs.get("bench", OTHERWISE),
        "sequence file": inputs.get("sequence", OTHERWISE),
        "tick, us": str(facts.tick_us),
        "sample period, ticks": str(loggings[0].get("period_ticks")) if loggings else OTHERWISE,
        "log thinned": OTHERWISE if (rule := thinning_of(facts)) is None else said_of(rule),
        "software": str((manifest.get("software") or {}).get("ramprig")),
        "parts (interruptions)": str(len(facts.parts)),
    }
    found |= {f"value of {name}": str(value) for name, value in (settings.get("values") or {}).items()}
    if facts.bench is not None:
        found["supply, as the bench file says"] = f"{facts.bench.supply.voltage_v:g} V"
        for motor in facts.bench.motors:
            found[f"{motor.name}: counts a turn"] = f"{float(motor.counts_per_turn):g}"
    for (item, index), value in facts.limits.items():
        found[f"limit {item} of {facts.owner_of(LIMITS[item].per, index)}"] = f"{value} {LIMITS[item].unit}".rstrip()
    return found


def differing(runs: Sequence[Facts]) -> dict[str, list[str]]:
    """The conditions that are not alike in all runs, with what each run has."""
    each = [conditions(facts) for facts in runs]
    names = dict.fromkeys(name for found in each for name in found)
    rows = {name: [found.get(name, OTHERWISE) for found in each] for name in names}
    return {name: values for name, values in rows.items() if len(set(values)) > 1}


def compared(reads: list[Read]) -> str:
    """The part of a report that compares: what differs, then verdicts and ranges side by side."""
    heads = [f"run {place}" for place in range(1, len(reads) + 1)]
    names = [[heads[place], f"<code>{page.text(read.facts.name)}</code>"] for place, read in enumerate(reads)]
    unlike = differing([read.facts for read in reads])
    parts = [page.table(["", "run folder"], names)]
    if unlike:
        warning = (
            f"{len(unlike)} conditions differ between these runs. What differs in the results may come from them and "
            "not from the motors."
        )
        rows = [[page.text(name), *map(page.text, values)] for name, values in unlike.items()]
        parts.append(f'<div class="differs"><p><strong>&#9888; {page.text(warning)}</strong></p>')
        parts.append(page.table(["differs", *heads], rows) + "</div>")
    else:
        parts.append(page.paragraph("No recorded condition differs between these runs."))
    parts.append("<h3>Side by side</h3>")
    parts.append(page.table(["", *heads], [*_facts_rows(reads), *_range_rows(reads), *_expectation_rows(reads)]))
    return "".join(parts)


def _facts_rows(reads: list[Read]) -> list[list[str]]:
    pick: dict[str, Callable[[Read], str]] = {
        "verdict": lambda read: read.facts.verdict,
        "judgements that did not hold": lambda read: _judgements(read.facts),
        "rows": lambda read: str(read.digest.rows),
        "lasted, s": lambda read: f"{read.digest.last_s - read.digest.first_s:.1f}" if read.digest.rows else OTHERWISE,
        "cycles or passes begun": lambda read: str(len(read.facts.passes)),
        "trips": lambda read: str(read.facts.counts["tripped"]),
    }
    return [[page.text(name), *(page.text(of(read)) for read in reads)] for name, of in pick.items()]


def _judgements(facts: Facts) -> str:
    found = facts.expectations.values()
    return f"{sum(each.failed for each in found)} of {sum(each.judged for each in found)}"


def _range_rows(reads: list[Read]) -> list[list[str]]:
    columns = dict.fromkeys(column for read in reads for column in read.digest.totals)
    rows = []
    for column in columns:
        name, unit = label_of(column)
        cells = []
        for read in reads:
            found = read.digest.totals.get(column)
            cells.append(OTHERWISE if found is None else page.text(" / ".join(page.alike(found))))
        rows.append([page.text(f"{name}, {unit} (least / mean / greatest)"), *cells])
    return rows


def _expectation_rows(reads: list[Read]) -> list[list[str]]:
    keys = dict.fromkeys(key for read in reads for key in read.facts.expectations)
    rows = []
    for place, text in keys:
        cells = []
        for read in reads:
            found = read.facts.expectations.get((place, text))
            if found is None:
                cells.append(OTHERWISE)
                continue
            mark = "&#10003; pass" if not found.failed else f"&#10007; FAIL {found.failed} of {found.judged}"
            cells.append(f"{mark}; {page.text(found.span or found.last_found)}")
        rows.append([page.text(text), *cells])
    return rows
