"""The pictures of the procedures: what is drawn, in which units, with which marks."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from ramprig.measure.numbers.uncertainty import Measured
from ramprig.measure.trace import Floats, MotorTrace

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from .ways import RunDown, Way

FORWARD, BACKWARD, MODEL, FAINT = "#1f5fa8", "#b3541e", "#2b2b2b", "#8a8a8a"


def pulses(figure: Figure, traces: Sequence[MotorTrace], *, title: str) -> None:
    """Duty, current and counts of all pulses, one after the other."""
    axes = figure.subplots(3, 1, sharex=True)
    begin_s = 0.0
    for trace in traces:
        time_s = trace.time_s + begin_s
        colour = FORWARD if trace.duty.sum() >= 0 else BACKWARD
        axes[0].plot(time_s, 100 * trace.duty, color=colour, linewidth=1)
        axes[1].plot(time_s, 1000 * trace.current_a, color=colour, linewidth=0.8)
        axes[2].plot(time_s, trace.counts, color=colour, linewidth=1)
        begin_s = float(time_s[-1]) + 0.1
    for axis, label in zip(axes, ("duty, %", "current, mA", "counts"), strict=True):
        axis.set_ylabel(label)
        axis.grid(alpha=0.3)
        axis.axhline(0.0, color=FAINT, linewidth=0.8)
    axes[2].set_xlabel("time of the pulses, s")
    axes[0].set_title(title)


def curve(figure: Figure, ways: Sequence[Way], *, title: str) -> None:
    """Speed and current over the duty, and the duties of break-away and drop-out."""
    speed, off, current, dead = figure.subplots(4, 1, height_ratios=(3, 1.5, 1.5, 1.1))
    for way, colour in zip(ways, (FORWARD, BACKWARD), strict=True):
        for rising, marker in ((True, "^"), (False, "v")):
            levels = [one for one in way.levels if one.rising is rising]
            duty = [100 * one.duty for one in levels]
            style = {"linestyle": "none", "marker": marker, "markersize": 5, "fillstyle": "none", "color": colour}
            label = f"{'forward' if way.sign > 0 else 'backward'}, {'up' if rising else 'down'}"
            speed.plot(duty, [one.speed_rpm for one in levels], label=label, **style)
            values = way.line.values
            left = [one.speed_rpm - way.sign * (values[0] + values[1] * abs(one.duty)) for one in levels]
            off.plot(duty, left, **style)
            current.plot(duty, [1000 * one.current_a for one in levels], **style)
        share = np.linspace(*way.linear, 100)
        line = way.line.values[0] + way.line.values[1] * share
        half = way.band_rpm(share)
        speed.plot(100 * way.sign * share, way.sign * line, color=MODEL, linewidth=0.9)
        off.fill_between(100 * way.sign * share, -half, half, color=colour, alpha=0.2, linewidth=0)
        for what, row, shape in (("breakaway", 1.0, "o"), ("dropout", 0.0, "s")):
            found = [100 * way.sign * getattr(one, what) for one in way.excursions]
            dead.plot(found, [row] * len(found), shape, color=colour, fillstyle="none", markersize=5)
    speed.set_title(f"{title}: speed over duty, and the line through its linear range")
    off.set_ylabel("off the line, rpm\n(band: 95 %)", fontsize=9)
    off.axhline(0.0, color=MODEL, linewidth=0.9)
    speed.set_ylabel("speed, rpm")
    speed.legend(fontsize=8, frameon=False)
    current.set_ylabel("current, mA")
    dead.set_yticks([0.0, 1.0], ["stops", "starts"])
    dead.set_ylim(-0.6, 1.6)
    dead.set_xlabel("duty, %")
    for axis in (speed, off, current, dead):
        axis.grid(alpha=0.3)
        axis.axvline(0.0, color=FAINT, linewidth=0.8)


def coastdown(figure: Figure, runs: Sequence[RunDown], per_turn: float, *, title: str) -> None:
    """Turns of the output over the time of each run-down with the fit, and what the fit leaves, in counts."""
    turns, left = figure.subplots(2, 1, sharex=True, height_ratios=(2.5, 1))
    for run in runs:
        colour = FORWARD if run.sign > 0 else BACKWARD
        shown = run.trace.time_s <= 1.1 * run.length_s
        turns.plot(run.trace.time_s[shown], run.trace.counts[shown] / per_turn, color=colour, linewidth=1.2)
        kept = run.trace.time_s[: len(run.fit.residuals)]
        fitted = run.trace.counts[: len(run.fit.residuals)] - run.fit.residuals
        turns.plot(kept, fitted / per_turn, color=MODEL, linewidth=0.8, linestyle="--")
        left.plot(kept, run.fit.residuals, color=colour, linewidth=0.7)
    turns.set_title(f"{title}: running down with the bridge off (blue forward, orange backward, dashed: fit)")
    turns.set_ylabel("turns of the output")
    left.set_ylabel("counts off the fit")
    left.set_xlabel("time since the bridge went off, s")
    for axis in (turns, left):
        axis.grid(alpha=0.3)


def repeats(figure: Figure, values: Sequence[float], mean: Measured, *, title: str, label: str) -> None:
    """Each repeat, their mean, and its 95 % interval."""
    axes = figure.subplots()
    numbers = np.arange(1, len(values) + 1)
    low, high = mean.interval()
    axes.axhspan(low, high, color=FORWARD, alpha=0.15, linewidth=0)
    axes.axhline(mean.value, color=MODEL, linewidth=0.9)
    axes.plot(numbers, values, "o", color=FORWARD, fillstyle="none")
    axes.set_xticks(numbers)
    axes.set_xlabel("repeat")
    axes.set_ylabel(label)
    axes.set_title(f"{title} (band: 95 % of the mean)")
    axes.grid(alpha=0.3)


def round_trips(figure: Figure, trips_s: Sequence[float]) -> None:
    """How often each round trip came."""
    axes = figure.subplots()
    trips_ms = 1000 * np.asarray(trips_s)
    bins = np.arange(0.0, max(20.0, float(trips_ms.max())) + 1.0, 0.5)
    axes.hist(trips_ms, bins=bins.tolist(), color=FORWARD, alpha=0.8)
    axes.axvspan(14.0, 18.0, color=FAINT, alpha=0.15, linewidth=0)
    axes.set_xlabel("round trip, ms (grey: where a USB adapter's latency timer of 16 ms puts it)")
    axes.set_ylabel("exchanges")
    axes.set_title("round trips of the link")
    axes.grid(alpha=0.3)


def positions(figure: Figure, targets: Floats, up: Floats, down: Floats, *, title: str) -> None:
    """Deviation at each target, approached from below and from above, with two standard deviations."""
    axes = figure.subplots()
    for deviations, colour, label, shift in ((up, FORWARD, "from below", -0.3), (down, BACKWARD, "from above", 0.3)):
        axes.errorbar(
            targets + shift,
            deviations.mean(axis=1),
            yerr=2 * deviations.std(axis=1, ddof=1),
            color=colour,
            marker="o",
            markersize=4,
            linewidth=0.9,
            capsize=3,
            label=f"{label}, mean and 2 s",
        )
        axes.plot(np.repeat(targets + shift, deviations.shape[1]), deviations.ravel(), ".", color=colour, alpha=0.4)
    axes.axhline(0.0, color=FAINT, linewidth=0.8)
    axes.set_xlabel("target, deg")
    axes.set_ylabel("deviation, deg")
    axes.set_title(f"{title}: measured less commanded angle")
    axes.legend(fontsize=8, frameon=False)
    axes.grid(alpha=0.3)
