"""Spaces the starts of motors evenly over the hour, so that no 60 minutes ever have more of them than allowed.

A rating of so many starts per hour is meant for any 60 minutes, and for starts that come evenly: a winding that is
started in a burst and then rests for the remainder of the hour gets as hot as the burst makes it (common practice with
rated motors, from memory). So a turn (a cycle or a check) with k starts takes its share of the hour, an n-th of it,
where n = floor(allowed / k) is how many such turns fit into it. A start may lie anywhere in its turn, so the hour is
taken longer by the turn's own length. A guard that counts the last hour's starts stands behind that; it has something
to do only where turns with unlike numbers of starts follow each other, or a run goes on after an interruption.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

HOUR_S = 3600


@dataclass(frozen=True, slots=True, kw_only=True)
class TurnBound:
    """A turn that comes `count` times: its starts by motor, and from its begin to its end in ticks."""

    count: int
    starts: Mapping[str, int]
    ticks: int


def share_ticks(count: int, *, per_hour: int, ticks: int, hour: int) -> int:
    """From the begin of a turn with `count` starts that took `ticks` to that of the next one; `hour` is in ticks."""
    fitting = max(1, per_hour // max(1, count))
    return -(-(hour + ticks) // fitting)


class StartsGuard:
    """Remembers the starts of each motor for an hour; times in s on one axis, not decreasing."""

    def __init__(self) -> None:
        self._starts: dict[str, deque[tuple[float, int]]] = {}
        self._last: dict[str, tuple[float, float, int]] = {}

    def note(self, starts: Mapping[str, int], at_s: float, *, took_s: float = 0.0) -> None:
        """These starts were over at `at_s`, in a turn that had begun `took_s` before."""
        for motor, count in starts.items():
            past = self._starts.setdefault(motor, deque())
            if count:
                past.append((at_s, count))
                self._last[motor] = at_s - took_s, took_s, count
            _forget(past, at_s)

    def earliest_s(self, starts: Mapping[str, int], now_s: float, *, per_hour: int) -> float:
        """When a turn with these starts may begin, `now_s` or later: evenly spaced, and with at most `per_hour` in any
        60 minutes."""
        allowed = [self._earliest_s(motor, count, now_s, per_hour) for motor, count in starts.items() if count]
        return max(allowed, default=now_s)

    def _earliest_s(self, motor: str, count: int, now_s: float, per_hour: int) -> float:
        past = self._starts.setdefault(motor, deque())
        _forget(past, now_s)
        excess = sum(number for _, number in past) + count - per_hour
        earliest_s = max(now_s, self._spaced_s(motor, per_hour))
        for at_s, number in past:
            if excess <= 0:
                break
            excess -= number
            earliest_s = max(earliest_s, at_s + HOUR_S)
        return earliest_s

    def _spaced_s(self, motor: str, per_hour: int) -> float:
        if motor not in self._last:
            return 0.0
        begin_s, took_s, count = self._last[motor]
        return begin_s + (HOUR_S + took_s) / max(1, per_hour // count)


def _forget(past: deque[tuple[float, int]], now_s: float) -> None:
    while past and past[0][0] <= now_s - HOUR_S:
        past.popleft()


def least_ticks(turns: Iterable[TurnBound], *, per_hour: int, hour: int) -> int:
    """Turns with these starts cannot be over sooner, counted from the begin of the first."""
    turns = [turn for turn in turns if turn.count]
    found = 0
    for motor in {name for turn in turns for name in turn.starts}:
        spaced = [
            (share_ticks(turn.starts[motor], per_hour=per_hour, ticks=turn.ticks, hour=hour), turn)
            for turn in turns
            if turn.starts.get(motor)
        ]
        if spaced:
            total = sum(share * turn.count for share, turn in spaced)
            # the last one's share need not be waited for, and which one is last is not asked
            found = max(found, total - max(share for share, _ in spaced) + min(turn.ticks for _, turn in spaced))
    return found


def longest_wait(turns: Iterable[TurnBound], *, per_hour: int, hour: int) -> int:
    """From the end of one of these turns to the begin of the next at the longest, as far as starts go.

    Where all have the same number of starts it is what the shares leave. Else the guard may wait besides: for an hour
    from the end of some earlier turn, since which all turns but the two last have had their shares.
    """
    turns = [turn for turn in turns if turn.count]
    longest = max((turn.ticks for turn in turns), default=0)
    found = 0
    for motor in {name for turn in turns for name in turn.starts}:
        counts = {turn.starts.get(motor, 0) for turn in turns} - {0}
        if len(counts) == 1:
            (count,) = counts
            found = max(found, share_ticks(count, per_hour=per_hour, ticks=longest, hour=hour))
        elif counts:
            found = max(found, -(-2 * max(counts) * hour // per_hour) + longest)
    return found


def most_ticks_a_turn(turns: Iterable[TurnBound], turn: TurnBound, *, per_hour: int, hour: int) -> int:
    """From the begin of `turn`, one of `turns`, to that of the next at the longest, as far as starts go.

    The times at which turns begin follow from those before by sums and greatest values alone. Where all turns have
    the same number of starts, the guard never waits for longer than the shares do. Else a wait of the guard, an hour
    and a turn at the longest, comes after more than `per_hour` - (most starts of a turn) starts.
    """
    turns = [other for other in turns if other.count]
    longest = max((other.ticks for other in turns), default=0)
    found = 0
    for motor, count in turn.starts.items():
        if not count:
            continue
        counts = {other.starts.get(motor, 0) for other in turns} - {0}
        share = share_ticks(count, per_hour=per_hour, ticks=longest, hour=hour)
        if counts != {count}:
            usable = max(1, per_hour - max(counts, default=count) + 1)
            share = max(share, -(-count * (hour + longest) // usable))
        found = max(found, share)
    return found
