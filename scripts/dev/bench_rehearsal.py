"""Measures how many times real time a rehearsal runs: the endurance sequence at 100 samples/s on mock and core.

    python scripts/dev/bench_rehearsal.py

It also tells what share of the time is the device's: the Python mock's, or the firmware core's and C plant's. Times are
the processor's.
"""

from __future__ import annotations

import time
from dataclasses import dataclass
from pathlib import Path

from ramprig.bench import load_bench
from ramprig.mock.cable import Device
from ramprig.mock.core import SimulatedDevice, why_not
from ramprig.mock.device import MockDevice
from ramprig.mock.from_bench import setup_of_bench
from ramprig.mock.port import DevicePort
from ramprig.sequence.outcome import Outcome, Verdict
from ramprig.sequence.reading import read_sequence
from ramprig.sequence.running import RunWish, run_sequence

AIM = 300.0
CORE_AIM = 2000.0
PASSES = "12"
BEST_OF = 3
SEQUENCE = Path(__file__).resolve().parent.parent / "vent_endurance.yaml"


@dataclass(frozen=True, slots=True)
class RehearsalSpeed:
    """Best of some runs: time simulated, time it took, and the time that the port, device and wire took, in s."""

    simulated_s: float
    took_s: float
    device_s: float

    @property
    def ratio(self) -> float:
        """How many times real time."""
        return self.simulated_s / self.took_s

    @property
    def host_ratio(self) -> float:
        """How many times real time it would be if the device took none."""
        return self.simulated_s / max(1e-9, self.took_s - self.device_s)


class TimedPort(DevicePort[Device]):
    """A port that adds up how long its device takes."""

    spent_s = 0.0

    def read_until(self, until_s: float) -> bytes:
        """As `PatientPort.read_until`."""
        begin_s = time.process_time()
        try:
            return super().read_until(until_s)
        finally:
            self.spent_s += time.process_time() - begin_s


def once(make: type[MockDevice] | type[SimulatedDevice]) -> RehearsalSpeed:
    """One rehearsal on a device of this kind; raises RuntimeError where it does not pass."""
    sequence = read_sequence(SEQUENCE, settings={"passes": PASSES})
    assert sequence.bench is not None
    bench = load_bench(sequence.bench)
    port = TimedPort(make(setup_of_bench(bench), seed=1), pace="virtual", seed=1)
    start_s, began_s = port.clock.now(), time.process_time()
    outcome: Outcome = run_sequence(RunWish(sequence=sequence, bench=bench, virtual=True), port).outcome
    took_s = time.process_time() - began_s
    if outcome.verdict is not Verdict.PASSED:
        raise RuntimeError(f"the rehearsal did not pass: {outcome}")
    return RehearsalSpeed(port.clock.now() - start_s, took_s, port.spent_s)


def measure(make: type[MockDevice] | type[SimulatedDevice] = MockDevice) -> RehearsalSpeed:
    """The best of BEST_OF runs."""
    return min((once(make) for _ in range(BEST_OF)), key=lambda speed: speed.took_s)


def line_of(name: str, speed: RehearsalSpeed, aim: float) -> str:
    """A speed in a sentence."""
    return (
        f"{speed.ratio:.0f} times real time at 100 samples a second on {name} "
        f"(aim {aim:.0f} or more: {speed.ratio / aim:.2f} of it); "
        f"{speed.device_s / speed.took_s:.0%} of it is the device's own, without that {speed.host_ratio:.0f} times"
    )


def lines() -> list[str]:
    """Rehearsals on the mock, and on the core where it can be built."""
    found = [line_of("the Python mock", measure(), AIM)]
    reason = why_not()
    found.append(line_of("the core", measure(SimulatedDevice), CORE_AIM) if reason is None else f"no core: {reason}")
    return [f"rehearsal:           {found[0]}", f"                     {found[1]}"]


def main() -> None:
    """Measure and print."""
    print("\n".join(lines()))


if __name__ == "__main__":
    main()
