"""Tells what the checks between cycles showed: each feature at the first and at the last of them, and the change.

Checks run the same short reference each time, so that their features do not depend on the load of the cycles. There
are few of them; nothing is judged here.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from html import escape

from ramprig.endure.features import is_judged, unit_of
from ramprig.endure.recorded import TurnFeatures

from . import page

CHECKS_MIN = 2


def checks_table(features: Sequence[TurnFeatures], blocks: Mapping[tuple[int, int], tuple[int, str]]) -> str:
    """A table of the checks among these features, with a heading, for each block of cycles that has CHECKS_MIN of them
    or more: those of different blocks are not alike. `blocks` is of `Facts.blocks`."""
    of_block: dict[tuple[int, str], list[TurnFeatures]] = {}
    for each in features:
        if each.span.is_check:
            of_block.setdefault(blocks.get((each.span.part, each.span.begin_tick), (1, "")), []).append(each)
    whose = {key: f" of '{key[1]}'" if len(of_block) > 1 else "" for key in of_block}
    return "".join(_table(checks, whose[key]) for key, checks in of_block.items() if len(checks) >= CHECKS_MIN)


def _table(checks: Sequence[TurnFeatures], whose: str) -> str:
    first, last = checks[0].values(), checks[-1].values()
    rows = []
    for name, before in first.items():
        after = last.get(name, math.nan)
        if math.isnan(before) or math.isnan(after):
            continue
        change = f"{100.0 * (after - before) / abs(before):+.1f} %" if before and is_judged(name) else ""
        rows.append([page.text(name), f"{before:.4g}", f"{after:.4g}", change, unit_of(name)])
    if not rows:
        return ""
    said = f"{len(checks)} checks{whose} were done, the first after {checks[0].span.after} cycles and the last after "
    said += f"{checks[-1].span.after}. What was judged of them stands among the findings."
    heads = ["feature of the check", "first", "last", "change", "unit"]
    table = page.table(heads, rows, numbers=(1, 2, 3))
    return f"<h3>Checks between the cycles{escape(whose)}</h3>" + table + page.paragraph(said, kind="note")
