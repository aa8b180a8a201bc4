"""Checks of lines and of exactly-once answers, for which nothing is switched on."""

from __future__ import annotations

import itertools
import random
from functools import partial

from ramprig.accept.talk import ANSWER_S
from ramprig.accept.trial import Trial, Untested, check
from ramprig.accept.vectors import Exchange, LineVector, exchanges, line_vectors
from ramprig_link.check import seal
from ramprig_link.messages import Answer, FromDevice, Notice
from ramprig_link.words import GARBLED_REST_TICKS, HOST_LINE_MAX

NO_VECTORS = "the protocol's vectors are not installed"
VALID, GARBLED, OVERLONG, OVERRUN, REPEATS = range(5)
"""Places in `counters`."""
NOISE_SEED = 20
NOISE_BYTES = 1500
CHUNK_BYTES = 60
"""Noise goes out in pieces that a board's receive buffer holds."""


@check(
    "LINE-2 LINE-3 LINE-4 LINE-5 LINE-6 LINE-7 CHECK-1 CHECK-2 FIELD-1 FIELD-2 FIELD-3 KIND-1 TAG-2 TAG-5 "
    "BAD-1 BAD-2 BAD-3 BAD-5"
)
def lines_of_the_vectors(trial: Trial) -> None:
    """Each line of lines.json is answered, refused, or dropped and counted as its vector says."""
    vectors = line_vectors()
    if not vectors:
        raise Untested(NO_VECTORS)
    for vector in vectors:
        _put(trial, vector)
    trial.note(f"{len(vectors)} lines")


def _put(trial: Trial, vector: LineVector) -> None:
    """One vector: its lines' answers, and what the counters say they were."""
    talk = trial.talk
    if b"limit" in vector.data and trial.identity.axes == 0:
        return
    before, since = trial.counters(), talk.heard_count
    for _, tag, _ in vector.gives:
        if tag:
            talk.rules.sent(int(tag, 16), "")
    talk.raw(vector.data)
    where = f"`{vector.note}` ({vector.clause})"
    for kind, tag, reason in vector.gives:
        if kind in ("request", "refused"):
            heard = talk.answer(int(tag, 16), since)
            if not trial.require(heard is not None, f"{vector.clause} TAG-2", f"{where}: no answer"):
                continue
            message = heard.message if heard is not None else None
            if kind == "refused" and isinstance(message, Answer):
                right = not message.ok and message.reason == reason
                trial.require(right, f"{vector.clause} BAD-5", f"{where}: answered {message}, not refused: {reason}")
    after = trial.counters()
    for tag in {given[1] for given in vector.gives if given[1]}:
        talk.rules.awaited[int(tag, 16)] = 0
    kinds = [kind for kind, _, _ in vector.gives]
    right_lines = sum(kind in ("request", "refused", "bare") for kind in kinds)
    expected = (right_lines + 1, kinds.count("garbled") + kinds.count("overlong"), kinds.count("overlong"))
    found = tuple(after[i] - before[i] for i in range(3))
    trial.require(
        found == expected,
        f"{vector.clause} COUNT-1",
        f"{where}: {found} lines were counted as valid, garbled, overlong; right is {expected}",
    )
    if b"limit offset_ma 0" in vector.data:
        trial.limits["offset_ma", 0] = trial.number("limit offset_ma 0", "LIMIT-1")


@check("LINE-2 LINE-3 TAG-2 TAG-3 TAG-4 TAG-5 BAD-1 BAD-2 BAD-4 KIND-1 STOP-2 RUN-3 ORDER-5")
def exchanges_of_the_vectors(trial: Trial) -> None:
    """Each exchange of exchanges.json that any board in state off answers alike is answered so."""
    if not exchanges():
        raise Untested(NO_VECTORS)
    for exchange in exchanges():
        needs_servo = any(step.send is not None and " swing " in step.send for step in exchange.steps)
        if needs_servo and not (trial.identity.servos and trial.identity.axes):
            continue
        trial.talk.listen_ticks(GARBLED_REST_TICKS + 20)
        trial.ok("why", "WHY-1")  # another tag and body than the exchange's
        _play(trial, exchange)


def _play(trial: Trial, exchange: Exchange) -> None:
    talk, since, garbled = trial.talk, trial.talk.heard_count, trial.counters()[GARBLED]
    since = talk.heard_count
    expected: list[str] = []
    tags = [line[:2] for step in exchange.steps for line in step.expect if line[0] not in "ND"]
    for tag in tags:
        talk.rules.sent(int(tag, 16), "")
    for step in exchange.steps:
        at, data = talk.heard_count, step.raw if step.raw is not None else b""
        if step.send is not None:
            data = seal(step.send.encode("latin-1"))
        if data:
            talk.raw(data)
        expected += step.expect
        for line in step.expect:
            if line[0] not in "ND":
                talk.wait(partial(_is_fresh, tag=int(line[:2], 16)), at, ANSWER_S)
        talk.listen_ticks(2)
    if any(line.startswith("N") for line in expected):
        talk.listen_ticks(GARBLED_REST_TICKS + 20)
    told = [heard.message for heard in talk.since(since)]
    for tag in tags:
        talk.rules.awaited[int(tag, 16)] = 0
    answers = [_body(m) for m in told if isinstance(m, Answer)]
    wanted = [line for line in expected if not line.startswith("N")]
    _compare(trial, exchange, wanted, answers)
    last = [m for m in told if isinstance(m, Notice) and m.word == "garbled"]
    counts = [int(line.split(" ")[3]) for line in expected if " garbled " in line]
    if counts and trial.require(bool(last), "BAD-4", f"`{exchange.name}`: no notice `garbled`"):
        count = int(last[-1].fields[0]) - garbled
        trial.require(count == counts[-1], "BAD-2 BAD-4", f"`{exchange.name}`: {count} refusals, not {counts[-1]}")


def _is_fresh(message: FromDevice, tag: int) -> bool:
    return isinstance(message, Answer) and message.tag == tag


def _body(answer: Answer) -> str:
    return " ".join((f"{answer.tag:02x}", "ok" if answer.ok else "no", str(answer.tick), *answer.fields))


def _compare(trial: Trial, exchange: Exchange, wanted: list[str], answers: list[str]) -> None:
    """The answers in order; where the exchange has one tick twice, so must the board."""
    name, clauses = f"`{exchange.name}`", " ".join(exchange.clauses)
    ticks: dict[str, str] = {}
    if not trial.require(len(wanted) == len(answers), clauses, f"{name}: answered {answers}, not {wanted}"):
        return
    for want, got in zip(wanted, answers, strict=True):
        wants, gots = want.split(" "), got.split(" ")
        if wants[1:2] + wants[3:] == ["ok", "none", "0", "0", "0", "0"]:  # `why` tells of an earlier trip
            gots = [*gots[:3], *wants[3:]]
        same = wants[:2] + wants[3:] == gots[:2] + gots[3:]
        same = same and ticks.setdefault(wants[0] + wants[2], gots[2]) == gots[2]
        trial.require(same, clauses, f"{name}: answered `{got}`, not `{want}` (ticks apart)")


@check("TAG-3 TAG-4 TAG-7 TAG-8 TAG-2 COUNT-1")
def exactly_once(trial: Trial) -> None:
    """A repeated line is answered letter for letter and not carried out again, a refused one too."""
    talk = trial.talk
    repeats = trial.counters()[REPEATS]
    for body in ("beat", "log 0 0 packed", "stop 7", "jump"):
        first = talk.ask(body)
        talk.listen_ticks(3)
        since = talk.heard_count
        talk.repeat(body, first.tag)
        heard = talk.answer(first.tag, since)
        trial.need(heard is not None, "TAG-2 TAG-3", f"`{body}` sent again was not answered")
        again = heard.message if heard is not None else None
        clauses = "TAG-3" if first.ok else "TAG-3 TAG-8"
        trial.require(again == first, clauses, f"`{body}` was answered {first}, and sent again {again}")
        other = talk.ask("state", tag=first.tag)
        trial.require(
            not other.ok and other.reason == "tag", "TAG-4", f"another body under the tag was answered {other}"
        )
        since = talk.heard_count
        talk.repeat(body, first.tag)
        kept = talk.answer(first.tag, since)
        kept_right = kept is not None and kept.message == first
        trial.require(kept_right, "TAG-3 TAG-4", "after `no tag` the kept answer is not the same any more")
    told = trial.counters()[REPEATS] - repeats
    trial.require(told == 8, "COUNT-1", f"8 lines were answered from memory, and `counters` has {told}")


@check("TAG-5 TAG-3 STOP-2 STOP-3")
def urgent_tag(trial: Trial) -> None:
    """Tag ff carries out `stop` and nothing else, each time it comes, and leaves the kept answer."""
    talk = trial.talk
    first = talk.ask("beat")
    stops = [talk.ask("stop 1", tag=0xFF), talk.ask("stop 1", tag=0xFF)]
    trial.require(all(a.ok and a.fields[:1] == ("off",) for a in stops), "TAG-5 STOP-2 STOP-3", f"answered {stops}")
    trial.require(stops[0].tick != stops[1].tick, "TAG-5", "the second urgent stop was answered from memory")
    for body in ("beat", "who", "nonsense"):
        answer = talk.ask(body, tag=0xFF)
        trial.require(not answer.ok and answer.reason == "tag", "TAG-5", f"`{body}` under ff was answered {answer}")
    since = talk.heard_count
    talk.repeat("beat", first.tag)
    heard = talk.answer(first.tag, since)
    right = heard is not None and heard.message == first
    trial.require(right, "TAG-5 TAG-3", "an urgent line has touched the kept answer")


@check("BAD-2 BAD-4 COUNT-1 CHECK-2")
def garbled_lines(trial: Trial) -> None:
    """A garbled line is not answered; one notice tells of it, and the next not before the rest is over."""
    talk = trial.talk
    talk.listen_ticks(GARBLED_REST_TICKS + 20)
    before, since = trial.counters(), talk.heard_count
    talk.raw(b"x\n")
    first = talk.notice("garbled", since)
    trial.need(first is not None, "BAD-4", "no notice `garbled` came for a garbled line")
    for line in (b"y\n", b"30 beat 0000\n", b"stop 1\n"):
        talk.raw(line)
    talk.listen_ticks(2 * GARBLED_REST_TICKS + 40)
    notices = talk.notices(since, "garbled")
    ticks = [tick for tick, _ in notices]
    apart = [b - a for a, b in itertools.pairwise(ticks)]
    least = all(rest >= GARBLED_REST_TICKS for rest in apart)
    trial.require(least, "BAD-4", f"two notices `garbled` were only {apart} ticks apart")
    told = int(notices[-1][1].fields[0]) - before[GARBLED]
    trial.require(told == 4, "BAD-4", f"the last notice tells of {told} refusals; there were 4")
    trial.require(len(notices) <= 3, "BAD-4", f"{len(notices)} notices came for 4 refusals")
    answers = [heard.message for heard in talk.since(since) if isinstance(heard.message, Answer)]
    trial.require(not answers, "BAD-4 CHECK-2", f"a garbled line was answered: {answers}")
    found = tuple(b - a for a, b in zip(before, trial.counters(), strict=True))[:3]
    trial.require(found == (1, 4, 0), "COUNT-1 BAD-2", f"{found} valid, garbled, overlong; right is (1, 4, 0)")


def _sealed_to(length: int) -> bytes:
    """A line of so many bytes, LF included, that is a request in form and has its right check."""
    return seal(b"a1 ".ljust(length - len(seal(b"")), b"x"))


@check("LINE-5 BAD-3 BAD-1 BAD-2 COUNT-1")
def overlong_lines(trial: Trial) -> None:
    """A line that is too long is dropped whole: nothing behind the limit is taken for a line of its own."""
    talk = trial.talk
    inner = seal(b"a1 beat")
    tails = [bytes([byte]) + inner for byte in (0, 1, 0x0D, 0x20, 0xFF)] + [inner]
    lines = [b"z" * length + tail for length in range(HOST_LINE_MAX - 1, HOST_LINE_MAX + 3) for tail in tails]
    lines += [_sealed_to(HOST_LINE_MAX + more) for more in (1, 2)]  # right but for their length
    for line in lines:
        before, since = trial.counters(), talk.heard_count
        talk.raw(line)
        after = trial.counters()
        answered = any(isinstance(h.message, Answer) and h.message.tag == 0xA1 for h in talk.since(since))
        where = f"{len(line)} bytes that end in {line[-len(inner) - 1 :]!r}"
        trial.require(not answered, "LINE-5 BAD-3", f"{where}: an overlong line, or one inside it, was carried out")
        found = tuple(b - a for a, b in zip(before, after, strict=True))[:3]
        what = f"{where}: {found} counted as valid, garbled, overlong; right is (1, 1, 1)"
        trial.require(found == (1, 1, 1), "LINE-5 BAD-3 COUNT-1", what)
    talk.rules.awaited[0xA1] = 0


@check("BAD-1 BAD-2 BAD-6")
def noise(trial: Trial) -> None:
    """Any bytes whatever leave the board answering, in its state and with its limits."""
    talk, chance = trial.talk, random.Random(NOISE_SEED)
    before = trial.counters()
    for _ in range(NOISE_BYTES // CHUNK_BYTES):
        talk.raw(chance.randbytes(CHUNK_BYTES))
        talk.listen_ticks(8)
    talk.raw(b"\n")
    talk.listen_ticks(GARBLED_REST_TICKS + 20)
    after = trial.counters()
    trial.require(after[GARBLED] > before[GARBLED], "BAD-2 COUNT-1", "no line of the noise was counted as garbled")
    trial.require(after[VALID] == before[VALID] + 1, "BAD-1 BAD-2", "a line of the noise was counted as valid")
    trial.note(f"{after[OVERRUN]} bytes overrun since the board's start")
    beat = trial.ok("beat", "BAD-1")
    trial.require(beat.fields[:1] == ("off",), "BAD-1", f"the state after noise is {beat.fields}")
    wrong = [
        f"{item} {index}: {found}, was {value}"
        for (item, index), value in trial.limits.items()
        if (found := trial.number(f"limit {item} {index}", "LIMIT-1")) != value
    ]
    trial.require(not wrong, "BAD-1", f"noise has changed limits: {', '.join(wrong)}")
