"""The traces that waves are read from, and their extrema."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal

from caval.recording import Signal
from caval.stages._signal import lowpass, moving_mean, nearest, refine

__all__ = ["SHARPEN_S", "Extrema", "traces"]

Floats = NDArray[np.float64]

_PROMINENCE_WINDOW_S = 0.5
_QUIET_MMHG, _LOUD_MMHG = 0.10, 0.20
"""Noise of the samples up to which a stretch is read off the finer trace, and from which off the smoother one."""
SHARPEN_S = 0.024
"""Extrema of the two traces this near are one."""
_NOISE_STEP_S, _NOISE_CELL_S = 0.008, 10.0


def traces(cvp: Signal, values: Floats, smooth_hz: float, fine_hz: float) -> tuple[Signal, Signal]:
    """The trace on which broad waves are sought, low-passed at `smooth_hz`, and that on which narrow ones are sought and all are read.

    The second is low-passed at `fine_hz` where it is quiet, at `smooth_hz` where it is not, and blended between.
    """
    rate = cvp.sampling_rate
    smooth, fine = lowpass(values, rate, smooth_hz), lowpass(values, rate, fine_hz)
    centres, noise = _noise(cvp, values)
    quiet = np.clip((_LOUD_MMHG - noise) / (_LOUD_MMHG - _QUIET_MMHG), 0.0, 1.0)
    share = np.interp(cvp.start_s + np.arange(len(values)) / rate, centres, quiet)
    both = (smooth, smooth + share * (fine - smooth))
    broad, narrow = (Signal(trace, rate, cvp.start_s, cvp.label, cvp.unit) for trace in both)
    return broad, narrow


def _noise(cvp: Signal, values: Floats) -> tuple[Floats, Floats]:
    """Centres of cells of a fixed grid (s) and the SD of the noise in them (mmHg), of samples taken 8 ms apart.

    It is that of their third differences, in which no wave is left.
    """
    step = max(1, round(_NOISE_STEP_S * cvp.sampling_rate))
    first = -round(cvp.start_s * cvp.sampling_rate) % step
    steady = np.abs(np.diff(moving_mean(values, step)[first::step], 3))
    time = cvp.start_s + (first + step * (np.arange(len(steady)) + 1.5)) / cvp.sampling_rate
    cells = np.floor(time / _NOISE_CELL_S).astype(np.int64)
    edges = np.flatnonzero(np.diff(cells, prepend=cells[0] - 1)) if len(cells) else np.empty(0, np.int64)
    noise = np.array([np.median(part) for part in np.split(steady, edges[1:])]) * 1.4826 / 20.0**0.5
    return (cells[edges] + 0.5) * _NOISE_CELL_S, noise


@dataclass(eq=False)
class Extrema:
    """All peaks, or all troughs, of a trace in time order: time (s), height (sign times mmHg), prominence (mmHg), and which are taken."""

    time: Floats
    height: Floats
    prominence: Floats
    taken: NDArray[np.bool_]

    @classmethod
    def of(cls, smooth: Signal, sign: float) -> Extrema:
        heights = sign * smooth.values
        window = round(_PROMINENCE_WINDOW_S * smooth.sampling_rate) | 1
        index, _ = signal.find_peaks(heights, plateau_size=(1, window // 2))  # a longer plateau is a stuck trace, no wave
        prominence = signal.peak_prominences(heights, index, wlen=window)[0] if len(index) else np.empty(0)
        time = smooth.start_s + refine(heights, index) / smooth.sampling_rate
        return cls(time, heights[index], prominence, np.zeros(len(index), dtype=bool))

    def nearest(self, time: Floats) -> Floats:
        """Time of the extremum nearest to each time, NaN for NaN."""
        if not len(self.time):
            return np.full(len(time), np.nan)
        return np.where(np.isfinite(time), self.time[nearest(self.time, time)], np.nan)

    def time_near(self, time: Floats) -> Floats:
        """Times of the extrema that lie at some times, as found on the other trace."""
        near = self.nearest(time)
        return near[np.abs(near - time) <= SHARPEN_S]

    def take_near(self, time: Floats) -> None:
        """Take the extrema that lie at some times, as found on the other trace."""
        self.taken |= np.isin(self.time, self.time_near(time))

    def around(self, start: Floats, most: int = 8) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
        """The `most` extrema from each start on, shape (n, most), and which of these exist and are free."""
        index = np.searchsorted(self.time, start)[:, None] + np.arange(most)
        there = index < len(self.time)
        index = np.minimum(index, max(0, len(self.time) - 1))
        return index, there & ~self.taken[index] if len(self.time) else there
