"""The pictures of the procedures: what is drawn, in which units, with which marks."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from ramprig.measure.trace import MotorTrace

if TYPE_CHECKING:
    from matplotlib.figure import Figure

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
