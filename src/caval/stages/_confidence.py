"""How likely a mark is right, from what was seen when it was chosen.

A logistic model for each wave, fitted to the marks of simulated patients of every rhythm by `tests/benchmarks/bench_truth.py --calibrate`:
right is a mark within 25 ms of the wave's true place. The reliability plot of the same script shows how well the numbers keep their word on
patients that were not fitted to. On real records they are as good as the simulated ones are like them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["COEFFICIENTS", "FUSED", "confidence", "design"]

Floats = NDArray[np.float64]

FUSED = 0.3
"""Confidence of a mark that is no extremum: it says that a wave is there, and not well where."""
COEFFICIENTS: dict[str, tuple[float, ...]] = {
    "a": (2.76, 1.37, -1.19, -0.50, 2.04),
    "c": (2.13, 0.60, -0.67, 0.57, -0.12),
    "x": (1.58, 0.18, -0.52, 0.34, 1.57),
    "v": (2.79, 0.60, -0.62, 0.49, -0.20),
    "y": (-2.44, 0.93, -0.38, 1.47, -0.06),
    "h": (0.0, 0.50, -0.50, 0.50, 0.0),  # not fitted: the truth of the model has no h
}
"""Intercept, and the weights of `design`'s columns, by wave."""


def design(evidence: Floats) -> Floats:
    """What the model sees of each mark, shape (n, 5).

    Columns: 1; logarithm of the prominence over the noise of the picture's beats, within −1 and 4; square of the distance from the
    picture's place, in reaches, up to 6; by how much the chosen extremum beat the next, up to 3; how fast the heart is (0 at an interval of
    0.6 s and more, 1 at 0.3 s).

    Parameters
    ----------
    evidence : float64 array, shape (n, 4)
        Prominence over noise, distance over reach, lead over the next, interval (s); NaN where nothing was found.
    """
    rise, off, lead, interval = evidence.T
    with np.errstate(divide="ignore", invalid="ignore"):
        columns = [
            np.ones(len(evidence)), np.clip(np.log(rise), -1.0, 4.0), np.minimum(off**2, 6.0), np.clip(lead, 0.0, 3.0),
            np.clip((0.6 - interval) / 0.3, 0.0, 1.0),
        ]
    return np.column_stack(columns)


def confidence(wave: str, evidence: Floats) -> Floats:
    """Probability that each mark is right, shape (n,); `FUSED` where there is no evidence of an extremum."""
    odds = design(evidence) @ np.array(COEFFICIENTS[wave])
    return np.where(np.isfinite(odds), 1.0 / (1.0 + np.exp(-np.nan_to_num(odds))), FUSED)
