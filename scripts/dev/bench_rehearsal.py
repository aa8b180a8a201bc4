"""Measures how many times real time a rehearsal runs: the endurance sequence at 100 samples/s on the Python mock.

    python scripts/dev/bench_rehearsal.py

It also tells what share of the time is the mock's, by running the bare device for as many ticks.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from pathlib import Path

from ramprig.bench import load_bench
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import MockPort
from ramprig.sequence.outcome import Outcome, Verdict
from ramprig.sequence.reading import read_sequence
from ramprig.sequence.running import RunWish, run_sequence

AIM = 300.0
PASSES = "12"
BEST_OF = 3
SEQUENCE = Path(__file__).resolve().parent.parent / "vent_endurance.yaml"


@dataclass(frozen=True, slots=True)
class RehearsalSpeed:
    """Best of some runs: time simulated, time it took, and the time that the port, mock and wire took of it, in s."""

    simulated_s: float
    took_s: float
    mock_s: float

    @property
    def ratio(self) -> float:
        """How many times real time."""
        return self.simulated_s / self.took_s

    @property
    def host_ratio(self) -> float:
        """How many times real time it would be if the mock took none."""
        return self.simulated_s / max(1e-9, self.took_s - self.mock_s)


class TimedPort(MockPort):
    """A mock's port that adds up how long its device takes."""

    spent_s = 0.0

    def read(self, timeout_s: float) -> bytes:
        """As the mock's."""
        begin_s = time.perf_counter()
        try:
            return super().read(timeout_s)
        finally:
            self.spent_s += time.perf_counter() - begin_s


def once() -> RehearsalSpeed:
    """One rehearsal; raises RuntimeError where it does not pass."""
    sequence = read_sequence(SEQUENCE, settings={"passes": PASSES})
    assert sequence.bench is not None
    bench = load_bench(sequence.bench)
    port = TimedPort(MockDevice(setup_of_bench(bench), seed=1), pace="virtual", seed=1)
    start_s, began_s = port.clock.now(), time.perf_counter()
    outcome: Outcome = run_sequence(RunWish(sequence=sequence, bench=bench, virtual=True), port).outcome
    took_s = time.perf_counter() - began_s
    if outcome.verdict is not Verdict.PASSED:
        raise RuntimeError(f"the rehearsal did not pass: {outcome}")
    return RehearsalSpeed(port.clock.now() - start_s, took_s, port.spent_s)


def measure() -> RehearsalSpeed:
    """The best of BEST_OF runs."""
    return min((once() for _ in range(BEST_OF)), key=lambda speed: speed.took_s)


def main() -> None:
    """Measure and print."""
    speed = measure()
    print(
        f"rehearsal: {speed.simulated_s:.0f} s in {speed.took_s:.2f} s, {speed.ratio:.0f} times real time "
        f"(aim {AIM:.0f}); without the mock's share ({speed.mock_s / speed.took_s:.0%}) {speed.host_ratio:.0f} times"
    )


if __name__ == "__main__":
    main()
