"""Single-channel event detectors of our own: QRS complexes on the ECG, upstrokes on the arterial trace.

They are meant to miss nothing; the anchors stage decides what is a beat.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, signal

from caval.recording import Signal
from caval.registry import detector
from caval.stages._signal import bandpass, cut, fill, lowpass, moving_mean

__all__ = ["QRS_BAND_HZ", "qrs", "upstroke"]

QRS_BAND_HZ = (6.0, 28.0)
"""Most of a QRS complex's energy, little of P, T, drift and mains (common practice)."""
_MIN_SLOPE = 25.0
"""mmHg/s; the upstroke of a pulse of 5 mmHg is steeper."""


@detector(name="qrs", role="ecg")
def qrs(ecg: Signal) -> NDArray[np.float64]:
    """Every bump of QRS-band energy, in seconds: QRS complexes, and whatever looks remotely like one.

    A bump is a local maximum, within 0.12 s either way, of the band's moving RMS (0.09 s) that reaches a tenth of the piece's typical
    QRS; its time is the largest deflection of the band within 60 ms.
    """
    values, missing = fill(ecg.values)
    rate = ecg.sampling_rate
    if len(values) < rate or missing.all():
        return np.empty(0)
    band = bandpass(values - np.median(values), rate, *QRS_BAND_HZ)
    energy = np.sqrt(np.maximum(moving_mean(band**2, round(0.09 * rate)), 0.0))  # its running sum may end a rounding below 0
    bumps, _ = signal.find_peaks(energy, distance=max(1, round(0.12 * rate)))
    bumps = bumps[energy[bumps] > 0.1 * _typical_top(energy, rate)]
    reach = round(0.06 * rate)
    peak = bumps - reach + np.abs(cut(band, bumps - reach, 2 * reach + 1)).argmax(axis=1)
    peak = np.unique(np.clip(peak, 0, len(values) - 1))
    return ecg.start_s + peak[~missing[peak]] / rate


@detector(name="upstroke", role="abp")
def upstroke(abp: Signal) -> NDArray[np.float64]:
    """Feet of the arterial upstrokes, the weak ones of premature beats and some dicrotic waves among them, in seconds.

    The foot is where the tangent at the steepest point meets the level of the lowest point of the 0.25 s before it (tangent method;
    Chiu et al., Am Heart J 1991;121:1460).
    """
    values, missing = fill(abp.values)
    rate = abp.sampling_rate
    if len(values) < rate or missing.all():
        return np.empty(0)
    smooth = lowpass(values, rate, 12.0)
    slope = np.gradient(smooth) * rate
    rise = moving_mean(np.maximum(slope, 0.0), round(0.1 * rate))
    peaks, _ = signal.find_peaks(rise, distance=max(1, round(0.2 * rate)))
    peaks = peaks[rise[peaks] > max(_MIN_SLOPE, 0.1 * _typical_top(rise, rate))]
    if not len(peaks):
        return np.empty(0)
    reach = round(0.08 * rate)
    steepest = np.clip(peaks - reach + cut(slope, peaks - reach, 2 * reach + 1).argmax(axis=1), 0, len(values) - 1)
    before = round(0.25 * rate)
    low = cut(smooth, steepest - before, before + 1).min(axis=1)
    foot = steepest - (smooth[steepest] - low) / np.maximum(slope[steepest], 1e-9) * rate
    keep = ~missing[steepest] & (foot > steepest - before)
    return abp.start_s + np.unique(foot[keep]) / rate


def _typical_top(level: NDArray[np.float64], rate: float) -> float:
    """Median over a piece of the largest value within 1.5 s: the height of a typical beat, bursts notwithstanding."""
    step = max(1, round(0.2 * rate))
    top = ndimage.maximum_filter1d(level, max(1, round(3.0 * rate)))[::step]
    return float(np.median(top))
