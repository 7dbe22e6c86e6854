"""The sequence of beats with the largest sum of weights, by dynamic programming over the intervals between candidates."""

from __future__ import annotations

from math import exp, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

__all__ = ["KINDS", "best_sequence", "kinds"]

Floats = NDArray[np.float64]

_REFRACTORY_S = 0.25
_REGULAR = 0.8
"""What an interval of the usual length adds."""
_REGULAR_SD = 0.10
_SHORT, _TOO_SHORT = 0.6, 3.0
"""Below this share of the usual interval, or in a slow heart of its square root (repolarisation goes with that: Bazett), an interval takes
away so much a unit of share."""
_LONG, _LONGEST, _GAP = 1.5, 1.95, 1.5
"""An interval of more than `_LONG` usual ones takes away up to `_GAP`: hearts seldom pause without a beat that came early.
The pause after such a beat, up to one and a half, is no pause of that kind."""
_HOPELESS = -(2 * _REGULAR + _GAP)
"""A candidate that takes away more than its intervals can give back is never part of the best sequence."""

KINDS = ("normal", "premature", "premature_wide")
"""What a beat is by its time and its shape."""
_EARLY_BY = 0.12
"""A beat is premature when it comes earlier than the usual interval by this share of it, and by three times what intervals vary; one of
another shape by half of that (our choice; sinus arrhythmia moves successive intervals by less)."""
_EARLY_SPREADS = 3.0
_NEIGHBOURS = 21


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
        slow = min(period, sqrt(period))
        best, link = (before - gap, link) if before > gap else (0.0, -1)
        for k in range(first[i], last[i]):
            share = (here - t[k]) / period
            gain = total[k] + _REGULAR * exp(-0.5 * ((share - 1.0) / _REGULAR_SD) ** 2)
            if share < _SHORT:
                gain -= _TOO_SHORT * max(0.0, _SHORT - (here - t[k]) / slow)
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


def kinds(time: Floats, odd: NDArray[np.bool_]) -> NDArray[np.object_]:
    """``normal``, ``premature`` or ``premature_wide`` (of `odd` shape, too) for each beat of a sequence, shape (n,).

    The usual interval is the running median of half of what two successive intervals last: a premature beat and the pause after it
    leave that alone, so every second beat may be premature. In fibrillation the intervals vary so much that none is early.
    """
    kind = np.full(len(time), KINDS[0], dtype=object)
    if len(time) < 5:
        return kind
    halves = 0.5 * (time[2:] - time[:-2])
    size = min(_NEIGHBOURS, len(halves))
    middle = ndimage.median_filter(halves, size=size, mode="reflect")
    spread = 1.4826 * ndimage.median_filter(np.abs(halves - middle), size=size, mode="reflect")
    usual, vary = np.pad(middle, 1, mode="edge"), np.pad(spread, 1, mode="edge")
    interval = np.diff(time, prepend=np.nan)
    ahead = usual - interval
    least = np.maximum(_EARLY_BY * usual, _EARLY_SPREADS * vary)
    wide = odd & (ahead > 0.5 * least)
    since_two = np.concatenate([[np.inf, np.inf], time[2:] - time[:-2]])
    on_time = np.concatenate([[False], wide[:-1]]) & (since_two > usual - least)  # the next of the node, after one put in between
    kind[(ahead > least) & ~on_time] = KINDS[1]
    kind[wide] = KINDS[2]
    return kind
