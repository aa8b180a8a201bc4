"""The chain of one axis in one tick, as SPEC section 12 words it: ceiling, slew, dwell lock, bridge.

This is the form to read beside the SPEC. `drive.Drive` does the same without making objects, for speed; a property
test holds the two equal.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True, kw_only=True)
class ChainLimits:
    """The limits of the chain: duties in 1/10000, `ceiling_duty` already held within the board's `max_duty`."""

    ceiling_duty: int
    slew_up_duty: int
    slew_down_duty: int
    dwell_ticks: int


@dataclass(frozen=True, slots=True, kw_only=True)
class ChainState:
    """What the chain keeps: the last bridge duty and sign, ticks in a row ended at zero, ticks the lock has held."""

    duty: int = 0
    last_sign: int = 0
    zero_ticks: int = 0
    held_ticks: int = 0


@dataclass(frozen=True, slots=True, kw_only=True)
class ChainStep:
    """What one tick gives. `let_go_ticks` is how long the dwell lock had held when it let go in this tick, else 0."""

    state: ChainState
    at_ceiling: bool
    at_slew: bool
    dwell_lock: bool
    let_go_ticks: int


def sign(value: int) -> int:
    """-1, 0 or 1."""
    return (value > 0) - (value < 0)


def held_within(value: int, bound: int) -> int:
    """The value, or the end of -bound to bound that it lies beyond."""
    return max(-bound, min(bound, value))


def slewed(duty: int, target: int, *, up: int, down: int) -> int:
    """CHAIN-2: one tick's move of the duty towards the target, which has the same sign or is zero."""
    if abs(target) < abs(duty):
        return max(target, duty - down) if duty > 0 else min(target, duty + down)
    return min(target, duty + up) if target > 0 else max(target, duty - up)


def chain_step(state: ChainState, limits: ChainLimits, *, demand: int, still: bool) -> ChainStep:
    """One tick. `demand` is in 1/10000; `still` says that the shaft is at standstill, or that there is no encoder."""
    target = held_within(demand, limits.ceiling_duty)
    at_ceiling = target != demand
    duty = held_within(state.duty, limits.ceiling_duty)  # [CHAIN-1] a tightened ceiling cuts at once

    if sign(target) == -sign(duty):
        target = 0
    duty = slewed(duty, target, up=limits.slew_up_duty, down=limits.slew_down_duty)  # [CHAIN-2]
    at_slew = duty != target

    leaving = state.duty == 0 and duty != 0 and sign(duty) != state.last_sign  # [CHAIN-3]
    dwell_lock = leaving and not (still and state.zero_ticks >= limits.dwell_ticks)
    if dwell_lock:
        duty = 0

    after = ChainState(  # [CHAIN-4]
        duty=duty,
        last_sign=sign(duty) or state.last_sign,
        zero_ticks=0 if duty else state.zero_ticks + 1,
        held_ticks=state.held_ticks + 1 if dwell_lock else 0,
    )
    let_go_ticks = state.held_ticks if leaving and not dwell_lock else 0
    return ChainStep(
        state=after, at_ceiling=at_ceiling, at_slew=at_slew, dwell_lock=dwell_lock, let_go_ticks=let_go_ticks
    )
