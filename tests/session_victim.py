"""A host that drives the motor until it is ended: started by test_session_process.py as a process of its own."""

from __future__ import annotations

import sys

from ramprig.errors import RamprigError
from ramprig.port.open import open_port
from ramprig.session import Session, StopOnSignals, Wanted

LEASE_MS = 300


def main(url: str) -> int:
    session = Session.open(open_port(url), wanted=Wanted(limits=lambda identity: {("stop_ticks", 0): 400}))
    try:
        with session, StopOnSignals(session):
            session.arm(LEASE_MS)
            session.ramp(0, 2500, 100, session.start_in())
            session.pump(session.clock_now() + 0.6)
            print("running", flush=True)
            session.pump(session.clock_now() + 60.0)
    except RamprigError as error:
        stop = session.last_stop
        print(f"{type(error).__name__}: {stop.verdict if stop else 'no stop'}", flush=True)
        return error.exit_code
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1]))
