"""What a cycle says of wear becomes the rules of its block on a bench, or an error at the limit that cannot be."""

from __future__ import annotations

from collections.abc import Iterator, Set

from ramprig.yamlfile import suggestion

from .rig import Axis, Rig
from .steps import Cycle
from .wear_limits import RUN_IN_TIME_CONSTANTS, SaidLimit, WearLimit, WearRules, WearWish
from .wear_words import FEATURE_WORDS, full_names


def wear_rules(rig: Rig, step: Cycle, *, block: int, driven: Set[str]) -> WearRules | None:
    """The rules of the block, None where nothing is judged; `driven` are the motors that a cycle drives.

    Raises `FileError` at a limit of a motor that the bench does not have, that is not driven, or that lacks the encoder
    that the feature needs.
    """
    wish = step.wear
    if wish is None:
        return None
    limits = tuple(limit for said in wish.limits for limit in _limits(rig, said, driven))
    return WearRules(
        block=block,
        name=step.name,
        run_in_cycles=wish.run_in_cycles,
        run_in_s=_run_in_s(rig, wish, driven),
        baseline=wish.baseline,
        detectors=wish.detectors,
        motors=tuple(sorted(driven)),
        limits=limits,
        others=wish.others,
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
    if said.motor:
        _check_motor(rig, said, driven)
    for name in full_names(said.word, said.motor, said.way):
        yield WearLimit(feature=name, watch=said.watch, fail=said.fail, k=said.k, n=said.n, place=str(said.mark.place))


def _check_motor(rig: Rig, said: SaidLimit, driven: Set[str]) -> None:
    axis = rig.axes.get(said.motor)
    if axis is None:
        found = f"the bench has no motor '{said.motor}'"
        raise said.motor_mark.error(found, suggestion(said.motor, rig.axes, "its motors"))
    if said.motor not in driven:
        raise said.motor_mark.error(f"'{said.motor}' is not driven in this cycle", "limit a motor that is")
    if FEATURE_WORDS[said.word].needs_encoder and not axis.has_encoder:
        found = f"'{said.motor}' has no encoder, so its {said.word} is not measured"
        raise said.motor_mark.error(found, "limit its steady current, peak current or energy")
