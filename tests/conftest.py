"""A hang-up means to the tests what it means at a terminal; and files that take long begin first.

Where they were begun with `nohup`, that ignores hang-ups, which every process that a test starts would inherit; a
handler that does nothing outlasts the terminal just as well, and is not inherited.
"""

from __future__ import annotations

import signal
import sys

import pytest

LONG_FIRST = (
    "test_readme.py",
    "test_fpga_proofs.py",
    "test_firmware_proofs.py",
    "test_firmware_agreement.py",
    "test_cli_kill.py",
    "test_measure_forecast.py",
    "test_measure_others.py",
    "test_measure_identify.py",
    "test_accept_emulated.py",
    "test_endure_ageing.py",
    "test_endure_live.py",
    "test_firmware_avr_vectors.py",
    "test_measure_wiring.py",
    "test_vectors_exchanges.py",
    "test_measure_constants.py",
    "test_scripts_demo.py",
    "test_accept_boards.py",
    "test_endure_wearing.py",
    "test_endure_features.py",
    "test_link_channel.py",
    "test_fpga_line.py",
    "test_measure_curve.py",
)
"""Files that take long on one core, the longest first. On several cores a file is one piece of work, see
`scripts/test.py`: were such a one the last to begin, the others would wait for it."""


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """The files of `LONG_FIRST` in its order, then the others as they were."""
    places = {name: place for place, name in enumerate(LONG_FIRST)}
    items.sort(key=lambda item: places.get(item.path.name, len(places)))


if sys.platform != "win32" and signal.getsignal(signal.SIGHUP) is signal.SIG_IGN:
    signal.signal(signal.SIGHUP, lambda number, frame: None)
