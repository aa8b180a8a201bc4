"""What a run's cycles could not show is told with what it would ask for, and nothing else is."""

from __future__ import annotations

from ramprig.endure.features import NEEDS, Span
from ramprig.endure.recorded import RecordedFeatures
from ramprig.report.untold import untold_table


def turn(number: int, **known: float) -> RecordedFeatures:
    named = {name.replace("__", ": ").replace("_", " "): value for name, value in known.items()}
    return RecordedFeatures(
        span=Span(number=number, part=1, begin_tick=0, end_tick=1), samples=1, left_out=0, known=named
    )


def test_a_feature_that_no_cycle_or_check_has_is_told_with_its_reason() -> None:
    turns = [turn(1, duration=1.0, vent__energy=2.0), turn(0, vent__resistance=2.5, vent_forward__steady_current=0.1)]
    text = untold_table(turns, motors=["vent"], servos=["latch"])
    assert "vent: lost motion" in text
    assert NEEDS["lost motion"].partition(";")[0] in text
    for shown in ("vent: resistance", "vent: steady current", "latch"):
        assert shown not in text


def test_a_run_that_tells_everything_has_no_such_table() -> None:
    known = {f"vent: {word}": 1.0 for word in NEEDS}
    everything = RecordedFeatures(
        span=Span(number=1, part=1, begin_tick=0, end_tick=1), samples=1, left_out=0, known=known
    )
    assert untold_table([everything], motors=["vent"], servos=[]) == ""
    assert untold_table([], motors=["vent"], servos=["latch"]) == ""
