"""The account of a run's samples, part by part, checked against the rows that were there when the report was made."""

from __future__ import annotations

from ramprig.record.reading import Audit

from . import page
from .facts import Document, Facts
from .kept import said_of_thinning, whole_of

GAPS_MAX = 400
"""Gaps in the table; those left out are counted and stand in run.json."""
NAMES = (
    *("expected", "received", "lost", "written", "thinned", "unwritten"),
    *("recovered", "duplicates", "strange_lines"),
)
COLUMNS = ("expected", "received", "lost", "written", "thinned")


def account(facts: Facts, audit: Audit) -> str:
    """Where every sample is."""
    found = facts.manifest.get("samples") or {}
    pairs: list[tuple[str, object]] = [(name.replace("_", " "), str(found[name])) for name in NAMES if name in found]
    pairs.append(("rows in the files", str(audit.rows)))
    pairs.append(("confirmed by the board", "yes, for every logging" if found.get("complete") else "no"))
    statements = audit.statements or (f"{whole_of(found)}, and no file was changed.",)
    thinned = said_of_thinning(facts)
    statements = (thinned, *statements) if thinned else statements
    files = [
        [page.text(entry.get("file")), str(entry.get("lines")), f"<code>{page.text(entry.get('sha256'))}</code>"]
        for entry in facts.manifest.get("files") or []
    ]
    hashes = page.table(["file", "lines", "SHA-256"], files, numbers=(1,)) if files else ""
    told = "".join(page.paragraph(text) for text in statements)
    return page.facts(pairs) + _parts(facts) + told + _gaps(found) + hashes


def _parts(facts: Facts) -> str:
    """The account of each part of a run that was gone on with; one that broke off has none."""
    if len(facts.parts) < 2:
        return ""
    rows = []
    for part in facts.parts:
        own = part.get("samples") or {}
        cells = [str(own.get(name, 0)) for name in COLUMNS] if own else ["no account"] + [""] * (len(COLUMNS) - 1)
        rows.append([page.text(part.get("part")), page.text(part.get("verdict") or part.get("status")), *cells])
    return page.table(["part", "ended as", *COLUMNS], rows, numbers=range(2, 2 + len(COLUMNS)))


def _gaps(found: Document) -> str:
    gaps = found.get("gaps") or []
    rows = [
        [str(gap.get("first_tick")), str(gap.get("count")), str(gap.get("period_ticks")), page.text(gap.get("reason"))]
        for gap in gaps[:GAPS_MAX]
    ]
    if not rows:
        return ""
    more = len(gaps) - len(rows) + int(found.get("gaps_unlisted") or 0)
    table = page.table(["lost from tick", "samples", "every", "why"], rows, numbers=(0, 1, 2))
    return table + (page.paragraph(f"{more} gaps more are counted above and not listed.") if more else "")
