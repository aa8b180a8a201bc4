"""How a file says which wear is watched for in a cycle, and which ends the run.

    wear:
      run in: {cycles: 20, for: 10 min}
      baseline: 100
      limits:
        - {feature: steady current, of: vent, going: forward, watch: +10 %, fail: +25 %, cycles: 3 of 5}
        - {feature: position error, of: vent, fail: -3 deg to 3 deg}
      other features: {watch: +- 15 %}
      detectors: on
      checks: {limits: [{feature: lost motion, of: vent, fail: at most 4 deg}]}

A threshold is a change against the baseline, with a sign and in %, or a range in the feature's unit.
"""

from __future__ import annotations

import re
from fractions import Fraction

from ramprig.errors import FileError
from ramprig.quantity import DURATION, SHARE, QuantityError, parse
from ramprig.yamlfile import (
    BandShape,
    CountShape,
    Fields,
    Key,
    ListShape,
    Mark,
    OrWord,
    QuantityShape,
    Reader,
    Record,
    Schema,
    Shape,
    TextShape,
    WordShape,
)

from .names import MOTOR_NAME
from .wear_limits import (
    BASELINE_CYCLES,
    BASELINE_LEAST,
    CHECKS_BASELINE,
    CHECKS_BASELINE_LEAST,
    K_DEFAULT,
    N_DEFAULT,
    OTHERS_DEFAULT,
    RUN_IN_CYCLES,
    ChecksWish,
    SaidLimit,
    Threshold,
    WearLimit,
    WearWish,
)
from .wear_words import FEATURE_WORDS, FeatureWord, Way, Whose, full_names

LIMITS_MAX = 100
N_MAX = 100
CYCLES_MAX = 10_000_000
SHARE_MOST = 1000
"""A change of more than this many % is no limit to wear."""

_NUMBER = r"[0-9]+(?:\.[0-9]+)?"
_BOTH = re.compile(rf"\+ ?/?- ?({_NUMBER} ?%)")
_ONE = re.compile(rf"([+-]) ?({_NUMBER} ?%)")
_PAIR = re.compile(rf"- ?({_NUMBER} ?%) to \+ ?({_NUMBER} ?%)")
_WANTED = "a change such as '+25 %', '-20 %', '+- 10 %' or '-5 % to +10 %'"


def _share(text: str) -> Fraction:
    share = parse(text, SHARE).value
    if not 0 < share <= SHARE_MOST:
        raise QuantityError(f"found a change of {text}", wanted=f"it must be above 0 and at most {SHARE_MOST} %")
    return share / 100


def share_threshold(text: str) -> Threshold | None:
    """The change against the baseline that `text` says, None where it says none. Raises QuantityError for a change
    that cannot be."""
    clean = " ".join(text.split())
    if both := _BOTH.fullmatch(clean):
        share = float(_share(both[1]))
        return Threshold(text=clean, low=-share, high=share)
    if one := _ONE.fullmatch(clean):
        share = float(_share(one[2]))
        return Threshold(text=clean, low=-share) if one[1] == "-" else Threshold(text=clean, high=share)
    if pair := _PAIR.fullmatch(clean):
        return Threshold(text=clean, low=-float(_share(pair[1])), high=float(_share(pair[2])))
    return None


class ThresholdShape(Shape[Threshold]):
    """A change against the baseline, or a range in the unit of the feature's `word`; without one, a change alone."""

    def __init__(self, word: FeatureWord | None = None) -> None:
        self.word = word

    def read(self, reader: Reader) -> Threshold:  # noqa: D102  (the base class says it, here and below)
        text = TextShape().read(reader)
        try:
            found = share_threshold(text)
        except QuantityError as error:
            raise reader.fail(error.found, error.wanted) from error
        word = self.word
        if found is None and re.fullmatch(rf"{_NUMBER} ?%", text.strip()):
            raise reader.fail(
                f"found '{text.strip()}' without a sign", "write '+' for a growth, '-' for a decrease, '+-' for both"
            )
        if found is not None:
            if word is not None and word.about_zero:
                example = "" if word.kind is None else f", such as 'at most {word.kind.example}'"
                wanted = f"a range in its unit{example}"
                raise reader.fail(f"found '{found.text}' for a feature that lies about zero", wanted)
            return found
        if word is None or word.kind is None:
            raise reader.fail(f"found '{text}' for '{reader.key}'", f"{_WANTED} is wanted here")
        try:
            band = reader.band(word.kind)
        except FileError as error:
            wanted = error.wanted if word.about_zero else f"{_WANTED}, or a range in its unit, is wanted here"
            raise reader.fail(error.found, wanted) from error
        unit = word.kind.unit(word.unit)
        assert unit is not None  # the table of words is tested for it
        low, high = (None if end is None else float(end / unit.factor) for end in (band.low, band.high))
        return Threshold(text=str(band), low=low, high=high, is_share=False)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        share = rf"[+-]\s*{_NUMBER}\s*%|\+\s*\/?-\s*{_NUMBER}\s*%|-\s*{_NUMBER}\s*%\s+to\s+\+\s*{_NUMBER}\s*%"
        change: Schema = {"type": "string", "pattern": rf"^\s*(?:{share})\s*$", "examples": ["+25 %"]}
        if self.word is None:
            return change
        kinds = dict.fromkeys(each.kind for each in FEATURE_WORDS.values() if each.kind is not None)
        return {"anyOf": [change, *(BandShape(kind).schema(names=names) for kind in kinds)]}


class KOfNShape(Shape[tuple[int, int]]):
    """`3 of 5`: at least so many of the last so many cycles."""

    def read(self, reader: Reader) -> tuple[int, int]:  # noqa: D102
        wanted = f"such as '3 of 5': how many of how many cycles, {N_MAX} at most"
        text = reader.text(pattern=r"\s*[0-9]{1,4}\s+of\s+[0-9]{1,4}\s*", wanted=wanted)
        k, n = (int(part) for part in text.split("of"))
        if not 1 <= k <= n <= N_MAX:
            raise reader.fail(f"found '{text.strip()}' for '{reader.key}'", wanted)
        return k, n

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return {"type": "string", "pattern": r"^\s*[0-9]{1,4}\s+of\s+[0-9]{1,4}\s*$", "examples": ["3 of 5"]}


FEATURE = Key("feature", WordShape(tuple(FEATURE_WORDS)), "what is limited in each cycle", required=True)
OF = Key("of", MOTOR_NAME, "the name of the motor or servo in the bench file, where the feature is of one")
GOING = Key("going", WordShape(tuple(Way)), "the direction, where the feature has one; both where left out")
CYCLES = Key("cycles", KOfNShape(), "in how many of the last cycles (or checks) it must be beyond to count")
WATCH_TEXT = "beyond this it is noted and told"
FAIL_TEXT = "beyond this the run ends as failed"


def _threshold_keys(word: FeatureWord | None) -> tuple[Key[Threshold], Key[Threshold]]:
    shape = ThresholdShape(word)
    return Key("watch", shape, WATCH_TEXT), Key("fail", shape, FAIL_TEXT)


class LimitShape(Shape[SaidLimit]):
    """The limits of one feature."""

    def read(self, reader: Reader) -> SaidLimit:  # noqa: D102
        others = (OF.name, GOING.name, "watch", "fail", CYCLES.name)
        word = FEATURE.shape.read(reader.mapping(required=(FEATURE.name,), optional=others)[FEATURE.name])
        return self._record(FEATURE_WORDS[word]).read(reader)

    def _record(self, word: FeatureWord) -> Record[SaidLimit]:
        watch, fail = _threshold_keys(word)

        def build(f: Fields) -> SaidLimit:
            _check_whose(f, word)
            _check_said(f, watch, fail)
            _check_order(f, watch, fail)
            k, n = f.get(CYCLES) or (K_DEFAULT, N_DEFAULT)
            way = f.get(GOING)
            return SaidLimit(
                mark=f.mark,
                word=f[FEATURE],
                drive=f.get(OF) or "",
                drive_mark=f.at(OF),
                way=None if way is None else Way(way),
                watch=f.get(watch),
                fail=f.get(fail),
                k=k,
                n=n,
            )

        return Record((FEATURE, OF, GOING, watch, fail, CYCLES), build)

    def schema(self, *, names: bool = False) -> Schema:  # noqa: D102
        return self._record(FEATURE_WORDS["steady current"]).schema(names=names)


def _check_whose(f: Fields, word: FeatureWord) -> None:
    feature = f[FEATURE]
    if word.whose is Whose.CYCLE and f.said(OF):
        raise f.error(OF, f"'of' does not go with '{feature}'", "it belongs to the whole cycle")
    if word.whose is not Whose.CYCLE and not f.said(OF):
        raise f.mark.error(f"'of' is missing beside '{feature}'", "name the motor or servo, as in 'of: vent'")
    if word.whose is not Whose.WAY and f.said(GOING):
        raise f.error(GOING, f"'going' does not go with '{feature}'", "it has no direction")


def _check_said(f: Fields, watch: Key[Threshold], fail: Key[Threshold]) -> None:
    if not f.said(watch) and not f.said(fail):
        raise f.mark.error("this limit has neither 'watch' nor 'fail'", f"as in 'fail: +25 %': {_WANTED}")


def _check_order(f: Fields, watch: Key[Threshold], fail: Key[Threshold]) -> None:
    """A run that fails at a limit must first have passed the one at which it is watched: else the two are exchanged."""
    near, far = f.get(watch), f.get(fail)
    if near is None or far is None or near.is_share != far.is_share:
        return
    above = near.high is not None and far.high is not None and far.high < near.high
    below = near.low is not None and far.low is not None and far.low > near.low
    if above or below:
        found = f"'fail', {far.text}, is reached before 'watch', {near.text}"
        raise f.error(fail, found, "'fail' lies farther out than 'watch', or where it does")


RUN_IN_CYCLES_KEY = Key("cycles", CountShape(0, CYCLES_MAX), "cycles of the run-in", default=RUN_IN_CYCLES)
RUN_IN_FOR = Key(
    "for",
    QuantityShape(DURATION, least="0 s", most="100 h"),
    "how long the run-in lasts at least, and again after an interruption; five thermal time constants of the slowest "
    "winding where left out",
)
RUN_IN: Key[tuple[int, Fraction | None]] = Key(
    "run in",
    Record((RUN_IN_CYCLES_KEY, RUN_IN_FOR), lambda f: (f[RUN_IN_CYCLES_KEY], _seconds(f))),
    "what is not judged at first: both must be over",
)
BASELINE = Key(
    "baseline", CountShape(BASELINE_LEAST, 100_000), "cycles after the run-in that later ones are judged against",
    default=BASELINE_CYCLES,
)  # fmt: skip
LIMITS = Key("limits", ListShape(LimitShape(), least=1, most=LIMITS_MAX), "the limits of single features")


def _seconds(f: Fields) -> Fraction | None:
    said = f.get(RUN_IN_FOR)
    return None if said is None else said.value


def _others() -> Record[WearLimit]:
    watch, fail = _threshold_keys(None)

    def build(f: Fields) -> WearLimit:
        _check_said(f, watch, fail)
        _check_order(f, watch, fail)
        k, n = f.get(CYCLES) or (K_DEFAULT, N_DEFAULT)
        return WearLimit(feature="", watch=f.get(watch), fail=f.get(fail), k=k, n=n, place=str(f.mark.place))

    return Record((watch, fail, CYCLES), build)


OTHERS: Key[WearLimit | None] = Key(
    "other features", OrWord("ignore", _others()), "the limits of all features that have none of their own, or ignore"
)
DETECTORS = Key(
    "detectors", WordShape(("on", "off")), "whether sudden and slow changes and drifts are looked for", default="on"
)


CHECKS_BASELINE_KEY = Key(
    "baseline",
    CountShape(CHECKS_BASELINE_LEAST, 100_000),
    "checks after the first one that later ones are judged against",
    default=CHECKS_BASELINE,
)


def _checks(f: Fields) -> ChecksWish:
    limits = f.get(LIMITS) or ()
    _check_once(limits)
    others = f.get(OTHERS) if f.said(OTHERS) else OTHERS_DEFAULT
    return ChecksWish(baseline=f[CHECKS_BASELINE_KEY], limits=limits, others=others)


CHECKS: Key[ChecksWish | None] = Key(
    "checks",
    OrWord("off", Record((CHECKS_BASELINE_KEY, LIMITS, OTHERS), _checks)),
    "the same for the checks between the cycles, which have a baseline of their own",
)


def _wear(f: Fields) -> WearWish:
    limits = f.get(LIMITS) or ()
    _check_once(limits)
    cycles, seconds = f.get(RUN_IN) or (RUN_IN_CYCLES, None)
    return WearWish(
        run_in_cycles=cycles,
        run_in_s=seconds,
        baseline=f[BASELINE],
        detectors=f[DETECTORS] == "on",
        limits=limits,
        others=f.get(OTHERS) if f.said(OTHERS) else OTHERS_DEFAULT,
        checks=f.get(CHECKS) if f.said(CHECKS) else ChecksWish(),
    )


def _check_once(limits: tuple[SaidLimit, ...]) -> None:
    seen: dict[str, Mark] = {}
    for limit in limits:
        for name in full_names(limit.word, limit.drive, limit.way):
            if name in seen:
                place = f"line {seen[name].line}"
                raise limit.mark.error(f"a second limit of '{name}'", f"the first is in {place}: a feature has one")
            seen[name] = limit.mark


WEAR: Key[WearWish | None] = Key(
    "wear",
    OrWord("off", Record((RUN_IN, BASELINE, LIMITS, OTHERS, DETECTORS, CHECKS), _wear)),
    "which drift and wear is watched for, cycle by cycle, and which ends the run",
)
"""A key of a cycle."""
