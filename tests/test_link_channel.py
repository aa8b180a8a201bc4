"""Over a line that flips, loses and doubles, every request is carried out exactly once or told as unknown.

Virtual time in steps of one tick. The line keeps its order, as a wire does; it may stall.
"""

from __future__ import annotations

import random
from collections import Counter, deque
from dataclasses import dataclass, field

import pytest

from ramprig_link.device import DeviceLink, Reply
from ramprig_link.faults import LinkSilent
from ramprig_link.host import Answered, HostLink, RetryPolicy, UrgentAnswered
from ramprig_link.messages import Request

TICK_S = 0.001


@dataclass
class Wire:
    """One direction. Each chance is per sending; what is sent arrives after `delay_ticks`, later in a stall."""

    draw: random.Random
    flip: float = 0.0
    lose: float = 0.0
    lose_byte: float = 0.0
    double: float = 0.0
    stall: float = 0.0
    delay_ticks: int = 2
    _under_way: deque[tuple[int, bytes]] = field(default_factory=deque)

    def send(self, data: bytes, tick: int) -> None:
        arrives = tick + self.delay_ticks + (self.draw.randrange(2000) if self.draw.random() < self.stall else 0)
        if self._under_way:
            arrives = max(arrives, self._under_way[-1][0])
        for _ in range(2 if self.draw.random() < self.double else 1):
            if self.draw.random() >= self.lose:
                self._under_way.append((arrives, self._spoilt(data)))

    def _spoilt(self, data: bytes) -> bytes:
        spoilt = bytearray(data)
        if self.draw.random() < self.flip:
            spoilt[self.draw.randrange(len(spoilt))] ^= 1 << self.draw.randrange(8)
        if self.draw.random() < self.lose_byte:
            del spoilt[self.draw.randrange(len(spoilt))]
        return bytes(spoilt)

    def arrived(self, tick: int) -> bytes:
        data = b""
        while self._under_way and self._under_way[0][0] <= tick:
            data += self._under_way.popleft()[1]
        return data


class Bench:
    """Both ends and both wires; the request `again ID` stands for an order of its own."""

    def __init__(self, seed: int, **chances: float) -> None:
        draw = random.Random(seed)
        self.draw = draw
        self.down = Wire(draw, **chances)  # type: ignore[arg-type]  # the chances are floats
        self.up = Wire(draw, **chances)  # type: ignore[arg-type]  # the chances are floats
        self.device = DeviceLink()
        self.host = HostLink(draw.randrange(255), RetryPolicy())
        self.tick = 0
        self.carried_out: Counter[int] = Counter()
        self.answered: set[int] = set()
        self.unknown: set[int] = set()
        self.urgent_stops = 0
        self.urgent_answers = 0

    def device_step(self) -> None:
        for incoming in self.device.receive(self.down.arrived(self.tick), self.tick):
            if isinstance(incoming, Reply):
                self.up.send(incoming.line, self.tick)
            elif isinstance(incoming, Request):
                (value,) = incoming.values()
                if incoming.urgent:
                    self.urgent_stops += 1
                else:
                    self.carried_out[int(value)] += 1
                self.up.send(self.device.ok(incoming, self.tick, value), self.tick)
        if news := self.device.garbled_news(self.tick):
            self.up.send(news, self.tick)

    def host_step(self, order: int) -> bool:
        """Pursue `order`; True once it is answered or told as unknown."""
        now_s = self.tick * TICK_S
        ended = False
        for event in self.host.receive(self.up.arrived(self.tick), now_s):
            self.urgent_answers += isinstance(event, UrgentAnswered)
            if isinstance(event, Answered):
                assert event.answer.ok
                assert event.answer.fields == (str(order),) == event.request.args
                self.answered.add(order)
                ended = True
        if ended:
            return True
        try:
            repeat = self.host.due(now_s)
        except LinkSilent:
            self.unknown.add(order)
            return True
        if repeat:
            self.down.send(repeat, self.tick)
        elif self.host.outstanding is None:
            self.down.send(self.host.ask("again", order, now_s=now_s), self.tick)
        return False

    def run(self, orders: int, *, urgent: float = 0.0) -> None:
        for order in range(orders):
            ended = False
            while not ended:
                if self.draw.random() < urgent:
                    self.down.send(HostLink.urgent_stop(0), self.tick)
                ended = self.host_step(order)
                self.device_step()
                self.tick += 1


BAD_LINES: dict[str, dict[str, float]] = {
    "clean": {},
    "flips": {"flip": 0.3},
    "losses": {"lose": 0.1, "lose_byte": 0.1},
    "doubles": {"double": 0.5},
    "stalls": {"stall": 0.05},
    "all": {"flip": 0.15, "lose": 0.1, "lose_byte": 0.1, "double": 0.2, "stall": 0.02},
    "hopeless": {"flip": 0.6, "lose": 0.5, "double": 0.2, "stall": 0.05},
}


def check(bench: Bench, orders: int, replay: str) -> None:
    assert bench.answered | bench.unknown == set(range(orders)), replay
    assert bench.answered & bench.unknown == set(), replay
    assert all(bench.carried_out[order] == 1 for order in bench.answered), replay
    assert all(bench.carried_out[order] <= 1 for order in bench.unknown), replay


@pytest.mark.parametrize("name", BAD_LINES)
@pytest.mark.parametrize("seed", range(3))
def test_every_request_is_carried_out_exactly_once_or_told_as_unknown(name: str, seed: int) -> None:
    """SPEC TAG-3, TAG-6."""
    bench = Bench(seed, **BAD_LINES[name])
    bench.run(orders=300)
    check(bench, 300, f"{name}, seed {seed}")
    if name != "hopeless":
        assert len(bench.answered) > 290
    if name == "hopeless":
        assert bench.unknown
    if name == "clean":
        assert bench.device.counts.repeats == 0


@pytest.mark.parametrize("seed", range(3))
def test_urgent_stops_in_between_disturb_no_request(seed: int) -> None:
    """SPEC TAG-5."""
    bench = Bench(seed, **BAD_LINES["all"])
    bench.run(orders=300, urgent=0.02)
    check(bench, 300, f"seed {seed}")
    assert bench.urgent_stops > 50
    assert bench.urgent_answers > 0


def test_without_the_kept_answer_requests_would_be_carried_out_twice(monkeypatch: pytest.MonkeyPatch) -> None:
    """The model sees the fault it looks for."""
    monkeypatch.setattr(DeviceLink, "_keep", lambda self, request, answer: answer)
    bench = Bench(1, **BAD_LINES["losses"])
    bench.run(orders=300)
    assert max(bench.carried_out.values()) > 1


@pytest.mark.soak
@pytest.mark.parametrize("seed", range(100, 130))
def test_exactly_once_over_many_more_requests(seed: int) -> None:
    for name, chances in BAD_LINES.items():
        bench = Bench(seed, **chances)
        bench.run(orders=1000, urgent=0.005)
        check(bench, 1000, f"{name}, seed {seed}")
