"""Samples in order and accounted for: lost, late, doubled and overlapping lines, against a device that keeps a few."""

from __future__ import annotations

import random

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramprig.session.blocks import Block, Layout
from ramprig.session.gaps import AGAIN_TRIES, HELD_LINES_MAX, Delivery, Filled, Gap, GapReason, SampleStream

PERIOD = 2
LAYOUT = Layout.of(0b11, PERIOD)
FIRST = 1000


def line(first_sample: int, count: int) -> Block:
    """Samples whose values tell which sample they are."""
    numbers = np.arange(first_sample, first_sample + count)
    values = np.column_stack([numbers, -numbers]).astype(np.int32)
    return Block((FIRST + PERIOD * numbers).astype(np.int64), values, LAYOUT)


def stream(*, keep: int = 8, number_before: int | None = 9) -> SampleStream:
    return SampleStream(first_tick=FIRST, layout=LAYOUT, keep=keep, number_before=number_before)


def samples_of(deliveries: list[Delivery]) -> list[int]:
    return [int(n) for item in deliveries if isinstance(item, Block) for n in item.values[:, 0]]


def test_lines_in_order_go_straight_through() -> None:
    log = stream()
    out = log.take(line(0, 5), 10) + log.take(line(5, 5), 11) + log.end(10)
    assert samples_of(out) == list(range(10))
    assert log.done
    account = log.accounting()
    assert (account.expected, account.received, account.lost, account.gaps) == (10, 10, 0, ())
    assert account.complete


def test_a_missing_line_is_asked_for_and_what_follows_waits_for_it() -> None:
    log = stream()
    log.take(line(0, 5), 10)
    assert log.take(line(10, 5), 12) == []
    assert log.wanted() == 11
    log.asked(11)
    assert log.wanted() is None
    out = log.take(line(5, 5), 11)
    assert out[0] == Filled(FIRST + 10, 5)
    assert samples_of(out) == list(range(5, 15))
    assert log.accounting().recovered == 5


def test_a_line_that_is_gone_becomes_a_gap_with_exact_ticks() -> None:
    log = stream()
    log.take(line(0, 5), 10)
    log.take(line(12, 3), 12)
    log.asked(11)
    out = log.refused(11)
    assert out[0] == Gap(FIRST + 10, 7, PERIOD, GapReason.NOT_KEPT)
    assert samples_of(out) == [12, 13, 14]
    assert log.accounting().lost == 7


def test_a_line_that_never_comes_is_given_up_after_so_many_tries() -> None:
    log = stream()
    log.take(line(0, 5), 10)
    log.take(line(10, 5), 12)
    out: list[Delivery] = []
    for _ in range(AGAIN_TRIES):
        assert log.wanted() == 11
        log.asked(11)
        out = log.unarrived(11)
    assert out[0] == Gap(FIRST + 10, 5, PERIOD, GapReason.NOT_ARRIVED)
    assert log.wanted() is None


def test_a_device_that_keeps_nothing_is_not_asked() -> None:
    log = stream(keep=0)
    log.take(line(0, 5), 10)
    out = log.take(line(10, 5), 12)
    assert out[0] == Gap(FIRST + 10, 5, PERIOD, GapReason.NOT_KEPT)


def test_a_hole_without_a_missing_number_was_never_sent() -> None:
    log = stream()
    log.take(line(0, 5), 10)
    assert log.take(line(6, 5), 11)[0] == Gap(FIRST + 10, 1, PERIOD, GapReason.NOT_SENT)


@pytest.mark.parametrize("number_before", [None, 9])
def test_the_first_line_of_a_logging_can_be_the_missing_one(number_before: int | None) -> None:
    log = stream(number_before=number_before)
    assert log.take(line(5, 5), 11) == []
    assert log.wanted() == 10
    log.asked(10)
    assert samples_of(log.take(line(0, 5), 10)) == list(range(10))


def test_the_tail_behind_the_last_line_is_found_by_what_the_device_made() -> None:
    log = stream()
    log.take(line(0, 5), 10)
    assert log.end(12) == []
    assert not log.done
    assert log.wanted() == 11
    log.asked(11)
    log.take(line(5, 5), 11)
    assert log.wanted() == 12
    log.asked(12)
    assert samples_of(log.take(line(10, 2), 12)) == [10, 11]
    assert log.done


def test_a_lost_tail_that_is_gone_is_a_gap() -> None:
    log = stream(keep=2)
    log.take(line(0, 5), 10)
    out = log.end(9)
    while (number := log.wanted()) is not None:
        log.asked(number)
        out = log.refused(number)
    assert out == [Gap(FIRST + 10, 4, PERIOD, GapReason.NOT_KEPT)]
    assert log.accounting().complete


def test_a_logging_of_which_nothing_arrived_is_one_gap() -> None:
    log = stream(number_before=None)
    assert log.end(4) == [Gap(FIRST, 4, PERIOD, GapReason.NOT_KEPT)]


def test_doubled_and_overlapping_lines_are_dropped_and_counted() -> None:
    log = stream()
    log.take(line(0, 5), 10)
    assert log.take(line(0, 5), 10) == []
    assert samples_of(log.take(line(3, 5), 11)) == [5, 6, 7]
    assert log.accounting().duplicates == 7


@pytest.mark.parametrize(
    "strange",
    [
        Block(np.array([FIRST + 11]), np.zeros((1, 2), np.int32), LAYOUT),
        Block(np.array([FIRST - 2]), np.zeros((1, 2), np.int32), LAYOUT),
        Block(np.array([FIRST + 10]), np.zeros((1, 1), np.int32), Layout.of(0b1, PERIOD)),
        Block(np.array([FIRST + 10]), np.zeros((1, 2), np.int32), Layout.of(0b11, 4)),
    ],
)
def test_a_line_of_another_phase_layout_or_time_is_dropped_and_counted(strange: Block) -> None:
    log = stream()
    log.take(line(0, 5), 10)
    assert log.take(strange, 11) == []
    assert log.accounting().strange_lines == 1


def test_what_is_held_is_bounded() -> None:
    log = stream(keep=200)
    out: list[Delivery] = []
    for step in range(1, HELD_LINES_MAX + 2):
        assert out == []
        out = log.take(line(step, 1), 10 + step)
    assert out[0] == Gap(FIRST, 1, PERIOD, GapReason.HELD_FULL)
    assert samples_of(out) == list(range(1, HELD_LINES_MAX + 2))


def test_a_lost_link_leaves_holes_with_that_reason_and_delivers_what_is_held() -> None:
    log = stream()
    log.take(line(5, 5), 11)
    out = log.abandon(GapReason.LINK_LOST)
    assert out[0] == Gap(FIRST, 5, PERIOD, GapReason.LINK_LOST)
    assert samples_of(out) == list(range(5, 10))
    assert not log.accounting().complete


class Sender:
    """A device that makes lines of random length and keeps the last few, behind a wire that loses some of them."""

    def __init__(self, seed: int, loss: float, keep: int, start: int) -> None:
        self.random = random.Random(seed)
        self.loss = loss
        self.keep = keep
        self.number = start
        self.made = 0
        self.kept: dict[int, Block] = {}

    def make(self) -> tuple[int, Block] | None:
        count = self.random.randint(1, 12)
        number, block = self.number, line(self.made, count)
        self.number = (number + 1) % 256
        self.made += count
        self.kept[number] = block
        while len(self.kept) > self.keep:
            del self.kept[next(iter(self.kept))]
        return None if self.random.random() < self.loss else (number, block)

    def again(self, log: SampleStream) -> list[Delivery]:
        number = log.wanted()
        if number is None:
            return []
        log.asked(number)
        if number not in self.kept:
            return log.refused(number)
        if self.random.random() < self.loss:
            return log.unarrived(number)
        return log.take(self.kept[number], number)


@given(
    seed=st.integers(0, 2**32),
    loss=st.sampled_from([0.0, 0.02, 0.3, 0.9]),
    keep=st.integers(0, 40),
    start=st.integers(0, 255),
    known=st.booleans(),
    lines=st.integers(0, 60),
)
def test_every_sample_is_delivered_once_in_order_or_in_exactly_one_gap(
    seed: int, loss: float, keep: int, start: int, known: bool, lines: int
) -> None:
    device = Sender(seed, loss, keep, start)
    log = SampleStream(first_tick=FIRST, layout=LAYOUT, keep=keep, number_before=(start - 1) % 256 if known else None)
    out: list[Delivery] = []
    for _ in range(lines):
        arrived = device.make()
        if arrived is not None:
            out += log.take(arrived[1], arrived[0])
        for _ in range(device.random.randint(0, 3)):
            out += device.again(log)
    out += log.end(device.made)
    while log.wanted() is not None:
        out += device.again(log)
    assert log.done
    covered: list[int] = []
    for item in out:
        if isinstance(item, Block):
            covered += [int(n) for n in item.values[:, 0]]
            assert np.array_equal(item.ticks, FIRST + PERIOD * item.values[:, 0].astype(np.int64))
        elif isinstance(item, Gap):
            start_sample = (item.first_tick - FIRST) // PERIOD
            covered += range(start_sample, start_sample + item.count)
    assert covered == list(range(device.made))
    account = log.accounting()
    assert account.complete
    assert account.expected == device.made == account.received + account.lost
    assert account.lost == sum(gap.count for gap in account.gaps)
    if loss == 0.0:
        assert account.lost == 0
