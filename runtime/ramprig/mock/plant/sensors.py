"""What the board sees of an axis: encoder counts and motor current, each with its faults."""

from __future__ import annotations

import math
import random

from .parameters import EncoderParameters, SensorParameters

_WRAP = 1 << 32
_HALF = 1 << 31

X4_STEPS: tuple[int | None, ...] = (
    0, -1, +1, None,
    +1, 0, None, -1,
    -1, None, 0, +1,
    None, +1, -1, 0,
)  # fmt: skip
"""Count for each change of the two phases: index 4 * before + now, each 2 * A + B; None where both changed at once.

A leads B when counting up. Source: TI SPRUIX1B table 15-3. Older TI manuals (SPRUG05A and others) print increment and
decrement exchanged in the four rows whose previous edge is B; those rows are wrong.
"""

GRAY_UP = (0b00, 0b10, 0b11, 0b01)
"""The states of (A, B) in the order in which they follow each other counting up."""


class QuadratureDecoder:
    """Counts a pair of phases four times a line; an illegal change counts nothing and raises `illegal`."""

    __slots__ = ("_state", "count", "illegal")

    def __init__(self, a: bool = False, b: bool = False) -> None:
        self._state = 2 * a + b
        self.count = 0
        self.illegal = 0

    def step(self, a: bool, b: bool) -> int:
        """Take the phases' new levels and return the count, not wrapped."""
        now = 2 * a + b
        moved = X4_STEPS[4 * self._state + now]
        self._state = now
        if moved is None:
            self.illegal += 1
        else:
            self.count += moved
        return self.count


class Encoder:
    """Counts of a shaft: the angle rounded down to whole counts, wrapping at 32 bits signed.

    `on_output` says that the angle to be read is that of the output shaft, not the motor's. Faults may be set at any
    time, and act from the next reading on. `phases_swapped` counts the wrong way; `dead` freezes the count;
    `one_channel` leaves phase A alone, so the count goes to and fro by one; `noisy` moves each reading by -1, 0 or +1,
    without a lasting error.
    """

    __slots__ = (
        "_count",
        "_counts_per_rad",
        "_position",
        "_random",
        "dead",
        "noisy",
        "on_output",
        "one_channel",
        "phases_swapped",
    )

    def __init__(self, parameters: EncoderParameters, *, randomness: random.Random) -> None:
        self._counts_per_rad = parameters.counts_per_turn / math.tau
        self._random = randomness
        self.on_output = parameters.on_output
        self._position = 0
        self._count = 0
        self.phases_swapped = False
        self.dead = False
        self.one_channel = False
        self.noisy = False

    def read(self, angle_rad: float) -> int:
        """Return the counter at `angle_rad`, -2**31 to 2**31 - 1."""
        position = math.floor(angle_rad * self._counts_per_rad)
        moved = position - self._position
        if moved:
            before = self._position
            self._position = position
            if self.dead:
                moved = 0
            elif self.one_channel:
                # B rests low: only A's edges count, up when it rises and down when it falls.
                moved = (GRAY_UP[position & 3] >> 1) - (GRAY_UP[before & 3] >> 1)
            if self.phases_swapped:
                moved = -moved
            count = self._count + moved
            self._count = count if -_HALF <= count < _HALF else (count + _HALF) % _WRAP - _HALF
        if self.noisy:
            return (self._count + self._random.randrange(-1, 2) + _HALF) % _WRAP - _HALF
        return self._count


class CurrentSensor:
    """The signed motor current in mA, with offset, Gaussian noise, saturation and steps.

    `offset_ma` and `noise_ma` may be set while running. Noise is drawn only when read; the same seed and the same
    readings give the same noise. It comes from a table of 4096 Gaussian values, so it never exceeds about 4 sigma.
    """

    __slots__ = ("_random", "_table", "noise_ma", "offset_ma", "range_ma", "step_ma")

    def __init__(self, parameters: SensorParameters, *, randomness: random.Random) -> None:
        self.offset_ma = parameters.offset_ma
        self.noise_ma = parameters.noise_ma
        self.range_ma = parameters.range_ma // parameters.step_ma * parameters.step_ma
        self.step_ma = parameters.step_ma
        self._random = randomness
        # Drawing from a table costs a sixth of random.gauss, and this runs in every tick.
        self._table = tuple(randomness.gauss(0.0, 1.0) for _ in range(4096))

    def read(self, current_a: float) -> int:
        """Return the reading in mA for a motor current in A: a multiple of the step, within the range."""
        reading = current_a * 1000.0 + self.offset_ma
        if self.noise_ma:
            reading += self.noise_ma * self._table[self._random.getrandbits(12)]
        limit = self.range_ma
        if reading > limit:
            reading = limit
        elif reading < -limit:
            reading = -limit
        step = self.step_ma
        return step * math.floor(reading / step + 0.5)
