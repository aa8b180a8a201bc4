"""What a cycle says of wear becomes the rules of its block on a bench, or an error at the limit that cannot be."""

from __future__ import annotations

from collections.abc import Iterator, Set
from dataclasses import replace

from ramprig.yamlfile import suggestion

from .plan import Cycles
from .rig import Axis, Rig
from .steps import Cycle
from .wear_limits import (
    CHECKS_RUN_IN,
    RUN_IN_TIME_CONSTANTS,
    SaidLimit,
    TurnKind,
    WearLimit,
    WearRules,
    WearWish,
)
from .wear_words import FEATURE_WORDS, Whose, full_names


def wear_rules(
    rig: Rig, step: Cycle, *, block: int, driven: Set[str], driven_in_check: Set[str] | None
) -> tuple[WearRules, ...]:
    """The rules of the block: for its cycles and, where it has some, for its checks; none where nothing is judged.

    `driven` are the motors that a cycle drives, `driven_in_check` those of a check, None where it has none. Raises
    `FileError` at a limit of a motor that the bench does not have, that is not driven, or that lacks the encoder that
    the feature needs; and at limits of checks where there are none.
    """
    wish = step.wear
    if wish is None:
        return ()
    cycles = WearRules(
        block=block,
        name=step.name,
        turn=TurnKind.CYCLE,
        run_in_turns=wish.run_in_cycles,
        run_in_s=_run_in_s(rig, wish, driven),
        baseline=wish.baseline,
        detectors=wish.detectors,
        drives=(*sorted(driven), *rig.channels),
        limits=tuple(limit for said in wish.limits for limit in _limits(rig, said, driven)),
        others=wish.others,
    )
    checks = wish.checks
    if driven_in_check is None or checks is None:
        if checks is not None and checks.limits:
            raise checks.limits[0].mark.error("this limits a check, and the cycle has none", "add 'check', or leave it")
        return (cycles,)
    return (
        cycles,
        replace(
            cycles,
            turn=TurnKind.CHECK,
            run_in_turns=CHECKS_RUN_IN,
            baseline=checks.baseline,
            detectors=False,
            drives=(*sorted(driven_in_check), *rig.channels),
            limits=tuple(limit for said in checks.limits for limit in _limits(rig, said, driven_in_check)),
            others=checks.others,
        ),
    )


def _run_in_s(rig: Rig, wish: WearWish, driven: Set[str]) -> float:
    if wish.run_in_s is not None:
        return float(wish.run_in_s)
    slowest_s = max((_time_constant_s(rig, rig.axes[name]) for name in driven), default=0.0)
    return RUN_IN_TIME_CONSTANTS * slowest_s


def _time_constant_s(rig: Rig, axis: Axis) -> float:
    """That of the overload trip, or of the bench file's model where it is longer."""
    limit_s = float(rig.limits["thermal_s", axis.index])
    model = axis.motor.model
    return limit_s if model is None or model.thermal_s is None else max(limit_s, model.thermal_s)


def _limits(rig: Rig, said: SaidLimit, driven: Set[str]) -> Iterator[WearLimit]:
    match FEATURE_WORDS[said.word].whose:
        case Whose.SERVO:
            _check_servo(rig, said)
        case Whose.MOTOR | Whose.WAY:
            _check_motor(rig, said, driven)
    for name in full_names(said.word, said.drive, said.way):
        yield WearLimit(feature=name, watch=said.watch, fail=said.fail, k=said.k, n=said.n, place=str(said.mark.place))


def _check_servo(rig: Rig, said: SaidLimit) -> None:
    if said.drive not in rig.channels:
        found = f"the bench has no servo '{said.drive}'"
        raise said.drive_mark.error(found, suggestion(said.drive, rig.channels, "its servos"))


def _check_motor(rig: Rig, said: SaidLimit, driven: Set[str]) -> None:
    axis = rig.axes.get(said.drive)
    if axis is None:
        found = f"the bench has no motor '{said.drive}'"
        raise said.drive_mark.error(found, suggestion(said.drive, rig.axes, "its motors"))
    if said.drive not in driven:
        raise said.drive_mark.error(f"'{said.drive}' is not driven here", "limit a motor that is")
    if FEATURE_WORDS[said.word].needs_encoder and not axis.has_encoder:
        found = f"'{said.drive}' has no encoder, so its {said.word} is not measured"
        raise said.drive_mark.error(found, "limit its steady current, peak current or energy")


def unjudged(part: Cycles) -> Iterator[str]:
    """A sentence for each kind of turn that a block has too few of for its changes to be judged, where a file limits
    them."""
    if part.times is None:
        return
    for rules in part.wear:
        many = part.times
        if rules.turn is TurnKind.CHECK:
            many = 1 + part.times // (part.check_every or 1)
        least = rules.run_in_turns + rules.baseline
        if many <= least and any(_is_change(limit) for limit in rules.limits):
            told = f"{many} {rules.turn}s of '{part.name}' are" if many > 1 else f"one {rules.turn} of '{part.name}' is"
            yield f"{told} too few to judge a change: that takes more than {least}"


def _is_change(limit: WearLimit) -> bool:
    return any(each is not None and each.is_share for each in (limit.watch, limit.fail))
