"""How many ticks a second of processor time the mock does: at rest, and with a motor and a servo moving and logging.

Ticks are 1 ms, so a thousand a second is real time. `python scripts/dev/bench_mock.py [SECONDS OF THE MOCK'S TIME]`
"""

from __future__ import annotations

import sys
import time

from ramprig.mock import MockDevice, MockSetup
from ramprig_link.check import seal
from ramprig_link.words import State

LIMITS = {("ceiling_duty", 0): 6000, ("lease_ms", 0): 5000, ("rated_ma", 0): 0, ("trip_ma", 0): 8000}
MASK = 0b111 | 1 << 12 | 1 << 16 | 1 << 18
ORDERS_EVERY_TICKS = 1000


def ask(device: MockDevice, tag: int, body: str) -> None:
    """Send a request and let it be answered."""
    device.receive(seal(f"{tag:02x} {body}".encode("ascii")))
    for _ in range(12):
        device.advance(1)


def run(device: MockDevice, ticks: int) -> None:
    """Let ticks pass and throw away what the device sends."""
    end = device.ticks + ticks
    while device.ticks < end:
        device.advance(end - device.ticks)
        device.transmit()


def at_rest(ticks: int) -> float:
    """Ticks a second of a device that is off."""
    device = MockDevice(MockSetup(limits=LIMITS))
    begin_s = time.process_time()
    run(device, ticks)
    return ticks / (time.process_time() - begin_s)


def moving(ticks: int) -> float:
    """Ticks a second of one with new orders for motor and servo every second."""
    device = MockDevice(MockSetup(limits=LIMITS))
    controller = device.controller
    assert controller is not None
    ask(device, 1, f"arm 5000 {controller.limits.digest()}")
    ask(device, 2, f"log 10 {MASK} packed")
    run(device, 400)
    begin_s = time.process_time()
    for n in range(ticks // ORDERS_EVERY_TICKS):
        start = controller.age + 40
        ask(device, 16 + n % 32, f"ramp 0 {2000 if n % 2 else 5000} 800 {start}")
        ask(device, 64 + n % 32, f"swing 0 {1800 if n % 2 else 1200} 800 {start}")
        run(device, ORDERS_EVERY_TICKS - 24)
    took_s = time.process_time() - begin_s
    assert controller.state is State.ARMED, controller.last_trip
    return ticks / took_s


def main() -> None:
    """Print both."""
    ticks = 1000 * int(sys.argv[1] if len(sys.argv) > 1 else 100)
    print(f"at rest                             {at_rest(ticks):>10,.0f} ticks/s")
    print(f"motor, servo, a sample in 10 ticks  {moving(ticks):>10,.0f} ticks/s")


if __name__ == "__main__":
    main()
