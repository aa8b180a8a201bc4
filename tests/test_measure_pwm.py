"""The PWM adviser against published and reckoned figures, each with its source."""

from __future__ import annotations

import dataclasses
import json
import math
from pathlib import Path

import pytest

from ramprig.bench import load_bench
from ramprig.cli.main import main
from ramprig.measure.procedures.pwm import PwmWish, advise, dead_time_error_v, exact_a, resolution_bits
from ramprig.measure.refusal import NotMeasurable
from ramprig.mock.plant.ripple import ripple_a

VENT = Path(__file__).resolve().parent.parent / "scripts" / "vent_bench.yaml"


@pytest.mark.parametrize(("duty", "milliamperes"), [(0.1, 54.0), (0.25, 112.5), (0.5, 150.0), (0.75, 112.5)])
def test_the_approximate_ripple(duty: float, milliamperes: float) -> None:
    # V D (1 - D)/(f L) at 12 V, 20 kHz, 1 mH: Erickson and Maksimovic, ch. 2 (from memory)
    found = ripple_a(bus_v=12.0, duty=duty, frequency_hz=20e3, inductance_h=1e-3)
    assert 1000 * found == pytest.approx(milliamperes)


@pytest.mark.parametrize(("duty", "milliamperes"), [(0.25, 112.48243), (0.5, 149.96876), (0.75, 112.48243)])
def test_the_exact_ripple(duty: float, milliamperes: float) -> None:
    # the same with 2 ohm; scipy.signal.lsim over 400 periods of 2000 samples agrees within 2e-4
    drive = {"bus_v": 12.0, "frequency_hz": 20e3, "inductance_h": 1e-3, "resistance_ohm": 2.0}
    assert 1000 * exact_a(duty=duty, bipolar=False, **drive) == pytest.approx(milliamperes, rel=1e-7)
    assert 1000 * exact_a(duty=duty, bipolar=True, **drive) == pytest.approx(2 * milliamperes, rel=1e-7)


@pytest.mark.parametrize(
    ("clock_hz", "frequency_hz", "centred", "bits"),
    [
        # PIC16F887 data sheet DS41291F, tables 11-3 and 11-4: f = Fosc/(4 (PR2 + 1)), bits = log2(4 (PR2 + 1))
        (20e6, 20e6 / (4 * 256), False, 10.0),
        (20e6, 20e6 / (4 * 64), False, 8.0),
        (20e6, 20e6 / (4 * 32), False, 7.0),
        (20e6, 20e6 / (4 * 24), False, 6.58496),
        (8e6, 8e6 / (4 * 26), False, 6.70044),
        # AVR at 16 MHz (from memory): fast PWM f = fclk/(1 + TOP); phase correct f = fclk/(2 TOP)
        (16e6, 62_500.0, False, 8.0),
        (16e6, 20_000.0, False, 9.64386),
        (16e6, 15_625.0, False, 10.0),
        (16e6, 31_372.549, True, math.log2(255)),
    ],
)
def test_the_resolution(clock_hz: float, frequency_hz: float, centred: bool, bits: float) -> None:
    assert resolution_bits(clock_hz, frequency_hz, centred=centred) == pytest.approx(bits, abs=2e-5)


def test_the_dead_time_error() -> None:
    # V t f: 24 V, 1 us, 20 kHz is 0.48 V, 2 % of the duty; 0.96 V where both legs switch (from memory)
    one = dead_time_error_v(bus_v=24.0, dead_time_s=1e-6, frequency_hz=20e3)
    assert one == pytest.approx(0.48)
    assert one / 24.0 == pytest.approx(0.02)
    assert dead_time_error_v(bus_v=24.0, dead_time_s=1e-6, frequency_hz=20e3, legs=2) == pytest.approx(0.96)


def test_advice_for_the_vent() -> None:
    bench = load_bench(VENT)
    found = advise(bench, PwmWish(motor="vent", frequency_hz=1000.0, dead_time_s=500e-9))
    # 0.6 V/(L I) with 12 V, 1.2 mH, 0.9 A
    assert found.values["least_frequency"].value == pytest.approx(0.6 * 12.0 / (1.2e-3 * 0.9))
    assert found.values["ripple"].value == pytest.approx(
        exact_a(bus_v=12.0, duty=0.5, frequency_hz=1e3, inductance_h=1.2e-3, resistance_ohm=2.5, bipolar=False)
    )
    assert found.values["ripple"].relative > 0.05, "a model's inductance is not a measured one"
    assert "nothing of it was measured" in found.lines[0]
    assert "20 kHz fits" in found.sentence
    assert "audible" in found.sentence


def test_what_makes_no_sense_is_refused() -> None:
    bench = load_bench(VENT)
    for wish in (
        PwmWish(motor="vent", frequency_hz=0.0),
        PwmWish(motor="vent", frequency_hz=1e9),
        PwmWish(motor="vent", clock_hz=math.nan),
        PwmWish(motor="vent", dead_time_s=1.0),
    ):
        with pytest.raises(NotMeasurable):
            advise(bench, wish)
    bare = dataclasses.replace(bench, motors=(dataclasses.replace(bench.motors[0], model=None),))
    with pytest.raises(NotMeasurable, match="neither a 'model' nor measured constants"):
        advise(bare, PwmWish(motor="vent"))


def test_the_command_prints_json_and_writes_a_plot(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["measure", "pwm", "--bench", str(VENT), "--runs", str(tmp_path), "--json"]) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["procedure"] == "pwm"
    rows = told["facts"]["rows"]
    assert [row["audible"] for row in rows if row["frequency_hz"] >= 16e3] == [True, False, False, False, False]
    assert (tmp_path / "pwm-vent.png").stat().st_size > 10_000
