"""The protections of a run: what people declare, what the board was shown to have in force, and which were off."""

from __future__ import annotations

from collections.abc import Mapping

from ramprig.bench import echo_lines
from ramprig.session.limits import LimitTable
from ramprig_link.words import LIMITS

from . import page
from .facts import Facts

TRIPS = {
    "trip_ma": "overcurrent",
    "rated_ma": "overload",
    "stall_duty": "stall",
    "wrong_counts": "wrong_way",
    "speed_counts": "overspeed",
    "under_mv": "undervoltage",
    "over_mv": "overvoltage",
    "lease_ms": "link_lost",
}
"""The trip that belongs to each limit."""
OFF_AT_ZERO = {
    "rated_ma": "rated_ma",
    "stall_duty": "stall_duty",
    "wrong_counts": "stall_duty",
    "speed_counts": "speed_counts",
    "under_mv": "under_mv",
}
"""A limit's trip is off where this limit of the same axis is 0: SPEC.md's table of limits."""
NO_LIMIT = ("safety: ", "note: ")


def is_off(limits: Mapping[tuple[str, int], int], item: str, index: int) -> bool:
    """Whether the trip that belongs to a limit is switched off."""
    return item in OFF_AT_ZERO and limits.get((OFF_AT_ZERO[item], index)) == 0


def protections(facts: Facts) -> str:
    """What the bench file declares, and what the board was shown to have in force."""
    bench = facts.bench
    declared: list[tuple[str, object]] = []
    if bench is not None:
        safety = bench.safety
        declared = [
            ("power cut", safety.power_cut),
            ("fuse", f"{safety.fuse_a:g} A" if safety.fuse_a else ""),
            ("guard", safety.guard),
            ("who answers for the rig", safety.contact),
        ]
    text = "Declared by people in the bench file; this program cannot check them."
    limits = "The software stop is not an emergency stop and not a safety function."
    return (
        "<h3>Declared</h3>"
        + page.paragraph(f"{text} {limits}")
        + page.facts(declared)
        + "<h3>In force on the board</h3>"
        + page.facts(_in_force(facts))
        + _in_words(facts)
        + _limits_table(facts)
    )


def stop_text(facts: Facts) -> str:
    """Whether the stop at the end was confirmed."""
    confirmed = (facts.manifest.get("results") or {}).get("stop_confirmed")
    if confirmed is None:
        return "not known"
    return "outputs off, confirmed" if confirmed else "NOT CONFIRMED that the outputs were off"


def _in_force(facts: Facts) -> list[tuple[str, object]]:
    armed = facts.of("armed")
    times = "once" if len(armed) == 1 else f"{len(armed)} times"
    return [
        ("limits of the board are those of the bench file (digest)", _same_limits(facts)),
        ("outputs enabled", times if armed else "never"),
        ("lease: the board stops by itself after", f"{armed[-1].get('lease_ms')} ms of silence" if armed else "-"),
        ("trips in this run", str(facts.counts["tripped"])),
        ("stop at the end", stop_text(facts)),
    ]


def _same_limits(facts: Facts) -> str:
    """By the digest that the board told each time it was opened."""
    told = list(
        dict.fromkeys(str(event["limits_digest"]) for event in facts.of("opened") if event.get("limits_digest"))
    )
    own = LimitTable(facts.limits).digest if facts.limits else ""
    if not (told and own):
        return "not known"
    if told == [own]:
        return f"yes: {own}"
    return f"NO: the board has told {', '.join(told)}, the bench file comes to {own}"


def _in_words(facts: Facts) -> str:
    """The bench file's meaning, as `ramprig check` tells it, without the port and what is no limit."""
    if facts.bench is None or not facts.limits:
        return ""
    lines = echo_lines(facts.bench, tick_us=facts.tick_us)[1:]
    rows = [[page.text(line)] for line in lines if not line.startswith(NO_LIMIT) and ": measured: " not in line]
    return page.table(["in words, from the bench file"], rows)


def _limits_table(facts: Facts) -> str:
    rows = []
    for (item, index), value in facts.limits.items():
        limit = LIMITS[item]
        kind = "trip" if item in TRIPS else "setting"
        if is_off(facts.limits, item, index):
            kind = "OFF"
        name, unit = f"<code>{page.text(item)}</code>", page.text(limit.unit) if limit.unit else ""
        rows.append([page.text(facts.owner_of(limit.per, index)), name, str(value), unit, kind])
    heads = ["whose", "as the board holds it", "value", "unit", ""]
    return page.table(heads, rows, numbers=(2,)) if rows else ""
