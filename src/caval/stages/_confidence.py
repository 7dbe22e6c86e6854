"""How likely a mark is right, from what was seen when it was chosen.

A logistic model for each wave, fitted to the marks of simulated patients of every rhythm by `tests/benchmarks/bench_truth.py --calibrate`:
right is a mark within 25 ms of the wave's true place. What the model says is then replaced by how many were right of those of which it said
so. The reliability plot of the same script shows how well the numbers keep their word on patients that were not fitted to. On real records
they are as good as the simulated ones are like them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["FUSED", "MODELS", "confidence", "design"]

Floats = NDArray[np.float64]

FUSED = 0.3
"""Confidence of a mark that is no extremum: it says that a wave is there, and not well where."""
MODELS: dict[str, tuple[tuple[float, ...], tuple[float, ...], tuple[float, ...]]] = {
    "a": (
        (7.80, -0.30, -0.35, -0.27, 1.92, 1.95),
        (0.448, 0.737, 0.844, 0.916, 0.946, 0.982, 0.996), (0.123, 0.645, 0.909, 0.938, 0.996, 0.997, 0.997),
    ),
    "c": ((3.15, 0.56, -0.64, 0.44, -0.40, 0.29), (0.896, 0.944, 0.982, 0.994), (0.897, 0.903, 0.985, 0.995)),
    "x": ((8.67, -0.54, -0.41, -1.05, 1.04, 1.65), (0.889, 0.950, 0.978), (0.827, 0.938, 0.994)),
    "v": ((4.17, 0.67, -0.68, 0.13, -0.30, 0.36), (0.860, 0.966, 0.996), (0.710, 0.987, 0.997)),
    "y": (
        (0.95, 0.40, -0.48, 1.12, -1.11, 1.10),
        (0.141, 0.506, 0.795, 0.917, 0.947, 0.973, 0.986, 0.993), (0.211, 0.377, 0.629, 0.793, 0.894, 0.944, 0.999, 0.999),
    ),
    "h": ((0.00, 0.50, -0.50, 0.50, 0.00, 0.00), (0.0, 1.0), (0.0, 0.8)),  # not fitted: the model's truth has no h
}
"""By wave: weights of `design`'s columns, what the logistic model then says, and how many were right of the marks of which it said so."""


def design(evidence: Floats) -> Floats:
    """What the model sees of each mark, shape (n, 6).

    Columns: 1; logarithm of the prominence over the noise of the picture's beats, within −1 and 4; square of the distance from the
    picture's place, in reaches, up to 6; by how much the chosen extremum beat the next, up to 3; how fast the heart is (0 at an interval of
    0.6 s and more, 1 at 0.3 s); logarithm of the prominence over the picture's height, within −4 and 0.

    Parameters
    ----------
    evidence : float64 array, shape (n, 5)
        Prominence over noise, distance over reach, lead over the next, interval (s), prominence over the picture's height; NaN where
        nothing was found.
    """
    rise, off, lead, interval, share = evidence.T
    with np.errstate(divide="ignore", invalid="ignore"):
        columns = [
            np.ones(len(evidence)), np.clip(np.log(rise), -1.0, 4.0), np.minimum(off**2, 6.0), np.clip(lead, 0.0, 3.0),
            np.clip((0.6 - interval) / 0.3, 0.0, 1.0), np.clip(np.log(share), -4.0, 0.0),
        ]
    return np.column_stack(columns)


def confidence(wave: str, evidence: Floats) -> Floats:
    """Probability that each mark is right, shape (n,); `FUSED` where there is no evidence of an extremum."""
    weights, said, right = MODELS[wave]
    odds = design(evidence) @ np.array(weights)
    sure = np.interp(1.0 / (1.0 + np.exp(-np.nan_to_num(odds))), said, right)
    return np.where(np.isfinite(odds), sure, FUSED)
