"""How long after R the pulse arrives, learned minute by minute and beat by beat."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from caval.stages._evidence import GRID_S, LEARN_S, Evidence

__all__ = ["Transit", "learn_transit"]

Floats = NDArray[np.float64]

_LOCAL_REACH_S = 8.0
_LOCAL_BEATS = 9
_LEAST_BEATS = 8
_DEFAULT_SPREAD_S = 0.04
"""Transit to a radial artery differs so much from person to person (0.15 to 0.25 s is usual, common practice; more when old or cold)."""


@dataclass(frozen=True, eq=False)
class Transit:
    """From R to the foot of the upstroke: that of the beats around where there are any, else that of the minutes, else the setting.

    `time_s`, `local_s`: running median over the beats that show it, shape (n,). `first`: number of the first minute of `minutes_s`, a
    row a minute: transit, robust standard deviation around it, the same around the running median.
    """

    time_s: Floats
    local_s: Floats
    first: int
    minutes_s: Floats

    def at(self, feet: Floats) -> tuple[Floats, Floats]:
        """Transit and its standard deviation for each upstroke, s."""
        cell = np.clip(np.floor(feet / GRID_S + 1e-9).astype(int) - self.first, 0, len(self.minutes_s) - 1)
        transit, spread, local_spread = self.minutes_s[cell].T
        if len(self.time_s) < 2:
            return transit, spread
        after = np.clip(np.searchsorted(self.time_s, feet), 1, len(self.time_s) - 1)
        distance = np.minimum(np.abs(feet - self.time_s[after - 1]), np.abs(feet - self.time_s[after]))
        local = distance < _LOCAL_REACH_S
        return np.where(local, np.interp(feet, self.time_s, self.local_s), transit), np.where(local, local_spread, spread)


def learn_transit(evidence: Evidence, feet: Floats, default_s: float) -> Transit:
    """Transit times from the sure complexes and the strong upstrokes after them."""
    r = evidence.time_s[evidence.sure]
    place = np.searchsorted(feet, r + 0.05)
    r, place = r[place < len(feet)], place[place < len(feet)]
    after = feet[place] - r
    r, after = r[after < 0.45], after[after < 0.45]
    local = ndimage.median_filter(after, size=_LOCAL_BEATS, mode="nearest") if len(after) >= _LOCAL_BEATS else after
    ends = [t for times in (r, feet) if len(times) for t in (times[0], times[-1])] or [0.0]
    first, last = (int(np.floor(t / GRID_S + 1e-9)) for t in (min(ends), max(ends)))
    minutes = np.tile([default_s, _DEFAULT_SPREAD_S, _DEFAULT_SPREAD_S], (last - first + 1, 1))
    for i in range(len(minutes)):
        low, high = np.searchsorted(r, GRID_S * (first + i + np.array([0, 1])) + LEARN_S * np.array([-1, 1]))
        if high - low >= _LEAST_BEATS:
            some = after[low:high]
            middle = np.median(some)
            minutes[i] = middle, _spread(some - middle), _spread(some - local[low:high])
    return Transit(r, local, first, minutes)


def _spread(error: Floats) -> float:
    """Robust standard deviation around 0, no less than a quarter of a sample of a 125 Hz trace."""
    return float(np.clip(1.4826 * np.median(np.abs(error)), 0.002, _DEFAULT_SPREAD_S))
