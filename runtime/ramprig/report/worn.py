"""What the limits to wear say of a run: a case for each of them, and the likely cause where one ended the run."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

from ramprig.endure.trends import FeatureTrend, Finding, Level
from ramprig.endure.wear import BlockJudge
from ramprig.sequence.wear_limits import TurnKind, WearLimit
from ramprig.sequence.wear_words import show_feature, word_of

from .facts import Document, Facts
from .trends import cycles_of, wear_of
from .tripcauses import Cause

NEXT_STEPS = {
    "steady current": "Turn the shaft by hand with the power cut: gear, bearings, brushes; compare it with a new one.",
    "peak current": "Look at what the motor starts against, and at its supply; compare with a new one.",
    "energy": "Look for what takes it: friction, or a load that has changed; compare with a new one.",
    "steady speed": "Measure winding and leads (`ramprig measure constants`): resistance or friction has changed.",
    "time to speed": "Measure winding and leads (`ramprig measure constants`): resistance or friction has changed.",
    "coast-down time": "Turn the shaft by hand with the power cut: gear, bearings, brushes.",
    "break-away duty": "Turn the shaft by hand with the power cut: where does it stick? Look at brushes and grease.",
    "break-away current": "Turn the shaft by hand with the power cut: where does it stick? Look at brushes and grease.",
    "start delay": "Turn the shaft by hand with the power cut: is there play, or does it stick?",
    "resistance": "Look at brushes, leads and plugs; measure it cold (`ramprig measure constants`).",
    "lost motion": "Look for play: gear, coupling, set screws.",
    "move time": "Move the servo's horn by hand with the power cut: does it bind, has it play?",
    "supply sag": "Move the servo's horn by hand with the power cut: does it bind? Look at supply and plugs.",
    "position error": "Look for slip and play: coupling, set screws, gear; then for counts that get lost.",
    "travel ratio": "Look for slip and play: coupling, set screws, gear; then for counts that get lost.",
    "lowest supply": "Look at supply, leads and plugs.",
}
"""What to look at first, by the feature's word; common practice, no certainty."""
ELSE_NEXT = "Look at the trends of the other features in the report, and compare with a new one."


@dataclass(frozen=True, slots=True, kw_only=True)
class WearCase:
    """One limit over the whole run; `failure` where its `fail` was passed, `skipped` where nothing could be judged."""

    group: str
    name: str
    out: str
    failure: str = ""
    skipped: str = ""


def worn_causes(facts: Facts) -> Iterator[Cause]:
    """The likely cause of a run that a limit to wear has ended."""
    for event in facts.of("wear_found"):
        if event.get("level") != Level.FAIL.name.lower():
            continue
        feature = str(event.get("feature"))
        yield Cause(
            key="wear",
            sentence=f"worn, or drifted, beyond a limit of the file: {feature} is {_now(feature, event)}",
            evidence=(str(event.get("text")), *_others(facts, feature)),
            next_step=NEXT_STEPS.get(word_of(feature), ELSE_NEXT),
            weight=0.97,
        )
        return


def _now(feature: str, event: Document) -> str:
    now = event.get("now")
    return show_feature(feature, float(now)) if isinstance(now, int | float) else "not known"


def _others(facts: Facts, feature: str) -> tuple[str, ...]:
    """Other features that have changed before."""
    names = dict.fromkeys(str(event.get("feature")) for event in facts.of("wear_found"))
    others = [name for name in names if name != feature]
    return (f"changed before: {', '.join(others)}",) if others else ()


def wear_cases(facts: Facts) -> Iterator[WearCase]:
    """A case for each limit that was in force; none in a run that recorded none."""
    if "wear" not in (facts.manifest.get("settings") or {}):
        return
    judge, findings = wear_of(facts, cycles_of(facts, ()))
    several = len({number for number, _ in judge.blocks}) > 1
    for (number, turn), block in judge.blocks.items():
        of_block = [finding for at, finding in findings if at == number and finding.turn == turn]
        group = f"wear '{block.rules.name}'" + (f" ({number})" if several else "")
        group += " checks" if turn is TurnKind.CHECK else ""
        own = {limit.feature for limit in block.rules.limits}
        cases = [
            _case(
                group,
                limit,
                block,
                block.features.get(limit.feature),
                [each for each in of_block if each.feature == limit.feature],
            )
            for limit in block.rules.limits
        ]
        if block.rules.others is not None:
            rest = [each for each in of_block if each.feature not in own]
            trends = [trend for name, trend in block.features.items() if name not in own]
            cases.append(_others_case(group, block.rules.others, block, trends, rest))
        yield from (_not_to_the_end(case, facts) for case in cases)


def unjudged_since(facts: Facts) -> list[str]:
    """Since when, and why, wear was not judged while the run was under way; empty where it was to the end."""
    return [str(event.get("text")) for event in facts.of("wear_unjudged")]


def _not_to_the_end(case: WearCase, facts: Facts) -> WearCase:
    """The case; of a run whose judge gave up, only what it had found before counts."""
    since = "; ".join(unjudged_since(facts))
    return replace(case, skipped=since) if since and not case.failure else case


def _case(
    group: str, limit: WearLimit, block: BlockJudge, trend: FeatureTrend | None, findings: list[Finding]
) -> WearCase:
    name = f"{limit.feature}: {limit}"
    lines = [f"limit at {limit.place}", *map(str, findings)]
    failed = next((str(each) for each in findings if each.level is Level.FAIL), "")
    if trend is None:
        why = _not_yet(block) or "no cycle showed this feature"
        return WearCase(group=group, name=name, out="\n".join(lines), skipped=why)
    if trend.established:
        first, now = (show_feature(limit.feature, each) for each in (trend.baseline.mean, trend.now))
        lines.append(f"{first} at first, {now} at the end")
    elif not findings and all(each is None or each.is_share for each in (limit.watch, limit.fail)):
        why = f"the baseline was not complete: {trend.baseline.count} of {block.rules.baseline} {block.rules.turn}s"
        return WearCase(group=group, name=name, out="\n".join(lines), skipped=why)
    return WearCase(group=group, name=name, out="\n".join(lines), failure=failed)


def _others_case(
    group: str, limit: WearLimit, block: BlockJudge, trends: list[FeatureTrend], findings: list[Finding]
) -> WearCase:
    name = f"every other feature: {limit}"
    judged = sum(trend.established for trend in trends)
    out = f"{judged} of {len(trends)} features had a complete baseline\n"
    out += "\n".join(map(str, findings)) or "nothing was found"
    failed = next((str(each) for each in findings if each.level is Level.FAIL), "")
    if not findings and not judged:
        return WearCase(group=group, name=name, out=out, skipped=_not_yet(block) or "the baseline was not complete")
    return WearCase(group=group, name=name, out=out, failure=failed)


def _not_yet(block: BlockJudge) -> str:
    if block.turns > block.run_in:
        return ""
    return f"the run-in was not over: {block.turns} {block.rules.turn}s were done"
