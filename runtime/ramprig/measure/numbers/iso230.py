"""Accuracy, repeatability and reversal error after the definitions of ISO 230-2:2014 (formulas from memory).

Approaches to each target from both sides: deviation = measured - target. The standard asks for 5 approaches a
direction; rotary axes up to 90 deg take at least 3 targets, up to 180 deg 5, above that 8. `conforms` says whether
that was kept; the figures are formed in any case. The factor is 2 (4 s wide), other standards use 3.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from ramprig.errors import UsageError

APPROACHES = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class Positioning:
    """The figures of ISO 230-2, in the unit of the deviations; arrays hold one value a target."""

    mean_up: NDArray[np.float64]
    mean_down: NDArray[np.float64]
    sd_up: NDArray[np.float64]
    sd_down: NDArray[np.float64]
    reversal_at: NDArray[np.float64]
    repeatability_at: NDArray[np.float64]
    reversal: float
    mean_reversal: float
    repeatability_up: float
    repeatability_down: float
    repeatability: float
    mean_deviation_range: float
    systematic_up: float
    systematic_down: float
    systematic: float
    accuracy_up: float
    accuracy_down: float
    accuracy: float
    approaches: int


def least_targets(travel_deg: float) -> int:
    """Targets a rotary axis of this travel must be given at least."""
    return 3 if travel_deg <= 90.0 else 5 if travel_deg <= 180.0 else 8


def conforms(found: Positioning, *, travel_deg: float) -> bool:
    """Whether as many targets and approaches were made as the standard asks for."""
    return found.approaches >= APPROACHES and len(found.mean_up) >= least_targets(travel_deg)


def positioning(up: NDArray[np.float64], down: NDArray[np.float64]) -> Positioning:
    """Evaluate deviations `(targets, approaches)`, approached upwards and downwards.

    Both arrays have the same shape, at least one target and two approaches; raises `UsageError` otherwise.
    """
    up, down = np.asarray(up, float), np.asarray(down, float)
    if up.shape != down.shape or up.ndim != 2 or up.shape[0] < 1 or up.shape[1] < 2:
        raise UsageError(
            f"deviations of shape {up.shape} upwards and {down.shape} downwards; both must be "
            "(targets, approaches), the same shape, with at least two approaches"
        )
    mean_up, mean_down = up.mean(axis=1), down.mean(axis=1)
    sd_up, sd_down = up.std(axis=1, ddof=1), down.std(axis=1, ddof=1)
    reversal_at = mean_up - mean_down
    both = 2.0 * sd_up + 2.0 * sd_down + np.abs(reversal_at)
    repeatability_at = np.maximum(both, np.maximum(4.0 * sd_up, 4.0 * sd_down))
    high_up, low_up = mean_up + 2.0 * sd_up, mean_up - 2.0 * sd_up
    high_down, low_down = mean_down + 2.0 * sd_down, mean_down - 2.0 * sd_down
    means = np.concatenate([mean_up, mean_down])
    return Positioning(
        mean_up=mean_up,
        mean_down=mean_down,
        sd_up=sd_up,
        sd_down=sd_down,
        reversal_at=reversal_at,
        repeatability_at=repeatability_at,
        reversal=float(np.abs(reversal_at).max()),
        mean_reversal=float(reversal_at.mean()),
        repeatability_up=float(4.0 * sd_up.max()),
        repeatability_down=float(4.0 * sd_down.max()),
        repeatability=float(repeatability_at.max()),
        mean_deviation_range=float(np.ptp((mean_up + mean_down) / 2.0)),
        systematic_up=float(np.ptp(mean_up)),
        systematic_down=float(np.ptp(mean_down)),
        systematic=float(np.ptp(means)),
        accuracy_up=float(high_up.max() - low_up.min()),
        accuracy_down=float(high_down.max() - low_down.min()),
        accuracy=float(max(high_up.max(), high_down.max()) - min(low_up.min(), low_down.min())),
        approaches=up.shape[1],
    )
