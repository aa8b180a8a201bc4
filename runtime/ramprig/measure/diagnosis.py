"""What a bring-up check saw, and which wiring mistake that is: a table of cases, judged by counts and current alone.

Pure: observations in, a verdict out. The order of the questions is the order in which an answer makes the next one
meaningless: a board that restarts, a supply or sensor that is off, counts that run by themselves, then motion.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import Enum

from ramprig.quantity import digits, format_current

COUNTS_ENOUGH = 12
"""So many counts one way are motion, and no flicker of an edge."""
TOGGLES_ENOUGH = 4
"""A count that changes so often between two neighbours comes from one channel alone."""
OFFSET_SHARE = 0.10
"""A current zero that is off by more than this share of the rated current, or by OFFSET_A, is a finding."""
OFFSET_A = 0.05
SAG_SHARE = 0.10
"""A supply that would sag by more than this share at the rated current is a finding."""
SUPPLY_SHARE = 0.6
"""Below this share of its nominal voltage the supply counts as off."""
CURRENT_SHARE = 0.02
"""Less than this share of the rated current is no current."""
SLOWED = 0.6
"""A current that falls to this share of what the standing winding draws at the same duty has a turning shaft."""
RATIO_WITHIN = 0.02
"""A ratio of counts is named where it is so near."""


class Case(Enum):
    """What the wiring is: heading, what to do, and what cannot be told apart from here."""

    GOOD = (
        "wired as the bench file says",
        "",
        "whether the shaft turns the way you mean cannot be seen from here: watch it at the first jog",
    )
    REVERSED = (
        "the counts run against the duty",
        "exchange the motor's two leads if the shaft turned the wrong way at the positive pulse, else the encoder's A "
        "and B (or write the other 'direction' in the bench file)",
        "leads and A/B exchanged look the same from here; which way the shaft turned decides",
    )
    LEADS = ("the motor's leads are exchanged", "exchange the motor's two leads", "")
    PHASES = (
        "the encoder's A and B are exchanged",
        "exchange the encoder's A and B, or write the other 'direction' in the bench file",
        "",
    )
    ENCODER_DEAD = (
        "the shaft turns and the encoder is silent",
        "look at the encoder's supply, the common ground, pull-ups (open collector), the pins, and the logic level",
        "which of these it is cannot be told from here",
    )
    ONE_CHANNEL = (
        "one channel of the encoder is missing: the count goes to and fro by one",
        "look at the wire, the pull-up and the pin of A and of B",
        "which of the two is missing cannot be told from here",
    )
    OPEN = (
        "no current flows and nothing turns",
        "look at the motor's leads, the driver's enable input, the motor supply, and the fuse",
        "which of these it is cannot be told from here",
    )
    STALLED = (
        "current flows and nothing turns",
        "free the shaft and the gear, and run the check again; if it is free, the motor needs more than the check's "
        "limits allow",
        "a jammed shaft, a seized motor and one that needs a higher duty to break away look the same from here",
    )
    NOISY = (
        "the counts run at random while the shaft stands",
        "look at the shield, the pull-ups and the ground of the encoder, and for inputs that float",
        "noise and a floating input look the same from here",
    )
    EXCHANGED = (
        "the counts come in on another motor's encoder",
        "exchange the encoder plugs, or the axis numbers in the bench file",
        "whether the encoders or the motors are exchanged cannot be told from here",
    )
    RATIO = (
        "the counts of a turn are not those of the bench file",
        "mend 'lines', 'on' or 'gear' in the bench file",
        "",
    )
    BROWNOUT = (
        "the board restarts when the motor starts",
        "give the board a supply of its own or a larger capacitor, twist the motor's leads, and fit 0.1 uF across the "
        "motor's terminals",
        "a sagging supply and interference look the same from here",
    )
    COUNTS_STOP = (
        "the counts come when the shaft is turned by hand, and stop when the motor runs",
        "give the encoder a supply that does not sag with the motor, twist the motor's leads, shield the encoder's, "
        "and fit 0.1 uF across the motor's terminals",
        "a sagging supply and interference look the same from here",
    )
    OFFSET = ("the current sensor does not show zero with the outputs off", "", "")
    WEAK_SUPPLY = (
        "the supply sags under load",
        "look at the supply's rating, its leads and its terminals",
        "a weak supply and a poor contact look the same from here",
    )
    NO_SUPPLY = ("the motor supply is off or too low", "switch it on, and look at its fuse and its leads", "")
    ONE_WAY = (
        "the shaft turns one way only",
        "look for an end stop in the way, at the driver's direction input, and at the half of the bridge for that way",
        "an obstacle and half a bridge look the same from here",
    )
    NONE_OF_THESE = (
        "what was seen fits none of the known mistakes",
        "repeat the check, and look at the samples in the run folder; an encoder with a short can look like anything",
        "",
    )

    @property
    def heading(self) -> str:
        """What it is."""
        return self.value[0]

    @property
    def remedy(self) -> str:
        """What to do."""
        return self.value[1]

    @property
    def untold(self) -> str:
        """What software cannot tell apart."""
        return self.value[2]


@dataclass(frozen=True, slots=True, kw_only=True)
class Rest:
    """With the outputs off: mean and noise (one sigma) of the current, supply, and what the counts did meanwhile.

    `supply_v` is None where the board does not measure it.
    """

    offset_a: float
    noise_a: float
    supply_v: float | None
    count_span: int
    count_changes: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Push:
    """One pulse. Currents are in the direction of the duty, without the offset; `moved` counts with it, too.

    `span` is the difference of the highest and the lowest count, `toggles` how often the count changed.
    `standing_ap1` is the greatest current per duty on the way up, `holding_ap1` that at the end of the hold;
    `least_a` the lowest current while the duty went back to zero. `elsewhere` are the counts that other encoders moved.
    """

    duty: float
    moved: float
    span: int
    toggles: int
    peak_a: float
    holding_ap1: float
    standing_ap1: float
    least_a: float
    elsewhere: Mapping[str, int] = field(default_factory=dict)
    trip: str = ""
    restarted: bool = False


@dataclass(frozen=True, slots=True, kw_only=True)
class Bring:
    """Everything that was seen on one motor.

    `forward` and `backward` are the pulses either way, weakest first. `hand_turns` is how many turns were made by hand
    and `hand_counts` what that gave; 0 turns: none. `expected_counts` belongs to them. `sag_low_v` is the least that
    the supply sags at rated current with 97.5 % confidence, None where not known. `forwards` is what a bystander saw
    at the positive pulse.
    """

    rated_a: float
    supply_nominal_v: float
    gear: float
    has_encoder: bool
    zero_a: float
    rest: Rest
    forward: tuple[Push, ...] = ()
    backward: tuple[Push, ...] = ()
    hand_turns: int = 0
    hand_counts: float = 0.0
    hand_span: int = 0
    hand_elsewhere: Mapping[str, int] = field(default_factory=dict)
    expected_counts: float = 0.0
    sag_low_v: float | None = None
    forwards: bool | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """The case, and what of the figures led to it."""

    case: Case
    because: str
    remedy: str = ""

    @property
    def lines(self) -> tuple[str, ...]:
        """For a person: why, what to do, what cannot be told."""
        untold = self.case.untold
        remedy = self.remedy or self.case.remedy
        found = [f"seen: {self.because}"] if self.because else []
        found += [f"do: {remedy}"] if remedy else []
        found += [f"not told apart: {untold}" if self.case is not Case.GOOD else f"note: {untold}"] if untold else []
        if self.case is not Case.GOOD:
            found.append("if none of this fits: it may be none of these; the samples of a run folder show what came")
        return tuple(found)


def current_floor_a(bring: Bring) -> float:
    """Below this, a mean over ten samples or so is no current."""
    return max(2.5 * bring.rest.noise_a, CURRENT_SHARE * bring.rated_a)


def turned_by_current(push: Push, floor_a: float) -> bool:
    """Whether the current tells of a turning shaft.

    A turning shaft drives current back while its duty falls, and draws less than a standing one at the same duty.
    """
    if push.least_a < -floor_a:
        return True
    return push.peak_a > 3 * floor_a and push.holding_ap1 < SLOWED * push.standing_ap1


def decided(push: Push, bring: Bring) -> bool:
    """Whether this pulse has shown what there is to see, so that no stronger one is needed."""
    if push.restarted or push.trip or abs(push.moved) >= COUNTS_ENOUGH:
        return True
    if _other(push.elsewhere):
        return True
    # A few counts are neither silence nor motion: a stronger pulse tells.
    silent = push.span <= 1 and all(abs(counts) <= 1 for counts in push.elsewhere.values())
    return silent and turned_by_current(push, current_floor_a(bring))


def offset_bound_a(rated_a: float) -> float:
    """An offset beyond this is a finding."""
    return max(OFFSET_A, OFFSET_SHARE * rated_a)


def at_rest(bring: Bring) -> Verdict | None:
    """What is wrong already before anything moves."""
    rest = bring.rest
    if rest.supply_v is not None and rest.supply_v < SUPPLY_SHARE * bring.supply_nominal_v:
        return Verdict(case=Case.NO_SUPPLY, because=f"{digits(rest.supply_v, 3)} V at the bridges with the outputs off")
    if abs(rest.offset_a) > offset_bound_a(bring.rated_a):
        zero_ma = round((rest.offset_a + bring.zero_a) * 1000)
        return Verdict(
            case=Case.OFFSET,
            because=f"{format_current(rest.offset_a)} with the outputs off",
            remedy=f"if the sensor is sound, write 'current zero: {zero_ma} mA' in the bench file",
        )
    if bring.has_encoder and (rest.count_span >= 2 or rest.count_changes >= 10 * TOGGLES_ENOUGH):
        return Verdict(
            case=Case.NOISY, because=f"{rest.count_changes} changes over {rest.count_span} counts with the outputs off"
        )
    return None


def judge(bring: Bring) -> Verdict:
    """The verdict on all that was seen."""
    pushes = (*bring.forward, *bring.backward)
    if any(push.restarted for push in pushes):
        return Verdict(case=Case.BROWNOUT, because="it restarted during a pulse")
    found = at_rest(bring) or _by_hand(bring)
    if found is not None:
        return found
    if not bring.forward or not bring.backward:
        return Verdict(case=Case.NONE_OF_THESE, because="the pulses were not carried out")
    found = _by_counts(bring) if bring.has_encoder else _by_current(bring)
    if found is not None:
        return found
    if bring.sag_low_v is not None and bring.sag_low_v > SAG_SHARE * bring.supply_nominal_v:
        return Verdict(
            case=Case.WEAK_SUPPLY,
            because=f"at the rated current it would sag by {digits(bring.sag_low_v, 3)} V or more",
        )
    return Verdict(case=Case.GOOD, because="")


def _by_hand(bring: Bring) -> Verdict | None:
    """What turning by hand tells that pulses do not: the ratio, and whose encoder it is."""
    if not bring.hand_turns or not bring.has_encoder:
        return None
    other = _other(bring.hand_elsewhere)
    if other and abs(bring.hand_counts) < COUNTS_ENOUGH:
        return Verdict(case=Case.EXCHANGED, because=f"turned by hand, '{other}' counted")
    if bring.hand_span <= 1:
        return None  # dead, or one channel: the pulses tell which
    ratio = abs(bring.hand_counts) / bring.expected_counts
    if abs(ratio - 1.0) <= RATIO_WITHIN:
        return None
    named = _name_of_ratio(ratio, bring.gear)
    because = (
        f"{digits(abs(bring.hand_counts), 6)} counts for {bring.hand_turns} turns by hand, where the bench file makes "
        f"it {digits(bring.expected_counts, 6)}: {digits(ratio, 4)} times"
    )
    return Verdict(case=Case.RATIO, because=f"{because}, {named}")


def _name_of_ratio(ratio: float, gear: float) -> str:
    """The culprit behind a ratio of counted to expected counts."""
    culprits = {
        4.0: "four times: 'lines' holds a quarter of the lines",
        2.0: "twice: 'lines' holds half the lines",
        0.5: "half: 'lines' holds twice the lines, or the board counts x2",
        0.25: "a quarter: 'lines' holds counts, not lines",
    }
    if gear != 1.0:
        culprits |= {
            gear: "the gear: the encoder sits on the motor's shaft",
            1.0 / gear: "one over the gear: the encoder sits on the output shaft",
        }
    for culprit, text in culprits.items():
        if abs(ratio / culprit - 1.0) <= RATIO_WITHIN:
            return text
    return "no usual factor: were the turns exact, and does nothing slip?"


def _other(elsewhere: Mapping[str, int]) -> str:
    """Another motor whose encoder has moved; empty where none has."""
    moved = {name: abs(counts) for name, counts in elsewhere.items() if abs(counts) >= COUNTS_ENOUGH}
    return max(moved, key=moved.__getitem__, default="")


def _by_counts(bring: Bring) -> Verdict | None:
    """None where the counts follow the duty either way."""
    ways = (bring.forward[-1].moved, bring.backward[-1].moved)
    moving = [abs(moved) >= COUNTS_ENOUGH for moved in ways]
    if all(moving):
        if all(moved > 0 for moved in ways):
            return None
        seen = " and ".join(
            f"{abs(moved):.0f} counts {'with' if moved > 0 else 'against'} the {way} pulse"
            for moved, way in zip(ways, ("positive", "negative"), strict=True)
        )
        if all(moved < 0 for moved in ways):
            return Verdict(case=_which_reversed(bring), because=seen)
        return Verdict(case=Case.NONE_OF_THESE, because=seen)
    if any(moving):
        way = "positive" if moving[0] else "negative"
        return Verdict(case=Case.ONE_WAY, because=f"counts came with the {way} pulses alone")
    return _without_counts(bring)


def _which_reversed(bring: Bring) -> Case:
    """A hand or an eye can tell what software cannot."""
    if bring.hand_turns and abs(bring.hand_counts) >= COUNTS_ENOUGH:
        return Case.PHASES if bring.hand_counts < 0 else Case.LEADS
    if bring.forwards is not None:
        return Case.PHASES if bring.forwards else Case.LEADS
    return Case.REVERSED


def _without_counts(bring: Bring) -> Verdict:
    pushes = (*bring.forward, *bring.backward)
    for push in pushes:
        other = _other(push.elsewhere)
        if other:
            return Verdict(case=Case.EXCHANGED, because=f"'{other}' counted {push.elsewhere[other]}")
    toggles = sum(push.toggles for push in pushes)
    if max(push.span for push in pushes) == 1 and toggles >= TOGGLES_ENOUGH:
        return Verdict(case=Case.ONE_CHANNEL, because=f"{toggles} changes by one count and back")
    if max(push.span for push in pushes) > COUNTS_ENOUGH // 2:
        return Verdict(case=Case.NONE_OF_THESE, because="a few counts, neither silence nor motion")
    found = _by_current(bring)
    if found is not None:
        return found
    case = Case.COUNTS_STOP if bring.hand_span >= COUNTS_ENOUGH else Case.ENCODER_DEAD
    return Verdict(case=case, because="the current tells of a turning shaft, and no count came")


def _by_current(bring: Bring) -> Verdict | None:
    """What the current alone tells; None where the shaft turns."""
    floor_a = current_floor_a(bring)
    pushes = (*bring.forward, *bring.backward)
    turned = [any(turned_by_current(push, floor_a) for push in way) for way in (bring.forward, bring.backward)]
    if any(turned):
        if all(turned):
            return None
        way = "positive" if turned[0] else "negative"
        return Verdict(case=Case.ONE_WAY, because=f"the current tells of motion with the {way} pulses alone")
    peak_a = max(push.peak_a for push in pushes)
    strongest = max(abs(push.duty) for push in pushes)
    seen = f"{format_current(peak_a)} at most, up to {digits(100 * strongest, 3)} % duty"
    trips = sorted({push.trip for push in pushes if push.trip})
    if trips:
        seen += f"; trips: {', '.join(trips)}"
    return Verdict(case=Case.STALLED if peak_a > 2 * floor_a else Case.OPEN, because=seen)
