"""When a measurement gives no numbers, and says why instead."""

from __future__ import annotations

from ramprig.errors import RamprigError


class NotMeasurable(RamprigError):
    """What was recorded cannot give the result: `found` says what stands in the way, `wanted` what would help."""

    exit_code = 1

    def __init__(self, found: str, *, wanted: str = "") -> None:
        self.found = found
        self.wanted = wanted
        super().__init__(f"no result: {found}" + (f"; {wanted}" if wanted else ""))
