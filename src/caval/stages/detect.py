"""Single-channel event detectors of our own: QRS complexes on the ECG, upstrokes on the arterial trace.

They are meant to miss nothing; the anchors stage decides what is a beat.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage, signal

from caval.recording import Signal
from caval.registry import detector
from caval.stages._signal import bandpass, cut, fill, lowpass, moving_mean, refine

__all__ = ["QRS_BAND_HZ", "clean_ecg", "qrs", "qrs_energy", "thinned", "upstroke"]

Floats = NDArray[np.float64]

QRS_BAND_HZ = (6.0, 28.0)
"""Most of a QRS complex's energy, little of P, T, drift and mains (common practice)."""
_MIN_SLOPE = 25.0
"""mmHg/s; the upstroke of a pulse of 5 mmHg is steeper."""
_THIN_HZ = 125.0
"""Rate at which the QRS band is looked at: more than four times its upper edge."""
_SPIKE_S = 0.008
"""A pacing pulse lasts at most 2 ms, a little more after the monitor's filters; the narrowest QRS complex is five times as wide."""
_SPIKE_RATIO = 4.0


@detector(name="qrs", role="ecg")
def qrs(ecg: Signal) -> Floats:
    """Every bump of QRS-band energy, in seconds: QRS complexes, and whatever looks remotely like one.

    A bump is a local maximum, within 0.12 s either way, of the band's moving RMS (0.09 s) that reaches a tenth of the piece's typical
    QRS; its time is the largest deflection of the band within 60 ms. Pacing spikes are taken out first.
    """
    if len(ecg) < ecg.sampling_rate or not np.isfinite(ecg.values).any():
        return np.empty(0)
    cleaned, missing = clean_ecg(ecg)
    thin = thinned(cleaned)
    rate = thin.sampling_rate
    band = bandpass(thin.values - np.median(thin.values), rate, *QRS_BAND_HZ)
    energy = qrs_energy(band, rate)
    bumps, _ = signal.find_peaks(energy, distance=max(1, round(0.12 * rate)))
    bumps = bumps[energy[bumps] > 0.1 * _typical_top(energy, rate)]
    reach = round(0.06 * rate)
    size = np.abs(band)
    peak = np.unique(np.clip(bumps - reach + cut(size, bumps - reach, 2 * reach + 1).argmax(axis=1), 0, len(size) - 1))
    time = thin.start_s + refine(size, peak) / rate
    return time[~missing[np.clip(np.rint(ecg.position(time)), 0, len(ecg) - 1).astype(int)]]


def clean_ecg(ecg: Signal) -> tuple[Signal, NDArray[np.bool_]]:
    """The ECG with gaps bridged and pacing spikes taken out, and where nothing was recorded, shape (n,)."""
    values, missing = fill(ecg.values)
    return Signal(_without_spikes(values, ecg.sampling_rate), ecg.sampling_rate, ecg.start_s, ecg.label, ecg.unit), missing


def _without_spikes(values: Floats, rate: float) -> Floats:
    """Spikes narrower than `_SPIKE_S` cut down to what stands on either side of them; scale-free, and no look beyond 16 ms."""
    reach = round(_SPIKE_S * rate)
    if reach < 2 or len(values) <= 4 * reach:  # below 190 Hz a spike has run into its neighbours
        return values
    middle, before, after = values[2 * reach : -2 * reach], values[reach : -3 * reach], values[3 * reach : -reach]
    excess = middle - np.clip(middle, np.minimum(before, after), np.maximum(before, after))
    at = np.flatnonzero(excess)
    around = (
        np.abs(before[at] - after[at]) + np.abs(values[at] - before[at]) + np.abs(values[at + 4 * reach] - after[at])
    )
    spike = at[np.abs(excess[at]) > _SPIKE_RATIO * around]
    cleaned = values.copy()
    cleaned[spike + 2 * reach] -= excess[spike]
    return cleaned


def thinned(ecg: Signal) -> Signal:
    """The trace at about 125 Hz, every `step`-th sample counted from the start of the record, each the triangular mean of its neighbours.

    At 500 Hz the triangle spans ±8 ms: nothing of 100 Hz, twice the mains, comes through, 4 % of 125 Hz, 78 % of 28 Hz.
    """
    rate = ecg.sampling_rate
    step = max(1, round(rate / _THIN_HZ))
    half = max(1, round((rate / 100.0 - 1) / 2)) if step > 1 else 0
    weights = np.convolve(np.ones(2 * half + 1), np.ones(2 * half + 1)) / (2 * half + 1) ** 2
    first = -round(ecg.start_s * rate) % step
    if len(ecg) <= first:
        first = 0
    padded = np.pad(ecg.values, 2 * half, mode="edge")
    count = -(-(len(ecg) - first) // step)
    total = np.zeros(count)
    for k, weight in enumerate(weights):
        total += weight * padded[first + k :: step][:count]
    return Signal(total, rate / step, ecg.start_s + first / rate, ecg.label, ecg.unit)


def qrs_energy(band: Floats, rate: float) -> Floats:
    """Moving RMS, over 0.09 s, of the QRS band."""
    return np.sqrt(np.maximum(moving_mean(band**2, round(0.09 * rate)), 0.0))  # its running sum may end a rounding below 0


@detector(name="upstroke", role="abp")
def upstroke(abp: Signal) -> Floats:
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


def _typical_top(level: Floats, rate: float) -> float:
    """Median over a piece of the largest value within 1.5 s: the height of a typical beat, bursts notwithstanding."""
    step = max(1, round(0.2 * rate))
    top = ndimage.maximum_filter1d(level, max(1, round(3.0 * rate)))[::step]
    return float(np.median(top))
