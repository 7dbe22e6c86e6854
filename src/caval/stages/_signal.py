"""Small signal tools that several stages share. All keep the length and are zero-phase; none changes its input."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, signal

from caval.errors import InputError
from caval.recording import Signal

__all__ = [
    "UNEVEN", "Thin", "bandpass", "cut", "fill", "grid", "lowpass", "median_error", "moving_mean", "nearest", "refine", "refine_rows",
    "runs", "uneven",
]

Floats = NDArray[np.float64]

UNEVEN = 0.09
"""Median difference of successive intervals over the median interval, from which a rhythm is irregular. In fibrillation successive
intervals differ by a quarter (Dash et al. 2009 take the root mean square of the differences over the mean interval, with a threshold of
0.1, from memory; the median forgives single early beats)."""


def fill(values: Floats) -> tuple[Floats, NDArray[np.bool_]]:
    """Straight lines across missing samples, and where they were; all zeros when nothing is there."""
    missing = ~np.isfinite(values)
    if not missing.any():
        return values, missing
    if missing.all():
        return np.zeros_like(values), missing
    index = np.arange(len(values))
    return np.interp(index, index[~missing], values[~missing]), missing


@cache
def _butterworth(cut_hz: float | tuple[float, float], kind: str, sampling_rate: float) -> Floats:
    return signal.butter(2, cut_hz, kind, fs=sampling_rate, output="sos")


def lowpass(values: Floats, sampling_rate: float, cut_hz: float) -> Floats:
    """Zero-phase Butterworth low-pass, fourth order in all; a copy when the rate is too low for the cut."""
    if not cut_hz > 0:
        raise InputError(f"low-pass at {cut_hz!r} Hz: a frequency above 0 is needed")
    if cut_hz >= 0.45 * sampling_rate or len(values) < 16:
        return values.copy()
    return signal.sosfiltfilt(_butterworth(cut_hz, "lowpass", sampling_rate), values)


def bandpass(values: Floats, sampling_rate: float, low_hz: float, high_hz: float) -> Floats:
    """Zero-phase Butterworth band-pass, fourth order in all; nothing when the rate is too low for the band."""
    if len(values) < 32 or low_hz >= 0.4 * sampling_rate:
        return np.zeros_like(values)
    return signal.sosfiltfilt(_butterworth((low_hz, min(high_hz, 0.45 * sampling_rate)), "bandpass", sampling_rate), values)


def moving_mean(values: Floats, width: int) -> Floats:
    """Centred mean over `width` samples (made odd), ends repeated."""
    return ndimage.uniform_filter1d(values, max(1, width | 1), mode="nearest")


def cut(values: NDArray, starts: NDArray, length: int) -> NDArray:
    """Windows ``values[start : start + length]`` as rows, shape (len(starts), length); ends repeated."""
    index = np.asarray(starts, dtype=np.int64)[:, None] + np.arange(length)
    return values[np.clip(index, 0, len(values) - 1)]


def refine(values: Floats, index: NDArray[np.int64]) -> Floats:
    """Fractional places of extrema at `index`, by the parabola through three samples; within half a sample of it."""
    if len(values) < 3:
        return index.astype(np.float64)
    middle = np.clip(index, 1, len(values) - 2).astype(np.int64)
    before, here, after = values[middle - 1], values[middle], values[middle + 1]
    bend = before - 2 * here + after
    shift = np.where(bend != 0, 0.5 * (before - after) / np.where(bend == 0, 1, bend), 0.0)
    return index.astype(np.float64) + np.where(middle == index, np.clip(shift, -0.5, 0.5), 0.0)


def refine_rows(values: Floats, at: NDArray[np.int64]) -> Floats:
    """By how much of a step the top of each row lies off its largest value, at `at`; 0 at the ends and where nothing bends down."""
    rows, middle = np.arange(len(at)), np.clip(at, 1, values.shape[1] - 2)
    before, here, after = (values[rows, middle + step] for step in (-1, 0, 1))
    bend = before - 2 * here + after
    shift = np.where((bend < 0) & (middle == at), 0.5 * (before - after) / np.where(bend < 0, bend, -1.0), 0.0)
    return np.clip(shift, -0.5, 0.5)


def nearest(places: Floats, query: NDArray) -> NDArray[np.int64]:
    """Index of the nearest of sorted `places` (at least one) for each query; of two equally near the later."""
    right = np.clip(np.searchsorted(places, query), 1, max(1, len(places) - 1))
    left = right - 1
    right = np.minimum(right, len(places) - 1)
    return np.where(np.abs(places[right] - query) <= np.abs(query - places[left]), right, left)


def median_error(low: Floats, high: Floats, count: int) -> Floats:
    """Standard error of a median of `count` values, by the normal law, from their quartiles."""
    return 1.2533 * (high - low) / 1.349 / count**0.5


def uneven(times_s: Floats, around: int, limit: float = UNEVEN) -> NDArray[np.bool_]:
    """Beats around which (`around` of them) the intervals change from one to the next as they do in fibrillation, shape (n,)."""
    if len(times_s) < 3:
        return np.zeros(len(times_s), dtype=bool)
    interval = np.diff(times_s, prepend=2 * times_s[0] - times_s[1])
    change, usual = (ndimage.median_filter(x, around, mode="nearest") for x in (np.abs(np.diff(interval, prepend=interval[0])), interval))
    return np.asarray(change > limit * usual)


def runs(mask: NDArray[np.bool_]) -> NDArray[np.int64]:
    """Stretches of True as rows ``[start, stop)``, shape (k, 2)."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], mask, [False]]).astype(np.int8)))
    return edges.reshape(-1, 2)


def grid(start_s: float, stop_s: float, step_s: float) -> Iterator[tuple[float, float]]:
    """Stretches of the fixed grid (lines at multiples of `step_s` from the start of the record) that ``[start_s, stop_s)`` touches."""
    for k in range(int(np.floor(start_s / step_s + 1e-9)), int(np.ceil(stop_s / step_s - 1e-9))):
        yield k * step_s, (k + 1) * step_s


def _even_step(sampling_rate: float, most: int) -> int:
    """The largest step up to `most` that divides a second, so that a shift by whole seconds shifts the choice; else `most`."""
    if sampling_rate == round(sampling_rate):
        for step in range(most, most // 3, -1):
            if round(sampling_rate) % step == 0:
                return step
    return most


@dataclass(frozen=True)
class Thin:
    """Every `step`-th sample of a stretch, counted from the start of the record, so that the choice does not depend on the stretch."""

    offset: int
    step: int
    length: int

    @classmethod
    def of(cls, stretch: Signal, every_s: float) -> Thin:
        """Samples about `every_s` apart, no farther."""
        step = _even_step(stretch.sampling_rate, max(1, round(every_s * stretch.sampling_rate)))
        return cls(-round(stretch.start_s * stretch.sampling_rate) % step, step, len(stretch))

    def take(self, values: NDArray) -> NDArray:
        """The chosen samples; the first sample stands in when the stretch is shorter than a step."""
        chosen = values[self.offset :: self.step]
        return chosen if len(chosen) else values[:1]

    def spread(self, chosen: NDArray) -> NDArray:
        """A value of the chosen samples for every sample of the stretch: that of the last chosen one."""
        index = (np.arange(self.length) - self.offset) // self.step
        return chosen[np.clip(index, 0, len(chosen) - 1)]

    def time_s(self, stretch: Signal) -> Floats:
        """Times of the chosen samples, seconds of the record."""
        count = max(1, -(-(self.length - self.offset) // self.step))
        return stretch.start_s + (self.offset + self.step * np.arange(count)) / stretch.sampling_rate
