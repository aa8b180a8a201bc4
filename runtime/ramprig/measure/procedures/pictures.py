"""The pictures of the procedures: what is drawn, in which units, with which marks."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np

from ramprig.measure.trace import MotorTrace

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from .curve import Way

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
