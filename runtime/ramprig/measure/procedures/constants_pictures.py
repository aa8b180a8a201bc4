"""The pictures of a fit of constants: what it leaves of current and angle, and how the constants hang together."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from ramprig.measure.identify import Identification

COLOURS = {"turning": "#1f5fa8", "coasting": "#3d8b57", "still": "#b3541e", "idle": "#8a8a8a"}


def residuals(figure: Figure, found: Identification, *, title: str) -> None:
    """Measured less fitted, in standard deviations, over the recordings' time and as a histogram, by motion."""
    axes = figure.subplots(2, 2, width_ratios=(3, 1), sharey="row")
    left = found.residuals()
    parts: tuple[list[np.ndarray[tuple[int, ...], np.dtype[np.float64]]], ...] = ([], [])
    begin_s = 0.0
    told: set[str] = set()
    for one in left:
        time_s = begin_s + one.window.period_s * np.arange(len(one.window))
        begin_s = float(time_s[-1]) + one.window.period_s
        motion = str(one.window.motion)
        label = None if motion in told else motion
        told.add(motion)
        scaled = (one.current_a / found.noise.current_a, None if one.angle_rad is None else one.angle_rad)
        axes[0, 0].plot(time_s[: len(scaled[0])], scaled[0], ".", markersize=1.5, color=COLOURS[motion], label=label)
        parts[0].append(scaled[0])
        if scaled[1] is not None:
            angle = scaled[1] / found.noise.angle_rad
            axes[1, 0].plot(time_s[: len(angle)], angle, ".", markersize=1.5, color=COLOURS[motion])
            parts[1].append(angle)
    for row, name in enumerate(("current", "angle")):
        axes[row, 0].set_ylabel(f"{name}, standard deviations")
        axes[row, 0].axhline(0.0, color="#2b2b2b", linewidth=0.8)
        axes[row, 0].grid(alpha=0.3)
        if parts[row]:
            axes[row, 1].hist(np.concatenate(parts[row]), bins=61, orientation="horizontal", color="#8a8a8a")
        axes[row, 1].set_xlabel("samples")
    axes[0, 0].set_title(f"{title}: measured less fitted (a good fit shows noise and nothing else)")
    axes[0, 0].legend(fontsize=8, frameon=False, markerscale=6)
    axes[1, 0].set_xlabel("time in the fitted windows, s")


def correlations(figure: Figure, found: Identification, *, title: str) -> None:
    """The correlation of each pair of constants."""
    axes = figure.subplots()
    image = axes.imshow(found.correlations, vmin=-1.0, vmax=1.0, cmap="RdBu_r")
    names = [name.replace("_", " ") for name in found.keys]
    axes.set_xticks(range(len(names)), names, rotation=40, ha="right", fontsize=8)
    axes.set_yticks(range(len(names)), names, fontsize=8)
    for row in range(len(names)):
        for column in range(len(names)):
            axes.text(column, row, f"{found.correlations[row, column]:.2f}", ha="center", va="center", fontsize=7)
    axes.set_title(f"{title}: correlations of the constants", fontsize=10)
    figure.colorbar(image, ax=axes)
