"""The ECG as the atrial stage looks at it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from caval.recording import Signal
from caval.stages._signal import cut, lowpass, moving_mean
from caval.stages.detect import clean_ecg, thinned

__all__ = ["FEWEST", "P_WIDTH_S", "Lead", "thin_lead"]

Floats = NDArray[np.float64]

FEWEST = 6
"""Beats below which nothing is said of the atria."""
_LOWPASS_HZ = 25.0
P_WIDTH_S = 0.11
"""Length of a P wave (below 0.12 s in adults, common practice); its top is taken to lie in its middle."""


@dataclass(frozen=True, eq=False)
class Lead:
    """The ECG at about 125 Hz, without its slow wander."""

    values: Floats
    rate: float
    start_s: float

    def index(self, time: Floats) -> NDArray[np.int64]:
        return np.floor((time - self.start_s) * self.rate + 0.5 + 1e-6).astype(np.int64)  # a tie goes the same way from any start

    def windows(self, r: Floats, before_s: float, after_s: float) -> Floats:
        """Windows around each R; NaN beyond the ends, shape (len(r), m)."""
        first = self.index(r) - round(before_s * self.rate)
        length = round((before_s + after_s) * self.rate) + 1
        rows = cut(self.values, first, length)
        outside = (first < 0) | (first + length > len(self.values))
        rows[outside] = np.nan
        return rows


def thin_lead(ecg: Signal) -> Lead | None:
    """The lead at about 125 Hz without pacing spikes, which thinning would widen into bumps; None where it shows nothing."""
    cleaned, missing = clean_ecg(ecg)
    if missing.mean() > 0.9 or len(ecg) < 4 * ecg.sampling_rate or np.ptp(cleaned.values) == 0:
        return None
    thin = thinned(cleaned)
    rate = thin.sampling_rate
    wander = moving_mean(moving_mean(thin.values, round(0.9 * rate)), round(0.9 * rate))
    return Lead(lowpass(thin.values - wander, rate, _LOWPASS_HZ), rate, thin.start_s)
