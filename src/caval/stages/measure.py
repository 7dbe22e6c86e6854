"""What is read off each beat once its waves are marked."""

from __future__ import annotations

import numpy as np
import pandas as pd

from caval import tables
from caval.recording import Signal
from caval.registry import stage
from caval.stages._signal import fill, lowpass
from caval.stages._usable import usable_beats

__all__ = ["measure"]


@stage(name="measure", gives=("readings",), margin_s=10.0)
def measure(cvp: Signal, beats: pd.DataFrame, marks: pd.DataFrame, spans: pd.DataFrame, *, smooth_hz: float = 12.0) -> pd.DataFrame:
    """Read the pressures of each beat that belong to no single mark.

    Parameters
    ----------
    cvp : Signal
        Venous pressure, mmHg.
    beats, marks, spans : DataFrame
        Marks may be those of the waves stage or corrected by a person.
    smooth_hz : float
        The pre-systolic nadir is read after a zero-phase low-pass at this frequency.

    Returns
    -------
    DataFrame
        ``beat, r_time_s, usable, reason, x_pre_mmhg, mean_mmhg``. `mean_mmhg` is the mean over the cycle from R to the next R (the
        last beat of the record, whose cycle has no end, has none); `x_pre_mmhg` the lowest pressure between a and c. NaN where the
        beat is unusable or the bounding marks are absent.
    """
    r = beats["r_time_s"].to_numpy(float)
    if not len(r):
        return tables.empty("readings")
    usable, reason = usable_beats(cvp, beats, spans)
    if len(cvp) < 2:
        blank = {"x_pre_mmhg": np.nan, "mean_mmhg": np.nan}
        return pd.DataFrame({"beat": beats["beat"].to_numpy(), "r_time_s": r, "usable": usable, "reason": reason, **blank})
    values, missing = fill(cvp.values)
    smooth = Signal(lowpass(values, cvp.sampling_rate, smooth_hz), cvp.sampling_rate, cvp.start_s)
    following = np.append(r[1:], np.nan)
    mean = np.where(usable & (following - r < 3.0), _mean_between(values, missing, cvp, r, following), np.nan)
    clear = marks[marks["state"] != "fused"]
    a, c = (_time_of(clear, wave, beats) for wave in "ac")
    x_pre = np.where(usable & (c > a), _lowest_between(smooth, a, c), np.nan)
    return pd.DataFrame(
        {"beat": beats["beat"].to_numpy(), "r_time_s": r, "usable": usable, "reason": reason, "x_pre_mmhg": x_pre, "mean_mmhg": mean}
    )


def _time_of(marks: pd.DataFrame, wave: str, beats: pd.DataFrame) -> np.ndarray:
    times = marks[marks["mark"] == wave].drop_duplicates("beat", keep="last").set_index("beat")["time_s"]
    return beats["beat"].map(times).to_numpy(float)


def _mean_between(values: np.ndarray, missing: np.ndarray, cvp: Signal, start_s: np.ndarray, stop_s: np.ndarray) -> np.ndarray:
    """Mean of the trace between two times a row, by the trapezoid rule on the samples and both ends; NaN where some are missing."""
    area = np.concatenate([[0.0], np.cumsum((values[1:] + values[:-1]) / 2.0)])  # integral up to each sample, in samples
    lost = np.concatenate([[0.0], np.cumsum(missing[1:] | missing[:-1])])
    index = np.arange(len(values))
    first, last = cvp.position(start_s), cvp.position(stop_s)
    inside = (first >= -1e-6) & (last <= len(values) - 1 + 1e-6)

    def integral(place: np.ndarray) -> np.ndarray:
        low = np.clip(np.floor(np.nan_to_num(place)), 0, max(0, len(values) - 2)).astype(int)
        part = np.nan_to_num(place) - low
        return area[low] + values[low] * part + 0.5 * (values[np.minimum(low + 1, len(values) - 1)] - values[low]) * part**2

    whole = np.interp(last, index, lost) - np.interp(first, index, lost) < 0.5
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.where(inside & whole, (integral(last) - integral(first)) / (last - first), np.nan)


def _lowest_between(smooth: Signal, start_s: np.ndarray, stop_s: np.ndarray) -> np.ndarray:
    share = np.linspace(0.0, 1.0, 33)
    times = start_s[:, None] + (stop_s - start_s)[:, None] * share
    levels = smooth.at(times)
    some = np.isfinite(levels).any(axis=1)
    return np.where(some, np.where(np.isfinite(levels), levels, np.inf).min(axis=1), np.nan)
