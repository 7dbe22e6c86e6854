"""The running picture of the cardiac cycle on the venous trace, and where its waves are."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import signal

from caval.recording import Signal

__all__ = ["Picture", "running_pictures"]

Floats = NDArray[np.float64]

STEP_S = 0.005
BEFORE_S, AFTER_S = 0.40, 1.20
KNOT_S = 30.0
NEIGHBOURS_S = 60.0
FEWEST = 4
"""Beats below which no picture is made."""


@dataclass(frozen=True, eq=False)
class Picture:
    """The median beat around `centre_s`.

    Attributes
    ----------
    centre_s : float
        Seconds of the record.
    time_s, trace_mmhg : float64 array
        Time from R, and the median trace less each beat's own level.
    interval_s : float
        Usual interval between beats.
    span_mmhg, noise_mmhg : float
        Height of the median beat from its lowest to its highest point; noise of the single beat in the waves' band.
    places : mapping of str to float
        Time from R of the waves it shows, seconds; no entry for a wave it does not show.
    """

    centre_s: float
    time_s: Floats
    trace_mmhg: Floats
    interval_s: float
    span_mmhg: float
    noise_mmhg: float
    places: Mapping[str, float]


def running_pictures(smooth: Signal, beats: pd.DataFrame, usable: NDArray[np.bool_]) -> list[Picture]:
    """Pictures on the fixed grid of half minutes, each of the usable beats within a minute either way; none where those are too few."""
    r = beats["r_time_s"].to_numpy(float)
    before = np.diff(r, prepend=np.nan)
    after = np.diff(r, append=np.nan)
    grid_s = np.arange(-round(BEFORE_S / STEP_S), round(AFTER_S / STEP_S), dtype=np.float64) * STEP_S
    traces = smooth.at(r[:, None] + grid_s)
    middle = (grid_s >= -0.2) & (grid_s < 0.5)
    level = traces[:, middle].mean(axis=1)
    usable = usable & np.isfinite(level)
    traces = traces - level[:, None]
    pictures = []
    for k in range(int(np.floor(r[0] / KNOT_S)), int(np.ceil(r[-1] / KNOT_S)) + 1):
        centre = k * KNOT_S
        rows = np.flatnonzero(usable & (np.abs(r - centre) <= NEIGHBOURS_S))
        if len(rows) < FEWEST:
            continue
        usual = float(np.nanmedian(np.concatenate([after[rows], before[rows]])))
        even = rows[(np.abs(before[rows] / usual - 1) < 0.15) & (np.abs(after[rows] / usual - 1) < 0.15)]
        chosen = even if len(even) >= max(FEWEST, 0.3 * len(rows)) else rows
        pictures.append(_picture(centre, grid_s, traces[chosen], usual))
    return pictures


def _picture(centre_s: float, grid_s: Floats, traces: Floats, interval_s: float) -> Picture:
    seen = np.isfinite(traces).sum(axis=0) >= max(3, 0.5 * len(traces))
    inside = seen & (grid_s < max(interval_s - 0.02, 0.3))
    median = _median(traces[:, inside], 0)
    time = grid_s[inside]
    rest = traces[:, inside] - median
    lag = round(0.04 / STEP_S)
    noise = 1.4826 * float(_median(np.abs(rest[:, lag:] - rest[:, :-lag]))) / 2.0**0.5
    span = float(np.ptp(median)) or 1e-9
    quarters = np.nanpercentile(traces[:, inside], [25, 75], axis=0)
    doubt = 1.2533 * (quarters[1] - quarters[0]) / 1.349 / len(traces) ** 0.5  # standard error of a median, by the normal law
    noise_of_median = noise / len(traces) ** 0.5
    return Picture(centre_s, time, median, interval_s, span, noise, _places(time, median, interval_s, span, noise_of_median, doubt))


def _median(values: Floats, axis: int | None = None) -> Floats:
    """Median without the missing values; the plain one, several times faster, where none is missing."""
    return np.asarray((np.nanmedian if np.isnan(values).any() else np.median)(values, axis=axis), dtype=np.float64)


def _places(time: Floats, trace: Floats, interval: float, span: float, noise: float, doubt: Floats) -> dict[str, float]:
    """Where the waves of a median beat are: the choice of extrema, in the order of waves, that fits height and common timing best.

    Timing (from R, through the line; common practice): a −0.06 s, c 0.11 s, x 0.235 s, v 0.47 s times the square root of the interval
    (the length of systole), y 0.17 s after v.
    """
    peaks = _prominent(trace, 1.0, max(0.015 * span, 2.0 * noise))
    troughs = _prominent(trace, -1.0, max(0.015 * span, 2.0 * noise))
    places = _systole(peaks, troughs, time, trace, interval, span)
    if "v" in places:
        peaks = peaks[np.abs(time[peaks] - (places["v"] - interval)) > 0.05]  # the v of the beat before is no a
    peaks_at, found = signal.find_peaks(trace, prominence=max(0.03 * span, 4.0 * noise))
    sure = peaks_at[found["prominences"] > 4.0 * doubt[peaks_at]]  # where beats differ, as before R in fibrillation, ripples are no a
    tall = np.intersect1d(peaks, sure)
    a = _best(tall, time, trace, span, (-0.28, min(0.06, places.get("x", 0.2) - 0.10)), -0.06, 0.08, 2.0)
    if a is not None:
        places["a"] = a
    if "v" in places:
        limit = min(places["v"] + 0.36, interval + places.get("a", 0.0) - 0.03)
        y = _best(troughs, time, -trace, span, (places["v"] + 0.05, limit), places["v"] + 0.17, 0.10, 3.0)
        if y is not None:
            places["y"] = y
    if "x" in places:
        start = max(places.get("a", -0.1) + 0.06, 0.03)
        c = _best(peaks, time, trace, span, (start, places["x"] - 0.03), 0.11, 0.035, 0.8)
        c = _corner(time, trace, span, places) if c is None else c
        if c is not None:
            places["c"] = c
    room = interval + places.get("a", -0.1) - places.get("y", interval)
    if room > 0.35:
        h = _best(peaks, time, trace, span, (places["y"] + 0.10, interval + places.get("a", -0.1) - 0.14), places["y"] + 0.2, 0.12, 1.0)
        if h is not None:
            places["h"] = h
    return places


def _systole(
    peaks: NDArray[np.int64], troughs: NDArray[np.int64], time: Floats, trace: Floats, interval: float, span: float
) -> dict[str, float]:
    """The pair of x and v that fits best; without a pair, the wave of systole from which the trace falls far, which is v without an x."""
    v_usual = 0.47 * np.sqrt(min(interval, 1.6))
    late = peaks[(np.abs(time[peaks] - v_usual) < 0.17) & (time[peaks] < interval - 0.08)]
    best, places = -np.inf, {}
    for x in troughs[(time[troughs] > 0.10) & (time[troughs] < 0.40)]:
        for v in late[time[late] > time[x] + 0.08]:
            score = 1.5 * (trace[v] - 2 * trace[x]) / span - _off(time[x], 0.235, 0.07) - _off(time[v], v_usual, 0.08)
            if score > best:
                best, places = score, {"x": float(time[x]), "v": float(time[v])}
    if not places and len(late):
        tallest = late[np.argmax(trace[late])]
        if trace[tallest] > trace[time > time[tallest]].min(initial=np.inf) + 0.3 * span:
            places = {"v": float(time[tallest])}
    return places


def _prominent(trace: Floats, sign: float, least: float) -> NDArray[np.int64]:
    index, _ = signal.find_peaks(sign * trace, prominence=least)
    return index


def _off(time: float, usual: float, spread: float) -> float:
    return 0.5 * ((time - usual) / spread) ** 2


def _best(
    index: NDArray[np.int64],
    time: Floats,
    height: Floats,
    span: float,
    between: tuple[float, float],
    usual: float,
    spread: float,
    weight: float,
) -> float | None:
    """Time of the extremum between two times that stands highest and nearest to the usual place; None when there is none."""
    index = index[(time[index] > between[0]) & (time[index] < between[1])]
    if not len(index):
        return None
    score = weight * height[index] / span - 0.5 * ((time[index] - usual) / spread) ** 2
    return float(time[index[np.argmax(score)]])


def _corner(time: Floats, trace: Floats, span: float, places: Mapping[str, float]) -> float | None:
    """The corner of the slope from a (or R) to x: the point farthest above the straight line between them."""
    start, stop = places.get("a", 0.0), places["x"]
    inside = np.flatnonzero((time >= start) & (time <= stop))
    if len(inside) < 3:
        return None
    share = (time[inside] - start) / (stop - start)
    above = trace[inside] - (trace[inside[0]] + (trace[inside[-1]] - trace[inside[0]]) * share)
    above[(time[inside] < 0.03) | (time[inside] > stop - 0.04)] = -np.inf
    k = int(np.argmax(above))
    return float(time[inside[k]]) if above[k] > 0.08 * span else None
