"""The device's end: exactly once, refusals below the controller, counts and running numbers."""

from __future__ import annotations

import pytest

from ramprig_link.check import seal
from ramprig_link.device import DeviceLink, Incoming, Reply
from ramprig_link.faults import FieldError, LinkMisuse
from ramprig_link.messages import Answer, Bare, Notice, Request, parse_device_line
from ramprig_link.words import DEVICE_LINE_MAX, GARBLED_REST_TICKS, Reason, State


def line(body: str) -> bytes:
    return seal(body.encode("ascii"))


def one(link: DeviceLink, body: str, tick: int = 5) -> Incoming:
    """What the one line brings; a request is answered `ok` at once."""
    taken = []
    for incoming in link.receive(line(body), tick):
        taken.append(incoming)
        if isinstance(incoming, Request):
            link.ok(incoming, tick)
    assert len(taken) == 1
    return taken[0]


def refused(incoming: Incoming, reason: Reason) -> bool:
    assert isinstance(incoming, Reply)
    answer = parse_device_line(incoming.line[:-1])
    return isinstance(answer, Answer) and answer.reason == reason


def test_a_request_sent_again_is_answered_letter_for_letter_and_not_carried_out() -> None:
    """SPEC TAG-2, TAG-3."""
    link = DeviceLink()
    for incoming in link.receive(line("a1 beat"), 100):
        assert isinstance(incoming, Request)
        first = link.ok(incoming, 100, State.OFF)
    assert first == line("a1 ok 100 off")
    for tick in (101, 5000):
        assert list(link.receive(line("a1 beat"), tick)) == [Reply(first, renews=False)]
    assert link.counts.repeats == 2


def test_a_refusal_is_kept_like_any_other_answer() -> None:
    """SPEC TAG-8, for refusals of the controller and of the link."""
    link = DeviceLink()
    for incoming in link.receive(line("a1 clear"), 7):
        assert isinstance(incoming, Request)
        kept = link.no(incoming, 7, Reason.STATE)
    assert list(link.receive(line("a1 clear"), 8)) == [Reply(kept, renews=False)]
    assert list(link.receive(line("a2 jump"), 9)) == [Reply(line("a2 no 9 word"), renews=True)]
    assert list(link.receive(line("a2 jump"), 10)) == [Reply(line("a2 no 9 word"), renews=False)]
    assert list(link.receive(line("a3 stop"), 11)) == [Reply(line("a3 no 11 args"), renews=True)]
    assert list(link.receive(line("a3 stop"), 12)) == [Reply(line("a3 no 11 args"), renews=False)]


def test_the_same_tag_with_another_body_is_refused_and_the_kept_answer_stays() -> None:
    """SPEC TAG-4. Letter for letter: a space more is another body."""
    link = DeviceLink()
    one(link, "a1 beat")
    for body in ("a1 who", "a1 beat ", "a1 jump", "a1"):
        assert refused(one(link, body), Reason.TAG)
    assert list(link.receive(line("a1 beat"), 9)) == [Reply(line("a1 ok 5"), renews=False)]


def test_an_earlier_tag_is_a_new_request() -> None:
    """SPEC TAG-3: only the last tag is kept; TAG-7: at start none is."""
    link = DeviceLink()
    assert isinstance(one(link, "a1 beat"), Request)
    assert isinstance(one(link, "a2 beat"), Request)
    assert isinstance(one(link, "a1 beat"), Request)


def test_an_urgent_stop_is_carried_out_each_time_and_leaves_the_kept_answer_alone() -> None:
    """SPEC TAG-5."""
    link = DeviceLink()
    one(link, "a1 beat")
    for _ in range(3):
        urgent = one(link, "ff stop 0")
        assert isinstance(urgent, Request)
        assert urgent.urgent
    for body in ("ff beat", "ff jump", "ff stops 0", "ff"):
        assert refused(one(link, body), Reason.TAG)
    assert refused(one(link, "ff stop"), Reason.ARGS)
    assert list(link.receive(line("a1 beat"), 9)) == [Reply(line("a1 ok 5"), renews=False)]
    assert link.counts.repeats == 1


def test_an_urgent_stop_comes_between_a_request_and_its_repeat() -> None:
    link = DeviceLink()
    taken = []
    for incoming in link.receive(line("a1 beat") + line("ff stop 1") + line("a1 beat"), 3):
        taken.append(incoming)
        if isinstance(incoming, Request):
            link.ok(incoming, 3)
    assert [type(incoming) for incoming in taken] == [Request, Request, Reply]


@pytest.mark.parametrize(
    ("body", "reason"),
    [("a1 jump", "word"), ("a1 beat 1", "args"), ("a1 arm 500 XYZ", "args"), ("a1 rest 9 spin 5", "args")],
)
def test_what_the_tables_alone_can_refuse_never_reaches_the_controller(body: str, reason: str) -> None:
    """SPEC BAD-5."""
    assert refused(one(DeviceLink(), body), Reason(reason))


def test_a_taken_request_gives_its_arguments_as_values() -> None:
    request = one(DeviceLink(), "a1 ramp 0 -2500 100 4294967295")
    assert isinstance(request, Request)
    assert request.values() == (0, -2500, 100, 4294967295)
    arm = one(DeviceLink(), "a1 arm 500 00c0ffee")
    assert isinstance(arm, Request)
    assert arm.values() == (500, "00c0ffee")


def test_a_bare_line_is_handed_on_and_keeps_nothing() -> None:
    """SPEC LINE-7."""
    link = DeviceLink()
    one(link, "a1 beat")
    assert list(link.receive(b"stop\nwho\r\n", 6)) == [Bare("stop"), Bare("who")]
    assert list(link.receive(line("a1 beat"), 9)) == [Reply(line("a1 ok 5"), renews=False)]


def test_each_request_must_be_answered_before_the_next_is_taken() -> None:
    link = DeviceLink()
    incoming = link.receive(line("a1 beat") + line("a2 beat"), 3)
    first = next(incoming)
    with pytest.raises(LinkMisuse):
        next(incoming)
    assert isinstance(first, Request)
    link.ok(first, 3)
    with pytest.raises(LinkMisuse):
        link.no(first, 3, Reason.STATE)


def test_garbled_lines_are_counted_and_never_answered() -> None:
    """SPEC BAD-2, BAD-3, BAD-4."""
    link = DeviceLink()
    spoilt = b"a1 beat 0000\n" + b"hello\n" + b"z" * 200 + b"\n" + b"\n" + line("a1 beat").replace(b"beat", b"be\x00t")
    assert list(link.receive(spoilt, 3)) == []
    counts = link.counts
    assert (counts.lines, counts.garbled, counts.overlong, counts.repeats) == (0, 4, 1, 0)


def test_garbled_notices_keep_their_rest_and_the_next_tells_of_all() -> None:
    """SPEC BAD-4."""
    link = DeviceLink()
    assert link.garbled_news(0) is None
    told = {}
    for tick in range(400):
        if tick in (10, 11, 12, 250):
            list(link.receive(b"noise\n", tick))
        if news := link.garbled_news(tick):
            told[tick] = news
    assert told == {
        10: line("N00 garbled 10 1"),
        10 + GARBLED_REST_TICKS: line(f"N01 garbled {10 + GARBLED_REST_TICKS} 3"),
        250: line("N02 garbled 250 4"),
    }


def test_the_rest_between_garbled_notices_survives_the_wrap_of_the_ticks() -> None:
    link = DeviceLink()
    last = 2**32 - 10
    list(link.receive(b"noise\n", last))
    assert link.garbled_news(last)
    list(link.receive(b"noise\n", last))
    assert link.garbled_news(GARBLED_REST_TICKS - 11) is None
    assert link.garbled_news(GARBLED_REST_TICKS - 10)


def test_notices_and_data_lines_count_apart_and_wrap() -> None:
    """SPEC KIND-1: each counts from 00, adding 1 modulo 256 for each line made."""
    link = DeviceLink()
    for count in range(600):
        notice = parse_device_line(link.notice("off", 9, State.OFF)[:-1])
        number, data = link.data("AAAA")
        assert isinstance(notice, Notice)
        assert (notice.number, number) == (count % 256, count % 256)
        assert data == line(f"D{number:02x} AAAA")


def test_a_plain_data_line_is_made_like_a_packed_one() -> None:
    assert DeviceLink().data("1000 2 7 500 -3 120") == (0, line("D00 1000 2 7 500 -3 120"))


def test_a_line_that_is_too_long_or_cannot_be_printed_is_never_made() -> None:
    """SPEC LINE-5, LINE-3; the running number stays for the next line."""
    link = DeviceLink()
    room = DEVICE_LINE_MAX - len("D00 ") - len(" 0000\n")
    assert len(link.data("A" * room)[1]) == DEVICE_LINE_MAX
    with pytest.raises(LinkMisuse):
        link.data("A" * (room + 1))
    with pytest.raises(LinkMisuse):
        link.notice("sparkle", 1)
    with pytest.raises(FieldError):
        link.notice("boot", 1, 5, "power on")
    assert link.data("A")[0] == 1
    assert link.notice("off", 1, State.OFF).startswith(b"N00 ")
