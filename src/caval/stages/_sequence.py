"""The sequence of beats with the largest sum of weights, by dynamic programming over the intervals between candidates."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["best_sequence"]

Floats = NDArray[np.float64]

_REFRACTORY_S = 0.25


def best_sequence(time: Floats, weight: Floats, usual: Floats) -> NDArray[np.int64]:
    """Indices of the candidates whose weights and intervals add up to the most.

    An interval near the usual one adds up to 0.8, one much shorter takes away; none is shorter than the refractory time.
    """
    total, back = np.array(weight, dtype=float), np.full(len(time), -1)
    best_so_far = -np.inf
    first = np.searchsorted(time, time - 2.2 * usual)
    last = np.searchsorted(time, time - _REFRACTORY_S, side="right")
    running = np.full(len(time) + 1, -np.inf)  # running[k]: the best total among candidates before k
    running_at = np.full(len(time) + 1, -1)
    for i in range(len(time)):
        low, high = first[i], last[i]
        best, link = max(0.0, running[low]), (running_at[low] if running[low] > 0 else -1)
        if high > low:
            share = (time[i] - time[low:high]) / usual[i]
            gain = 0.8 * np.exp(-0.5 * ((share - 1.0) / 0.10) ** 2) - 3.0 * np.clip(0.6 - share, 0.0, None)
            linked = total[low:high] + gain
            k = int(np.argmax(linked))
            if linked[k] > best:
                best, link = float(linked[k]), low + k
        total[i] = weight[i] + best
        back[i] = link
        better = total[i] > best_so_far
        best_so_far = max(best_so_far, total[i])
        running[i + 1] = best_so_far
        running_at[i + 1] = i if better else running_at[i]
    chosen = []
    i = int(np.argmax(total)) if len(total) and total.max() > 0 else -1
    while i >= 0:
        chosen.append(i)
        i = back[i]
    return np.array(chosen[::-1], dtype=np.int64)
