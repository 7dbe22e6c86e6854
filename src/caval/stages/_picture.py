"""The running picture of the cardiac cycle on the venous trace, and where its waves are."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval.recording import Signal
from caval.stages._label import MedianBeat, label
from caval.stages._signal import median_error, uneven

__all__ = ["Picture", "running_pictures"]

Floats = NDArray[np.float64]

STEP_S = 0.005
BEFORE_S, AFTER_S = 0.40, 1.20
KNOT_S = 30.0
NEIGHBOURS_S = 60.0
FEWEST = 4
"""Beats below which no picture is made."""
_BEYOND_S = 0.12
"""The picture reaches this far past the next R: in a fast heart v and y stand there."""
_AROUND = 15
"""Beats that tell whether the intervals are uneven."""
_P_REACH_S = 0.34
_P_TO_A_S = (0.06, 0.24)
"""Where a may stand after the onset of P: 0.08 to 0.10 s at the heart (from memory), and the delay of the line."""


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
    atrial : str
        What the ECG shows of the atria of most beats: ``coupled``, ``apart``, ``absent``, ``unknown``.
    p_to_a_s : float
        From the onset of P to a, seconds; NaN where no P or no a is shown.
    pr_s : float
        From the onset of P to R, seconds; NaN where they are not coupled.
    """

    centre_s: float
    time_s: Floats
    trace_mmhg: Floats
    interval_s: float
    span_mmhg: float
    noise_mmhg: float
    places: Mapping[str, float] = field(default_factory=dict)
    atrial: str = "unknown"
    p_to_a_s: float = np.nan
    pr_s: float = np.nan


def running_pictures(
    smooth: Signal, beats: pd.DataFrame, usable: NDArray[np.bool_], atria: pd.DataFrame | None = None, coupling: pd.DataFrame | None = None
) -> list[Picture]:
    """Pictures on the fixed grid of half minutes, each of the usable beats within a minute either way; none where those are too few.

    `atria` and `coupling` are the tables of the atrial stage; without them nothing is known of P.
    """
    r = beats["r_time_s"].to_numpy(float)
    before = np.diff(r, prepend=np.nan)
    after = np.diff(r, append=np.nan)
    grid_s = np.arange(-round(BEFORE_S / STEP_S), round(AFTER_S / STEP_S), dtype=np.float64) * STEP_S
    traces = smooth.at(r[:, None] + grid_s)
    middle = (grid_s >= -0.2) & (grid_s < 0.5)
    level = traces[:, middle].mean(axis=1)
    usable = usable & np.isfinite(level)
    traces = traces - level[:, None]
    states, pr = _atrial_of(beats, coupling)
    p = np.empty(0) if atria is None else atria["time_s"].to_numpy(float)
    ragged = uneven(r, _AROUND)
    pictures = []
    for k in range(int(np.floor(r[0] / KNOT_S)), int(np.ceil(r[-1] / KNOT_S)) + 1):
        centre = k * KNOT_S
        rows = np.flatnonzero(usable & (np.abs(r - centre) <= NEIGHBOURS_S))
        if len(rows) < FEWEST:
            continue
        usual = float(np.nanmedian(np.concatenate([after[rows], before[rows]])))
        even = rows[(np.abs(before[rows] / usual - 1) < 0.15) & (np.abs(after[rows] / usual - 1) < 0.15)]
        chosen = even if len(even) >= max(FEWEST, 0.3 * len(rows)) else rows
        atrial = _most(states[rows])
        regular = bool(ragged[rows].mean() < 0.5)
        near_p = p[np.abs(p - centre) <= NEIGHBOURS_S]
        pr_s = float(np.nanmedian(pr[chosen])) if atrial == "coupled" and np.isfinite(pr[chosen]).any() else np.nan
        pictures.append(_picture(centre, grid_s, traces[chosen], usual, atrial, pr_s, regular, smooth, near_p))
    return pictures


def _atrial_of(beats: pd.DataFrame, coupling: pd.DataFrame | None) -> tuple[NDArray[np.object_], Floats]:
    """What the ECG shows of the atria of each beat, and its PR interval."""
    if coupling is None or not len(coupling):
        return np.full(len(beats), "unknown", dtype=object), np.full(len(beats), np.nan)
    of_beat = coupling.set_index("beat")
    return (
        beats["beat"].map(of_beat["p"]).fillna("unknown").to_numpy(object),
        beats["beat"].map(of_beat["pr_s"]).to_numpy(float),
    )


def _most(states: NDArray[np.object_]) -> str:
    """The commonest of what is known; ``unknown`` where less than a third of the beats say anything."""
    known = states[states != "unknown"]
    if len(known) < max(1, len(states) / 3):
        return "unknown"
    names, counts = np.unique(known.astype(str), return_counts=True)
    return str(names[np.argmax(counts)])


def _picture(
    centre_s: float, grid_s: Floats, traces: Floats, interval_s: float, atrial: str, pr_s: float, regular: bool, smooth: Signal, p: Floats
) -> Picture:
    seen = np.isfinite(traces).sum(axis=0) >= max(3, 0.5 * len(traces))
    inside = seen & (grid_s < max(interval_s + _BEYOND_S, 0.3))
    traces = traces[:, inside]
    low, median, high = _quartiles(traces)
    time = grid_s[inside]
    rest = traces - median
    lag = round(0.04 / STEP_S)
    steps = np.abs(rest[:, lag:] - rest[:, :-lag])
    noise = 1.4826 * float(np.median(steps[np.isfinite(steps)])) / 2.0**0.5
    cycle = time < interval_s
    span = float(np.ptp(median[cycle])) or 1e-9
    doubt = median_error(low, high, len(traces))
    places = label(MedianBeat(time, median, doubt, interval_s, span, noise / len(traces) ** 0.5, atrial, pr_s, regular))
    p_to_a = places.get("a", np.nan) + pr_s if atrial == "coupled" else _after_p(smooth, p) if atrial == "apart" else np.nan
    return Picture(centre_s, time, median, interval_s, span, noise, places, atrial, p_to_a, pr_s)


def _after_p(smooth: Signal, p: Floats) -> float:
    """From the onset of P to the top of the median trace that follows it, seconds; NaN without one.

    Where P goes its own way, the waves that belong to R cancel in the median over P.
    """
    if len(p) < FEWEST:
        return np.nan
    after = np.arange(round(_P_REACH_S / STEP_S)) * STEP_S
    traces = smooth.at(p[:, None] + after)
    traces = traces[np.isfinite(traces).all(axis=1)]
    if len(traces) < FEWEST:
        return np.nan
    median = np.median(traces - traces.mean(axis=1, keepdims=True), axis=0)
    inside = (after >= _P_TO_A_S[0]) & (after <= _P_TO_A_S[1])
    top = int(np.argmax(np.where(inside, median, -np.inf)))
    return float(after[top]) if 0 < top < len(after) - 1 and median[top] >= max(median[top - 1], median[top + 1]) else np.nan


def _quartiles(values: Floats) -> tuple[Floats, Floats, Floats]:
    """Lower quartile, median and upper quartile of each column, over what is not missing; each column has some."""
    ordered = np.sort(values, axis=0)  # missing values go to the end
    count = np.isfinite(ordered).sum(axis=0)
    columns = np.arange(values.shape[1])
    found = []
    for share in (0.25, 0.5, 0.75):
        place = share * (count - 1)
        low = np.floor(place).astype(np.int64)
        below, above = ordered[low, columns], ordered[np.minimum(low + 1, count - 1), columns]
        found.append(below + (above - below) * (place - low))
    return found[0], found[1], found[2]
