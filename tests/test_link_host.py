"""The host's end: tags, repeats and their bound, stale answers, gaps in the running numbers, urgent stops."""

from __future__ import annotations

import pytest

from ramprig_link.check import seal
from ramprig_link.faults import FieldError, LinkBusy, LinkMisuse, LinkSilent
from ramprig_link.host import (
    AGAIN_WITHIN_LINES,
    Answered,
    Dropped,
    HostEvent,
    HostLink,
    Noticed,
    RetryPolicy,
    Sampled,
    UrgentAnswered,
)
from ramprig_link.messages import Flaw
from ramprig_link.words import Form, Rest

POLICY = RetryPolicy(first_s=0.125, growth=2.0, repeats_max=3, hurried_max=2)


def line(body: str) -> bytes:
    return seal(body.encode("ascii"))


def get(link: HostLink, *bodies: str, now_s: float = 0.0) -> list[HostEvent]:
    return link.receive(b"".join(map(line, bodies)), now_s)


def plain(number: int, tick: int = 1000) -> str:
    return f"D{number:02x} {tick} 2 1 500"


def missed(events: list[HostEvent]) -> list[int]:
    return [event.missed for event in events if isinstance(event, Sampled | Noticed)]


def test_tags_run_from_the_first_to_fe_and_begin_again() -> None:
    """SPEC TAG-1, TAG-5: never the last tag again, and never ff."""
    link = HostLink(0xFD)
    tags = []
    for _ in range(600):
        sent = link.ask("beat", now_s=0.0)
        tags.append(int(sent[:2], 16))
        get(link, f"{tags[-1]:02x} ok 5 off")
    assert tags[:4] == [0xFD, 0xFE, 0x00, 0x01]
    assert tags == [(0xFD + i) % 255 for i in range(600)]


def test_a_first_tag_that_is_no_tag_for_requests_is_refused() -> None:
    for tag in (-1, 255):
        with pytest.raises(LinkMisuse):
            HostLink(tag)


def test_a_second_request_waits_for_the_first() -> None:
    """SPEC TAG-1."""
    link = HostLink(0)
    link.ask("beat", now_s=0.0)
    with pytest.raises(LinkBusy):
        link.ask("who", now_s=0.0)
    outstanding = link.outstanding
    assert outstanding
    assert outstanding.word == "beat"
    get(link, "00 ok 5 off")
    assert link.ask("who", now_s=0.0) == line("01 who")


def test_arguments_are_printed_in_their_one_spelling_and_checked() -> None:
    link = HostLink(0xA1)
    assert link.ask("rest", 0, Rest.BRAKE, 12, now_s=0.0) == line("a1 rest 0 brake 12")
    link.abandon()
    assert link.ask("log", 2, 7, Form.PACKED, now_s=0.0) == line("a2 log 2 7 packed")
    link.abandon()
    for word, args in (("jump", ()), ("beat", (1,)), ("stop", (-1,)), ("arm", (500, "XYZ")), ("arm", (500, "a b"))):
        with pytest.raises(FieldError):
            link.ask(word, *args, now_s=0.0)
    assert link.outstanding is None


def test_the_answer_comes_with_the_times_of_its_request() -> None:
    link = HostLink(0xA1)
    link.ask("beat", now_s=1.0)
    (event,) = get(link, "a1 ok 77 off", now_s=1.25)
    assert isinstance(event, Answered)
    assert (event.request.word, event.answer.ok, event.answer.tick) == ("beat", True, 77)
    assert (event.sent_s, event.received_s, event.repeats) == (1.0, 1.25, 0)
    assert link.due_at_s is None
    assert link.due(99.0) is None


def test_repeats_come_after_growing_waits_and_end_at_their_bound() -> None:
    """SPEC TAG-6."""
    link = HostLink(0, POLICY)
    sent = link.ask("beat", now_s=10.0)
    for due_at_s in (10.125, 10.375, 10.875):
        assert link.due_at_s == due_at_s
        assert link.due(due_at_s - 1e-6) is None
        assert link.due(due_at_s) == sent
    assert link.due(11.875 - 1e-6) is None
    with pytest.raises(LinkSilent) as caught:
        link.due(11.875)
    assert (caught.value.word, caught.value.tag, caught.value.repeats, caught.value.sent_s) == ("beat", 0, 3, 10.0)
    assert link.outstanding is None
    assert link.ask("beat", now_s=12.0) == line("01 beat")


def test_a_host_that_slept_repeats_before_it_holds_the_link_for_lost() -> None:
    link = HostLink(0, POLICY)
    sent = link.ask("beat", now_s=0.0)
    assert link.due(1000.0) == sent
    assert link.due(1000.1) is None


def test_a_notice_garbled_hurries_the_repeat_within_its_own_bound() -> None:
    link = HostLink(0, POLICY)
    sent = link.ask("beat", now_s=0.0)
    now_s = 0.01
    for number in range(2):
        get(link, f"N{number:02x} garbled 5 1", now_s=now_s)
        assert link.due_at_s == now_s
        assert link.due(now_s) == sent
        assert link.due_at_s == now_s + 0.125
        now_s += 0.01
    get(link, "N02 garbled 5 1", now_s=now_s)
    assert link.due(now_s) is None  # the bound of hurried repeats
    (event,) = get(link, "00 ok 5 off", now_s=now_s)
    assert isinstance(event, Answered)
    assert event.repeats == 2


def test_hurried_repeats_do_not_use_up_the_others() -> None:
    link = HostLink(0, POLICY)
    link.ask("beat", now_s=0.0)
    now_s = 0.0
    for repeats in range(POLICY.repeats_max + POLICY.hurried_max):
        get(link, f"N{repeats:02x} garbled 5 1", now_s=now_s)
        now_s = link.due_at_s or 0.0
        assert link.due(now_s)
    now_s = link.due_at_s or 0.0
    with pytest.raises(LinkSilent):
        link.due(now_s)
    assert now_s <= POLICY.longest_s()


def test_a_notice_garbled_changes_nothing_while_nothing_is_outstanding() -> None:
    link = HostLink(0, POLICY)
    get(link, "N00 garbled 5 1")
    assert link.due_at_s is None


def test_an_answer_to_no_outstanding_tag_is_dropped_as_stale() -> None:
    """SPEC TAG-6."""
    link = HostLink(0xA1)
    stale = Dropped(line("a1 ok 5 off")[:-1], "stale answer")
    assert get(link, "a1 ok 5 off") == [stale]
    link.ask("beat", now_s=0.0)
    assert [type(event) for event in get(link, "a0 ok 5", "a1 ok 5 off", "a1 ok 5 off")] == [Dropped, Answered, Dropped]
    link.ask("beat", now_s=0.0)
    assert get(link, "a1 ok 5 off") == [stale]


def test_the_answer_to_an_abandoned_request_is_stale() -> None:
    link = HostLink(0)
    link.ask("beat", now_s=0.0)
    assert link.abandon().word == "beat"
    assert [type(event) for event in get(link, "00 ok 5 off")] == [Dropped]
    with pytest.raises(LinkMisuse):
        link.abandon()


def test_an_urgent_stop_is_fixed_bytes_that_half_a_line_cannot_swallow() -> None:
    """SPEC TAG-5, LINE-7."""
    assert HostLink.urgent_stop(0) == b"\n" + line("ff stop 0") + b"stop\n"
    assert HostLink.urgent_stop(1) == b"\n" + line("ff stop 1")


def test_the_answer_to_an_urgent_stop_leaves_the_outstanding_request() -> None:
    link = HostLink(0)
    link.ask("beat", now_s=0.0)
    events = get(link, "ff ok 5 off", "00 ok 6 off")
    assert [type(event) for event in events] == [UrgentAnswered, Answered]


def test_lost_notices_and_data_lines_are_counted_from_their_numbers() -> None:
    """SPEC KIND-1, NOTE-1, DATA-11."""
    link = HostLink(0)
    assert missed(get(link, "N07 off 5 off", "N08 off 5 off", "N0b off 5 off", plain(250), plain(251), plain(3))) == [
        *(0, 0, 2),
        *(0, 0, 7),
    ]


def test_numbers_begin_again_with_a_boot() -> None:
    link = HostLink(0)
    events = get(link, "N07 off 5 off", plain(9), "N00 boot 0 2 watchdog", "N01 off 1 off", plain(0), plain(2))
    assert missed(events) == [0, 0, 0, 0, 0, 1]


def test_a_data_line_that_cannot_be_decoded_counts_as_lost() -> None:
    """SPEC DATA-10, DATA-11."""
    link = HostLink(0)
    events = get(link, plain(4), "D05 ====", "D06 1000 2 1 5 6 7", plain(7))
    assert [type(event) for event in events] == [Sampled, Dropped, Dropped, Sampled]
    assert missed(events) == [0, 2]


def test_a_line_sent_again_is_marked_and_makes_no_gap() -> None:
    """SPEC LOG-5."""
    link = HostLink(0)
    assert missed(get(link, plain(4), plain(6))) == [0, 1]
    link.ask("again", 5, now_s=0.0)
    events = get(link, plain(7), "00 ok 9", plain(5), plain(8))
    assert [(e.number, e.again, e.missed) for e in events if isinstance(e, Sampled)] == [
        *((7, False, 0), (5, True, 0), (8, False, 0)),
    ]


@pytest.mark.parametrize("answer", ["00 no 9 gone", None])
def test_a_line_asked_for_in_vain_is_not_taken_for_a_later_one(answer: str | None) -> None:
    link = HostLink(0)
    get(link, plain(6))
    link.ask("again", 5, now_s=0.0)
    if answer:
        get(link, answer)
    numbers = [*range(7, 7 + AGAIN_WITHIN_LINES), 5]
    events = get(link, *(plain(number) for number in numbers))
    assert not any(event.again for event in events if isinstance(event, Sampled))
    assert missed(events)[-1] == (5 - 7 - AGAIN_WITHIN_LINES) % 256


def test_the_next_line_due_is_never_taken_for_one_sent_again() -> None:
    link = HostLink(0)
    get(link, plain(4))
    link.ask("again", 5, now_s=0.0)
    (event,) = get(link, plain(5))
    assert isinstance(event, Sampled)
    assert not event.again


@pytest.mark.parametrize(
    ("raw", "why"),
    [
        (b"rubbish\n", Flaw.CHECK),
        (b"\xff\xfe\n", Flaw.BYTE),
        (line("X00 off 5"), Flaw.KIND),
        (line("N00  off 5"), Flaw.FORM),
        (b"z" * 900 + b"\n", Flaw.OVERLONG),
    ],
)
def test_what_cannot_be_used_is_dropped_with_its_reason(raw: bytes, why: Flaw) -> None:
    """SPEC BAD-1, BAD-2, BAD-3."""
    (event,) = HostLink(0).receive(raw, 0.0)
    assert isinstance(event, Dropped)
    assert event.why == why
