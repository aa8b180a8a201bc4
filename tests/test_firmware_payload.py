"""A board with short payloads sends every sample as it was, where one alone fills a line: SPEC DATA-4, DATA-9."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from core_device import COMPILER, CoreDevice
from ramprig_link.samples import decode
from scripted_device import Device

pytestmark = pytest.mark.skipif(COMPILER is None, reason="no C compiler: install gcc (Debian: apt-get install gcc)")

VECTORS = Path(__file__).resolve().parent.parent / "protocol" / "vectors" / "exchanges.json"


class Short(CoreDevice):
    """Room for one sample of the channels below, and three bits."""

    build_options = ("-DRR_PAYLOAD=33",)


def test_a_sample_that_stays_alone_in_its_line_keeps_its_values() -> None:
    board: Device = json.loads(VECTORS.read_text("utf-8"))["device"]
    device = Short(board, {}, {"counts": [{"rule": "turns", "counts_per_tick": 40}]})
    device.step()
    device.send("01 log 1 327687 packed")
    answer = device.step()[0]
    first = int(answer.split(" ")[3])
    seen: dict[int, tuple[int, ...]] = {}
    given: dict[int, int] = {}
    for i in range(12):
        given[first + i] = 300 * i * (-1) ** i
        device.change({"current_ma": [given[first + i]]})
        for line in device.step():
            block = decode(line.split(" ")[1])
            for row, values in enumerate(zip(*block.columns, strict=True)):
                seen[block.first_tick + row] = values
    assert len(seen) >= 11
    assert {tick: values[2] for tick, values in seen.items()} == {tick: given[tick] for tick in seen}
    assert {tick: values[1] for tick, values in seen.items()} == {tick: 40 * (tick + 1) for tick in seen}
