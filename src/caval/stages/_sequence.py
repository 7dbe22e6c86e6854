"""The sequence of beats with the largest sum of weights, by dynamic programming over the intervals between candidates."""

from __future__ import annotations

from math import exp

import numpy as np
from numpy.typing import NDArray

__all__ = ["best_sequence"]

Floats = NDArray[np.float64]

_REFRACTORY_S = 0.25
_REGULAR = 0.8
"""What an interval of the usual length adds."""
_REGULAR_SD = 0.10
_SHORT, _TOO_SHORT = 0.6, 3.0
"""Below this share of the usual interval, an interval takes away so much a unit of share."""
_LONG, _LONGEST, _GAP = 1.5, 1.95, 1.5
"""An interval of more than `_LONG` usual ones takes away up to `_GAP`: hearts seldom pause without a beat that came early.
The pause after such a beat, up to one and a half, is no pause of that kind."""
_HOPELESS = -(2 * _REGULAR + _GAP)
"""A candidate that takes away more than its intervals can give back is never part of the best sequence."""


def best_sequence(time: Floats, weight: Floats, usual: Floats, steadiness: Floats) -> NDArray[np.int64]:
    """Indices of the candidates whose weights and intervals add up to the most; no interval is shorter than the refractory time.

    `time` in seconds, sorted; `weight` in log-odds; `usual` the interval usual there, s; `steadiness` from 0 (intervals are
    all over the place, and a pause means nothing) to 1. All of shape (n,).
    """
    hopeful = np.flatnonzero(weight > _HOPELESS)
    times = time[hopeful]
    first = np.searchsorted(times, times - 2.2 * usual[hopeful]).tolist()
    last = np.searchsorted(times, times - _REFRACTORY_S, side="right").tolist()
    t, w, u = times.tolist(), weight[hopeful].tolist(), usual[hopeful].tolist()
    gaps = (_GAP * steadiness[hopeful]).tolist()
    total: list[float] = []
    back: list[int] = []
    running: list[tuple[float, int]] = [(0.0, -1)]  # running[k]: the best total among candidates before k, and which
    for i, (here, own, period, gap) in enumerate(zip(t, w, u, gaps, strict=True)):
        before, link = running[first[i]]
        best, link = (before - gap, link) if before > gap else (0.0, -1)
        for k in range(first[i], last[i]):
            share = (here - t[k]) / period
            gain = total[k] + _REGULAR * exp(-0.5 * ((share - 1.0) / _REGULAR_SD) ** 2)
            if share < _SHORT:
                gain -= _TOO_SHORT * (_SHORT - share)
            elif share > _LONG:
                gain -= gap * min(1.0, (share - _LONG) / (_LONGEST - _LONG))
            if gain > best:
                best, link = gain, k
        total.append(own + best)
        back.append(link)
        running.append(max(running[-1], (total[i], i)))
    chosen = []
    i = running[-1][1]
    while i >= 0:
        chosen.append(i)
        i = back[i]
    return hopeful[np.array(chosen[::-1], dtype=np.int64)]
