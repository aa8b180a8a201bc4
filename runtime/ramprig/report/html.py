"""The report of a run as one self-contained HTML file.

Its contents follow the list of ISO/IEC 17025:2017 clause 7.8.2 where it applies; clause letters are given from memory
and the report claims no accreditation.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field

from ramprig import __version__
from ramprig.record.reading import Audit

from . import page, plots, sections
from .account import account
from .checks import checks_table
from .compare import compared
from .digest import Digest
from .explain import Explanation, view_of_trip
from .facts import BROKEN_OFF, UNDER_WAY, Facts
from .protections import protections
from .results import results
from .trends import rules_in_force, seen_of
from .untold import untold_table
from .worn import unjudged_since

ENTRIES = {
    "lab": "laboratory and its address",
    "customer": "customer and contact",
    "item": "item tested, and how it is told apart",
    "condition": "condition of the item",
    "received": "date of receipt",
    "environment": "environment",
    "instruments": "instruments and their calibration",
    "authorised": "authorised by",
    "deviations": "deviations from the method",
}
"""What a person may enter for the report: name and meaning."""


@dataclass(frozen=True, slots=True, kw_only=True)
class Read:
    """One run, read whole: its facts, the digest of its samples, the audit of its account, and why it ended."""

    facts: Facts
    digest: Digest
    audit: Audit
    explanation: Explanation | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Wish:
    """What goes onto the paper besides the runs: `issued` is the time of writing, `entries` what people said."""

    issued: str
    entries: Mapping[str, str] = field(default_factory=dict)


class _Figures:
    """Numbers figures through the whole report."""

    def __init__(self) -> None:
        self._count = 0

    def put(self, found: list[plots.Plot]) -> str:
        parts = []
        for plot in found:
            self._count += 1
            parts.append(page.figure(self._count, plot.caption, plot.svg))
        return "".join(parts)


def report_id(reads: list[Read], wish: Wish) -> str:
    """Unique for this issue: the name of the first run and a hash of `run.json` of each, of the notes, the time of
    issue and what was entered."""
    digest = hashlib.sha256(json.dumps([wish.issued, sorted(wish.entries.items())]).encode("utf-8"))
    for read in reads:
        digest.update((read.facts.folder / "run.json").read_bytes())
        digest.update(json.dumps(read.facts.notes, sort_keys=True).encode("utf-8"))
    more = f"+{len(reads) - 1}" if len(reads) > 1 else ""
    return f"{reads[0].facts.name}{more} / {digest.hexdigest()[:12]}"


def render(reads: list[Read], wish: Wish) -> str:
    """The whole file for one run, or for several with what differs between them first."""
    number_of = report_id(reads, wish)
    clauses = sections.clauses(wish.entries, [read.facts for read in reads])
    figures = _Figures()
    title = f"Test report: {reads[0].facts.manifest.get('name') or reads[0].facts.name}"
    if len(reads) > 1:
        title = f"Comparison of {len(reads)} test runs"
    parts = [_head(title, number_of, reads, wish)]
    number = 1
    if len(reads) > 1:
        parts.append(page.section(number, "Conditions of the runs compared", number_of, compared(reads)))
        number += 1
    for place, read in enumerate(reads, 1):
        prefix = f"Run {place}: " if len(reads) > 1 else ""
        for name, content in _parts_of(read, wish, figures):
            parts.append(page.section(number, prefix + name, number_of, content))
            number += 1
    parts.append(page.section(number, "What this report holds of clause 7.8.2", number_of, clauses))
    parts.append(_end(number_of, wish.entries.get("authorised")))
    return page.page(title, number_of, "\n".join(parts))


def _head(title: str, number_of: str, reads: list[Read], wish: Wish) -> str:
    verdicts = "".join(_verdict(read, named=len(reads) > 1) for read in reads)
    return (
        '<header><p class="kicker">ramprig '
        f"{__version__} &middot; motor bench</p><h1>{page.text(title)}</h1>"
        f'<p class="id">report {page.text(number_of)}<br>issued {page.text(wish.issued)}</p></header>{verdicts}'
    )


_SIGNS = {"passed": ("passed", "&#10003;"), UNDER_WAY: ("", "&#8230;")}
_NO_REASON = {UNDER_WAY: "The run was still being written when this report was made: it tells of no end."}


def _verdict(read: Read, *, named: bool) -> str:
    facts = read.facts
    word = facts.verdict
    kind, mark = _SIGNS.get(word, ("bad", "&#10007;"))
    reason = facts.manifest.get("stop_reason") or _NO_REASON.get(word, "no reason was written")
    lines = [f'<p class="word">{mark} {page.text(word)}</p>', f"<p>{page.text(reason)}</p>"]
    if read.audit.statements and word not in (UNDER_WAY, BROKEN_OFF):
        more = f" (and {len(read.audit.statements) - 1} more)" if len(read.audit.statements) > 1 else ""
        text = f"The record is not what the run says that it is: {read.audit.statements[0]}{more}."
        lines.append(f'<p class="differs">{page.text(text)} See Account of the samples.</p>')
    if named:
        lines.insert(0, f'<p class="id named">{page.text(facts.name)}</p>')
    if read.explanation is not None and read.explanation.likely is not None:
        likely = read.explanation.likely
        lines.insert(0, f"<p><strong>Likely cause: {page.text(likely.sentence)}.</strong></p>")
        lines.append(f"<p>Because: {page.text('; '.join(likely.evidence))}.</p>")
        lines.append(f"<p>Next: {page.text(likely.next_step)}</p>")
        others = [cause.sentence for cause in read.explanation.causes[1:3] if cause.weight >= 0.25]
        if others:
            lines.append(f'<p class="note">Less likely: {page.text("; or ".join(others))}.</p>')
    return f'<div class="verdict {kind}">{"".join(lines)}</div>'


def _parts_of(read: Read, wish: Wish, figures: _Figures) -> list[tuple[str, str]]:
    """The parts of one run: name and content."""
    facts, digest = read.facts, read.digest
    interruptions = ("Deviations and interruptions", sections.interruptions(facts, digest, wish.entries))
    found = [
        ("Item, rig and environment", sections.item_and_rig(facts, wish.entries)),
        ("Method", sections.method(facts)),
        ("Results", results(facts, digest.totals) + _ranges(facts, digest)),
        interruptions,
        ("Account of the samples", account(facts, read.audit)),
        ("Protections", protections(facts)),
    ]
    trip = view_of_trip(facts)
    if trip is not None:
        record = ("Record around the trip", figures.put(plots.trip_record(*trip)))
        # a trip that the run went on after is one of its interruptions, and not the first thing to be told
        found.insert(found.index(interruptions) + 1 if facts.was_outlived(trip[0]) else 0, record)
    pictures = figures.put(plots.against_time(facts, digest))
    found.append(("Against time", pictures or page.paragraph("There are no samples to draw.", kind="note")))
    for name, pictures in (
        ("Cycle over cycle", figures.put(plots.overlays(facts, digest)) + _trends(read, figures)),
        ("Duty to speed", figures.put(plots.curves(facts, digest))),
    ):
        if pictures:
            found.append((name, pictures))
    return found


def _trends(read: Read, figures: _Figures) -> str:
    """What the features showed, in words first, then each against the cycle where there are turns enough to draw."""
    facts, digest = read.facts, read.digest
    seen = seen_of(facts, digest)
    words = "".join(page.paragraph(text, kind="note") for text in unjudged_since(facts))
    if seen.drawn or seen.turns:
        words += sections.trend_findings(seen, rules_in_force(facts))
    if not words:
        return ""
    if digest.features_left_out:
        text = f"features.csv and the tables below have the first {len(digest.features)} cycles and checks; "
        words += page.paragraph(f"{text}{digest.features_left_out} later ones are in cycles.jsonl alone.", kind="note")
    tables = checks_table(digest.features, facts.blocks())
    tables += untold_table(digest.features, motors=facts.motors, servos=facts.servos)
    return words + figures.put(plots.by_cycle(facts, seen.drawn)) + tables


def _ranges(facts: Facts, digest: Digest) -> str:
    """Of what was logged: the plot around a trip may show more."""
    rows = []
    for column, triple in digest.totals.items():
        name, unit = plots.label_of(column)
        rows.append([page.text(name), *page.alike(triple), page.text(unit)])
    if not rows:
        return ""
    heads = ["over all samples", "least", "mean", "greatest", "unit"]
    said = "What came and went between two samples is not in these; the board's own limits look at every tick."
    if facts.counts["tripped"]:
        said += " Its record around a trip stands under its own heading."
    table = page.table(heads, rows, numbers=(1, 2, 3))
    return "<h3>Range of each quantity</h3>" + table + page.paragraph(said, kind="note")


def _end(number_of: str, authorised: str | None) -> str:
    return (
        f"<h3>Authorised by</h3><p>{page.text(authorised)}</p>"
        '<div class="end"><p style="max-width:none">The results relate only to the items tested, in the condition and '
        "under the conditions told above.<br>This report is to be passed on whole.</p>"
        f'<p class="id" style="text-align:center;max-width:none">End of report {page.text(number_of)}</p></div>'
    )
